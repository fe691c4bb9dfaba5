"""Apparent geocentric right ascension and longitude, how fast they change, and when they agree."""

from __future__ import annotations

import numpy as np

from planner.sky import places, timescale

DAY_S = timescale.DAY_S
_RATE_STEP_S = 0.05 * DAY_S


def coordinate_rad(body: str, tt_s: np.ndarray, axis: str) -> np.ndarray:
    """Return the geocentric apparent `ra` or ecliptic `longitude` of a body, true equinox of date, in radians."""
    seen = places.apparent(body, None, tt_s).vector_km
    angle = places.of_date(seen, tt_s)[0] if axis == "ra" else places.ecliptic_lonlat(seen, tt_s)[0]
    return np.radians(angle)


def motion(body: str, tt_s: np.ndarray, axis: str) -> np.ndarray:
    """Return the rate of `ra` or `longitude` in rad/s, by a fourth-order difference over 0.2 days.

    Its error is under 1e-4 arcsec a day: nutation's fastest terms have periods of 5 days.
    """
    tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
    offsets = np.array([-2.0, -1.0, 1.0, 2.0]) * _RATE_STEP_S
    angle = coordinate_rad(body, (tt_s + offsets[:, None]).ravel(), axis).reshape(4, -1)
    angle = np.unwrap(angle, axis=0)
    return (angle[0] - 8.0 * angle[1] + 8.0 * angle[2] - angle[3]) / (12.0 * _RATE_STEP_S)


def apparent_syzygies(body: str, guess_tt_s: np.ndarray, angle_rad: float) -> np.ndarray:
    """Return when the apparent longitude of a planet is that of the Sun plus an angle, near each guess."""
    t = np.array(guess_tt_s, dtype=float)
    if not len(t):
        return t
    first, last = timescale.SPAN
    half_step_s = 0.1 * DAY_S
    for _ in range(5):
        ends = np.clip(np.concatenate([t - half_step_s, t + half_step_s]), first, last)
        apart = coordinate_rad(body, ends, "longitude") - coordinate_rad("sun", ends, "longitude") - angle_rad
        before, after = ((apart + np.pi) % (2 * np.pi) - np.pi).reshape(2, -1)
        rate = (after - before) / (2 * half_step_s)
        t = np.clip(t - 0.5 * (before + after) / rate, first, last)
    return t
