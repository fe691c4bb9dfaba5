"""A planet or a star beside the Moon or cut by its limb, on what is left when limb and glare are taken off."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from imaging.discs.among_stars import Noise, resolved, sky_noise, spread_point
from imaging.discs.glare import Glare, limb_and_glare
from imaging.discs.limb import LimbFit
from imaging.discs.lit import Body
from imaging.discs.stamp import DiscPlace, Stamp
from planner.errors import NoSolutionError

_GLOW_PX = 36.0  # half side, at least, of the piece that shows the glow
_SURE = 6.0  # sigmas by which a planet stands out of places equally far from the limb
# Lunar mountains rise this part of the radius over the mean limb (3.5 km: from memory).
_RELIEF = 0.002
_MISFIT = 2.0  # sigmas of chi^2 from which a shape is wrong
_CUT_PX = 0.3  # a disc smaller than this is a point: it is there or it is not


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
    """Place a planet or a star near or partly behind the Moon, whose limb fit says where it is cut and the blur.

    It is fitted on what is left without limb and glare, each pixel with the scatter of all that lie equally far from
    the limb; the error stated allows for what neighbours share there. Raises NoSolutionError when less than a tenth of
    the planet's disc is clear of the Moon, when nothing stands out of the places equally far from the limb, or what
    does has not its shape.
    """
    gap = np.hypot(x_px - moon.x_px, y_px - moon.y_px) - moon.radius_px
    if gap < -0.8 * body.radius_px - 0.5 * search_px:
        raise NoSolutionError("the planet is behind the Moon")
    sigma = moon.blur.sigma_px
    reach = body.reach_px + 5 * sigma + 3
    wide = Stamp.cut(data, x_px, y_px, max(search_px + reach, _GLOW_PX), saturation)
    noise = sky_noise(wide, gain_e_adu)
    found, glare = _found(wide, x_px, y_px, body, moon, search_px)
    x0, y0 = found.place
    left = replace(wide, data=wide.data - glare.light, usable=wide.usable & glare.within)
    piece = left.part(x0, y0, reach)
    if piece.usable.mean() < 0.4:
        raise NoSolutionError("too little of the sky beside the Moon is in the frame")
    scatter = replace(left, data=glare.scatter).part(x0, y0, reach).data
    noise = replace(noise, level_adu=0.0, sky_adu2=float(np.median(scatter)) ** 2, map_adu2=scatter**2)
    clipped = int(piece.clipped.sum())
    large = body.radius_px > 1.5 * sigma and body.radius_px > 1.2
    place = None if large else _point(piece, x0, y0, body, moon, noise, clipped)
    if place is None or (body.radius_px > _CUT_PX and _gap_px(place, moon) < _uncut_px(place, body, moon)):
        place = resolved(piece, x0, y0, body, sigma, noise, moon, clipped)
        if _gap_px(place, moon) < body.reach_px:
            # where the limb really cuts it is known as well as the limb lies on its circle
            dx, dy = place.x_px - moon.x_px, place.y_px - moon.y_px
            across = 0.5 * moon.motion_px * np.array([dx, dy]) / np.hypot(dx, dy)
            place = replace(place, covariance=place.covariance + np.outer(across, across))
    place = replace(place, covariance=place.covariance * found.alike**2)
    return _defended(place, body, moon)


def _point(
    piece: Stamp, x0: float, y0: float, body: Body, moon: LimbFit, noise: Noise, clipped: int
) -> DiscPlace:
    """Fit an image by the blur of the limb, or, where its photons show that it has another shape, by a free one."""
    blur = replace(moon.blur, sigma_px=float(np.hypot(moon.blur.sigma_px, body.radius_px / 2)))
    enough = 1 + _MISFIT * np.sqrt(2 / max(int(piece.usable.sum()), 1))
    held = None if clipped else spread_point(piece, x0, y0, body, blur.sigma_px, noise, clipped, None, blur)
    if held is not None and held.chi2 < enough:
        return held
    free = spread_point(piece, x0, y0, body, moon.blur.sigma_px, noise, clipped, None)
    # a shape that explains no more than the limb's follows what is left of the limb, and not the body
    return free if held is None or free.chi2 < max(enough, 0.5 * held.chi2) else held


def _uncut_px(place: DiscPlace, body: Body, moon: LimbFit) -> float:
    """Return the distance from the limb beyond which a disc placed so is surely whole."""
    return body.reach_px + 3 * max(place.sigma_px) + moon.motion_px


def _gap_px(place: DiscPlace, moon: LimbFit) -> float:
    dx, dy = place.x_px - moon.x_px, place.y_px - moon.y_px
    return float(np.hypot(dx, dy) / moon.outline.ratio(np.arctan2(dy, dx)) - moon.radius_px)


def _defended(place: DiscPlace, body: Body, moon: LimbFit) -> DiscPlace:
    """Return the place, or raise when it is not a planet's."""
    gap, worst = _gap_px(place, moon), max(place.sigma_px)
    if place.chi2 > 8 or worst > max(2.0, body.radius_px):
        raise NoSolutionError("the Moon's light drowns the planet: nothing there has a planet's shape")
    if gap < -0.8 * body.radius_px - _RELIEF * moon.radius_px - 3 * worst:
        raise NoSolutionError(
            "what stands out there is on the Moon: less than a tenth of the planet is clear of it"
        )
    return place


