"""A quick look at many hypotheses at once: does the sky they predict show more stars than chance would?

Only their order comes from here; what is accepted is decided by `imaging.stars.verify`.
"""

from __future__ import annotations

import numpy as np

from imaging.stars.hypotheses import Hypotheses
from imaging.stars.refine import Field, Sky

_STARS = 14  # of the brightest in each predicted frame
_MOST = 1000  # hypotheses looked at, the likeliest first
_GATE_PX = 4.0
_STRETCH = 0.012  # of the way from the group: distortion and the group's own error
_MAGNITUDES = 1.5
_DETECTED = 0.4
GROWN = 10  # the true one was first in all of 70 fields of benchmarks/drawn_fields.py


def promising(guesses: Hypotheses, field: Field, sky: Sky, most: int = GROWN) -> np.ndarray:
    """Return indices of the hypotheses to grow, the most promising first."""
    score = scores(guesses, field, sky)
    return np.argsort(-(score + np.log(guesses.weight[: len(score)])), kind="stable")[:most]


def scores(guesses: Hypotheses, field: Field, sky: Sky) -> np.ndarray:
    """Return the log likelihood ratio of the brightest stars that each of the first hypotheses predicts."""
    count = min(len(guesses), _MOST)
    if count == 0:
        return np.empty(0)
    height, width = field.shape
    axes, focal = guesses.axes[:count], guesses.focal_px[:count]
    known = sky.vectors[:600]
    x, y, z = (np.einsum("hk,nk->hn", axes[:, row], known, optimize=True) for row in range(3))
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = np.where(z > 0.3, focal[:, None] / z, np.nan)
        x, y = x * scale + (width - 1) / 2, y * scale + (height - 1) / 2
        inside = (x > 0) & (x < width) & (y > 0) & (y < height)
    own = np.zeros(inside.shape, dtype=bool)
    for column in range(guesses.sky_stars.shape[1]):
        index = guesses.sky_stars[:count, column]
        near = np.flatnonzero(index < len(known))
        own[near, index[near]] = True
    inside &= ~own
    inside &= np.cumsum(inside, axis=1) <= _STARS
    h, n = np.nonzero(inside)
    if len(h) == 0:
        return np.zeros(count)
    px, py = x[h, n], y[h, n]
    group = guesses.image_stars[:count]
    middle_x, middle_y = field.x_px[group].mean(axis=1), field.y_px[group].mean(axis=1)
    zero = np.median(field.magnitude[group] - sky.magnitude[guesses.sky_stars[:count]], axis=1)
    gate = _GATE_PX + _STRETCH * np.hypot(px - middle_x[h], py - middle_y[h])
    nearest = min(4, len(field.x_px))
    distance, index = field.tree.query(
        np.column_stack([px, py]), k=nearest, distance_upper_bound=float(gate.max())
    )
    distance, index = distance.reshape(len(h), nearest), index.reshape(len(h), nearest)
    index = np.minimum(index, len(field.x_px) - 1)
    away = field.magnitude[index] - (sky.magnitude[n] + zero[h])[:, None]
    bright = (np.abs(away) < _MAGNITUDES) | (field.saturated[index] & (away > 0))
    met = ((distance < gate[:, None]) & bright).any(axis=1)
    ordered = np.sort(field.magnitude)
    expected = sky.magnitude[n] + zero[h]
    rivals = np.searchsorted(ordered, expected + _MAGNITUDES) - np.searchsorted(
        ordered, expected - _MAGNITUDES
    )
    chance = np.clip((rivals + 1) * np.pi * gate**2 / field.area_px2, 1e-6, 0.9)
    likely = _DETECTED + (1 - _DETECTED) * chance
    gain = np.where(met, np.log(likely / chance), np.log((1 - likely) / (1 - chance)))
    return np.bincount(h, weights=gain, minlength=count)
