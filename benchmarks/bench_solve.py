"""Share of fields solved, wrong solutions, model error and time, over random fields of five rigs, clear and clouded.

    python benchmarks/bench_solve.py --fields 200 [--blind] [--rig "400 mm, 36x24"]

Hinted: centre off by up to three half-diagonals, scale by up to 10 %, roll and mirror unknown. What is drawn: see
`drawn_fields.py`. Wrong: the solution is off by more than 50 px anywhere in the frame.
"""

from __future__ import annotations

import argparse
import warnings
from time import process_time

import numpy as np
from drawn_fields import RIGS, TT_S, detections_of, draw, model_error_px
from measured import machine, table

from imaging.stars.catalogue import whole_sky
from imaging.stars.lens import LearnedLens
from imaging.stars.solve import Hint, solve_detections
from planner.errors import NoSolutionError

CALIBRATED = "1000 mm, APS-C"


def main() -> None:
    options = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    options.add_argument("--fields", type=int, default=200)
    options.add_argument("--blind", action="store_true", help="without any hint")
    options.add_argument("--calibrated", action="store_true", help="1000 mm, APS-C with its lens known")
    options.add_argument("--rig", choices=list(RIGS))
    asked = options.parse_args()
    warnings.simplefilter("ignore", RuntimeWarning)
    print(machine())
    whole_sky(TT_S)
    if asked.blind:
        from imaging.stars.index import quad_index

        began = process_time()
        index = quad_index()
        size = sum(part.nbytes for part in (index.keys, index.codes, index.stars)) / 1e6
        print(
            f"index: {len(index)} quads, {size:.0f} MB, opened or built in {process_time() - began:.1f} s of CPU"
        )
    if asked.calibrated:
        calibrated(asked.fields)
        return
    rows, by_stars = [], {}
    for name in [asked.rig] if asked.rig else RIGS:
        for clouded in (False, True):
            rows.append(one_row(name, clouded, asked.fields, asked.blind, by_stars.setdefault(name, [])))
            print("|", " | ".join(rows[-1]), "|", flush=True)
    print(f"\n{'blind' if asked.blind else 'hinted'}, {asked.fields} fields a row\n")
    print(
        table(
            ["rig", "sky", "solved", "wrong", "error, median px", "CPU s, median", "CPU s when not solved"],
            rows,
        )
    )
    for name in ("1000 mm, 36x24", CALIBRATED):
        if by_stars.get(name):
            print(f"\n{name}: solved by number of catalogue stars detected\n")
            print(table(["stars", "solved"], counted(by_stars[name])))


def one_row(name: str, clouded: bool, fields: int, blind: bool, by_stars: list) -> list[str]:
    rig = RIGS[name]
    solved, wrong, errors, times, lost = 0, 0, [], [], []
    for seed in range(fields):
        rng = np.random.default_rng([seed, round(rig.focal_mm), rig.width_px, int(clouded)])
        field = draw(rig, rng, clouded)
        hint = (
            Hint()
            if blind
            else Hint(off_center(field, rng, 3.0), rig.scale_arcsec_px * rng.uniform(0.9, 1.1))
        )
        began = process_time()
        try:
            solution = solve_detections(detections_of(field), TT_S, "bottom", hint, blind=blind)
        except NoSolutionError:
            lost.append(process_time() - began)
            by_stars.append((field.catalogue_seen, False))
            continue
        times.append(process_time() - began)
        median, worst = model_error_px(solution, field)
        wrong += worst > 50
        solved += worst <= 50
        errors.append(median)
        by_stars.append((field.catalogue_seen, True))
    return [
        name, "clouded" if clouded else "clear", f"{100 * solved / fields:.1f} %", str(wrong),
        f"{np.median(errors):.4f}" if errors else "-", f"{np.median(times):.2f}" if times else "-",
        f"{np.median(lost):.1f}" if lost else "-",
    ]  # fmt: skip


def calibrated(fields: int) -> None:
    """Scale within 0.5 %, mirror known, distortion known: by number of catalogue stars, roll unknown and known."""
    rig = RIGS[CALIBRATED]
    rng = np.random.default_rng(5)
    optics = (0.004, ((rig.width_px - 1) / 2 + 11.0, (rig.height_px - 1) / 2 - 7.0), rig.focal_px)
    lens = known_lens(optics, rig)
    for roll_known in (False, True):
        by_stars, errors, wrong = [], [], 0
        for seed in range(fields):
            rng = np.random.default_rng([seed, 99])
            field = draw(rig, rng, clouded=bool(seed % 2), parity=1, optics=optics)
            roll = roll_of(field) + rng.uniform(-5, 5) if roll_known else None
            hint = Hint(
                off_center(field, rng, 1.0),
                rig.scale_arcsec_px * rng.uniform(0.9975, 1.0025),
                0.005,
                roll,
                1,
                lens.lens,
            )
            try:
                solution = solve_detections(detections_of(field), TT_S, "bottom", hint)
            except NoSolutionError:
                by_stars.append((field.catalogue_seen, False))
                continue
            median, worst = model_error_px(solution, field)
            wrong += worst > 50
            errors.append(median)
            by_stars.append((field.catalogue_seen, worst <= 50))
        print(f"\ncalibrated rig, roll {'within 5 degrees' if roll_known else 'unknown'}: wrong {wrong}, "
              f"error {np.median(errors):.3f} px\n")  # fmt: skip
        print(table(["stars", "solved"], counted(by_stars)), flush=True)


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
