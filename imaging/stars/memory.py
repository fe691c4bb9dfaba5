"""Stars that the catalogue lacks, learned from earlier frames of a sequence: reference where clouds thin a frame out.

A hot pixel stays on the sensor when the sky moves, a planet moves on the sky: only what stood at one place of the sky
while its pixel changed is taken for a star.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from imaging.stars.camera import ARCSEC_RAD
from imaging.stars.refine import Field, Match, Sky

if TYPE_CHECKING:
    from imaging.stars.air import Air

LEARNED = -1  # in place of a row of the star list
_MOST = 600
_SAME_PX = 2.0  # on the sky, between frames
_MOVED_PX = 6.0  # on the sensor: more than any hot pixel is wide


@dataclass(frozen=True)
class Memory:
    """n places of uncatalogued light: ICRS unit vectors (n, 3), magnitudes on the catalogue's scale.

    `sigma_px`: of the centroid; `shared_px`: error of the pointings that placed them, the same for all; `first_px`
    (n, 2): where on the sensor each was seen first; `moved`: whether it has since been elsewhere on the sensor.
    """

    vectors: np.ndarray
    magnitude: np.ndarray
    sigma_px: np.ndarray
    shared_px: float
    first_px: np.ndarray
    moved: np.ndarray

    def stars(self, scale_arcsec_px: float) -> Sky:
        """Return what has proved to be stars.

        Their common error is given to each n-fold, so that n of them together do not claim to know better.
        """
        sure = np.flatnonzero(self.moved)
        sigma_px = np.sqrt(self.sigma_px[sure] ** 2 + len(sure) * self.shared_px**2)
        return Sky(
            self.vectors[sure], self.magnitude[sure], sigma_px * scale_arcsec_px, np.full(len(sure), LEARNED)
        )


def together(sky: Sky, learned: Sky) -> Sky:
    """Return catalogue and learned stars, brightest first."""
    both = Sky(
        *(
            np.concatenate([getattr(sky, name), getattr(learned, name)])
            for name in ("vectors", "magnitude", "sigma_arcsec", "index")
        )
    )
    return both.take(np.argsort(both.magnitude, kind="stable"))


def remembered(memory: Memory | None, match: Match, field: Field, air: Air | None) -> Memory:
    """Return the memory with what a solved frame shows beyond the stars matched."""
    from scipy.spatial import cKDTree

    camera, bright = match.fit.camera, match.bright
    free = np.setdiff1d(np.arange(len(field.x_px)), match.detection)
    free = free[~field.saturated[free] & (field.sigma_px[free] < 0.5)][:_MOST]
    x, y = field.x_px[free], field.y_px[free]
    vectors = camera.vectors(x, y)
    if air is not None:
        vectors = air.unlifted(vectors)
    middle = np.array([field.shape[1] / 2]), np.array([field.shape[0] / 2])
    shared_px = float(np.sqrt(np.trace(match.fit.covariance_at(*middle)[0]) / 2))
    new = Memory(
        vectors,
        bright.pivot + (field.magnitude[free] - bright.zero) / max(bright.slope, 0.1),
        field.sigma_px[free],
        shared_px,
        np.column_stack([x, y]),
        np.zeros(len(free), dtype=bool),
    )
    if memory is None or len(memory.magnitude) == 0 or len(free) == 0:
        return new if memory is None or len(free) else memory
    reach = _SAME_PX * camera.scale_arcsec_px / ARCSEC_RAD
    distance, old = cKDTree(memory.vectors).query(vectors, distance_upper_bound=reach)
    known = np.isfinite(distance)
    seen = old[known]
    moved = memory.moved.copy()
    moved[seen] |= np.hypot(*(memory.first_px[seen] - new.first_px[known]).T) > _MOVED_PX
    # what is seen is kept, and what is a star already; the rest makes room for what is new
    now = np.isin(np.arange(len(moved)), seen)
    kept = np.concatenate([np.flatnonzero(now), np.flatnonzero(moved & ~now)])[: 2 * _MOST]
    fresh = np.flatnonzero(~known)[: max(0, _MOST - len(kept))]
    before = replace(memory, moved=moved)

    def joined(name: str) -> np.ndarray:
        return np.concatenate([getattr(before, name)[kept], getattr(new, name)[fresh]])

    return Memory(
        joined("vectors"),
        joined("magnitude"),
        joined("sigma_px"),
        max(memory.shared_px, shared_px) if len(kept) else shared_px,
        joined("first_px"),
        joined("moved"),
    )
