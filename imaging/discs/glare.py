"""The Moon's limb and its glare in a piece of a frame: what places equally far from the limb share, and how well."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from imaging.discs.outline import Outline
from imaging.discs.stamp import Stamp
from planner.errors import NoSolutionError

_SHARP_PX = 0.29  # a pixel's own width, as a sigma
_LEAST_IN_KNOT = 6  # pixels between two knots of the profile
_LEAST_IN_BIN = 24  # pixels that tell a scatter
_TURNS = 5


@dataclass(frozen=True)
class Glare:
    """`light` of limb and glare in each pixel of a stamp, `scatter`: rms of what is left, at that distance from the
    limb, `away`: distance outward from the limb (px), `within`: pixels for which the others are true.
    """

    light: np.ndarray
    scatter: np.ndarray
    away: np.ndarray
    within: np.ndarray


def limb_and_glare(
    stamp: Stamp,
    x_px: float,
    y_px: float,
    radius_px: float,
    sigma_px: float,
    clear: np.ndarray,
    outline: Outline | None = None,
) -> Glare:
    """Return what `clear` pixels at equal distances from the limb share: a smooth profile across the limb.

    `x_px`, `y_px`, `radius_px`: of the Moon; `sigma_px`: of the blur. Along the limb its height and its place change by
    a second-order polynomial. The scatter of what is left is that of the frame itself: relief, maria and a coarse grid
    of pixels make it larger than photons do where the limb is steep. Raises NoSolutionError when too few pixels are
    clear.
    """
    x, y = stamp.grid()
    dx, dy = x - x_px, y - y_px
    angle = np.arctan2(dy, dx)
    away = np.asarray(np.hypot(dx, dy) / (outline or Outline()).ratio(angle) - radius_px)
    seen = float(np.hypot(sigma_px, _SHARP_PX))
    within = away > -(4 * seen + 3)
    use = clear & stamp.usable & within
    if use.sum() < 200:
        raise NoSolutionError("too little of the Moon's glow is seen to take it off")
    middle = np.arctan2(
        np.mean(np.broadcast_to(dy, away.shape)[use]), np.mean(np.broadcast_to(dx, away.shape)[use])
    )
    turn = (angle - middle + np.pi) % (2 * np.pi) - np.pi
    turn = turn / max(float(np.abs(turn[use]).max()), 1e-9)
    order = np.argsort(away[use], kind="stable")
    place, value, t = away[use][order], stamp.data[use][order], turn[use][order]
    knots = _knots(place, seen)
    scatter = np.full(place.size, 1.0)
    keep = np.ones(place.size, bool)
    along = np.zeros(4)
    base = float(np.median(value[place > np.quantile(place, 0.8)]))
    profile = None
    for turn_number in range(_TURNS):
        profile = _profile(place, value, along, t, base, knots, 1 / scatter**2 * keep)
        level, slope = profile(place) - base, profile(place, 1)
        design = np.stack([level * t, level * t * t, slope * t, slope * t * t], axis=1)
        weight = np.where(keep, 1 / scatter, 0.0)
        step, *_ = np.linalg.lstsq(design * weight[:, None], (value - base - level) * weight, rcond=None)
        along = step
        left = value - base - level - design @ step
        scatter = _scatter(place, left, seen)(place)
        if turn_number >= 1:
            keep = np.abs(left) < 5 * scatter
    assert profile is not None
    inner = np.clip(away, place[0], place[-1])
    level, slope = profile(inner) - base, profile(inner, 1)
    light = base + level * (1 + along[0] * turn + along[1] * turn**2)
    light += slope * (along[2] * turn + along[3] * turn**2)
    return Glare(
        light, _scatter(place, left, seen)(inner), away, within & (away <= place[-1]) & (away >= place[0])
    )


def _knots(place: np.ndarray, seen: float) -> np.ndarray:
    """Return knots (px from the limb): close where the limb is steep, ever wider in the glare."""
    knots = [float(place[0])]
    while knots[-1] < place[-1]:
        step = 0.4 * seen + 0.2 * max(abs(knots[-1]) - 3 * seen, 0.0)
        here = int(np.searchsorted(place, knots[-1]))
        full = place[min(here + _LEAST_IN_KNOT, place.size - 1)]
        knots.append(max(knots[-1] + step, float(full) + 1e-6))
    end = float(place[-1])
    inner = [k for k in knots[1:-1] if end - k > 0.4 * seen]
    while inner and place.size - np.searchsorted(place, inner[-1]) < _LEAST_IN_KNOT:
        inner.pop()
    return np.array([place[0]] * 4 + inner + [end] * 4)


def _profile(  # type: ignore[no-untyped-def]
    place: np.ndarray,
    value: np.ndarray,
    along: np.ndarray,
    t: np.ndarray,
    base: float,
    knots: np.ndarray,
    weight: np.ndarray,
):
    """Return the cubic spline across the limb, with what changes along it taken off."""
    from scipy.interpolate import make_lsq_spline

    tiny = 1e-6 * float(weight.max())
    height = 1 + along[0] * t + along[1] * t * t
    shift = along[2] * t + along[3] * t * t
    moved = np.clip(place + shift, knots[0], knots[-1])
    order = np.argsort(moved, kind="stable")
    root = np.sqrt(np.maximum(weight, tiny)) * height
    try:
        return make_lsq_spline(moved[order], (base + (value - base) / height)[order], knots, 3, root[order])
    except (ValueError, np.linalg.LinAlgError):
        raise NoSolutionError("too little of the Moon's glow is seen to take it off") from None


def _scatter(place: np.ndarray, left: np.ndarray, seen: float):  # type: ignore[no-untyped-def]
    """Return the robust scatter of what is left as a function of distance from the limb."""
    edges = [float(place[0])]
    while edges[-1] < place[-1]:
        step = 0.5 * seen + 0.15 * max(abs(edges[-1]) - 3 * seen, 0.0)
        here = int(np.searchsorted(place, edges[-1]))
        edges.append(max(edges[-1] + step, float(place[min(here + _LEAST_IN_BIN, place.size - 1)]) + 1e-6))
    index = np.searchsorted(place, edges)
    middle: list[float] = []
    spread: list[float] = []
    for low, high in pairwise(index.tolist()):
        if high - low < _LEAST_IN_BIN // 2 and spread:
            continue
        middle.append(float(np.mean(place[low:high])))
        # whole numbers: at least the scatter of rounding
        spread.append(max(1.48 * float(np.median(np.abs(left[low:high]))), 0.29))
    return lambda at: np.interp(at, middle, spread)
