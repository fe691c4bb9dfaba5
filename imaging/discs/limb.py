"""The limb of the Sun or the Moon: centre, radius and seeing of a disc, from its edge alone.

The pixels about the limb are sorted into sectors. In each sector the mean limb profile of the whole frame is fitted
with a level, a contrast and a displacement of its own, so that clouds, gradients and vignetting change levels and
not places. The displacements give the centre, robustly. The mean profile, fitted by a blurred model of a disc,
gives the true radius: an inflection point would be biased inward by the blur (0.08-0.5").
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.discs.edge import Blur, EdgeFit, fit_edge
from imaging.discs.find import find_disc
from imaging.discs.outline import Outline
from planner.errors import NoSolutionError


@dataclass(frozen=True)
class LimbFit:
    """A disc fitted by its limb. Pixels are 0-based, covariance is of (x, y, radius) in px^2.

    `radius_px`: the true, unrefracted, unblurred radius. `arc_deg`: how much of the limb was used.
    `rms_px`: scatter of the limb about the fit, what seeing and relief do included. `notes`: what was assumed.
    """

    x_px: float
    y_px: float
    radius_px: float
    covariance: np.ndarray
    blur: Blur
    arc_deg: float
    rms_px: float
    contrast_adu: float
    sky_adu: float
    power: tuple[float, float, float]
    outline: Outline
    saturated: bool = False
    radius_held: bool = False
    notes: tuple[str, ...] = ()

    @property
    def sigma_px(self) -> tuple[float, float]:
        """1-sigma of x and y."""
        return float(np.sqrt(self.covariance[0, 0])), float(np.sqrt(self.covariance[1, 1]))

    @property
    def seeing_fwhm_px(self) -> float:
        """Full width at half maximum of the blur."""
        return self.blur.fwhm_px


@dataclass
class _Ring:
    """Pixels about a limb: positions, values, and the sector each belongs to."""

    x: np.ndarray
    y: np.ndarray
    value: np.ndarray
    clipped: np.ndarray


@dataclass
class _Sectors:
    """Displacement of the limb in each sector, outward, and its error; not all sectors are good."""

    angle: np.ndarray
    shift: np.ndarray
    sigma: np.ndarray
    contrast: np.ndarray
    level: np.ndarray
    good: np.ndarray


def fit_limb(
    data: np.ndarray,
    radius_px: float | None = None,
    radius_sigma_px: float | None = None,
    guess_px: tuple[float, float] | None = None,
    outline: Outline | None = None,
    saturation: float | None = None,
    lit_angle_deg: float | None = None,
    lit_half_deg: float = 180.0,
    avoid: tuple[tuple[float, float, float], ...] = (),
) -> LimbFit:
    """Fit the limb of the one bright disc in a frame.

    data: (rows, columns), any unit. `radius_px`: expected true radius; with `radius_sigma_px` it is a prior
    (give both for the Moon and for discs cut by the frame: the tool holds it when the arc is short).
    `guess_px`: rough centre. `outline`: refraction. `lit_angle_deg`, `lit_half_deg`: polar angle (+x toward +y)
    of the middle of the lit limb and how far to each side it may be used. `avoid`: circles (x, y, radius) to
    leave out, such as a planet. Raises NoSolutionError with a reason when the data do not defend a number.
    Centre unbiased to 0.01 px on clean frames; the error stated includes seeing as the limb itself shows it.
    """
    data = np.asarray(data, np.float32)
    outline = outline or Outline()
    if radius_px is not None and radius_px < 6:
        raise NoSolutionError(f"a disc of {radius_px:.1f} px in radius is too small for a limb fit")
    if guess_px is None or radius_px is None:
        rough = find_disc(data, radius_px)
        if rough.rival > 0.75:
            raise NoSolutionError(
                "two discs of like strength in the frame: which one is meant cannot be told"
            )
        x, y, radius, error = rough.x_px, rough.y_px, rough.radius_px, rough.error_px
        if radius_px is not None:
            radius = radius_px
    else:
        (x, y), radius, error = guess_px, radius_px, max(4.0, 0.01 * radius_px)
    prior = None
    if radius_px is not None and radius_sigma_px is not None:
        prior = (radius_px, radius_sigma_px)

    width = float(np.clip(3 * error, 10.0, max(0.35 * radius, 10.0)))
    lit = (lit_angle_deg, lit_half_deg)
    for _ in range(3):
        ring = _ring(data, x, y, radius, width, outline, saturation, avoid)
        sectors, blur_px = _crossings(ring, x, y, radius, width, outline, lit)
        x, y, radius, *_ = _geometry(sectors, x, y, radius, prior, outline)
        width = float(
            np.clip(max(4 * np.median(np.abs(sectors.shift[sectors.good])), 6 * blur_px), 8.0, width)
        )

    shifts = None
    width = float(np.clip(9 * blur_px, 7.0, max(0.3 * radius, 7.0)))
    ring = _ring(data, x, y, radius, width + 2, outline, saturation, avoid)
    for turn in range(5):
        sectors, template = _fitted(ring, x, y, radius, width, outline, lit, shifts, sectors)
        x_new, y_new, radius_new, covariance, used, rms = _geometry(
            sectors, x, y, radius, prior, outline, correlated=True
        )
        moved = np.hypot(x_new - x, y_new - y) + abs(radius_new - radius)
        shifts = sectors.shift - (
            (x_new - x) * np.cos(sectors.angle) + (y_new - y) * np.sin(sectors.angle) + (radius_new - radius)
        )
        shifts = np.where(used, np.clip(shifts, -width / 3, width / 3), 0.0)
        x, y, radius = x_new, y_new, radius_new
        if moved < 1e-3 and turn >= 2:
            break
    arc = 360.0 * used.sum() / used.size
    edge = _true_edge(template, radius, blur_px)
    return _defended(
        data, x, y, radius, covariance, used, rms, arc, edge, template, outline, prior, sectors, ring
    )


def _defended(data, x, y, radius, covariance, used, rms, arc, edge, template, outline, prior, sectors, ring):  # type: ignore[no-untyped-def]
    """Return the fit with its true radius, or raise when something about it is not as a disc's."""
    notes = []
    if arc < 25:
        raise NoSolutionError(f"only {arc:.0f} degrees of limb are seen: too little to place a disc")
    if prior is None and arc < 110:
        raise NoSolutionError(
            f"{arc:.0f} degrees of limb do not fix a centre without a known radius: give the scale"
        )
    if rms > max(0.15 * radius, 3.0):
        raise NoSolutionError(f"the edge wanders by {rms:.1f} px about the best circle: not a limb")
    contrast = float(np.median(sectors.contrast[used]))
    shift, shift_sigma = edge.shift_px, edge.shift_sigma_px
    held = False
    if prior is not None:
        # the prior acted on the provisional radius; what matters is the true one
        held = bool(prior[1] < np.sqrt(max(covariance[2, 2], 1e-12)) * 2)
    true_radius = radius + shift
    covariance = covariance.copy()
    covariance[2, 2] += shift_sigma**2
    if prior is not None and abs(true_radius - prior[0]) > max(8 * prior[1], 0.05 * prior[0]):
        raise NoSolutionError(
            f"the disc has a radius of {true_radius:.1f} px where {prior[0]:.1f} is expected: another body or scale"
        )
    if edge.residual > 400:
        notes.append("the limb profile is not that of a blurred disc: radius and seeing are rough")
    saturated = bool(ring.clipped.mean() > 0.2)
    if saturated:
        notes.append("the disc is saturated: its radius is that of the clipped image")
    return LimbFit(
        x, y, float(true_radius), covariance, edge.blur, float(arc), float(rms), contrast, edge.sky * contrast,
        edge.power, outline, saturated, held, tuple(notes),
    )  # fmt: skip


