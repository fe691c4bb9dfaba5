"""A solution from a rough pointing and scale: groups of stars around the hint, made on the fly."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from imaging.stars.camera import ARCSEC_RAD, Camera, Lens, unknown_lens, unproject
from imaging.stars.groups import local_groups
from imaging.stars.hypotheses import hypotheses, pair_groups, turned_by
from imaging.stars.prescreen import promising
from imaging.stars.refine import Field, Match, Sky, grow
from imaging.stars.roundness import narrowed
from imaging.stars.verify import ACCEPT_LOG10, Tally

SCALE_TOLERANCE = 0.12
ROLL_TOLERANCE_DEG = 8.0


@dataclass(frozen=True)
class Effort:
    """How widely to search: reach in field radii, stars a field, neighbours that make groups of `size`."""

    reach: float
    image_stars: int
    sky_stars: int
    image_neighbours: int
    sky_neighbours: int
    size: int = 4


# From the cheap and likely to the dear and rare: nearby and clean, clouded, far off, far off and clouded.
EFFORTS = (
    Effort(1.2, 40, 60, 5, 6),
    Effort(4.0, 50, 70, 6, 7),
    Effort(1.2, 40, 130, 6, 10),
    Effort(2.0, 70, 250, 6, 11),
    Effort(4.0, 50, 130, 6, 10),
    Effort(1.2, 40, 150, 39, 14, size=3),
    Effort(4.0, 40, 100, 39, 12, size=3),
)
# Where the catalogue has few stars: every triple of the brightest, as hot pixels and planets are among them.
SPARSE_EFFORTS = (
    Effort(1.2, 24, 200, 23, 12, size=3),
    Effort(4.0, 24, 200, 23, 10, size=3),
    Effort(1.2, 45, 200, 44, 16, size=3),
    Effort(4.0, 40, 200, 39, 14, size=3),
    Effort(4.0, 30, 30, 29, 22, size=3),
)
# 1 % of distortion across a frame changes the ratios of a local group by less; of triples there are more
_QUADS, _TRIPLES = 0.012, 0.008
_ROUND = (0.2, 0.25)  # of the widths of linear and other terms
_FEW_GROWN, _HOPEFUL_LOG10 = 8, -1.0  # when further hypotheses are grown
_SPARSE = 60  # catalogue stars a field


@dataclass(frozen=True)
class Attempt:
    """What came out: the match, or None with the best evidence seen, and how many hypotheses there were."""

    match: Match | None
    best_log10: float
    trials: int
    false_alarm_log10: float = 0.0


def solve_hinted(
    field: Field,
    sky_near: Callable[[float, float], Sky],
    center: np.ndarray,
    scale_arcsec_px: float,
    lens: Lens,
    *,
    scale_tolerance: float = SCALE_TOLERANCE,
    parity: int | None = None,
    rotation_deg: float | None = None,
) -> Attempt:
    """Return the match of a field whose centre and scale are roughly known; roll and mirror may be unknown.

    `sky_near(radius_rad, stars_per_sr)` gives catalogue stars around `center` (unit vector), brightest first, to
    about that density (all when it is infinite). Never returns a match whose false-alarm probability is above 1e-6.
    """
    focal = ARCSEC_RAD / scale_arcsec_px
    height, width = field.shape
    half = field.half_diagonal_px
    radius = half / focal if lens.projection != "TAN" else np.arctan(half / focal)
    field_sr = height * width / focal**2 if radius < 0.5 else 2 * np.pi * (1 - np.cos(radius)) * 0.6
    x0, y0 = (width - 1) / 2, (height - 1) / 2
    best, trials, tally = 0.0, 0, Tally()
    around = sky_near(min(2.2 * radius, np.pi), 2 * _SPARSE / field_sr)
    per_field = len(around) * field_sr / (2 * np.pi * (1 - np.cos(min(2.2 * radius, np.pi))))
    sparse = per_field < _SPARSE
    # with few stars a lens is taken for a round one first, then for any
    kinds = [narrowed(lens, *_ROUND), lens] if sparse and lens is unknown_lens(3) else [lens]
    for turn, effort in enumerate(SPARSE_EFFORTS if sparse else EFFORTS, 1):
        used = min(effort.image_stars, len(field.x_px))
        if used < 4:
            break
        image_vectors = unproject(field.x_px[:used] - x0, field.y_px[:used] - y0, focal, lens.projection)
        image = local_groups(image_vectors, effort.size, effort.image_neighbours)
        sky = sky_near(min(radius * (1 + effort.reach), np.pi), effort.sky_stars / field_sr)
        if len(sky) < 4:
            continue
        if len(image) == 0:
            continue
        least, most = (
            image.longest.min() / (1.05 + scale_tolerance),
            image.longest.max() * (1.05 + scale_tolerance),
        )
        groups = local_groups(sky.vectors, effort.size, effort.sky_neighbours, most, least)
        pairs = pair_groups(
            image, groups, scale_tolerance, tolerance=_TRIPLES if effort.size == 3 else _QUADS
        )
        allowed = (focal / (1 + scale_tolerance), focal * (1 + scale_tolerance))
        guesses = hypotheses(field, sky, image, groups, pairs, focal, allowed, parity, lens.projection)
        if rotation_deg is not None:
            guesses = guesses.take(turned_by(guesses, rotation_deg) < ROLL_TOLERANCE_DEG)
        guesses = guesses.near(center, radius, effort.reach + 0.3)
        trials += len(guesses)
        best_here = 0.0
        for rank, i in enumerate(promising(guesses, field, sky)):
            if rank >= _FEW_GROWN and best_here > _HOPEFUL_LOG10:
                break
            for held in kinds:
                camera = Camera(
                    guesses.axes[i], guesses.focal_px[i], x0, y0, half, projection=lens.projection
                )
                match = grow(camera, held, field, sky, guesses.image_stars[i], guesses.sky_stars[i])
                if match is None or match.evidence.chance_log10(1) > _HOPEFUL_LOG10:
                    break
                # over the sets tried the odds are shared out as 1 / (n (n + 1)), which sums to one
                log_share = guesses.log_share(i) - np.log(turn * (turn + 1) * len(kinds))
                log10, match = tally.add(match, sky.index, log_share)
                best_here = min(best_here, log10)
                if log10 < ACCEPT_LOG10:
                    return Attempt(match, log10, trials, log10)
        best = min(best, best_here)
    return Attempt(None, best, trials)
