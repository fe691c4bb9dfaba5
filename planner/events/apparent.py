"""Apparent geocentric right ascension and longitude, how fast they change, and when they agree."""

from __future__ import annotations

import erfa
import numpy as np

from planner.sky import places, timescale

DAY_S = timescale.DAY_S
_RATE_STEP_S = 0.05 * DAY_S
# Small enough for the third derivative of Mercury's longitude, large enough for rounding.
_FINE_STEP_S = 0.01 * DAY_S
_J2000_JD = 2451545.0


def coordinate_rad(body: str, tt_s: np.ndarray, axis: str) -> np.ndarray:
    """Return the geocentric apparent `ra` or ecliptic `longitude` of a body, true equinox of date, in radians."""
    seen = places.apparent(body, None, tt_s).vector_km
    angle = places.of_date(seen, tt_s)[0] if axis == "ra" else places.ecliptic_lonlat(seen, tt_s)[0]
    return np.radians(angle)


def mean_motion(body: str, tt_s: np.ndarray, axis: str) -> np.ndarray:
    """Return the rate (rad/s) of `ra` or `longitude` referred to the mean equinox of date: without nutation, smooth."""
    ends = _ends(tt_s)
    seen = places.apparent(body, None, ends).vector_km
    matrix = erfa.pmat06(_J2000_JD, ends / DAY_S) if axis == "ra" else erfa.ecm06(_J2000_JD, ends / DAY_S)
    return _rate(_angle(matrix, seen))


def true_motion(body: str, tt_s: np.ndarray, axis: str) -> np.ndarray:
    """Return the rate (rad/s) referred to the true equinox of date, nutation evaluated directly (100 us a time).

    For stations of slow planets, where the interpolated table's 0.02 mas would cost seconds.
    """
    ends = _ends(tt_s)
    seen = places.apparent(body, None, ends).vector_km
    if axis == "ra":
        return _rate(_angle(erfa.pnm06a(_J2000_JD, ends / DAY_S), seen))
    in_longitude, _ = erfa.nut06a(_J2000_JD, ends / DAY_S)
    return _rate(_angle(erfa.ecm06(_J2000_JD, ends / DAY_S), seen) + in_longitude)


def _ends(tt_s: np.ndarray) -> np.ndarray:
    tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
    return np.concatenate([tt_s - _FINE_STEP_S, tt_s + _FINE_STEP_S])


def _angle(matrix: np.ndarray, vector: np.ndarray) -> np.ndarray:
    x, y, _ = np.einsum("nij,jn->in", matrix, vector)
    return np.arctan2(y, x)


def _rate(angle_rad: np.ndarray) -> np.ndarray:
    before, after = angle_rad.reshape(2, -1)
    return ((after - before + np.pi) % (2 * np.pi) - np.pi) / (2.0 * _FINE_STEP_S)


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
