"""A planet beside the Moon or cut by its limb: the Moon's glow is taken off by what lies equally far from the limb."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from imaging.discs.among_stars import Noise, resolved, sky_noise, spread_point
from imaging.discs.limb import LimbFit
from imaging.discs.lit import Body
from imaging.discs.stamp import DiscPlace, Stamp
from planner.errors import NoSolutionError

_BIN_PX = 0.5
_LIMB_BLURS = 3.0  # from the limb, within which the limb itself is steep
# The glow is alike along the limb to this part of itself (assumed; a slope along it is fitted).
_UNEVEN = 0.004
_GLOW_PX = 24.0  # half side, at least, of the piece that shows the glow


def planet_beside_moon(
    data: np.ndarray,
    x_px: float,
    y_px: float,
    body: Body,
    moon: LimbFit,
    search_px: float = 12.0,
    saturation: float | None = None,
    gain_e_adu: float | None = None,
) -> DiscPlace:
    """Place a planet near or partly behind the Moon, whose limb fit says where the planet is cut and how blurred it is.

    Clear of the limb by two blurs, it is fitted on what is left when the glow is gone, with pixels off the Moon alone;
    nearer, limb and planet are one model. Raises NoSolutionError when less than a tenth of the planet's disc is clear
    of the Moon, or nothing stands out there.
    """
    gap = np.hypot(x_px - moon.x_px, y_px - moon.y_px) - moon.radius_px
    if gap < -0.8 * body.radius_px - 0.5 * search_px:
        raise NoSolutionError("the planet is behind the Moon")
    sigma = moon.blur.sigma_px
    reach = body.reach_px + 5 * sigma + 3
    wide = Stamp.cut(data, x_px, y_px, max(search_px + reach, _GLOW_PX), saturation)
    noise = sky_noise(wide, gain_e_adu)
    x0, y0, glow = _peak_off_moon(wide, x_px, y_px, body, moon, search_px, noise)
    away = _away(wide, moon)
    clear = float(away[round(y0) - wide.y_low, round(x0) - wide.x_low]) - body.reach_px
    if clear > 2 * sigma + 1:
        place = _clear_of_limb(wide, x0, y0, body, moon, noise, glow, reach)
    else:
        stamp = Stamp.cut(data, x0, y0, reach, saturation)
        place = resolved(stamp, x0, y0, body, sigma, noise, moon, int(stamp.clipped.sum()))
    gap = np.hypot(place.x_px - moon.x_px, place.y_px - moon.y_px) - moon.radius_px
    if place.chi2 > 8 or max(place.sigma_px) > max(2.0, body.radius_px):
        raise NoSolutionError("the Moon's light drowns the planet: nothing there has a planet's shape")
    if gap < -0.8 * max(body.radius_px, 1.0):
        raise NoSolutionError("less than a tenth of the planet is clear of the Moon")
    return place


def _away(stamp: Stamp, moon: LimbFit) -> np.ndarray:
    """Return the distance of pixels from the limb, outward."""
    x, y = stamp.grid()
    dx, dy = x - moon.x_px, y - moon.y_px
    return np.asarray(np.hypot(dx, dy) / moon.outline.ratio(np.arctan2(dy, dx)) - moon.radius_px)


def _clear_of_limb(
    wide: Stamp, x0: float, y0: float, body: Body, moon: LimbFit, noise: Noise, glow: np.ndarray, reach: float
) -> DiscPlace:
    """Fit the planet as on a dark sky, the glow gone, on the pixels off the Moon."""
    x, y = wide.grid()
    sigma = moon.blur.sigma_px
    glow = _glow(wide, moon, np.hypot(x - x0, y - y0) > body.reach_px + 3.5 * sigma + 1)
    away = _away(wide, moon)
    left = replace(wide, data=wide.data - glow, usable=wide.usable & (away > _LIMB_BLURS * sigma))
    piece = left.part(x0, y0, reach)
    if piece.usable.mean() < 0.4:
        raise NoSolutionError("too little of the sky beside the Moon is in the frame")
    row, column = round(y0) - wide.y_low, round(x0) - wide.x_low
    bright = float(max(glow[row, column] - noise.level_adu, 0.0))
    dim = replace(_without_glow(wide, glow, away, moon, noise), level_adu=0.0)
    dim = replace(dim, sky_adu2=dim.sky_adu2 + noise.per_adu * bright + (_UNEVEN * bright) ** 2)
    clipped = int(piece.clipped.sum())
    if body.radius_px > 1.5 * sigma and body.radius_px > 1.2:
        return resolved(piece, x0, y0, body, sigma, dim, None, clipped)
    return spread_point(piece, x0, y0, body, sigma, dim, clipped, None)


def _without_glow(stamp: Stamp, glow: np.ndarray, away: np.ndarray, moon: LimbFit, noise: Noise) -> Noise:
    """Return the noise of the sky off the Moon as it is without the glow's slopes."""
    left = (stamp.data - glow)[stamp.usable & (away > _LIMB_BLURS * moon.blur.sigma_px + 1)]
    if left.size < 30:
        return noise
    spread = 1.48 * float(np.median(np.abs(left - np.median(left))))
    # whole numbers: at least the variance of rounding
    return replace(noise, sky_adu2=min(max(spread**2, 1 / 12), noise.sky_adu2))