def _ring(
    data: np.ndarray,
    x: float,
    y: float,
    radius: float,
    width: float,
    outline: Outline,
    saturation: float | None,
    avoid: tuple[tuple[float, float, float], ...],
) -> _Ring:
    """Collect the pixels within `width` of the limb."""
    rows, columns = data.shape
    squeeze = float(np.min(outline.ratio(np.linspace(-np.pi, np.pi, 73))))
    stretch = float(np.max(outline.ratio(np.linspace(-np.pi, np.pi, 73))))
    outer, inner = radius * max(stretch, 1.0) + width, max(radius * squeeze - width, 0.0)
    line = np.arange(max(0, int(np.ceil(y - outer))), min(rows, int(np.floor(y + outer)) + 1))
    if line.size == 0:
        raise NoSolutionError("the disc lies outside the frame")
    far = np.sqrt(np.maximum(outer**2 - (line - y) ** 2, 0))
    near = np.sqrt(np.maximum(inner**2 - (line - y) ** 2, 0))
    pieces = []
    for low, high in ((x - far, x - near), (x + near, x + far)):
        start = np.clip(np.ceil(low), 0, columns).astype(int)
        stop = np.clip(np.floor(high) + 1, 0, columns).astype(int)
        pieces.append((line, start, np.maximum(stop - start, 0)))
    row = np.concatenate([np.repeat(lines, count) for lines, _, count in pieces])
    column = np.concatenate(
        [
            np.arange(count.sum()) - np.repeat(np.cumsum(count) - count - start, count)
            for _, start, count in pieces
        ]
    )
    # rows above and below the inner circle are walked twice, from both sides: keep each pixel once
    if near.size and (near == 0).any():
        flat = np.unique(row * columns + column)
        row, column = flat // columns, flat % columns
    value = data[row, column]
    keep = np.isfinite(value)
    for ax, ay, ar in avoid:
        keep &= (column - ax) ** 2 + (row - ay) ** 2 > ar**2
    row, column, value = row[keep], column[keep], value[keep].astype(float)
    clipped = value >= saturation if saturation is not None else np.zeros(value.size, bool)
    if value.size < 200:
        raise NoSolutionError("the disc's limb lies outside the frame")
    return _Ring(column.astype(float), row.astype(float), value, clipped)


