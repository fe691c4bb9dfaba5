"""What a site sees of an instant: altitude, azimuth, and what stands in the way."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.sky import observer as places_on_earth
from planner.sky import places
from planner.sky.observer import Observer

# Brightest-limit V magnitude and the Sun's altitude below which a target of it is worth a try in a telescope.
# Common practice, no source: Venus is found by day, first-magnitude stars about sunset (Regulus was timed with the
# Sun 2 degrees up on 1999 May 22), stars of magnitude 4 need nautical twilight.
_DAYLIGHT_LIMITS = ((-3.0, 90.0), (-1.5, 20.0), (1.5, 3.0), (3.0, -6.0), (6.0, -9.0), (99.0, -12.0))


@dataclass(frozen=True)
class View:
    """What an observer sees of a target at n times; NaN and `None` limits at the geocentre.

    `limited_by`: `below horizon`, `behind the horizon line`, `daylight` or None, a tuple of n.
    """

    altitude_deg: np.ndarray
    azimuth_deg: np.ndarray
    sun_altitude_deg: np.ndarray
    limited_by: tuple[str | None, ...]

    @property
    def visible(self) -> np.ndarray:
        """True where nothing limits."""
        return np.array([limit is None for limit in self.limited_by], dtype=bool)


def sun_altitude_deg(observer: Observer | None, tt_s: np.ndarray) -> np.ndarray:
    """Return the geometric altitude of the Sun's centre (NaN at the geocentre)."""
    tt_s = np.asarray(tt_s, dtype=float)
    if observer is None:
        return np.full(tt_s.shape, np.nan)
    sun = places.direction("sun", observer, tt_s).vector_km
    return places.altaz(sun, observer, tt_s, refracted=False)[0]


def view(
    vector_km: np.ndarray,
    observer: Observer | None,
    tt_s: np.ndarray,
    magnitude: float | np.ndarray | None = None,
) -> View:
    """Return what an observer sees of a direction (3, n); a magnitude makes daylight a limit.

    Altitudes are refracted. Without a horizon line the limit is 0 degrees.
    """
    tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
    nothing = np.full(tt_s.shape, np.nan)
    if observer is None:
        return View(nothing, nothing, nothing, (None,) * len(tt_s))
    altitude, azimuth = places.altaz(vector_km, observer, tt_s, refracted=True)
    sun = sun_altitude_deg(observer, tt_s)
    line = np.maximum(0.0, places_on_earth.horizon_altitude_deg(observer, azimuth))
    daylight = np.zeros(tt_s.shape, dtype=bool)
    if magnitude is not None:
        daylight = sun > darkness_needed_deg(np.broadcast_to(magnitude, tt_s.shape))
    limits = [
        "below horizon" if h < 0 else "behind the horizon line" if h < edge else "daylight" if day else None
        for h, edge, day in zip(altitude, line, daylight, strict=True)
    ]
    return View(altitude, azimuth, sun, tuple(limits))


def darkness_needed_deg(magnitude: np.ndarray) -> np.ndarray:
    """Return the Sun's altitude (degrees) below which a target of this V magnitude is worth a try."""
    edges, altitudes = np.array(_DAYLIGHT_LIMITS).T
    return altitudes[np.minimum(np.searchsorted(edges, magnitude, side="right"), len(altitudes) - 1)]
