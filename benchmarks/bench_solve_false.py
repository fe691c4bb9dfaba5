"""False solutions, counted: points at random, grids, lines, clumps, and real fields with a wrong hint.

    python benchmarks/bench_solve_false.py --runs 5000 [--first 0] [--keep false.jsonl] [--blind]
    python benchmarks/bench_solve_false.py --read false.jsonl

Narrow rigs come more often, because few stars are what chance can imitate; half of the runs of the narrowest know
scale, mirror and lens (and every second of those the roll), as a calibrated rig does. The stated probability of the
best pointing of each run is counted too: of N runs at most t N may state less than t.
"""

from __future__ import annotations

import argparse
import json
import re
import warnings
from dataclasses import replace
from pathlib import Path
from time import process_time

import numpy as np
from bench_solve import known_lens
from drawn_fields import RIGS, TT_S, detections_of, draw, model_error_px
from measured import machine, table

from imaging.stars.catalogue import whole_sky
from imaging.stars.solve import Hint, solve_detections
from planner.errors import NoSolutionError

KINDS = ("random", "grid", "line", "clump", "real field, wrong hint")
# of twenty runs one of each wide rig, six of the 1000 mm one, eleven of the narrowest
MIX = tuple(
    {0: "35 mm, 36x24", 7: "135 mm, 36x24", 13: "400 mm, 36x24"}.get(i)
    or ("1000 mm, 36x24" if i % 3 == 1 else "1000 mm, APS-C")
    for i in range(20)
)
CALIBRATED = "1000 mm, APS-C"


def main() -> None:
    options = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    options.add_argument("--runs", type=int, default=5000)
    options.add_argument(
        "--first", type=int, default=0, help="number of the first run: a long count in parts"
    )
    options.add_argument("--seconds", type=float, default=np.inf, help="stop after so much processor time")
    options.add_argument("--keep", type=Path, help="append what became of each run to this file")
    options.add_argument("--read", type=Path, nargs="+", help="count what such files hold, and run nothing")
    options.add_argument(
        "--blind", action="store_true", help="search the whole sky too (not the real fields)"
    )
    asked = options.parse_args()
    warnings.simplefilter("ignore", RuntimeWarning)
    print(machine())
    if asked.read:
        runs = {}
        for path in asked.read:
            for line in path.read_text(encoding="utf-8").splitlines():
                one = json.loads(line)
                runs[one["run"], one["blind"]] = one
        report(list(runs.values()))
        return
    whole_sky(TT_S)
    done, began = [], process_time()
    for run in range(asked.first, asked.first + asked.runs):
        if process_time() - began > asked.seconds:
            break
        done.append(one_run(run, asked.blind))
        if asked.keep:
            with asked.keep.open("a", encoding="utf-8") as file:
                file.write(json.dumps(done[-1]) + "\n")
    report(done)


def one_run(run: int, blind: bool) -> dict:
    kind = KINDS[run % len(KINDS)]
    rng = np.random.default_rng([run, 1234])
    name = MIX[run // len(KINDS) % len(MIX)]
    field, found, hint, knows = case(kind, RIGS[name], rng, run)
    blind = blind and kind != KINDS[-1]
    began = process_time()
    one = {"run": run, "kind": kind, "rig": name, "knows": knows, "blind": blind, "false": False}
    try:
        solution = solve_detections(found, TT_S, "bottom", hint, blind=blind)
    except NoSolutionError as none:
        best = re.findall(r"best chance 1e(-?\d+)", str(none))
        one["log10"] = min((int(text) for text in best), default=0)
    else:
        # a wide field reaches over the sky to its true place
        one["false"] = not (kind == KINDS[-1] and model_error_px(solution, field)[1] < 50)
        one["log10"] = solution.false_alarm_log10 if one["false"] else 0
        if one["false"]:
            print("FALSE", one, solution.how, flush=True)
    one["cpu_s"] = round(process_time() - began, 3)
    return one


def report(runs: list[dict]) -> None:
    rows = []
    for kind in KINDS:
        for knows in ("rough hint", "calibrated"):
            here = [one for one in runs if one["kind"] == kind and one["knows"] == knows]
            if here:
                rows.append([kind, knows, str(len(here)), str(sum(one["false"] for one in here))])
    print(table(["kind", "hint", "runs", "false solutions"], rows))
    false = sum(one["false"] for one in runs)
    print(f"\n{false} of {len(runs)}; 95 % upper limit when none: {3.0 / max(len(runs), 1):.1e} a run")
    rows = []
    for power in (0.5, 1.5, 2.5, 3.5):
        states = sum(one["log10"] <= -round(power + 0.5) for one in runs)
        rows.append([f"1e-{power}", str(states), f"{len(runs) * 10**-power:.1f}"])
    print("\n" + table(["best pointing stated below", "runs", "allowed"], rows))
    print(f"{np.mean([one['cpu_s'] for one in runs]):.2f} s of CPU a run")


def case(kind: str, rig, rng, run: int):
    field = draw(rig, rng)
    found = detections_of(field)
    ra, dec = rng.uniform(0, 360), np.degrees(np.arcsin(rng.uniform(-0.95, 0.95)))
    known, knows = {}, "rough hint"
    if rig.name == CALIBRATED and rng.random() < 0.5:
        lens = known_lens((0.004, ((rig.width_px - 1) / 2, (rig.height_px - 1) / 2), rig.focal_px), rig).lens
        roll = rng.uniform(0, 360) if rng.random() < 0.5 else None
        known, knows = (
            {"scale_tolerance": 0.005, "rotation_deg": roll, "parity": 1, "lens": lens},
            "calibrated",
        )
    if kind == KINDS[-1]:
        center = field.center
        ra = (np.degrees(np.arctan2(center[1], center[0])) + rng.uniform(150, 210)) % 360
        dec = -np.degrees(np.arcsin(center[2]))
        off = 1.0 if known else rng.uniform(0.9, 1.1)
        return field, found, Hint((float(ra), float(dec)), rig.scale_arcsec_px * off, **known), knows
    size = np.array([rig.width_px, rig.height_px])
    count = int(rng.integers(4, 400))
    if kind == "random":
        places = rng.uniform(0, 1, (count, 2)) * size
    elif kind == "grid":
        step = rng.uniform(150, 900)
        places = np.stack(
            np.meshgrid(np.arange(50, size[0], step), np.arange(50, size[1], step)), -1
        ).reshape(-1, 2)
        places = places + rng.normal(0, rng.choice([0.05, 3.0]), places.shape)
    elif kind == "line":
        places = rng.uniform(0, 1, (count, 1)) * size * 0.98 + rng.normal(
            0, rng.choice([0.3, 20.0]), (count, 2)
        )
    else:
        places = size / 2 + rng.normal(0, rng.uniform(20, 600), (count, 2))
    places = places[(places > 2).all(axis=1) & (places < size - 2).all(axis=1)]
    found = found.take(np.arange(len(places)) % len(found))
    flux = np.sort(10 ** rng.uniform(2, 5, len(places)))[::-1]
    places = rng.permutation(places)
    found = replace(found, x_px=places[:, 0], y_px=places[:, 1], flux_adu=flux)
    return field, found, Hint((ra, float(dec)), rig.scale_arcsec_px, **known), knows


if __name__ == "__main__":
    main()