def _polar(ring: _Ring, x: float, y: float, radius: float, outline: Outline) -> tuple[np.ndarray, np.ndarray]:
    """Return (offset outward from the limb in unrefracted px, polar angle) of the ring's pixels."""
    dx, dy = ring.x - x, ring.y - y
    angle = np.arctan2(dy, dx)
    return np.hypot(dx, dy) / outline.ratio(angle) - radius, angle


def _sector_of(angle: np.ndarray, count: int) -> np.ndarray:
    return np.minimum(((angle + np.pi) * (count / (2 * np.pi))).astype(int), count - 1)


def _middles(count: int) -> np.ndarray:
    return (np.arange(count) + 0.5) * 2 * np.pi / count - np.pi


def _within_lit(angle: np.ndarray, lit: tuple[float | None, float]) -> np.ndarray:
    if lit[0] is None:
        return np.ones(angle.size, bool)
    away = np.abs((np.degrees(angle) - lit[0] + 180) % 360 - 180)
    return away <= lit[1]


def _crossings(
    ring: _Ring,
    x: float,
    y: float,
    radius: float,
    width: float,
    outline: Outline,
    lit: tuple[float | None, float],
) -> tuple[_Sectors, float]:
    """Find the steepest fall of brightness in each sector, to half a pixel; also the typical sigma of the fall."""
    offset, angle = _polar(ring, x, y, radius, outline)
    count = int(np.clip(2 * np.pi * radius / 6, 24, 360))
    step = max(1.0, width / 40)
    bins = int(2 * width / step)
    inside = np.abs(offset) < width
    cell = _sector_of(angle[inside], count) * bins + np.clip(
        ((offset[inside] + width) / step).astype(int), 0, bins - 1
    )
    number = np.bincount(cell, minlength=count * bins).reshape(count, bins)
    total = np.bincount(cell, ring.value[inside], count * bins).reshape(count, bins)
    with np.errstate(invalid="ignore"):
        profile = total / np.where(number > 0, number, np.nan)
    from scipy.ndimage import gaussian_filter1d

    third = bins // 3
    full = np.isfinite(profile).mean(axis=1) > 0.9
    filled = _filled(profile)
    smooth = gaussian_filter1d(filled, 1.0, axis=1, mode="nearest")
    fall = -np.diff(smooth, axis=1)
    peak = np.argmax(fall, axis=1)
    high = np.median(filled[:, :third], axis=1)
    low = np.median(filled[:, -third:], axis=1)
    contrast = high - low
    noise = 1.48 * np.median(np.abs(np.diff(filled, axis=1)), axis=1) / np.sqrt(2)
    size = np.quantile(contrast[full], 0.9) if full.any() else 0.0
    inner = (peak > 1) & (peak < fall.shape[1] - 2)
    good = (
        full & inner & (contrast > 0.15 * size) & (contrast > 4 * noise) & _within_lit(_middles(count), lit)
    )
    if good.sum() < max(6, 0.05 * count):
        raise NoSolutionError("no limb falls off clearly where the disc should end: clouds, or no disc")
    row = np.arange(count)
    p = np.clip(peak, 1, fall.shape[1] - 2)
    left, mid, right = fall[row, p - 1], fall[row, p], fall[row, p + 1]
    bend = left - 2 * mid + right
    fine = np.where(np.abs(bend) > 1e-12, 0.5 * (left - right) / np.where(np.abs(bend) > 1e-12, bend, 1), 0.0)
    shift = (p + np.clip(fine, -1, 1) + 1) * step - width
    # a Gaussian fall of height h has its steepest slope h / (sqrt(2 pi) sigma)
    sigma = contrast * step / np.sqrt(2 * np.pi) / np.maximum(mid, 1e-12)
    blur = float(np.clip(np.median(sigma[good]), 0.4, width / 3))
    return (
        _Sectors(_middles(count), shift, np.full(count, 0.3 * step), contrast, low, good),
        blur,
    )


