"""A solution without any hint: quads of the frame looked up among quads of the whole sky.

Wide fields are de-projected with an assumed field first, because a flat picture of 50 degrees has no true shapes.
"""

from __future__ import annotations

from math import radians, tan
from time import process_time

import numpy as np

from imaging.stars.camera import Camera, Lens, unproject
from imaging.stars.catalogue import rows_near, whole_sky
from imaging.stars.groups import local_groups
from imaging.stars.hinted import Attempt
from imaging.stars.hypotheses import Hypotheses, hypotheses_of
from imaging.stars.index import QuadIndex
from imaging.stars.prescreen import scores
from imaging.stars.refine import Field, Match, Sky, grow
from imaging.stars.verify import ACCEPT_LOG10, Tally
from planner.sky.starlist import rows_in_force

TOLERANCE = 0.013
GIVE_UP_S = 8.0

# (assumed half-diagonal in degrees, least and greatest that it stands for): shapes hold within 2 % in between
_FIELDS = (
    (0.0, 0.1, 13.0),
    (30.0, 26.0, 34.5),
    (20.0, 16.0, 24.0),
    (25.0, 21.0, 29.0),
    (14.0, 10.0, 18.0),
    (38.0, 32.0, 45.0),
)
_PASSES = ((40, 6), (50, 8))  # (brightest stars, neighbours): clean skies, then clouds
_MOST_LIKELY, _MOST_SCORED, _MOST_GROWN = 10, 250, 80


def solve_blind(
    field: Field,
    index: QuadIndex,
    tt_s: float,
    lens: Lens,
    *,
    parity: int | None = None,
    focal_range_px: tuple[float, float] | None = None,
    give_up_s: float = GIVE_UP_S,
) -> Attempt:
    """Return the match of a field anywhere on the sky, of 0.3 to 60 degrees.

    `focal_range_px` narrows the scale where it is known. Gives up after `give_up_s` of processor time.
    """
    began = process_time()
    sky = whole_sky(tt_s)
    row_of = _rows_by_index(sky.index)[rows_in_force()]  # the index is of the installed stars
    height, width = field.shape
    half = field.half_diagonal_px
    x0, y0 = (width - 1) / 2, (height - 1) / 2
    best, trials, number, tally = 0.0, 0, 0, Tally()
    for stars, neighbours in _PASSES:
        used = min(stars, len(field.x_px))
        if used < 4:
            break
        waiting: list[tuple[float, Hypotheses, int, int]] = []
        for assumed_deg, least_deg, most_deg in _FIELDS:
            allowed = (half / tan(radians(most_deg)), half / tan(radians(least_deg)))
            if focal_range_px is not None:
                allowed = (max(allowed[0], focal_range_px[0]), min(allowed[1], focal_range_px[1]))
            if allowed[0] >= allowed[1] or process_time() - began > give_up_s:
                continue
            focal = half / tan(radians(assumed_deg or 0.5))
            vectors = unproject(field.x_px[:used] - x0, field.y_px[:used] - y0, focal)
            image = local_groups(vectors, 4, neighbours)
            first, second = index.like(image.codes, TOLERANCE)
            sky_stars = row_of[index.stars[second].astype(np.int64)]
            longest = _longest(sky.vectors[sky_stars])
            focal_each = focal * image.longest[first] / longest
            guesses = hypotheses_of(field, sky, image.stars[first], sky_stars, focal_each, allowed, parity)
            trials += len(guesses)
            number += 1
            turn = [(0.0, guesses, i, number) for i in range(min(_MOST_LIKELY, len(guesses)))]
            waiting += [
                (
                    _quick_score(guesses, i, field, sky, tt_s) + float(np.log(guesses.weight[i])),
                    guesses,
                    i,
                    number,
                )
                for i in range(_MOST_LIKELY, min(_MOST_SCORED, len(guesses)))
                if process_time() - began < give_up_s / 2
            ]
            match, log10 = _first_accepted(turn, field, sky, tt_s, lens, tally, began + give_up_s)
            best = min(best, log10)
            if match is not None:
                return Attempt(match, best, trials, log10)
        waiting.sort(key=lambda one: -one[0])
        match, log10 = _first_accepted(
            waiting[:_MOST_GROWN], field, sky, tt_s, lens, tally, began + give_up_s
        )
        best = min(best, log10)
        if match is not None:
            return Attempt(match, best, trials, log10)
        if process_time() - began > give_up_s:
            break
    return Attempt(None, best, trials)


def _first_accepted(
    turn: list[tuple[float, Hypotheses, int, int]],
    field: Field,
    sky: Sky,
    tt_s: float,
    lens: Lens,
    tally: Tally,
    until_s: float,
) -> tuple[Match | None, float]:
    """Grow hypotheses in turn; return the first match that can be defended, and the best evidence seen (log10)."""
    best = 0.0
    height, width = field.shape
    for _, guesses, i, number in turn:
        if process_time() > until_s:
            break
        focal = guesses.focal_px[i]
        field_sr = min(height * width / focal**2, 2.0)
        radius = np.arctan(field.half_diagonal_px / focal) * 1.1
        rows = rows_near(guesses.axes[i][2], radius, tt_s, 200 / field_sr)
        rows = np.union1d(rows, guesses.sky_stars[i])
        camera = Camera(guesses.axes[i], focal, (width - 1) / 2, (height - 1) / 2, field.half_diagonal_px)
        own = np.searchsorted(rows, guesses.sky_stars[i])
        match = grow(camera, lens, field, sky.take(rows), guesses.image_stars[i], own)
        if match is None:
            continue
        log_share = guesses.log_share(i) - float(np.log(number * (number + 1)))
        log10, match = tally.add(match, sky.index[rows], log_share)
        best = min(best, log10)
        if log10 < ACCEPT_LOG10:
            return match, log10
    return None, best


def _quick_score(guesses: Hypotheses, i: int, field: Field, sky: Sky, tt_s: float) -> float:
    """Return the log likelihood ratio of the brightest stars that one hypothesis predicts (see `prescreen`)."""
    focal = guesses.focal_px[i]
    radius = np.arctan(field.half_diagonal_px / focal)
    field_sr = min(field.area_px2 / focal**2, 2.0)
    rows = np.union1d(rows_near(guesses.axes[i][2], radius, tt_s, 30 / field_sr), guesses.sky_stars[i])
    one = Hypotheses(
        guesses.image_stars[i : i + 1],
        np.searchsorted(rows, guesses.sky_stars[i])[None],
        guesses.axes[i : i + 1],
        guesses.focal_px[i : i + 1],
        guesses.weight[i : i + 1],
    )
    return float(scores(one, field, sky.take(rows))[0])


def _longest(vectors: np.ndarray) -> np.ndarray:
    """Return the longest chord of each group (n, k, 3)."""
    longest = np.zeros(len(vectors))
    for a in range(vectors.shape[1]):
        for b in range(a):
            longest = np.maximum(longest, np.linalg.norm(vectors[:, a] - vectors[:, b], axis=1))
    return longest


def _rows_by_index(index: np.ndarray) -> np.ndarray:
    """Return the row in the sky list of each row of the star list."""
    rows = np.zeros(int(index.max()) + 1, dtype=np.int64)
    rows[index] = np.arange(len(index))
    return rows
