"""Share of fields solved, wrong solutions, model error and time, over random fields of five rigs, clear and clouded.

    python benchmarks/bench_solve.py --fields 200 [--mode hinted|blind|calibrated|previous] [--rig "400 mm, 36x24"]
    python benchmarks/bench_solve.py ... --first 100 --seconds 300 --keep solved.jsonl     a long count in parts
    python benchmarks/bench_solve.py --read solved.jsonl

Hinted: centre off by up to three half-diagonals, scale by up to 10 %, roll and mirror unknown. Calibrated: the
narrowest rig with scale within 0.5 %, mirror and lens known, centre within one half-diagonal, roll unknown and within
5 degrees. Previous: the frame shifted by some 30 px, a tenth of its stars lost. What is drawn: see `drawn_fields.py`.
Wrong: the solution is off by more than 50 px anywhere in the frame. Limits are Wilson's, 95 %.
"""

from __future__ import annotations

import argparse
import json
import warnings
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from time import process_time

import numpy as np
from drawn_fields import RIGS, TT_S, DrawnField, detections_of, draw, model_error_px
from measured import machine, table

from imaging.stars.catalogue import whole_sky
from imaging.stars.lens import LearnedLens
from imaging.stars.solve import Hint, solve_detections
from planner.errors import NoSolutionError

CALIBRATED = "1000 mm, APS-C"
BY_STARS = ("1000 mm, 36x24", "1000 mm, APS-C")
MODES = ("hinted", "blind", "calibrated", "previous")


def main() -> None:
    options = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    options.add_argument("--mode", choices=MODES, default="hinted")
    options.add_argument("--fields", type=int, default=200)
    options.add_argument("--first", type=int, default=0)
    options.add_argument("--rig", choices=list(RIGS))
    options.add_argument("--sky", choices=("clear", "clouded"))
    options.add_argument("--seconds", type=float, default=np.inf, help="stop after so much processor time")
    options.add_argument("--keep", type=Path, help="append what became of each field to this file")
    options.add_argument("--read", type=Path, nargs="+", help="count what such files hold, and solve nothing")
    asked = options.parse_args()
    warnings.simplefilter("ignore", RuntimeWarning)
    print(machine())
    if asked.read:
        lines = [line for path in asked.read for line in path.read_text(encoding="utf-8").splitlines()]
        runs = {
            tuple(one[name] for name in ("mode", "rig", "sky", "field")): one
            for one in map(json.loads, lines)
        }
        report(list(runs.values()))
        return
    whole_sky(TT_S)
    if asked.mode == "blind":
        from imaging.stars.index import quad_index

        began = process_time()
        index = quad_index()
        size = index.nbytes / 1e6
        print(
            f"index: {len(index)} quads, {size:.0f} MB, opened or built in {process_time() - began:.1f} s of CPU"
        )
    done, began = [], process_time()
    for number in range(asked.first, asked.first + asked.fields):
        for one in one_field(number, asked.mode, asked.rig, asked.sky):
            done.append(one)
            if asked.keep:
                with asked.keep.open("a", encoding="utf-8") as file:
                    file.write(json.dumps(one) + "\n")
        if process_time() - began > asked.seconds:
            break
    report(done)


def one_field(number: int, mode: str, only_rig: str | None, only_sky: str | None) -> Iterator[dict]:
    """Yield what became of the field of this number, for each rig and sky asked for."""
    if mode == "calibrated":
        yield from calibrated(number)
        return
    for name in [only_rig] if only_rig else RIGS:
        for sky in [only_sky] if only_sky else ("clear", "clouded"):
            rig = RIGS[name]
            rng = np.random.default_rng([number, round(rig.focal_mm), rig.width_px, int(sky == "clouded")])
            field = draw(rig, rng, sky == "clouded")
            hint = Hint(off_center(field, rng, 3.0), rig.scale_arcsec_px * rng.uniform(0.9, 1.1))
            if mode == "blind":
                hint = Hint()
            about = {"mode": mode, "rig": name, "sky": sky, "field": number, "stars": field.catalogue_seen}
            if mode == "previous":
                yield from next_frame(field, hint, about, rng)
            else:
                yield about | outcome(field, detections_of(field), hint, blind=mode == "blind")


def outcome(
    field: DrawnField, found, hint: Hint, previous=None, blind: bool = False, moved=(0.0, 0.0)
) -> dict:
    began = process_time()
    try:
        solution = solve_detections(found, TT_S, "bottom", hint, previous, blind=blind)
    except NoSolutionError as none:
        return {"solved": 0, "wrong": 0, "cpu_s": round(process_time() - began, 4), "reason": str(none)}
    cpu_s = process_time() - began
    field = replace(field, axis_px=(field.axis_px[0] + moved[0], field.axis_px[1] + moved[1]))
    median, worst = model_error_px(solution, field)
    return {
        "solved": int(worst <= 50), "wrong": int(worst > 50), "cpu_s": round(cpu_s, 4), "error_px": round(median, 5),
        "worst_px": round(worst, 4), "log10": round(solution.false_alarm_log10, 2), "how": solution.how,
    }  # fmt: skip


def next_frame(field: DrawnField, hint: Hint, about: dict, rng: np.random.Generator) -> Iterator[dict]:
    """Solve the field from its true hint, then the same field shifted, from that solution."""
    found = detections_of(field)
    try:
        before = solve_detections(found, TT_S, "bottom", hint)
    except NoSolutionError:
        return
    shift = rng.normal(0, 30, 2)
    x, y = found.x_px + shift[0], found.y_px + shift[1]
    on = (x > 3) & (x < field.width_px - 4) & (y > 3) & (y < field.height_px - 4) & (rng.random(len(x)) < 0.9)
    moved = replace(found, x_px=x, y_px=y).take(np.flatnonzero(on))
    yield about | outcome(field, moved, Hint(), before, moved=tuple(shift))