def _filled(profile: np.ndarray) -> np.ndarray:
    """Return rows with their gaps closed by the nearest value to the left."""
    index = np.where(np.isfinite(profile), np.arange(profile.shape[1]), 0)
    np.maximum.accumulate(index, axis=1, out=index)
    return np.nan_to_num(profile[np.arange(profile.shape[0])[:, None], index])


@dataclass
class _Template:
    """The frame's mean limb profile: 0 outside, 1 inside, on a fine grid of offsets, with its error and slope."""

    offset: np.ndarray
    value: np.ndarray
    sigma: np.ndarray

    def at(self, offset: np.ndarray) -> np.ndarray:
        return np.interp(offset, self.offset, self.value)

    def slope_at(self, offset: np.ndarray) -> np.ndarray:
        return np.interp(offset, self.offset, np.gradient(self.value, self.offset))


def _fitted(
    ring: _Ring,
    x: float,
    y: float,
    radius: float,
    width: float,
    outline: Outline,
    lit: tuple[float | None, float],
    shifts: np.ndarray | None,
    rough: _Sectors,
) -> tuple[_Sectors, _Template]:
    """Fit the mean profile with level, contrast and displacement in every sector by weighted least squares."""
    offset, angle = _polar(ring, x, y, radius, outline)
    count = int(np.clip(2 * np.pi * radius / 8, 36, 720))
    sector = _sector_of(angle, count)
    if shifts is None:
        shifts = np.zeros(count)
    place = offset - shifts[sector]
    inside = np.abs(place) < width
    sector, place, value = sector[inside], place[inside], ring.value[inside]
    clipped = ring.clipped[inside]
    number = np.bincount(sector, minlength=count)

    outer, inner = place > 0.5 * width, place < -0.5 * width
    low = _mean(value, sector, outer, count)
    high = _mean(value, sector, inner, count)
    contrast = high - low
    expected = 2 * width * radius * 2 * np.pi / count
    whole = (number > 0.6 * expected) & np.isfinite(contrast)
    whole &= (np.bincount(sector[outer], minlength=count) > 0.1 * expected) & (
        np.bincount(sector[inner], minlength=count) > 0.1 * expected
    )
    whole &= _within_lit(_middles(count), lit)
    size = np.quantile(contrast[whole], 0.9) if whole.sum() > 5 else 0.0
    whole &= contrast > 0.15 * size
    if size <= 0 or whole.sum() < 6:
        raise NoSolutionError("no limb falls off clearly where the disc should end: clouds, or no disc")

    level, contrast = np.where(whole, low, 0.0), np.where(whole, contrast, 1.0)
    for _ in range(2):
        relative = (value - level[sector]) / contrast[sector]
        template, spread_in, spread_out = _mean_profile(place, relative, whole[sector], width)
        # variance along the profile goes from that of the sky to that of the disc
        mixed = np.clip(template.at(place), 0, 1)
        weight = 1 / (spread_out + (spread_in - spread_out) * mixed + 1e-12)
        shape, slope = template.at(place), template.slope_at(place)
        sums = _normal(sector, count, weight, shape, slope, value)
        solution, inverse, chi2 = sums
        level = np.where(whole, solution[:, 0], level)
        contrast = np.where(whole & (solution[:, 1] > 0), solution[:, 1], contrast)
    with np.errstate(invalid="ignore", divide="ignore"):
        shift = -solution[:, 2] / solution[:, 1]
        error = np.sqrt(inverse[:, 2, 2] * np.maximum(chi2, 0)) / np.abs(solution[:, 1])
    good = whole & np.isfinite(shift) & np.isfinite(error) & (solution[:, 1] > 0.15 * size)
    good &= np.abs(shift) < width / 2
    good &= np.bincount(sector, clipped, count) < 0.9 * np.maximum(number, 1)
    return _Sectors(_middles(count), shift + shifts, error, solution[:, 1], solution[:, 0], good), template


