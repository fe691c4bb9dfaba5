"""The catalogue as the solver needs it: unit vectors of a date, brightest first, and position errors."""

from __future__ import annotations

from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np

from imaging.stars.refine import Sky
from planner.sky.places import radec_deg

if TYPE_CHECKING:
    from planner.sky.stars import StarField

_EPOCH_STEP_S = 86400.0 * 10  # within it no star of the list moves by more than 0.3 arcsec, most by 0.001
_WIDE_RAD = (
    0.7  # up to here a field alone is brought to the date, which takes a hundredth of the whole sky's time
)


@lru_cache(maxsize=4)
def _whole(epoch: int) -> tuple[Sky, Any]:
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
    return _whole(round(tt_s / _EPOCH_STEP_S))[0]


def stars_near(center: np.ndarray, radius_rad: float, tt_s: float, stars_per_sr: float | None = None) -> Sky:
    """Return the stars within a radius of a unit vector, brightest first, to about a mean density."""
    radius = min(radius_rad, np.pi)
    if radius < _WIDE_RAD:
        from planner.sky.stars import stars_in_field

        ra_deg, dec_deg = radec_deg(np.asarray(center, float))
        sky = _as_sky(stars_in_field(float(ra_deg), float(dec_deg), float(np.degrees(radius)), tt_s))
        index = np.arange(len(sky))
    else:
        sky, tree = _whole(round(tt_s / _EPOCH_STEP_S))
        index = np.arange(len(sky))
        if radius < np.pi - 1e-6:
            index = np.sort(tree.query_ball_point(center, 2 * np.sin(radius / 2)))
    if stars_per_sr is not None and np.isfinite(stars_per_sr):
        index = index[: max(4, round(stars_per_sr * 2 * np.pi * (1 - np.cos(radius))))]
    return sky.take(index)