def calibrated(number: int) -> Iterator[dict]:
    """Scale within 0.5 %, mirror and lens known, with the roll unknown and known; every second field clouded."""
    rig = RIGS[CALIBRATED]
    optics = (0.004, ((rig.width_px - 1) / 2 + 11.0, (rig.height_px - 1) / 2 - 7.0), rig.focal_px)
    lens = known_lens(optics, rig).lens
    rng = np.random.default_rng([number, 99])
    field = draw(rig, rng, clouded=bool(number % 2), parity=1, optics=optics)
    roll = roll_of(field) + rng.uniform(-5, 5)
    near, scale = off_center(field, rng, 1.0), rig.scale_arcsec_px * rng.uniform(0.995, 1.005)
    for known in (None, roll):
        hint = Hint(near, scale, 0.006, known, 1, lens)
        about = {"mode": "calibrated", "rig": "roll unknown" if known is None else "roll within 5 degrees",
                 "sky": "mixed", "field": number, "stars": field.catalogue_seen}  # fmt: skip
        yield about | outcome(field, detections_of(field), hint)


def report(runs: list[dict]) -> None:
    rows = []
    groups = sorted({(one["mode"], list(RIGS).index(one["rig"]) if one["rig"] in RIGS else 9, one["rig"], one["sky"])
                     for one in runs})  # fmt: skip
    for mode, _, rig, sky in groups:
        here = [one for one in runs if (one["mode"], one["rig"], one["sky"]) == (mode, rig, sky)]
        good = [one for one in here if one["solved"]]
        lost = [one["cpu_s"] for one in here if not one["solved"]]
        rows.append([
            mode, rig, sky, share(len(good), len(here)), str(sum(one["wrong"] for one in here)),
            f"{np.median([one['error_px'] for one in good]):.4f}" if good else "-",
            f"{np.median([one['cpu_s'] for one in good]):.3f}" if good else "-",
            f"{np.median(lost):.2f} / {max(lost):.1f}" if lost else "-",
        ])  # fmt: skip
    header = [
        "mode",
        "rig",
        "sky",
        "solved",
        "wrong",
        "error, median px",
        "CPU s, median",
        "not solved: CPU s, median / most",
    ]
    print("\n" + table(header, rows))
    for mode, _, rig in sorted({group[:3] for group in groups}):
        if rig in BY_STARS or mode == "calibrated":
            here = [one for one in runs if one["mode"] == mode and one["rig"] == rig]
            print(f"\n{mode}, {rig}: by number of catalogue stars detected\n")
            print(table(["stars", "solved"], counted([(one["stars"], bool(one["solved"])) for one in here])))


def share(good: int, of: int) -> str:
    """Say a share with Wilson's 95 % interval."""
    p, z = good / of, 1.96
    middle, half = p + z * z / (2 * of), z * np.sqrt(p * (1 - p) / of + z * z / (4 * of * of))
    low, high = ((middle - half) / (1 + z * z / of), (middle + half) / (1 + z * z / of))
    return f"{good} of {of}: {100 * p:.1f} % ({100 * low:.0f} to {100 * high:.0f})"


def known_lens(optics, rig) -> LearnedLens:
    """A lens as `solve --learn` would hand it over: its radial term known to 2 %."""
    from imaging.stars.camera import unknown_lens

    lens = unknown_lens(3)
    half = np.hypot(rig.width_px, rig.height_px) / 2
    coefficients = np.zeros((2, len(lens.terms)))
    for row, terms in ((0, ((3, 0), (1, 2))), (1, ((2, 1), (0, 3)))):
        for term in terms:
            coefficients[row, lens.terms.index(term)] = optics[0]
    sigma = np.array([1.5e-3 if p + q == 1 else 5e-5 for p, q in lens.terms])
    axis = (np.array(optics[1]) - [(rig.width_px - 1) / 2, (rig.height_px - 1) / 2]) / half
    held = type(lens)(lens.terms, coefficients, np.diag(np.tile(sigma, 2) ** 2), axis, np.full(2, 1e-3))
    return LearnedLens(held, rig.scale_arcsec_px, 1e-4, 1, 20, rig.width_px, rig.height_px)


def roll_of(field) -> float:
    """Position angle of +y in the middle of the field, from its own axes."""
    here, up = field.axes[2], field.axes[1]
    east = np.array([-here[1], here[0], 0.0]) / np.hypot(here[0], here[1])
    return float(np.degrees(np.arctan2(up @ east, up @ np.cross(here, east))) % 360)


def off_center(field, rng, most: float) -> tuple[float, float]:
    center = field.center
    away = np.cross(center, rng.normal(size=3))
    away *= np.tan(min(rng.uniform(0, most) * np.arctan(field.half / field.focal_px), 1.2)) / np.linalg.norm(
        away
    )
    place = (center + away) / np.linalg.norm(center + away)
    return float(np.degrees(np.arctan2(place[1], place[0])) % 360), float(np.degrees(np.arcsin(place[2])))


def counted(by_stars: list) -> list[list[str]]:
    rows = []
    for low, high in (
        (0, 3),
        (3, 4),
        (4, 5),
        (5, 6),
        (6, 7),
        (7, 8),
        (8, 9),
        (9, 10),
        (10, 12),
        (12, 16),
        (16, 1000),
    ):
        here = [solved for stars, solved in by_stars if low <= stars < high]
        if here:
            label = (
                str(low) if high == low + 1 else f"{low} to {high - 1}" if high < 1000 else f"{low} and more"
            )
            rows.append([label, f"{sum(here)} of {len(here)}"])
    return rows


if __name__ == "__main__":
    main()
