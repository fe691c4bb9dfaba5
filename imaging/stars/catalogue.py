"""The catalogue as the solver needs it: unit vectors of a date, brightest first, and position errors."""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np

from imaging.stars.refine import Sky
from planner.sky.places import radec_deg
from planner.sky.starlist import list_in_force

if TYPE_CHECKING:
    from planner.sky.stars import StarField

_EPOCH_STEP_S = (
    86400.0 * 90
)  # of the whole sky: within it one star of the list moves by 1.3 arcsec, most by 0.01
_WIDE_RAD = 0.7  # up to here a field alone is brought to the date, in a hundredth of the whole sky's time


@lru_cache(maxsize=4)
def _whole(epoch: int, in_force: int) -> tuple[Sky, Any]:
    from scipy.spatial import cKDTree

    from planner.sky.stars import all_stars

    sky = _as_sky(all_stars(epoch * _EPOCH_STEP_S))
    return sky, cKDTree(sky.vectors, balanced_tree=False, compact_nodes=False)


def _as_sky(stars: StarField) -> Sky:
    return Sky(
        vectors_of(stars.ra_deg, stars.dec_deg),
        stars.magnitude,
        np.asarray(stars.sigma_mas) * 1e-3,
        stars.index,
    )


def vectors_of(ra_deg: np.ndarray, dec_deg: np.ndarray) -> np.ndarray:
    """Return unit vectors (n, 3) of directions."""
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    return np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=-1)


def whole_sky(tt_s: float) -> Sky:
    """Return all catalogue stars at a date, brightest first."""
    return _whole(round(tt_s / _EPOCH_STEP_S), list_in_force())[0]


def stars_near(center: np.ndarray, radius_rad: float, tt_s: float, stars_per_sr: float | None = None) -> Sky:
    """Return the stars within a radius of a unit vector at the date, brightest first, to about a mean density."""
    if radius_rad >= _WIDE_RAD:
        return whole_sky(tt_s).take(rows_near(center, radius_rad, tt_s, stars_per_sr))
    center = np.asarray(center, float)
    here = list_in_force()
    for held, about, reach, when, density, sky in _RECENT:  # frames of a sequence ask for nearly the same
        away = np.arccos(np.clip(about @ center, -1, 1))
        if (
            held == here
            and _alike(density, stars_per_sr)
            and abs(when - tt_s) < _SAME_S
            and away + radius_rad <= reach
        ):
            return sky.take(np.flatnonzero(sky.vectors @ center > np.cos(radius_rad)))
    wide = radius_rad * _SPARE
    sky = _in_field(center, wide, tt_s, stars_per_sr)
    _RECENT.insert(0, (here, center, wide, tt_s, stars_per_sr, sky))
    del _RECENT[4:]
    return sky.take(np.flatnonzero(sky.vectors @ center > np.cos(radius_rad)))


_SAME_S = 6 * 3600.0  # in which no star moves by more than 0.01 arcsec
_SPARE = 1.12
_RECENT: list[tuple[int, np.ndarray, float, float, float | None, Sky]] = []


def _alike(one: float | None, other: float | None) -> bool:
    return one == other or (one is not None and other is not None and abs(one - other) < 0.05 * other)


def _in_field(center: np.ndarray, radius_rad: float, tt_s: float, stars_per_sr: float | None) -> Sky:
    from planner.sky.stars import stars_in_field

    ra_deg, dec_deg = radec_deg(center)
    most = None if stars_per_sr is None else _number(np.inf, radius_rad, stars_per_sr)
    return _as_sky(
        stars_in_field(float(ra_deg), float(dec_deg), float(np.degrees(radius_rad)), tt_s, brightest=most)
    )


def density_of(stars: int, radius_rad: float) -> float:
    """Return the density, per steradian, at which a cone of this radius holds so many stars."""
    return stars / (2 * np.pi * (1 - np.cos(min(radius_rad, np.pi))))


def rows_near(
    center: np.ndarray, radius_rad: float, tt_s: float, stars_per_sr: float | None = None
) -> np.ndarray:
    """Return the rows of `whole_sky` within a radius of a unit vector, ascending, to about a mean density."""
    sky, tree = _whole(round(tt_s / _EPOCH_STEP_S), list_in_force())
    radius = min(radius_rad, np.pi)
    if radius >= np.pi - 1e-6:
        rows = np.arange(len(sky))
    else:
        rows = np.sort(tree.query_ball_point(center, 2 * np.sin(radius / 2))).astype(int)
    return rows[: _number(len(rows), radius, stars_per_sr)]


def _number(found: float, radius_rad: float, stars_per_sr: float | None) -> int | None:
    if stars_per_sr is None or not np.isfinite(stars_per_sr):
        return None if np.isinf(found) else int(found)
    return int(min(found, max(4, round(stars_per_sr * 2 * np.pi * (1 - np.cos(min(radius_rad, np.pi)))))))
