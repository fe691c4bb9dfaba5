"""The same event from two sites: how contact times differ and the track shifts, the base for measuring a distance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.events.catalogue import family
from planner.events.family import Circumstances, Event, Geometry
from planner.sky import places, timescale
from planner.sky.observer import Observer, itrs_position_km


@dataclass(frozen=True)
class Shift:
    """One instant from both sites: NaN where a site does not have it.

    `later_s`: how much later it comes at the other site. `along_arcsec`, `across_arcsec`: how far the target stands
    for the other site, at the first site's instant, ahead on its way over the reference and to the left of it.
    """

    name: str
    tt_s: float
    other_tt_s: float
    later_s: float
    along_arcsec: float
    across_arcsec: float


@dataclass(frozen=True)
class Comparison:
    """An event from two sites; `baseline_km` is the straight line between them."""

    one: Circumstances
    other: Circumstances
    baseline_km: float
    shifts: tuple[Shift, ...]


def compare(event: Event, one: Observer | None, other: Observer | None) -> Comparison:
    """Return the circumstances of an event at two sites (None: the geocentre) and how they differ.

    Parallax is exact: both sites look at the same light-time places. The target is measured against the reference
    disc of its family, or against the stars.
    """
    chosen = family(event.spec.family)
    here, there = chosen.predict(event, one), chosen.predict(event, other)
    ends = [itrs_position_km(site) if site is not None else np.zeros(3) for site in (one, other)]
    shifts = []
    for instant in here.instants:
        twin = there.instant(instant.name)
        along, across = _displacement(chosen, event, one, other, instant.tt_s)
        shifts.append(
            Shift(
                instant.name,
                instant.tt_s,
                twin.tt_s if twin else float("nan"),
                twin.tt_s - instant.tt_s if twin else float("nan"),
                along,
                across,
            )
        )
    return Comparison(here, there, float(np.linalg.norm(ends[1] - ends[0])), tuple(shifts))


def _displacement(chosen, event: Event, one: Observer | None, other: Observer | None, tt_s: float):  # type: ignore[no-untyped-def]
    # tracks among the stars take weeks: their direction is taken over a day, without the daily parallax
    step_s = 1800.0 if chosen.campaign else 30.0
    times = np.clip(tt_s + np.array([-step_s, 0.0, step_s]), *timescale.SPAN)
    here = chosen.geometry(event, one, times)
    there = chosen.geometry(event, other, times)
    course = chosen.geometry(event, None, times) if chosen.campaign else here
    if here.reference == "stars":
        east, north = _from(here, there, 1)
        path = _from(course, course, slice(None))
        motion = path[0][2] - path[0][0], path[1][2] - path[1][0]
    else:
        mine, theirs = _over(here), _over(there)
        east, north = theirs[0][1] - mine[0][1], theirs[1][1] - mine[1][1]
        motion = mine[0][2] - mine[0][0], mine[1][2] - mine[1][0]
    length = float(np.hypot(*motion))
    along = (east * motion[0] + north * motion[1]) / length
    # left of the motion as seen on the sky, where east is to the left of north
    across = (east * motion[1] - north * motion[0]) / length
    return float(along), float(across)


def _over(geometry: Geometry) -> tuple[np.ndarray, np.ndarray]:
    """Return the target's offsets from the reference disc."""
    disc = geometry.discs[geometry.reference]
    return places.offsets_arcsec(disc.ra_deg, disc.dec_deg, *_target(geometry))


def _from(here: Geometry, there: Geometry, at: int | slice) -> tuple[np.ndarray, np.ndarray]:
    """Return offsets of the second geometry's target from the middle of the first's."""
    ra_deg, dec_deg = (value[1] for value in _target(here))
    target = _target(there)
    return places.offsets_arcsec(ra_deg, dec_deg, target[0][at], target[1][at])


def _target(geometry: Geometry) -> tuple[np.ndarray, np.ndarray]:
    for name, ra_deg, dec_deg, _ in geometry.stars:
        # among the stars it is the body before the star that parallax moves
        if name == geometry.target and geometry.reference != "stars":
            return ra_deg, dec_deg
    disc = geometry.discs.get(geometry.target) or next(iter(geometry.discs.values()))
    return disc.ra_deg, disc.dec_deg