def _mean(value: np.ndarray, sector: np.ndarray, chosen: np.ndarray, count: int) -> np.ndarray:
    number = np.bincount(sector[chosen], minlength=count)
    total = np.bincount(sector[chosen], value[chosen], count)
    with np.errstate(invalid="ignore", divide="ignore"):
        return total / number


def _mean_profile(
    place: np.ndarray, relative: np.ndarray, chosen: np.ndarray, width: float
) -> tuple[_Template, float, float]:
    """Average the sectors' normalised profiles in bins of a quarter pixel; also the variances inside and outside."""
    step = 0.25
    bins = int(2 * width / step)
    index = np.clip(((place[chosen] + width) / step).astype(int), 0, bins - 1)
    value = np.clip(relative[chosen], -3, 4)
    number = np.bincount(index, minlength=bins)
    safe = np.maximum(number, 1)
    mean = np.bincount(index, value, bins) / safe
    middle = np.bincount(index, place[chosen], bins) / safe
    # reject what is far off (spots, prominences, stars), once
    off = value - mean[index]
    spread = 1.48 * np.median(np.abs(off)) + 1e-9
    near = np.abs(off) < 5 * spread + 0.05
    number = np.bincount(index[near], minlength=bins)
    safe = np.maximum(number, 1)
    mean = np.bincount(index[near], value[near], bins) / safe
    middle = np.bincount(index[near], place[chosen][near], bins) / safe
    square = np.bincount(index[near], (value[near] - mean[index[near]]) ** 2, bins) / safe
    filled = number > 3
    if filled.sum() < 12:
        raise NoSolutionError("the disc is too small or too much of it is hidden for a limb fit")
    from scipy.ndimage import gaussian_filter1d

    smooth = gaussian_filter1d(mean[filled], 1.0, mode="nearest")
    error = np.sqrt(np.maximum(square[filled], 1e-12) / number[filled])
    u = middle[filled]
    inner, outer = u < -0.5 * width, u > 0.5 * width
    return (
        _Template(u, smooth, error),
        float(np.median(square[filled][inner])) + 1e-9 if inner.any() else 1.0,
        float(np.median(square[filled][outer])) + 1e-9 if outer.any() else 1.0,
    )


