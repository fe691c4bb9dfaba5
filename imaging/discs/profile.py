"""The limb fitted in sectors: one mean profile for all, with level, contrast and displacement of each sector's own."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.discs.edge import Blur, blurred_powers
from imaging.discs.outline import Outline
from imaging.discs.ring import Lit, Ring, Sectors, Template, middles, sector_of, slow_waves
from planner.errors import NoSolutionError

_BIN_PX = 0.25


@dataclass(frozen=True)
class ProfileFit:
    """What the sectors gave: their displacements and the mean profile they share."""

    sectors: Sectors
    template: Template


def fit_sectors(
    ring: Ring,
    x: float,
    y: float,
    radius: float,
    width: float,
    outline: Outline,
    lit: Lit,
    shifts: np.ndarray | None = None,
    inner_blur: Blur | None = None,
) -> ProfileFit:
    """Fit the frame's mean profile with level, contrast and displacement in every sector.

    `shifts`: displacements known already, taken off before the profiles are averaged. `inner_blur`: give it for
    a surface that is not equally bright toward the limb all around (the Moon); then each sector has a free part
    in mu too. Weighted linear least squares about the displacements known; the noise is that which the profiles
    show.
    """
    offset, angle = ring.polar(x, y, radius, outline)
    # sectors keep their number from turn to turn, though the radius moves
    count = int(np.clip(2 * np.pi * radius / 8, 36, 720)) if shifts is None else shifts.size
    sector = sector_of(angle, count)
    if shifts is not None:
        offset = offset - shifts[sector]
    inside = np.abs(offset) < width
    sector, place, value, clipped = sector[inside], offset[inside], ring.value[inside], ring.clipped[inside]
    number = np.bincount(sector, minlength=count)
    level, contrast, whole = _contrasts(sector, place, value, number, count, width, lit)
    size = np.quantile(contrast[whole], 0.9)
    solution = inverse = chi2 = np.zeros(0)
    wave_variance = 0.0
    template = None
    for _ in range(2 if shifts is None else 1):
        relative = (value - level[sector]) / contrast[sector]
        inner = None if inner_blur is None else (radius, inner_blur)
        template, spread_in, spread_out = _mean_profile(place, relative, whole[sector], width, inner)
        shape = template.at(place)
        # the variance goes along the profile from that of the sky to that of the disc
        weight = 1 / (spread_out + (spread_in - spread_out) * np.clip(shape, 0, 1) + 1e-12)
        # a brightness that changes across the limb (cloud, vignetting) is not to be taken for a displacement
        columns = [shape, np.interp(place, template.offset, template.slope), place * shape]
        if inner_blur is None:
            columns.append(place * columns[-1])
        if template.inner is not None:
            columns.append(np.interp(place, template.offset, template.inner))
        curved = len(columns) if inner_blur is None else None
        solution, inverse, chi2, wave_variance = _solved(
            sector, count, weight, columns, value, curved, contrast, whole
        )
        level = np.where(whole, solution[:, 0], level)
        contrast = np.where(whole & (solution[:, 1] > 0), solution[:, 1], contrast)
    assert template is not None
    with np.errstate(invalid="ignore", divide="ignore"):
        shift = -solution[:, 2] / solution[:, 1]
        error = np.sqrt(np.maximum(inverse[:, 2, 2] * chi2, 0)) / np.abs(solution[:, 1])
    good = whole & np.isfinite(shift) & np.isfinite(error) & (error > 0) & (solution[:, 1] > 0.15 * size)
    good &= np.abs(shift) < width / 2
    good &= np.bincount(sector, clipped, count) < 0.9 * np.maximum(number, 1)
    if good.any():
        # displacements count from the mean profile, so their own mean is zero; what is left of it is the smoothing's
        shift = shift - np.average(shift[good], weights=1 / error[good] ** 2)
    if shifts is not None:
        shift = shift + shifts
    sectors = Sectors(middles(count), shift, error, solution[:, 1], solution[:, 0], good, wave_variance)
    return ProfileFit(sectors, template)


def _contrasts(
    sector: np.ndarray,
    place: np.ndarray,
    value: np.ndarray,
    number: np.ndarray,
    count: int,
    width: float,
    lit: Lit,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return level outside and contrast of each sector, and which sectors show both sides of a limb."""
    outer, inner = place > 0.5 * width, place < -0.5 * width
    number_out, number_in = (
        np.bincount(sector[outer], minlength=count),
        np.bincount(sector[inner], minlength=count),
    )
    low = np.bincount(sector[outer], value[outer], count) / np.maximum(number_out, 1)
    high = np.bincount(sector[inner], value[inner], count) / np.maximum(number_in, 1)
    # a sector whole in the frame has as many pixels as most, or as the fullest when most are cut
    expected = np.quantile(number, 0.95)
    whole = (number > 0.6 * expected) & (number_out > 0.1 * expected) & (number_in > 0.1 * expected)
    whole &= lit.holds(middles(count))
    contrast = high - low
    size = np.quantile(contrast[whole], 0.9) if whole.sum() > 5 else 0.0
    whole &= contrast > 0.15 * size
    if size <= 0 or whole.sum() < 6:
        raise NoSolutionError("no limb falls off clearly where the disc should end: clouds, or no disc")
    return np.where(whole, low, 0.0), np.where(whole, contrast, 1.0), whole


