"""The celestial pole and the equinox of date: IAU 2006/2000A, from a daily table filled where it is asked for.

A direct evaluation costs 50 microseconds a time; the table, interpolated with a polynomial through six nodes, costs
under 1 and agrees with it to 0.02 mas. The observed offsets of the pole from the model (under 1 mas) are left out.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from planner.sky.bodies import ARCSEC
from planner.sky.rotation import DAY_S, polar_motion_arcsec
from planner.sky.timescale import SPAN, ut1_s

# Columns of the table: X and Y of the pole and the CIO locator s (IAU 2006/2000A), equation of the origins,
# true obliquity of date; all in radians.
_COLUMNS = 5
_FIRST_DAY = int(np.floor(SPAN[0] / DAY_S)) - 8
_DAYS = int(np.ceil(SPAN[1] / DAY_S)) + 8 - _FIRST_DAY
# Weights of the six-point Lagrange polynomial over nodes -2..3: 1 / prod(j - k)
_NODES = np.arange(-2, 4)
_WEIGHTS = np.array([1.0 / np.prod([j - k for k in _NODES if k != j]) for j in _NODES])


@lru_cache(maxsize=1)
def _table() -> np.ndarray:
    return np.full((_DAYS, _COLUMNS), np.nan)


def _fill(rows: np.ndarray) -> None:
    import erfa

    table = _table()
    rows = rows[np.isnan(table[rows, 0])]
    if not len(rows):
        return
    day = rows + float(_FIRST_DAY)
    matrix = erfa.pnm06a(2451545.0, day)
    x, y = erfa.bpn2xy(matrix)
    s = erfa.s06(2451545.0, day, x, y)
    origins = erfa.eors(matrix, s)
    # nutation in obliquity from the pole itself: angle between the mean pole of the ecliptic of date and the pole
    mean_obliquity = erfa.obl06(2451545.0, day)
    ecliptic_pole = erfa.ecm06(2451545.0, day)[:, 2, :]
    obliquity = np.arccos(np.einsum("ij,ij->i", ecliptic_pole, matrix[:, 2, :]))
    assert np.all(np.abs(obliquity - mean_obliquity) < 1e-4)
    table[rows] = np.stack([x, y, s, origins, obliquity], axis=1)


def pole_columns(tt_s: np.ndarray) -> np.ndarray:
    """Return X, Y, s, equation of the origins and true obliquity, (5, n) in radians."""
    day = np.atleast_1d(np.asarray(tt_s, float)) / DAY_S - _FIRST_DAY
    whole = np.floor(day).astype(np.int64)
    np.clip(whole, 2, _DAYS - 4, out=whole)
    first, last = int(whole.min(initial=2)) - 2, int(whole.max(initial=2)) + 3
    if last - first < 4 * len(whole):
        _fill(np.arange(first, last + 1))
    else:
        _fill(np.unique(np.unique(whole)[:, None] + _NODES))
    u = day - whole
    left = [np.ones_like(u)]
    for node in _NODES[:-1]:
        left.append(left[-1] * (u - node))
    right = [np.ones_like(u)]
    for node in _NODES[:0:-1]:
        right.append(right[-1] * (u - node))
    table = _table()
    result = np.zeros((_COLUMNS, len(u)))
    for k in range(6):
        result += table[whole + _NODES[k]].T * (left[k] * right[5 - k] * _WEIGHTS[k])
    return result


def celestial_to_intermediate(columns: np.ndarray) -> np.ndarray:
    """Return the matrix GCRS to CIRS, (n, 3, 3), from `pole_columns`.

    IERS Conventions (2010), eq. 5.10 with 5.6.
    """
    x, y, s = columns[:3]
    z = np.sqrt(1.0 - x * x - y * y)
    a = 1.0 / (1.0 + z)
    cos, sin = np.cos(s), np.sin(s)
    q = np.empty((len(x), 3, 3))
    # rows of Q transposed (GCRS to the intermediate frame without s), then the turn by s about the pole
    first = np.stack([1.0 - a * x * x, -a * x * y, -x])
    second = np.stack([-a * x * y, 1.0 - a * y * y, -y])
    q[:, 0, :] = (cos * first - sin * second).T
    q[:, 1, :] = (sin * first + cos * second).T
    q[:, 2, :] = np.stack([x, y, z]).T
    return q


def earth_rotation_angle(tt_s: np.ndarray) -> np.ndarray:
    """Return the Earth rotation angle in radians (IAU 2000, Capitaine et al. 2000; IERS Conventions eq. 5.15)."""
    days = ut1_s(np.atleast_1d(tt_s)) / DAY_S
    whole = np.floor(days)
    return 2 * np.pi * np.mod(0.7790572732640 + 0.00273781191135448 * days + (days - whole), 1.0)


def celestial_to_terrestrial(tt_s: np.ndarray) -> np.ndarray:
    """Return the matrix GCRS to ITRS, (n, 3, 3), with polar motion; the TIO locator (under 0.1 mas) is left out."""
    tt_s = np.atleast_1d(np.asarray(tt_s, float))
    q = celestial_to_intermediate(pole_columns(tt_s))
    angle = earth_rotation_angle(tt_s)
    cos, sin = np.cos(angle)[:, None], np.sin(angle)[:, None]
    turned = np.empty_like(q)
    turned[:, 0] = cos * q[:, 0] + sin * q[:, 1]
    turned[:, 1] = -sin * q[:, 0] + cos * q[:, 1]
    turned[:, 2] = q[:, 2]
    x, y = polar_motion_arcsec(tt_s)
    x, y = (x * ARCSEC)[:, None], (y * ARCSEC)[:, None]
    # small angles: the neglected second order is under 1e-11
    return np.stack(
        [
            turned[:, 0] + x * turned[:, 2],
            turned[:, 1] - y * turned[:, 2],
            turned[:, 2] - x * turned[:, 0] + y * turned[:, 1],
        ],
        axis=1,
    )


def true_equator_matrix(tt_s: np.ndarray) -> np.ndarray:
    """Return the matrix GCRS to true equator and equinox of date, (n, 3, 3)."""
    columns = pole_columns(tt_s)
    q = celestial_to_intermediate(columns)
    cos, sin = np.cos(columns[3])[:, None], np.sin(columns[3])[:, None]
    # right ascension = intermediate right ascension - equation of the origins
    return np.stack([cos * q[:, 0] + sin * q[:, 1], cos * q[:, 1] - sin * q[:, 0], q[:, 2]], axis=1)


def true_obliquity(tt_s: np.ndarray) -> np.ndarray:
    """Return the true obliquity of the ecliptic of date in radians."""
    return pole_columns(tt_s)[4]