def _glow(stamp: Stamp, moon: LimbFit, clear: np.ndarray) -> np.ndarray:
    """Return the Moon's glow: the mean of `clear` pixels equally far from the limb, with a slope along it."""
    away = _away(stamp, moon)
    x, y = stamp.grid()
    turn = np.arctan2(y - moon.y_px, x - moon.x_px)
    turn = turn - np.median(turn[0]) if turn.size else turn
    turn = (turn - np.mean(turn) + np.pi) % (2 * np.pi) - np.pi
    use = clear & stamp.usable
    edge = _LIMB_BLURS * moon.blur.sigma_px + 1
    first = np.floor(away.min() / _BIN_PX)
    step = (np.floor(away / _BIN_PX) - first).astype(int)
    count = int(step.max()) + 1
    tilt = np.zeros(stamp.data.shape)
    mean = np.zeros(count)
    keep = use
    for _ in range(4):
        number = np.bincount(step[keep], minlength=count)
        total = np.bincount(step[keep], (stamp.data - tilt)[keep], count)
        known = number >= 4
        if known.sum() < 4:
            raise NoSolutionError("too little of the Moon's glow is seen to take it off")
        middle = np.bincount(step[keep], away[keep], count)[known] / number[known]
        mean = np.interp(away, middle, total[known] / number[known])
        rest = stamp.data - mean
        lever = turn * np.maximum(mean - mean.min(), 1e-9)
        slope = float(np.sum((lever * rest)[keep]) / max(np.sum(lever[keep] ** 2), 1e-30))
        tilt = slope * lever
        far = use & (away > edge)
        scatter = 1.48 * float(np.median(np.abs((rest - tilt)[far]))) if far.any() else 0.0
        keep = use & ((np.abs(rest - tilt) < 5 * max(scatter, 0.5)) | (away <= edge))
    return np.asarray(mean + tilt)


def _peak_off_moon(
    stamp: Stamp, x_px: float, y_px: float, body: Body, moon: LimbFit, search_px: float, noise: Noise
) -> tuple[float, float, np.ndarray]:
    """Return the brightest place off the Moon against the glow's own noise, and the glow."""
    import cv2

    x, y = stamp.grid()
    away = _away(stamp, moon)
    glow = _glow(stamp, moon, np.ones(stamp.data.shape, bool))
    noise = _without_glow(stamp, glow, away, moon, noise)
    bright = np.clip(glow - noise.level_adu, 0, None)
    rest = np.where(stamp.usable, stamp.data - glow, 0.0)
    sigma = max(np.hypot(moon.blur.sigma_px, 0.5 * body.radius_px), 0.6)
    smooth = cv2.GaussianBlur(rest, (0, 0), sigma, borderType=cv2.BORDER_REPLICATE)
    # photons of the glow, and its unevenness, which a filter does not average away
    spread = np.sqrt(
        (noise.sky_adu2 + noise.per_adu * bright) / (4 * np.pi * sigma**2) + (_UNEVEN * bright) ** 2
    )
    allowed = (np.hypot(x - x_px, y - y_px) <= search_px) & (away > -0.8 * body.radius_px)
    if not allowed.any():
        raise NoSolutionError("the planet is behind the Moon")
    sure = allowed & (smooth > 6 * spread)
    if not sure.any():
        raise NoSolutionError("nothing stands out of the Moon's glare where the planet is expected")
    row, column = np.unravel_index(np.argmax(np.where(sure, smooth, -np.inf)), smooth.shape)
    return float(column + stamp.x_low), float(row + stamp.y_low), glow
