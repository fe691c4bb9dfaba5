"""Planning: CPU seconds of a transit with 5,000 frames and of a six-month campaign, and their growth.

    python benchmarks/bench_plan.py

The reference route plans the same transit frame by frame, as one would by hand: for each frame the altitude of the Sun
from astropy (vectorised over frames, same Earth orientation data), its extinction and an exposure from it; no contacts,
no checks. Times are CPU seconds of one thread, after imports and one warm-up run.
"""

from __future__ import annotations

import time
import warnings
from pathlib import Path

import numpy as np
from measured import machine, table

from planner.sequence.builder import build_plan
from planner.sequence.documents import dump_plan, load_brief
from planner.sequence.equipment import Filter, Guiding
from planner.sequence.models import Brief

CONFIGS = Path(__file__).resolve().parent.parent / "configs"


def wished(brief: Brief, **wish: object) -> Brief:
    return brief.model_copy(update={"wish": brief.wish.model_copy(update=wish)})


def roomy(brief: Brief) -> Brief:
    return brief.model_copy(update={"rig": brief.rig.model_copy(update={"storage_gb": 1e5})})


def cpu_s(work, repeats: int = 3) -> float:
    work()
    times = []
    for _ in range(repeats):
        begun = time.process_time()
        work()
        times.append(time.process_time() - begun)
    return min(times)


def by_hand(plan) -> np.ndarray:
    """Return exposures of every frame from astropy's altitude of the Sun."""
    import astropy.units as u
    from astropy.coordinates import AltAz, EarthLocation, get_sun
    from astropy.time import Time
    from astropy.utils import iers

    from planner.sequence.frametimes import frame_starts
    from planner.sky.timescale import time_from_tt_s

    warnings.simplefilter("ignore")  # dates beyond the tables are dubious to ERFA, as they are to us
    iers.conf.auto_download = False
    iers.conf.auto_max_age = None
    start = frame_starts(plan)[2]
    times = Time(time_from_tt_s(start))
    site = EarthLocation.from_geodetic(
        plan.site.longitude_deg * u.deg, plan.site.latitude_deg * u.deg, plan.site.height_m * u.m
    )
    altitude = get_sun(times).transform_to(AltAz(obstime=times, location=site)).alt.deg
    return 1e-3 * 10 ** (0.4 * plan.site.extinction_mag / np.sin(np.radians(altitude)))


def main() -> None:
    transit = roomy(load_brief(CONFIGS / "mercury_transit_2032.yaml"))
    campaign = load_brief(CONFIGS / "mars_retrograde_2027.yaml")
    rows = []
    for cadence_s in (30.0, 15.0, 3.7, 1.85, 0.6):
        brief = wished(transit, cadence_s=cadence_s)
        plan = build_plan(brief)
        seconds = cpu_s(lambda brief=brief: build_plan(brief))
        hand = cpu_s(lambda plan=plan: by_hand(plan), 1)
        rows.append(
            (f"transit, {plan.frames_total} frames", f"{seconds:.2f}", f"{hand:.2f}", f"{hand / seconds:.1f}")
        )
    for visits in (10, 30, 100):
        brief = wished(campaign, visits=visits)
        plan = build_plan(brief)
        seconds = cpu_s(lambda brief=brief: build_plan(brief))
        days = (plan.passages[-1].shots[0].start_utc - plan.passages[0].shots[0].start_utc).days
        rows.append((f"campaign of {days} days, {len(plan.passages)} visits", f"{seconds:.2f}", "", ""))
    lens, wheel = campaign.rig.optics, [Filter(name=name) for name in ("V", "R", "B")]
    optics = lens.model_copy(update={"focal_length_mm": 300.0, "aperture_mm": 75.0})
    rig = campaign.rig.model_copy(update={"optics": optics, "filters": wheel, "guiding": Guiding(on="star")})
    brief = wished(
        campaign.model_copy(update={"rig": rig}), mosaic="track", filters=["V", "R", "B"], visits=30
    )
    plan = build_plan(brief)
    seconds = cpu_s(lambda: build_plan(brief))
    panels = len(plan.visits()[0])
    rows.append((f"the same, 30 visits of {panels} panels, 3 filters, guided", f"{seconds:.2f}", "", ""))
    plan = build_plan(wished(transit, cadence_s=3.7))
    rows.append(("writing the plan of 5,000 frames as YAML", f"{cpu_s(lambda: dump_plan(plan)):.2f}", "", ""))
    print(machine())
    print(table(("job", "CPU s", "by hand, CPU s", "ratio"), rows))


if __name__ == "__main__":
    main()