@dataclass(frozen=True)
class _Standing:
    """Where something stands out: place, distance from the limb, and by how much more than single pixels' scatter
    promises what a planet's shape collects scatters at that distance, as neighbours share what is left.
    """

    place: tuple[float, float]
    away_px: float
    alike: float


def _found(
    stamp: Stamp, x_px: float, y_px: float, body: Body, moon: LimbFit, search_px: float
) -> tuple[_Standing, Glare]:
    """Find what stands out, and limb and glare as the pixels away from it show them."""
    x, y = stamp.grid()
    blind = body.reach_px + 3.5 * moon.blur.sigma_px + 1
    limb = moon.x_px, moon.y_px, moon.radius_px, moon.blur.sigma_px
    glare = limb_and_glare(stamp, *limb, np.ones(stamp.data.shape, bool), moon.outline)
    found = _standing_out(stamp, x_px, y_px, body, moon, search_px, glare)
    for _ in range(3):
        before = found.place
        clear = np.hypot(x - before[0], y - before[1]) > blind
        glare = limb_and_glare(stamp, *limb, clear, moon.outline)
        found = _standing_out(stamp, *before, body, moon, blind, glare)
        if np.hypot(found.place[0] - before[0], found.place[1] - before[1]) < 1.5:
            break
    return found, glare


def _standing_out(
    stamp: Stamp, x_px: float, y_px: float, body: Body, moon: LimbFit, search_px: float, glare: Glare
) -> _Standing:
    """Find what stands out most of the places equally far from the limb, by a filter of the planet's shape."""
    import cv2

    x, y = stamp.grid()
    sigma = float(np.sqrt(moon.blur.sigma_px**2 + 1 / 12 + (0.5 * body.radius_px) ** 2))
    line = np.arange(-np.ceil(3.5 * sigma), np.ceil(3.5 * sigma) + 1)
    shape = np.exp(-(line[:, None] ** 2 + line[None, :] ** 2) / (2 * sigma**2))
    weight = np.where(stamp.usable & glare.within, 1 / glare.scatter**2, 0.0)
    rest = (stamp.data - glare.light) * weight
    top = cv2.filter2D(rest, cv2.CV_64F, shape, borderType=cv2.BORDER_CONSTANT)
    below = cv2.filter2D(weight, cv2.CV_64F, shape**2, borderType=cv2.BORDER_CONSTANT)
    strength = top / np.sqrt(np.maximum(below, 1e-12))
    held = glare.within & (below > 0.5 * np.sum(shape**2) / glare.scatter**2)
    alike = _alike(glare.away[held], strength[held], sigma)
    near = np.hypot(x - x_px, y - y_px) <= search_px
    allowed = near & held & (glare.away > -0.8 * body.radius_px - _RELIEF * moon.radius_px)
    if not allowed.any():
        raise NoSolutionError("the planet is behind the Moon")
    over = np.where(allowed, strength / np.maximum(alike(glare.away), 1.0), -np.inf)
    row, column = np.unravel_index(np.argmax(over), over.shape)
    if over[row, column] < _SURE:
        raise NoSolutionError("nothing stands out of the Moon's glare where the planet is expected")
    # of a bright body the wing that lies farther from the limb stands out most: its middle is where it is brightest
    _, labels = cv2.connectedComponents((over > _SURE).astype(np.uint8))
    smooth = cv2.filter2D(
        np.where(weight > 0, stamp.data - glare.light, 0.0), cv2.CV_64F, shape, borderType=cv2.BORDER_CONSTANT
    )
    one = labels == labels[row, column]
    row, column = np.unravel_index(np.argmax(np.where(one, smooth, -np.inf)), over.shape)
    away = float(glare.away[row, column])
    return _Standing(
        (float(column + stamp.x_low), float(row + stamp.y_low)), away, float(max(alike(np.array(away)), 1.0))
    )


def _alike(away: np.ndarray, strength: np.ndarray, sigma: float):  # type: ignore[no-untyped-def]
    """Return the robust scatter of a filter's strength (1 for independent pixels) by distance from the limb."""
    order = np.argsort(away)
    away, strength = away[order], strength[order]
    edges = np.arange(away[0], away[-1] + sigma, sigma)
    index = np.searchsorted(away, edges)
    middle, spread = [], []
    for low, high in pairwise(index.tolist()):
        if high - low > 20:
            middle.append(float(np.mean(away[low:high])))
            spread.append(1.48 * float(np.median(np.abs(strength[low:high]))))
    if not middle:
        raise NoSolutionError("too little of the Moon's glow is seen to take it off")
    return lambda at: np.interp(at, middle, spread)
