"""Conjunctions in ecliptic longitude: the mean of finding every event whose bodies must first come together.

A longitude difference that only grows is sampled on a grid on which it gains less than half a turn, unwrapped, and
inverted: no conjunction can be missed, however long the span.
"""

from __future__ import annotations

from functools import partial

import numpy as np

from planner.sky import ephemeris, places, timescale

DAY_S = timescale.DAY_S
# Days in which the faster of planet and Earth gains less than half a turn on the other, at perihelion of both:
# Mercury gains at most 5.4 degrees a day, Venus 0.7, the Earth 0.6 on Mars and 1.02 on the others.
_HELIOCENTRIC_GRID_S = {"mercury": 28 * DAY_S, "venus": 200 * DAY_S, "mars": 200 * DAY_S}
_OUTER_GRID_S = 160 * DAY_S
# The Moon gains 10 to 17 degrees a day on any planet.
_MOON_GRID_S = 4 * DAY_S

_OBLIQUITY_RAD = np.deg2rad(84381.406 / 3600.0)  # of J2000.0, IAU 2006 (Hilton et al. 2006)
_COS_EPS, _SIN_EPS = np.cos(_OBLIQUITY_RAD), np.sin(_OBLIQUITY_RAD)


def with_earth(
    body: str, start_tt_s: float, end_tt_s: float, opposite: bool = False, steps: int = 3
) -> np.ndarray:
    """Return when a planet and the Earth have the same heliocentric longitude, in TT seconds.

    That is inferior conjunction or opposition; with `opposite` the longitudes differ by half a turn: superior
    conjunction or conjunction with the Sun. Geometric places, ecliptic of J2000.0: within a day (Mercury: an hour) of
    the apparent event. Covers the span and up to a step beyond.
    """
    grid = _grid(start_tt_s, end_tt_s, _HELIOCENTRIC_GRID_S.get(body, _OUTER_GRID_S))
    target = np.pi if opposite else 0.0
    inner = 1.0 if body in ("mercury", "venus") else -1.0

    def gain(tt_s: np.ndarray, with_rate: bool = True) -> tuple[np.ndarray, np.ndarray]:
        angle, rate = _heliocentric_gain(body, tt_s, with_rate)
        return inner * (angle - target), inner * rate

    return _solved(gain, grid, steps)


def elongation_rad(body: str, tt_s: np.ndarray) -> np.ndarray:
    """Return the angle Sun-Earth-planet without light-time: to 0.02 degrees, for a first sieve."""
    tdb_s = timescale.tdb_s(tt_s)
    earth = ephemeris.position_km("emb", tdb_s)
    planet, sun = (ephemeris.position_km(name, tdb_s) - earth for name in (body, "sun"))
    return places.separation_arcsec(planet, sun) / places.RAD_ARCSEC


def moon_with(body: str, start_tt_s: float, end_tt_s: float) -> np.ndarray:
    """Return when the Moon and a planet have the same geocentric longitude (ecliptic of J2000.0), in TT seconds."""
    return _solved(partial(_geocentric_gain, body), _grid(start_tt_s, end_tt_s, _MOON_GRID_S))


def _grid(start_tt_s: float, end_tt_s: float, step_s: float) -> np.ndarray:
    first, last = timescale.SPAN
    low, high = max(first, start_tt_s - step_s), min(last, end_tt_s + step_s)
    return np.linspace(low, high, max(2, int(np.ceil((high - low) / step_s)) + 1))


def _solved(gain, grid: np.ndarray, steps: int = 3) -> np.ndarray:  # type: ignore[no-untyped-def]
    angle = np.unwrap(gain(grid, with_rate=False)[0])
    turns = 2 * np.pi * np.arange(np.ceil(angle[0] / (2 * np.pi)), angle[-1] / (2 * np.pi))
    t = np.interp(turns, angle, grid)
    # linear interpolation is off by two days for Mercury; each step squares that error over some ten days
    for _ in range(steps):
        angle, rate = gain(t)
        ahead = (angle + np.pi) % (2 * np.pi) - np.pi
        t = np.clip(t - ahead / rate, grid[0], grid[-1])
    return t


def _longitude(r: np.ndarray) -> np.ndarray:
    return np.arctan2(r[1] * _COS_EPS + r[2] * _SIN_EPS, r[0])


def _heliocentric_gain(body: str, tt_s: np.ndarray, with_rate: bool) -> tuple[np.ndarray, np.ndarray]:
    """Return the planet's longitude minus that of the Earth-Moon barycentre (6" from the Earth's), and its rate."""
    tdb_s = timescale.tdb_s(tt_s)
    kernel = ephemeris.default_ephemeris()
    sun, sun_v = kernel.state("sun", tdb_s, with_rate)
    longitude, rate = [], []
    for name in (body, "emb"):
        r, v = kernel.state(name, tdb_s, with_rate)
        r = r - sun
        y = r[1] * _COS_EPS + r[2] * _SIN_EPS
        longitude.append(np.arctan2(y, r[0]))
        if v is not None and sun_v is not None:
            v = v - sun_v
            vy = v[1] * _COS_EPS + v[2] * _SIN_EPS
            rate.append((r[0] * vy - y * v[0]) / (r[0] ** 2 + y**2))
    return longitude[0] - longitude[1], rate[0] - rate[1] if rate else np.full(len(tdb_s), np.nan)


def _geocentric_gain(body: str, tt_s: np.ndarray, with_rate: bool = True) -> tuple[np.ndarray, np.ndarray]:
    half_step_s = 300.0
    if not with_rate:
        vectors = [places.direction(name, None, tt_s).vector_km for name in ("moon", body)]
        return _longitude(vectors[0]) - _longitude(vectors[1]), np.full(len(tt_s), np.nan)
    ends = np.concatenate([tt_s - half_step_s, tt_s + half_step_s])
    moon = _longitude(places.direction("moon", None, ends).vector_km)
    planet = _longitude(places.direction(body, None, ends).vector_km)
    before, after = (moon - planet).reshape(2, -1)
    change = (after - before + np.pi) % (2 * np.pi) - np.pi
    return before + 0.5 * change, change / (2 * half_step_s)
