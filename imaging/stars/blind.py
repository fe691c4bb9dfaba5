"""A solution without any hint: quads of the frame looked up among quads of the whole sky.

Wide fields are de-projected with an assumed field first, because a flat picture of 50 degrees has no true shapes.
"""

from __future__ import annotations

from math import radians, tan
from time import process_time
from typing import NamedTuple

import numpy as np

from imaging.stars.camera import Camera, Lens, unproject
from imaging.stars.catalogue import rows_near, whole_sky
from imaging.stars.groups import coded, local_groups
from imaging.stars.hinted import Attempt
from imaging.stars.hypotheses import hypotheses_of
from imaging.stars.index import QuadIndex
from imaging.stars.refine import Field, grow
from imaging.stars.verify import ACCEPT_LOG10, Tally

GIVE_UP_S = 6.0  # a set of quads takes two seconds at most, so that all is over within eight
_GROWN = 10  # hypotheses of a set: a true one is nearly always among the likeliest
_HOPELESS_LOG10 = -4.0  # share of the odds below which none is grown


class Search(NamedTuple):
    """One set of quads: half-diagonals in degrees (assumed, and from least to most), how many stars and neighbours.

    Shapes hold within 2 % in between; 0 is assumed flat. `tolerance` is of codes.
    """

    assumed_deg: float
    least_deg: float
    most_deg: float
    stars: int
    neighbours: int
    tolerance: float


_FLAT, _WIDE = 0.006, 0.013
# clean skies first, then clouds; narrow fields show stars that the catalogue lacks among their brightest
SEARCHES = (
    Search(0.0, 0.1, 13.0, 40, 6, _FLAT),
    Search(30.0, 26.0, 34.5, 40, 6, _WIDE),
    Search(20.0, 16.0, 24.0, 40, 6, _WIDE),
    Search(25.0, 21.0, 29.0, 40, 6, _WIDE),
    Search(14.0, 10.0, 18.0, 40, 6, _WIDE),
    Search(38.0, 32.0, 45.0, 40, 6, _WIDE),
    Search(0.0, 0.1, 13.0, 40, 10, _FLAT),
    Search(0.0, 0.1, 13.0, 40, 14, _FLAT),
    Search(0.0, 0.1, 13.0, 70, 14, _FLAT),
    Search(30.0, 26.0, 34.5, 50, 8, _WIDE),
    Search(20.0, 16.0, 24.0, 50, 8, _WIDE),
    Search(25.0, 21.0, 29.0, 50, 8, _WIDE),
    Search(14.0, 10.0, 18.0, 50, 8, _WIDE),
    Search(38.0, 32.0, 45.0, 50, 8, _WIDE),
    Search(0.0, 0.1, 13.0, 110, 14, _FLAT),
)


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
    row_of = _rows_by_index(sky.index)
    height, width = field.shape
    half = field.half_diagonal_px
    x0, y0 = (width - 1) / 2, (height - 1) / 2
    best, trials, tally = 0.0, 0, Tally()
    for turn, search in enumerate(SEARCHES, 1):
        used = min(search.stars, len(field.x_px))
        allowed = (half / tan(radians(search.most_deg)), half / tan(radians(search.least_deg)))
        if focal_range_px is not None:
            allowed = (max(allowed[0], focal_range_px[0]), min(allowed[1], focal_range_px[1]))
        if used < 4 or allowed[0] >= allowed[1]:
            continue
        if process_time() - began > give_up_s:
            break
        focal = half / tan(radians(search.assumed_deg or 0.5))
        vectors = unproject(field.x_px[:used] - x0, field.y_px[:used] - y0, focal)
        image = local_groups(vectors, 4, search.neighbours)
        first, second = index.like(image.codes, search.tolerance)
        quads, share_of_quad = index.quads(second)
        found = coded(sky.vectors, row_of[quads])
        first = first[found.rows]
        focal_each = focal * image.longest[first] / found.longest
        prior = share_of_quad[found.rows]
        guesses = hypotheses_of(
            field, sky, image.stars[first], found.stars, focal_each, allowed, parity, prior=prior
        )
        trials += len(guesses)
        for i in range(min(len(guesses), _GROWN)):
            share = guesses.log_share(i)
            if share / np.log(10) < _HOPELESS_LOG10 or process_time() - began > give_up_s:
                break
            near = _rows_seen(guesses.axes[i][2], guesses.focal_px[i], field, tt_s)
            near = np.union1d(near, guesses.sky_stars[i])
            camera = Camera(guesses.axes[i], guesses.focal_px[i], x0, y0, half)
            own = np.searchsorted(near, guesses.sky_stars[i])
            match = grow(camera, lens, field, sky.take(near), guesses.image_stars[i], own)
            if match is None:
                continue
            log10, match = tally.add(match, sky.index[near], share - float(np.log(turn * (turn + 1))))
            best = min(best, log10)
            if log10 < ACCEPT_LOG10:
                return Attempt(match, best, trials, log10)
    return Attempt(None, best, trials)


def _rows_seen(center: np.ndarray, focal_px: float, field: Field, tt_s: float) -> np.ndarray:
    """Return the rows of the brightest 200 stars or so of a field."""
    field_sr = min(field.area_px2 / focal_px**2, 2.0)
    return rows_near(center, np.arctan(field.half_diagonal_px / focal_px) * 1.1, tt_s, 200 / field_sr)


def _rows_by_index(index: np.ndarray) -> np.ndarray:
    """Return the row in the sky list of each row of the star list."""
    rows = np.zeros(int(index.max()) + 1, dtype=np.int64)
    rows[index] = np.arange(len(index))
    return rows
