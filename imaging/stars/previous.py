"""A solution from the previous frame of a sequence: the same camera, moved and turned a little."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from imaging.stars.catalogue import density_of
from imaging.stars.hinted import Attempt
from imaging.stars.refine import STARS_LOOKED_AT, Field, Sky, grow
from imaging.stars.verify import ACCEPT_LOG10

if TYPE_CHECKING:
    from imaging.stars.solution import PlateSolution

_BRIGHTEST = 60
_BIN_PX = 6.0  # a turn of 0.1 degree smears a shift by this over a frame
_MOST_SHIFTS = 5
_MOST_STARS = 500  # the brightest of the catalogue are enough to know the place


def solve_from_previous(
    field: Field, previous: PlateSolution, sky_near: Callable[[np.ndarray, float, float], Sky]
) -> Attempt:
    """Return the match of a field that lies near the previous one, by the shift that most star pairs agree on.

    `sky_near(center, radius_rad, stars_per_sr)` gives the catalogue around a unit vector, brightest first.
    Shifts of up to half a frame, turns of a few tenths of a degree.
    """
    assert previous.fit is not None
    camera, lens = previous.fit.camera, previous.fit_lens
    assert lens is not None
    height, width = field.shape
    middle = camera.vectors(np.array([(width - 1) / 2]), np.array([(height - 1) / 2]))[0]
    corner = camera.vectors(np.array([0.0]), np.array([0.0]))[0]
    radius = float(np.arccos(np.clip(middle @ corner, -1, 1)))
    if len(field.x_px) < 4:
        return Attempt(None, 0.0, 0)
    seen = slice(0, _BRIGHTEST)
    trials, best = 0, 0.0
    # near the previous place first: a tracked sequence moves little
    for limit in (0.02, 0.5):
        sky = sky_near(middle, (1.0 + limit) * radius * 1.02, density_of(STARS_LOOKED_AT, radius))
        sky = sky.take(np.arange(min(len(sky), int(_MOST_STARS * (1.0 + limit) ** 2))))
        x, y = camera.pixels(sky.vectors)
        near = (np.abs(x - width / 2) < (0.5 + limit) * width) & (
            np.abs(y - height / 2) < (0.5 + limit) * height
        )
        bright = np.flatnonzero(near)[: 2 * _BRIGHTEST]
        if len(bright) < 4:
            continue
        dx = field.x_px[seen, None] - x[None, bright]
        dy = field.y_px[seen, None] - y[None, bright]
        inside = (np.abs(dx) < width / 2) & (np.abs(dy) < height / 2)
        inside &= np.hypot(dx, dy) < limit * np.hypot(width, height)
        for shift_x, shift_y in _shifts(dx[inside], dy[inside]):
            trials += max(1, int(inside.sum()))
            close = np.hypot(dx - shift_x, dy - shift_y) < _BIN_PX
            detection, star = _one_to_one(close, np.hypot(dx - shift_x, dy - shift_y))
            if len(detection) < 3:
                continue
            first = slice(0, 4)
            start = replace(camera, axes=_turned(camera, field, sky, detection[first], bright[star[first]]))
            match = grow(start, lens, field, sky, detection[first], bright[star[first]])
            if match is None:
                continue
            log10 = match.evidence.chance_log10(trials)
            best = min(best, log10)
            if log10 < ACCEPT_LOG10:
                return Attempt(match, best, trials, log10)
    return Attempt(None, best, trials)


def _shifts(dx: np.ndarray, dy: np.ndarray) -> list[tuple[float, float]]:
    """Return the shifts on which most pairs agree, best first."""
    from scipy.spatial import cKDTree

    if len(dx) == 0:
        return []
    points = np.column_stack([dx, dy])
    if len(points) > 8000:
        points = points[np.argsort(np.hypot(dx, dy))[:8000]]
    tree = cKDTree(points)
    votes = tree.query_ball_point(points, r=_BIN_PX, return_length=True)
    chosen: list[tuple[float, float]] = []
    for i in np.argsort(-votes, kind="stable"):
        if votes[i] < 3 and chosen:
            break
        if all(np.hypot(points[i, 0] - a, points[i, 1] - b) > 2 * _BIN_PX for a, b in chosen):
            chosen.append((float(points[i, 0]), float(points[i, 1])))
        if len(chosen) >= _MOST_SHIFTS:
            break
    return chosen


def _one_to_one(close: np.ndarray, distance: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return pairs (detection, star), each used once, brightest detections first."""
    masked = np.where(close, distance, np.inf)
    star = masked.argmin(axis=1)
    detection = np.flatnonzero(np.isfinite(masked[np.arange(len(masked)), star]))
    star = star[detection]
    mutual = masked[:, star].argmin(axis=0) == detection
    return detection[mutual], star[mutual]


def _turned(camera, field: Field, sky: Sky, detection: np.ndarray, star: np.ndarray) -> np.ndarray:  # type: ignore[no-untyped-def]
    """Return camera axes turned so that the pairs fall on each other (Kabsch 1976)."""
    from imaging.stars.camera import unproject

    u, v = camera.ideal(field.x_px[detection], field.y_px[detection])
    seen = unproject(u, v, camera.focal_px, camera.projection)
    true = sky.vectors[star] @ camera.axes.T
    left, _, right = np.linalg.svd(seen.T @ true)
    turn = left @ np.diag([1.0, 1.0, np.linalg.det(left @ right)]) @ right
    return turn @ camera.axes