def _mean_profile(
    place: np.ndarray,
    relative: np.ndarray,
    chosen: np.ndarray,
    width: float,
    inner: tuple[float, Blur] | None,
) -> tuple[Template, float, float]:
    """Average the sectors' normalised profiles in fine bins; also the variances inside and outside."""
    from scipy.ndimage import gaussian_filter1d

    bins = int(2 * width / _BIN_PX)
    place, value = place[chosen], np.clip(relative[chosen], -3, 4)
    index = np.clip(((place + width) / _BIN_PX).astype(int), 0, bins - 1)
    mean = np.bincount(index, value, bins) / np.maximum(np.bincount(index, minlength=bins), 1)
    # what is far off (spots, prominences, stars) is left out once
    off = value - mean[index]
    spread = 1.48 * np.median(np.abs(off[:: max(off.size // 20000, 1)])) + 1e-9
    near = np.abs(off) < 5 * spread + 0.05
    index, value, place = index[near], value[near], place[near]
    number = np.bincount(index, minlength=bins)
    safe = np.maximum(number, 1)
    mean = np.bincount(index, value, bins) / safe
    middle = np.bincount(index, place, bins) / safe
    square = np.bincount(index, value * value, bins) / safe - mean**2
    filled = number > 3
    if filled.sum() < 12:
        raise NoSolutionError("the disc is too small, or too much of it is hidden, for a limb fit")
    offset = middle[filled]
    smooth = gaussian_filter1d(mean[filled], 1.0, mode="nearest")
    square = np.maximum(square[filled], 1e-12)
    surface = None
    if inner is not None:
        radius, blur = inner
        surface = blurred_powers(offset, radius, Blur(np.hypot(blur.sigma_px, 0.29), blur.wing))[1]
    template = Template(
        offset, mean[filled], smooth, np.sqrt(square / number[filled]), np.gradient(smooth, offset), surface
    )
    inside, outside = offset < -0.5 * width, offset > 0.5 * width
    return (
        template,
        float(np.median(square[inside])) + 1e-9 if inside.any() else 1.0,
        float(np.median(square[outside])) + 1e-9 if outside.any() else 1.0,
    )


def _solved(
    sector: np.ndarray,
    count: int,
    weight: np.ndarray,
    columns: list[np.ndarray],
    value: np.ndarray,
    curved: int | None,
    contrast: np.ndarray,
    whole: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
    """Solve value = level + sum a_k column_k in every sector; returns solutions, inverse normals, chi^2 by freedom.

    `curved`: the number of the column by which a brightness bends across the limb. Where clouds surely do that it is
    free in each sector. Else it is held to its median, so that a clear sky costs nothing, and of what the slow waves of
    a free bend would move the limb by as much is put back as stands above their noise (Wiener 1949). Last of the
    returned is the variance that each of these waves keeps, in px^2.
    """
    terms = [None, *columns]
    size = len(terms)
    normal = np.empty((count, size, size))
    right = np.empty((count, size))
    heavy = [weight if term is None else weight * term for term in terms]
    for i in range(size):
        right[:, i] = np.bincount(sector, heavy[i] * value, count)
        for j in range(i, size):
            other = terms[j]
            product = heavy[i] if other is None else heavy[i] * other
            normal[:, i, j] = normal[:, j, i] = np.bincount(sector, product, count)
    square = np.bincount(sector, weight * value * value, count)
    freedom = np.maximum(np.bincount(sector, minlength=count) - size, 1)
    solution, inverse, chi2 = _solution(normal, right, square, freedom)
    if curved is None:
        return solution, inverse, chi2, 0.0
    bend, variance = solution[:, curved] / contrast, inverse[:, curved, curved] * chi2 / contrast**2
    power, number = _wave_power(bend[whole], variance[whole], middles(count)[whole])
    if power > 1 + 2 * np.sqrt(2 / number):
        return solution, inverse, chi2, 0.0
    pull = chi2 / (contrast**2 * 1e-4 * float(np.median(variance[whole])))
    normal[:, curved, curved] += pull
    right[:, curved] += pull * float(np.median(bend[whole])) * contrast
    held, held_inverse, _ = _solution(normal, right, square, freedom)
    share = max(0.0, 1 - 1 / power)
    if share > 0:
        with np.errstate(invalid="ignore", divide="ignore"):
            moved = held[:, 2] / held[:, 1] - solution[:, 2] / solution[:, 1]
            cost = (inverse[:, 2, 2] - held_inverse[:, 2, 2]) * chi2 / solution[:, 1] ** 2
        sure = whole & np.isfinite(moved) & (cost > 0)
        if sure.sum() > 3 * number:
            waves = slow_waves(middles(count))
            root = 1 / np.sqrt(cost[sure])
            design = np.column_stack([np.ones(int(sure.sum())), waves[sure]]) * root[:, None]
            found = np.linalg.lstsq(design, moved[sure] * root, rcond=1e-3)[0]
            held[:, 2] -= share * (waves @ found[1:]) * held[:, 1]
            return held, held_inverse, chi2, share * 2 * float(np.median(cost[sure])) / int(sure.sum())
    return held, held_inverse, chi2, 0.0


def _wave_power(bend: np.ndarray, variance: np.ndarray, angle: np.ndarray) -> tuple[float, int]:
    """Return the power of a bend in slow waves along the limb over its noise, and how many waves there are."""
    middle = float(np.median(bend))
    most = 5 * 1.48 * float(np.median(np.abs(bend - middle)))
    left = np.clip(bend - middle, -most, most) / np.sqrt(np.maximum(variance, 1e-30))
    basis, _ = np.linalg.qr(np.column_stack([np.ones_like(angle), slow_waves(angle)]))
    power = (basis[:, 1:].T @ left) ** 2
    return float(power.mean()), power.size


def _solution(
    normal: np.ndarray, right: np.ndarray, square: np.ndarray, freedom: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    diagonal = np.arange(right.shape[1])
    firm = normal.copy()
    firm[:, diagonal, diagonal] = firm[:, diagonal, diagonal] * (1 + 1e-9) + 1e-12
    inverse = np.linalg.inv(firm)
    solution = np.einsum("nij,nj->ni", inverse, right)
    explained = np.einsum("ni,ni->n", solution, right)
    return solution, inverse, np.maximum(square - explained, 0) / freedom
