"""A circle through displacements of a limb: robust, with a prior on the radius, and errors that neighbours share."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.discs.outline import Outline
from imaging.discs.ring import Sectors, slow_waves
from planner.errors import NoSolutionError

# Sectors further apart than this never count as moving together.
_MOST_LAGS = 12
_WAVES = range(2, 5)


@dataclass(frozen=True)
class CircleFit:
    """Centre and radius (px), their covariance, which sectors were used, what is left in each, and its rms."""

    x: float
    y: float
    radius: float
    covariance: np.ndarray
    used: np.ndarray
    residual: np.ndarray
    rms: float


def fit_circle(
    sectors: Sectors,
    x: float,
    y: float,
    radius: float,
    prior: tuple[float, float] | None,
    outline: Outline,
    correlated: bool = False,
) -> CircleFit:
    """Move a circle (x, y, radius) by the displacements of its sectors, with Tukey's weights.

    `prior`: radius and its 1-sigma. The scale of the weights is that about zero of the first, unweighted turns,
    so that a rough start does not silence half the limb. `correlated`: errors allow for neighbours that move
    together (Newey & West 1987), as seeing makes them.
    """
    good = sectors.good
    angle = sectors.angle[good]
    ratio = outline.ratio(angle)
    design = np.stack([np.cos(angle) / ratio, np.sin(angle) / ratio, np.ones_like(angle)], axis=1)
    shift, sigma = sectors.shift[good], sectors.sigma[good]
    if shift.size < 6:
        raise NoSolutionError("too little of a limb is seen to place a disc")
    floor = float(np.median(sigma))
    base = 1 / (sigma**2 + floor**2)
    extra, target = np.zeros(3), np.zeros(3)
    if prior is not None:
        extra[2], target[2] = 1 / prior[1] ** 2, prior[0] - radius
    weight = np.ones(shift.size)
    solution = np.zeros(3)
    residual = shift
    normal = np.eye(3)
    for turn in range(25):
        total = base * weight
        normal = design.T @ (design * total[:, None]) + np.diag(extra) + 1e-12 * np.eye(3)
        new = np.linalg.solve(normal, design.T @ (total * shift) + extra * target)
        change = float(np.abs(new - solution).max())
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
    used = np.zeros(good.size, bool)
    used[np.nonzero(good)[0][weight > 0.2]] = True
    left = np.full(good.size, np.nan)
    left[good] = residual
    rms = float(np.sqrt(np.sum(weight * residual**2) / max(np.sum(weight) - 3, 1)))
    # Tukey's estimate moves by its influence function, whose slope is not its weight (Huber 1981, section 6.3)
    u2 = np.clip((residual / (5 * scale)) ** 2, 0, 1)
    slope = base * np.clip((1 - u2) * (1 - 5 * u2), -0.8, 1)
    bread = np.linalg.inv(design.T @ (design * slope[:, None]) + np.diag(extra) + 1e-12 * np.eye(3))
    covariance = bread
    if correlated:
        middle = _shared(design, base * weight, residual, good)
        apart = (design * (base * weight * residual)[:, None] ** 2).T @ design
        most = float(np.trace(middle) / max(np.trace(apart), 1e-300))
        middle = middle * max(
            1.0, _slow_waves(angle, design, np.sqrt(base * weight), residual) / max(most, 1e-9)
        )
        clouds = (design * (base * weight)[:, None]).T @ slow_waves(angle)
        middle = middle + sectors.wave_variance * clouds @ clouds.T
        covariance = bread @ (middle + np.diag(extra)) @ bread
    return CircleFit(
        x + float(solution[0]), y + float(solution[1]), radius + float(solution[2]), covariance, used, left, rms
    )  # fmt: skip


def _shared(design: np.ndarray, weight: np.ndarray, residual: np.ndarray, good: np.ndarray) -> np.ndarray:
    """Return the covariance of the weighted sum of residuals, neighbouring sectors correlated.

    The fit has taken the three slowest waves out of the residuals, which the sum over lags would count as zeros: hence
    the last factor.
    """
    moment = np.zeros((good.size, 3))
    moment[good] = design * (weight * residual)[:, None]
    count = int(good.sum())
    left = np.full(good.size, np.nan)
    left[good] = residual
    lags = _lags(left, count)
    total = moment.T @ moment
    for lag in range(1, lags + 1):
        part = np.roll(moment, -lag, axis=0).T @ moment
        total += (1 - lag / (lags + 1)) * (part + part.T)
    return total * count / max(count - 3 * (lags + 1), 0.3 * count)


def _slow_waves(angle: np.ndarray, design: np.ndarray, root: np.ndarray, residual: np.ndarray) -> float:
    """Return the power of the residuals in slow waves along the limb over that in all: 1 for independent sectors.

    Clouds, spots and seeing move the limb slowly along it, and what moves a centre is the slowest wave of all, which no
    residual shows: the next ones, two to four waves a turn, tell what to expect of it.
    """
    waves = np.concatenate([[np.cos(m * angle), np.sin(m * angle)] for m in _WAVES]).T
    basis, _ = np.linalg.qr(design * root[:, None])
    waves = waves * root[:, None]
    left = waves - basis @ (basis.T @ waves)
    u, size, _ = np.linalg.svd(left, full_matrices=False)
    # on a short arc some waves are what a circle can do, or what another wave is
    u = u[:, size > 0.2 * size.max()]
    scaled = root * residual
    freedom = max(angle.size - 3, 1)
    return float(np.mean((u.T @ scaled) ** 2) / max(float(scaled @ scaled) / freedom, 1e-300))


def _lags(left: np.ndarray, count: int) -> int:
    """Return over how many sectors residuals are alike: 0 unless neighbours are, by two sigma."""
    square = np.nanmean(left**2)
    alike = 0
    for lag in range(1, min(_MOST_LAGS, count // 8) + 1):
        product = left * np.roll(left, -lag)
        if not np.isfinite(product).any() or np.nanmean(product) < 2 * square / np.sqrt(count):
            break
        alike = lag
    return min(2 * alike + 1, _MOST_LAGS, count // 8) if alike else 0


def limb_motion(sectors: Sectors, circle: CircleFit) -> tuple[float, float]:
    """Return the rms displacement of points of the limb (px) without photon noise, and its correlation length (px).

    The displacement of points is taken as m^2 exp(-(d/L)^2); a sector shows its mean over the sector's length. L
    follows from how alike neighbouring sectors are, m from the variance of all beyond that of photons. Zero when there
    is no such excess by three sigma.
    """
    step = 2 * np.pi * circle.radius / sectors.angle.size
    left = np.where(circle.used, circle.residual, np.nan)
    number = int(circle.used.sum())
    if number < 12:
        return 0.0, step
    total = float(np.nanmean(left**2)) * number / max(number - 3, 1)
    photons = float(np.mean(sectors.sigma[circle.used] ** 2))
    excess = total - photons
    if excess < 3 * total * np.sqrt(2 / number):
        return 0.0, step
    product = left * np.roll(left, -1)
    alike = float(np.nanmean(product)) / excess if np.isfinite(product).any() else 0.0
    # mean of the law over two pieces of one sector (lag 0) and over one sector and the next (lag 1)
    lengths = np.geomspace(0.2, 12.0, 60)
    place = (np.arange(24) + 0.5) / 24
    apart = place[:, None] - place[None, :]
    same = np.array([np.mean(np.exp(-((apart / length) ** 2))) for length in lengths])
    following = np.array([np.mean(np.exp(-(((apart + 1) / length) ** 2))) for length in lengths])
    chosen = float(np.interp(alike, following / same, lengths))
    return float(np.sqrt(excess / np.interp(chosen, lengths, same))), chosen * step