def _normal(
    sector: np.ndarray,
    count: int,
    weight: np.ndarray,
    shape: np.ndarray,
    slope: np.ndarray,
    value: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Solve value = level + contrast shape + k slope in every sector; returns solutions, inverse normals, chi^2."""

    def total(quantity: np.ndarray) -> np.ndarray:
        return np.bincount(sector, weight * quantity, count)

    normal = np.empty((count, 3, 3))
    normal[:, 0, 0] = total(np.ones_like(value))
    normal[:, 0, 1] = normal[:, 1, 0] = total(shape)
    normal[:, 0, 2] = normal[:, 2, 0] = total(slope)
    normal[:, 1, 1] = total(shape * shape)
    normal[:, 1, 2] = normal[:, 2, 1] = total(shape * slope)
    normal[:, 2, 2] = total(slope * slope)
    right = np.stack([total(value), total(value * shape), total(value * slope)], axis=1)
    ridge = 1e-9 * np.trace(normal, axis1=1, axis2=2)[:, None] + 1e-12
    normal[:, np.arange(3), np.arange(3)] += ridge
    inverse = np.linalg.inv(normal)
    solution = np.einsum("nij,nj->ni", inverse, right)
    model = solution[sector, 0] + solution[sector, 1] * shape + solution[sector, 2] * slope
    number = np.bincount(sector, minlength=count)
    chi2 = np.bincount(sector, weight * (value - model) ** 2, count) / np.maximum(number - 3, 1)
    return solution, inverse, chi2


def _geometry(
    sectors: _Sectors,
    x: float,
    y: float,
    radius: float,
    prior: tuple[float, float] | None,
    outline: Outline,
    correlated: bool = False,
) -> tuple[float, float, float, np.ndarray, np.ndarray, float]:
    """Solve displacements for centre and radius; returns them, their covariance, what was used, the rms."""
    good = sectors.good
    cos, sin = np.cos(sectors.angle[good]), np.sin(sectors.angle[good])
    ratio = outline.ratio(sectors.angle[good])
    design = np.stack([cos / ratio, sin / ratio, np.ones_like(cos)], axis=1)
    shift, sigma = sectors.shift[good], sectors.sigma[good]
    floor = np.median(sigma)
    base = 1 / (sigma**2 + floor**2)
    extra = np.zeros(3) if prior is None else np.array([0.0, 0.0, 1 / prior[1] ** 2])
    target = np.zeros(3) if prior is None else np.array([0.0, 0.0, prior[0] - radius])
    weight = np.ones(shift.size)
    solution = np.array([0.0, 0.0, np.median(shift) if prior is None else 0.0])
    scale = floor
    for turn in range(25):
        total = base * weight
        # the first two turns are not weighted by residuals: a rough start must not silence half the limb
        normal = design.T @ (design * total[:, None]) + np.diag(extra)
        new = np.linalg.solve(normal + 1e-12 * np.eye(3), design.T @ (total * shift) + extra * target)
        change = np.abs(new - solution).max()
        solution = new
        residual = shift - design @ solution
        scale = max(1.48 * float(np.median(np.abs(residual))), 0.3 * floor, 1e-6)
        if turn >= 1:
            weight = np.clip(1 - (residual / (5 * scale)) ** 2, 0, None) ** 2
            if (weight > 0.2).sum() < 6:
                raise NoSolutionError(
                    "the edges do not lie on one circle: not a disc, or most of it is hidden"
                )
        if turn > 3 and change < 1e-5:
            break
    inlier = weight > 0.2
    used = np.zeros(good.size, bool)
    used[np.nonzero(good)[0][inlier]] = True
    variance = float(np.sum(weight * residual**2) / max(np.sum(weight) - 3, 1))
    rms = float(np.sqrt(variance))
    bread = np.linalg.inv(normal + 1e-12 * np.eye(3))
    if correlated:
        meat = _meat(design, base * weight, residual, sectors.angle[good], good.size)
        covariance = bread @ (meat + np.diag(extra)) @ bread
    else:
        covariance = bread
    return (
        x + float(solution[0]), y + float(solution[1]), radius + float(solution[2]), covariance, used, rms,
    )  # fmt: skip


def _meat(
    design: np.ndarray, weight: np.ndarray, residual: np.ndarray, angle: np.ndarray, count: int
) -> np.ndarray:
    """Return the covariance of the weighted sum, with neighbours correlated up to 8 sectors (Newey & West 1987)."""
    order = np.argsort(angle)
    moment = design[order] * (weight * residual)[order, None]
    total = moment.T @ moment
    for lag in range(1, min(9, max(moment.shape[0] // 6, 1))):
        part = moment[lag:].T @ moment[:-lag]
        total += (1 - lag / 9.0) * (part + part.T)
    # finite sample: three parameters were fitted
    freedom = max(moment.shape[0] - 3, 1)
    return total * moment.shape[0] / freedom


def _true_edge(template: _Template, radius: float, blur_px: float) -> EdgeFit:
    """Fit the blurred model of a disc to the mean profile."""
    step = max(1, template.offset.size // 60)
    count = template.offset.size // step * step
    fold = lambda array: array[:count].reshape(-1, step).mean(axis=1)  # noqa: E731
    return fit_edge(
        fold(template.offset),
        fold(template.value),
        fold(template.sigma) / np.sqrt(step) + 1e-5,
        radius,
        blur_px,
    )
