"""Fields with three to eight catalogue stars: pairs instead of triples, where the rig's scale and mirror are known.

A pair of stars fixes the camera; each further star that meets a detection is evidence. With the scale known to half a
percent two more stars are enough, which a free solution could never defend.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from imaging.stars.camera import ARCSEC_RAD, Camera, Lens
from imaging.stars.hinted import Attempt
from imaging.stars.hypotheses import Hypotheses, hypotheses_of, turned_by
from imaging.stars.prescreen import promising
from imaging.stars.refine import Field, Sky, grow
from imaging.stars.roundness import narrowed
from imaging.stars.verify import ACCEPT_LOG10, Tally

WIDEST_SCALE_TOLERANCE = 0.02
_IMAGE_STARS, _SKY_STARS = 45, 160
_RANK = 8  # detections up to about this rank are alike; further down a catalogue star is ever less likely
_SHORTEST = 0.12  # of the half-diagonal: a close pair says nothing about roll
_MAGNITUDES = 1.2  # difference of brightness of a pair, between frame and catalogue
_MOST_GROWN = 20
_LITTLE_AIR = 0.1  # of the width of the linear terms: what the air does to a field of a degree at 45 degrees
_SHARPEST_PX = 0.1
ROLL_TOLERANCE_DEG = 6.0


def solve_sparse(
    field: Field,
    sky_near: Callable[[float, float], Sky],
    center: np.ndarray,
    scale_arcsec_px: float,
    scale_tolerance: float,
    lens: Lens,
    parity: int | None,
    rotation_deg: float | None,
    reach: float = 1.2,
) -> Attempt:
    """Return the match of a sparse field of a calibrated rig.

    `sky_near` as in `solve_hinted`; `rotation_deg` within 5 degrees where known. Accepts at a false-alarm
    probability of 1e-6.
    """
    focal = ARCSEC_RAD / scale_arcsec_px
    half = field.half_diagonal_px
    radius = float(np.arctan(half / focal))
    sky = sky_near(radius * (1 + reach), np.inf)
    sky = sky.take(np.arange(min(len(sky), _SKY_STARS)))
    if len(sky) < 3 or len(field.x_px) < 3:
        return Attempt(None, 0.0, 0)
    flat = undistorted(field, lens)
    first, second = _pairs(flat, sky, focal, scale_tolerance)
    seen = np.hypot(
        flat.x_px[first[:, 0]] - flat.x_px[first[:, 1]], flat.y_px[first[:, 0]] - flat.y_px[first[:, 1]]
    )
    true = np.linalg.norm(sky.vectors[second[:, 0]] - sky.vectors[second[:, 1]], axis=1)
    allowed = (focal / (1 + scale_tolerance), focal * (1 + scale_tolerance))
    parts = [
        hypotheses_of(flat, sky, first, second, seen / true, allowed, one)
        for one in ((-1, 1) if parity is None else (parity,))
    ]
    guesses = Hypotheses(
        *(np.concatenate([getattr(part, name) for part in parts]) for name in Hypotheses.__dataclass_fields__)
    )
    if rotation_deg is not None:
        guesses = guesses.take(turned_by(guesses, rotation_deg) < ROLL_TOLERANCE_DEG)
    ranked = guesses.weight / (_RANK + guesses.image_stars).prod(axis=1)
    guesses = replace(guesses, weight=ranked).near(center, radius, reach)
    trials, best = len(guesses), 0.0
    x0 = (field.shape[1] - 1) / 2 + lens.axis[0] * half
    y0 = (field.shape[0] - 1) / 2 + lens.axis[1] * half
    tally = Tally()
    turns = promising(guesses, flat, sky, _MOST_GROWN)
    # little refraction first, then as much as there may be: the odds of error are halved between the two
    for held in (narrowed(lens, _LITTLE_AIR, 1.0), lens):
        for i in turns:
            camera = Camera(
                guesses.axes[i],
                guesses.focal_px[i],
                x0,
                y0,
                half,
                lens.terms,
                lens.coefficients,
                lens.projection,
            )
            match = grow(
                camera,
                held,
                field,
                sky,
                guesses.image_stars[i],
                guesses.sky_stars[i],
                sharpest_px=_SHARPEST_PX,
            )
            if match is None:
                continue
            log10, match = tally.add(match, sky.index, guesses.log_share(i) - np.log(2))
            best = min(best, log10)
            if log10 < ACCEPT_LOG10:
                return Attempt(match, best, trials, log10)
    return Attempt(None, best, trials)


def undistorted(field: Field, lens: Lens) -> Field:
    """Return detections where a lens without distortion, centred on the frame, would have put them."""
    height, width = field.shape
    half = field.half_diagonal_px
    x0, y0 = (width - 1) / 2, (height - 1) / 2
    camera = Camera(
        np.eye(3),
        1.0,
        x0 + lens.axis[0] * half,
        y0 + lens.axis[1] * half,
        half,
        lens.terms,
        lens.coefficients,
    )
    u, v = camera.ideal(field.x_px, field.y_px)
    moved = replace(field, x_px=u + x0, y_px=v + y0)
    return moved.take(np.arange(len(u)))


def _pairs(field: Field, sky: Sky, focal_px: float, tolerance: float) -> tuple[np.ndarray, np.ndarray]:
    """Return pairs of detections and of stars (n, 2) of like separation and like difference of brightness."""
    used = min(_IMAGE_STARS, len(field.x_px))
    a, b = np.triu_indices(used, 1)
    seen = np.hypot(field.x_px[a] - field.x_px[b], field.y_px[a] - field.y_px[b])
    long = seen > _SHORTEST * field.half_diagonal_px
    a, b, seen = a[long], b[long], seen[long]
    c, d = (index.ravel() for index in np.meshgrid(np.arange(len(sky)), np.arange(len(sky)), indexing="ij"))
    c, d = c[c != d], d[c != d]  # both ways round: either star may be the first
    true = np.linalg.norm(sky.vectors[c] - sky.vectors[d], axis=1) * focal_px
    order = np.argsort(true)
    c, d, true = c[order], d[order], true[order]
    slack = 1 + tolerance + 2.0 / np.maximum(seen, 1.0)  # a separation is not known better than two pixels
    start, stop = np.searchsorted(true, seen / slack), np.searchsorted(true, seen * slack)
    number = stop - start
    line = np.repeat(np.arange(len(a)), number)
    row = np.repeat(start - np.concatenate([[0], np.cumsum(number)[:-1]]), number) + np.arange(number.sum())
    first, second = np.column_stack([a[line], b[line]]), np.column_stack([c[row], d[row]])
    away = (field.magnitude[first[:, 0]] - field.magnitude[first[:, 1]]) - (
        sky.magnitude[second[:, 0]] - sky.magnitude[second[:, 1]]
    )
    alike = (np.abs(away) < _MAGNITUDES) | field.saturated[first].any(axis=1)
    return first[alike], second[alike]
