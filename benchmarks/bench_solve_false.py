"""False solutions, counted: points at random, grids, lines, clumps, and real fields with a wrong hint.

python benchmarks/bench_solve_false.py --runs 5000
"""

from __future__ import annotations

import argparse
import warnings
from dataclasses import replace
from time import process_time

import numpy as np
from drawn_fields import RIGS, TT_S, detections_of, draw, model_error_px
from measured import machine, table

from imaging.stars.catalogue import whole_sky
from imaging.stars.solve import Hint, solve_detections
from planner.errors import NoSolutionError

KINDS = ("random", "grid", "line", "clump", "real field, wrong hint")


def main() -> None:
    options = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    options.add_argument("--runs", type=int, default=5000)
    options.add_argument(
        "--blind", action="store_true", help="search the whole sky too (random, grid, line, clump)"
    )
    asked = options.parse_args()
    warnings.simplefilter("ignore", RuntimeWarning)
    print(machine())
    whole_sky(TT_S)
    false = dict.fromkeys(KINDS, 0)
    runs = dict.fromkeys(KINDS, 0)
    began = process_time()
    for seed in range(asked.runs):
        kind = KINDS[seed % len(KINDS)]
        rng = np.random.default_rng([seed, 1234])
        rig = list(RIGS.values())[seed // len(KINDS) % len(RIGS)]
        field, found, hint = case(kind, rig, rng)
        blind = asked.blind and kind != KINDS[-1]
        runs[kind] += 1
        try:
            solution = solve_detections(found, TT_S, "bottom", hint, blind=blind)
        except NoSolutionError:
            continue
        if kind == KINDS[-1] and model_error_px(solution, field)[1] < 50:
            continue  # a wide field reaches over the sky to its true place
        false[kind] += 1
        print("FALSE", kind, rig.name, seed, solution.false_alarm_log10, solution.how, flush=True)
    print(
        table(
            ["kind", "runs", "false solutions"], [[kind, str(runs[kind]), str(false[kind])] for kind in KINDS]
        )
    )
    print(f"{(process_time() - began) / asked.runs:.2f} s of CPU a run")


def case(kind: str, rig, rng):
    field = draw(rig, rng)
    found = detections_of(field)
    ra, dec = rng.uniform(0, 360), np.degrees(np.arcsin(rng.uniform(-0.95, 0.95)))
    if kind == KINDS[-1]:
        center = field.center
        ra = (np.degrees(np.arctan2(center[1], center[0])) + rng.uniform(150, 210)) % 360
        dec = -np.degrees(np.arcsin(center[2]))
        return field, found, Hint((float(ra), float(dec)), rig.scale_arcsec_px * rng.uniform(0.9, 1.1))
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
    places = places[(places > 2).all(axis=1) & (places < size - 2).all(axis=1)][: len(found)]
    found = found.take(np.arange(len(places)))
    flux = np.sort(10 ** rng.uniform(2, 5, len(places)))[::-1]
    places = rng.permutation(places)
    found = replace(found, x_px=places[:, 0], y_px=places[:, 1], flux_adu=flux)
    return field, found, Hint((ra, float(dec)), rig.scale_arcsec_px)


if __name__ == "__main__":
    main()
