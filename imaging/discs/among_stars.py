"""A planet against the night sky or beside the Moon: a point or a disc, saturated, bled, lit from one side."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from scipy.special import erf

from imaging.discs.edge import FWHM_OVER_SIGMA, WING_RATIO, Blur
from imaging.discs.limb import LimbFit
from imaging.discs.lit import RING_EDGES, Body, LitCells, from_the_light, lit_cells, ring_distance
from imaging.discs.phase import law_of, minnaert
from imaging.discs.stamp import (
    DiscPlace,
    Stamp,
    StampFit,
    blurred,
    coverage,
    fit_stamp,
    projected_cost,
    sub_pixels,
)
from planner.errors import NoSolutionError

# Widths of the round Gaussians that together are any point spread: in units of the narrowest, and, for the aureole,
# of the stamp's half side.
# What the model of an image is not known to, however bright it is: measured on drawn points and discs.
MODEL_FLOOR_PX = 0.006
_SATELLITE_SIGMAS, _MOST_SATELLITES = 8.0, 5
COARSE_PX = 0.01  # of a disc that a few pixels hold, besides
_LOST = 0.2  # of a disc's area: so much of it saturated, its own shape is not seen
_WIDTHS, _AUREOLE = (1.0, 1.6, 2.6, 4.5), (0.12, 0.2, 0.33, 0.6)


@dataclass(frozen=True)
class Noise:
    """Variance of a pixel: `sky_adu2` where it is dark, growing by `per_adu` times the light above `level_adu`.

    `relative`: by what part of the light the model of the point spread may be wrong in a pixel (assumed).
    `brightest_adu`: the most that any usable pixel holds; a model that promises more earns no larger variance by it.
    `map_adu2`: that of each pixel of a stamp where it is dark, in place of `sky_adu2`, when it is not the same for all.
    """

    level_adu: float
    sky_adu2: float
    per_adu: float
    relative: float = 0.0
    brightest_adu: float = np.inf
    map_adu2: np.ndarray | None = None

    @property
    def dark_adu2(self) -> np.ndarray | float:
        """The variance where nothing shines."""
        return self.sky_adu2 if self.map_adu2 is None else self.map_adu2

    def variance(self, model: np.ndarray) -> np.ndarray:
        """Return the variance at these levels."""
        light = np.clip(model - self.level_adu, 0, self.brightest_adu - self.level_adu)
        return np.asarray(self.dark_adu2 + self.per_adu * light + (self.relative * light) ** 2)


def planet_among_stars(
    data: np.ndarray,
    x_px: float,
    y_px: float,
    body: Body | None = None,
    fwhm_px: float = 2.5,
    search_px: float = 12.0,
    saturation: float | None = None,
    gain_e_adu: float | None = None,
) -> DiscPlace:
    """Place a planet on a dark sky: centre of light, and centre of figure by its phase.

    `x_px`, `y_px`: where it is looked for, to within `search_px`; `fwhm_px`: rough width of a star. A disc
    clearly larger than the blur is fitted as a lit sphere (Minnaert's law with a free exponent); a smaller one
    as a point spread of free shape, and the centre of figure follows from the law of `phase.law_of`. Saturated
    pixels and bled columns are left out; their surroundings place the body. Raises NoSolutionError when nothing
    stands out, or the image is cut.
    """
    body = body or Body()
    x0, y0, half, noise = _locate(data, x_px, y_px, body, fwhm_px, search_px, saturation, gain_e_adu)
    stamp = _without_bled_columns(Stamp.cut(data, x0, y0, half, saturation))
    clipped = int(stamp.clipped.sum())
    sigma = fwhm_px / FWHM_OVER_SIGMA
    if body.radius_px > 1.5 * sigma and body.radius_px > 1.2:
        if clipped < _LOST * np.pi * body.radius_px**2:
            return resolved(stamp, x0, y0, body, sigma, noise, None, clipped)
        # of a disc that is lost to saturation only the skirt is left: its shape is the point spread's
        return spread_point(stamp, x0, y0, body, sigma, noise, clipped, lit_cells(body))
    return spread_point(stamp, x0, y0, body, sigma, noise, clipped, None)


def sky_noise(stamp: Stamp, gain_e_adu: float | None) -> Noise:
    """Return level and noise of the sky in a stamp without what shines in it; raises NoSolutionError without pixels."""
    values = stamp.data[stamp.usable]
    if values.size < 30:
        raise NoSolutionError("too few usable pixels where the planet is looked for")
    level = float(np.median(values))
    for _ in range(3):
        scale = 1.48 * float(np.median(np.abs(values - level))) + 1e-9
        level = float(np.median(values[np.abs(values - level) < 4 * scale]))
    pairs = np.diff(stamp.data, axis=1)[stamp.usable[:, 1:] & stamp.usable[:, :-1]]
    # mean square of the inner nine tenths, 0.623 of a normal law's variance: a median would be 0 for coarse numbers
    square = np.sort(pairs**2)[: max(int(0.9 * pairs.size), 1)]
    sky = max(float(square.mean()) / 0.623 / 2, 1 / 12)
    return Noise(level, sky, 1 / gain_e_adu if gain_e_adu else sky / max(level, 1.0))


def _locate(
    data: np.ndarray,
    x_px: float,
    y_px: float,
    body: Body,
    fwhm_px: float,
    search_px: float,
    saturation: float | None,
    gain_e_adu: float | None,
) -> tuple[float, float, float, Noise]:
    """Find the brightest thing near a place; returns its middle, the half size of the stamp it needs, the noise."""
    import cv2

    reach = body.reach_px + 3 * fwhm_px + 4
    wide = Stamp.cut(data, x_px, y_px, search_px + 2 * reach, saturation)
    noise = sky_noise(wide, gain_e_adu)
    sigma = max(np.hypot(fwhm_px / FWHM_OVER_SIGMA, 0.5 * body.radius_px), 0.6)
    light = np.where(wide.usable | wide.clipped, wide.data - noise.level_adu, 0.0)
    smooth = cv2.GaussianBlur(light, (0, 0), sigma, borderType=cv2.BORDER_REPLICATE)
    x, y = wide.grid()
    allowed = np.hypot(x - x_px, y - y_px) <= search_px
    row, column = np.unravel_index(np.argmax(np.where(allowed, smooth, -np.inf)), smooth.shape)
    significance = smooth[row, column] * np.sqrt(4 * np.pi) * sigma / np.sqrt(noise.sky_adu2)
    if significance < 6:
        raise NoSolutionError(
            f"nothing brighter than the sky's noise within {search_px:.0f} px of where the planet is expected"
        )
    # the middle of what is saturated, or of what is above half of the peak
    top = smooth[row, column]
    blob = wide.clipped if wide.clipped[row, column] else smooth > 0.5 * top
    count, labels = cv2.connectedComponents(blob.astype(np.uint8))
    label = labels[row, column]
    chosen = (labels == label) if count > 1 and label > 0 else blob
    rows, columns = np.nonzero(chosen)
    x0, y0 = float(np.mean(columns)) + wide.x_low, float(np.mean(rows)) + wide.y_low
    size = np.sqrt(rows.size / np.pi) if wide.clipped[row, column] else 0.0
    return x0, y0, max(reach, 3 * size + 3 * fwhm_px + 5), noise


def _without_bled_columns(stamp: Stamp) -> Stamp:
    """Leave out whole columns (or rows) along which charge has run out of saturated pixels, and their neighbours."""
    usable = stamp.usable.copy()
    core = np.sqrt(stamp.clipped.sum() / np.pi)
    for axis in (0, 1):
        along = stamp.clipped.sum(axis=axis)
        for line in np.nonzero(along > 3.0 * core + 4)[0]:
            piece = slice(max(line - 1, 0), line + 2)
            if axis == 0:
                usable[:, piece] = False
            else:
                usable[piece, :] = False
    return Stamp(stamp.data, stamp.x_low, stamp.y_low, usable, stamp.clipped)


def spread_point(
    stamp: Stamp,
    x0: float,
    y0: float,
    body: Body,
    sigma: float,
    noise: Noise,
    clipped: int,
    disc: LitCells | None,
    blur: Blur | None = None,
) -> DiscPlace:
    """Fit a round point spread of free shape: eight Gaussians of fixed ratio, integrated over pixels.

    `disc`: what is spread, where it is no point; its centre of light is what is fitted. `blur`: the shape, where it is
    known but for its width to a fifth; few photons place a body better by it.
    """
    x, y = stamp.grid()
    unit = max(float(stamp.data.shape[0]), 1.0)
    plane = [np.ones(stamp.data.shape), (x - x0) / unit + 0 * y, (y - y0) / unit + 0 * x]

    def share(offset: np.ndarray, width: float) -> np.ndarray:
        return 0.5 * (erf((offset + 0.5) / (np.sqrt(2) * width)) - erf((offset - 0.5) / (np.sqrt(2) * width)))

    def spread(px: float, py: float, width: float) -> np.ndarray:
        if disc is None:
            return share(y - py, width) * share(x - px, width)
        columns = share(x[0, :, None] - px - (disc.x_px - disc.centre_px[0]), width)
        rows = share(y[:, 0, None] - py - (disc.y_px - disc.centre_px[1]), width)
        return rows @ disc.light @ columns.T

    reach = 0.5 * min(stamp.data.shape)
    count = len(_WIDTHS) + len(_AUREOLE) if blur is None else 1
    seen = np.hypot(sigma, body.radius_px / 2)
    wide = seen if disc is None else sigma

    def components(parameters: np.ndarray) -> np.ndarray:
        px, py, log_sigma = parameters
        if blur is not None:
            known = replace(blur, sigma_px=float(np.exp(log_sigma))).parts()
            return np.array([sum(part * spread(px, py, width) for part, width in known), *plane])
        widths = [ratio * np.exp(log_sigma) for ratio in _WIDTHS] + [part * reach for part in _AUREOLE]
        return np.array([spread(px, py, width) for width in widths] + plane)

    core = np.hypot(x - x0, y - y0) < 2 * FWHM_OVER_SIGMA * seen
    tolerance = replace(noise, relative=0.008, brightest_adu=float(stamp.data[stamp.usable].max()))
    x0, y0 = _clipped_centroid(stamp, x0, y0, noise, seen)
    near = 0.5 + 0.5 * seen if blur is None else 1.5 + seen  # one shape has one minimum
    start = np.array([x0, y0, np.log(wide)])
    stages: tuple[float, ...] = (0.008,)
    if blur is None and (clipped or seen < 0.8):
        # a saturated or undersampled point has several minima: with large relative errors they are one
        stages = (0.1, 0.008)
        start = _best_start(stamp, components, start, replace(tolerance, relative=0.1), count)
    fit = None
    for relative in stages:
        fit = fit_stamp(
            stamp,
            components,
            start if fit is None else fit.parameters,
            np.array([0.01, 0.01, 0.01]),
            replace(tolerance, relative=relative).variance,
            prior=np.array([np.inf, np.inf, 0.4 if blur is None else 0.2]),
            limit=np.array([near, near, 1.5]),
            robust=8.0,
            positive=count,
            core=core,
        )
    assert fit is not None
    light = np.tensordot(fit.amplitudes[:count], components(fit.parameters)[:count], axes=(0, 0))
    height = float(light.max())
    if height < 3 * np.sqrt(noise.sky_adu2):
        raise NoSolutionError("nothing like a planet stands out of the sky there")
    light_x, light_y = float(fit.parameters[0]), float(fit.parameters[1])
    dx, dy = body.light_offset_px() if disc is None else disc.centre_px
    covariance = fit.covariance[:2, :2] + np.eye(2) * MODEL_FLOOR_PX**2
    if disc is not None:
        covariance = covariance + disc.law_covariance_px2
    notes = []
    if body.lit_angle_deg is None and body.phase_angle_deg * body.radius_px > 2:
        notes.append("the phase is not corrected: the direction to the lit limb is not known")
    elif np.hypot(dx, dy) > 0.01:
        law = law_of(body.name) if disc is None else "lambert"
        notes.append(f"centre of figure from the centre of light by the law of {law.title()}")
    if clipped:
        notes.append(f"{clipped} saturated pixels left out")
    return DiscPlace(
        light_x - dx, light_y - dy, covariance, body.radius_px, 0.0,
        Blur(float(np.exp(fit.parameters[2]))), light_x, light_y,
        height / float(np.sqrt(noise.sky_adu2)), fit.chi2, "point spread", clipped, tuple(notes),
    )  # fmt: skip


def _clipped_centroid(stamp: Stamp, x0: float, y0: float, noise: Noise, seen: float) -> tuple[float, float]:
    """Return the centroid of the image clipped at a hundredth of its height: saturation and blur move it little."""
    x, y = stamp.grid()
    light = np.where(stamp.usable | stamp.clipped, stamp.data - noise.level_adu, 0.0)
    top = max(0.01 * float(light.max()), 10 * np.sqrt(noise.sky_adu2))
    cut = np.clip(light, 0, top)
    cut[light < np.maximum(0.2 * top, 4 * np.sqrt(noise.dark_adu2))] = 0
    radius = 3 * seen + np.sqrt(float((light >= top).sum()) / np.pi)
    for _ in range(6):
        window = cut * (np.hypot(x - x0, y - y0) < radius + 1)
        total = window.sum()
        if total <= 0:
            break
        x0, y0 = float((window * x).sum() / total), float((window * y).sum() / total)
    return x0, y0


def _best_start(  # type: ignore[no-untyped-def]
    stamp: Stamp, components, start: np.ndarray, noise: Noise, positive: int
) -> np.ndarray:
    """Try widths, and places about the centroid: a saturated or undersampled point has several minima."""
    weight = np.where(stamp.usable, 1 / noise.variance(stamp.data), 0.0)
    offsets = np.linspace(-0.3, 0.3, 4)
    best, best_cost = start, np.inf
    for log_width in start[2] + np.log([0.35, 0.55, 0.8, 1.2]):
        for dy in offsets:
            for dx in offsets:
                tried = np.array([start[0] + dx, start[1] + dy, log_width])
                cost = projected_cost(components(tried), stamp.data, weight, positive)
                if cost < best_cost:
                    best, best_cost = tried, cost
    return best


def _satellites(stamp: Stamp, fit: StampFit, body: Body, sigma: float) -> np.ndarray:
    """Say which pixels a satellite lights: points at or off the outline that stand out of what the fit leaves."""
    import cv2

    x, y = stamp.grid()
    left = np.where(stamp.usable, stamp.data - fit.model, 0.0) / np.sqrt(np.maximum(fit.model, 1.0))
    smooth = cv2.GaussianBlur(left, (0, 0), max(sigma, 0.6), borderType=cv2.BORDER_REPLICATE)
    away = np.hypot(x - fit.parameters[0], y - fit.parameters[1])
    off = stamp.usable & (away > 0.9 * (1 - body.flattening) * body.radius_px)
    hit = np.zeros(stamp.data.shape, bool)
    for _ in range(_MOST_SATELLITES):
        free = off & ~hit
        if free.sum() < 50:
            break
        scale = 1.48 * float(np.median(np.abs(smooth[free] - np.median(smooth[free]))))
        row, column = np.unravel_index(np.argmax(np.where(free, smooth, -np.inf)), smooth.shape)
        if smooth[row, column] < _SATELLITE_SIGMAS * scale:
            break
        hit |= np.hypot(x - column - stamp.x_low, y - row - stamp.y_low) < 3 * max(sigma, 0.6) + 0.5
    return hit


def resolved(
    stamp: Stamp,
    x0: float,
    y0: float,
    body: Body,
    sigma: float,
    noise: Noise,
    moon: LimbFit | None,
    clipped: int,
) -> DiscPlace:
    """Fit a blurred lit ellipsoid, cut by the Moon where there is one."""
    finer = sub_pixels(body.radius_px, sigma)
    wing = moon.blur.wing if moon is not None else 0.1
    margin = min(int(np.ceil(4 * WING_RATIO * sigma)) + 1, 24)
    x, y = stamp.grid(finer, margin)
    phase = body.phase_angle_deg if body.lit_angle_deg is not None else 0.0
    xs, ys = stamp.grid()
    unit = max(float(stamp.data.shape[0]), 1.0)
    u, v = (xs - x0) / unit + 0 * ys, (ys - y0) / unit + 0 * xs
    plane = [np.ones(stamp.data.shape), u, v]
    clear: np.ndarray | float = 1.0
    if moon is not None:
        dx, dy = x - moon.x_px, y - moon.y_px
        away = np.hypot(dx, dy) / moon.outline.ratio(np.arctan2(dy, dx)) - moon.radius_px
        clear = 1 - coverage(away, finer)

    def disc(parameters: np.ndarray) -> np.ndarray:
        px, py, log_sigma, log_radius, exponent = parameters
        radius = body.radius_px * np.exp(log_radius)
        toward, side, distance = from_the_light(x - px, y - py, body, radius)
        # pixels on the outline count by the part inside; brightness there is that just inside
        shrink = np.minimum(1.0, 0.995 / np.maximum(distance, 1e-6))
        bright = minnaert(toward * shrink, side * shrink, phase, exponent)
        seen = bright * coverage((distance - 1) * radius, finer) * clear
        return blurred(seen, Blur(float(np.exp(log_sigma)), wing), finer, margin)

    def rings(parameters: np.ndarray) -> list[np.ndarray]:
        px, py, log_sigma, log_radius, _ = parameters
        if body.ring_sine <= 0:
            return []
        radius = body.radius_px * np.exp(log_radius)
        distance, slope = ring_distance(x - px, y - py, body, radius)
        _, _, globe = from_the_light(x - px, y - py, body, radius)
        within = [coverage((distance - edge) / slope, finer) for edge in RING_EDGES]
        # what crosses the globe is left to the globe, whose light is free
        off = (1 - coverage((globe - 1) * radius, finer)) * clear
        blur = Blur(float(np.exp(log_sigma)), wing)
        return [blurred((outer - inner) * off, blur, finer, margin) for inner, outer in pairwise(within)]

    def components(parameters: np.ndarray) -> np.ndarray:
        return np.array([disc(parameters), *rings(parameters), *plane])

    light_dx, light_dy = body.light_offset_px()
    start = np.array([x0 - light_dx, y0 - light_dy, np.log(max(sigma, 0.3)), 0.0, 0.8])

    def fitted(piece: Stamp, start: np.ndarray) -> StampFit:
        return fit_stamp(
            piece,
            components,
            start,
            np.array([0.02, 0.02, 0.01, 0.005, 0.02]),
            noise.variance,
            prior=np.array([np.inf, np.inf, 0.2 if moon is not None else 0.5, 0.01, 0.25]),
            limit=np.array([max(6.0, 2 * body.radius_px)] * 2 + [1.5, 0.2, 1.0]),
            robust=8.0,
            positive=1 if body.ring_sine <= 0 else 1 + len(RING_EDGES) - 1,
        )

    fit = fitted(stamp, start)
    if moon is None:
        beside = _satellites(stamp, fit, body, sigma)
        if beside.any():
            # from the same start: priors are about it
            fit = fitted(replace(stamp, usable=stamp.usable & ~beside), start)
    px, py = float(fit.parameters[0]), float(fit.parameters[1])
    height = float((fit.amplitudes[0] * disc(fit.parameters)).max())
    if height < 5 * np.sqrt(noise.sky_adu2):
        raise NoSolutionError("nothing like the planet's disc stands out there")
    notes = (f"{clipped} saturated pixels left out",) if clipped else ()
    # few pixels hold a disc this small, and what the blur's shape is not known to then shows
    coarse = COARSE_PX * float(np.clip(2.5 - body.radius_px, 0, 1))
    covariance = fit.covariance[:2, :2] + np.eye(2) * (MODEL_FLOOR_PX**2 + coarse**2)
    return DiscPlace(
        px, py, covariance, float(body.radius_px * np.exp(fit.parameters[3])),
        float(body.radius_px * np.sqrt(fit.covariance[3, 3])), Blur(float(np.exp(fit.parameters[2])), wing),
        px + light_dx, py + light_dy, height / float(np.sqrt(noise.sky_adu2)), fit.chi2, "lit disc", clipped, notes,
    )  # fmt: skip
