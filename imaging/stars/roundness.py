"""How round a lens is: priors of several widths, weighed by what the stars of a frame say (Bayesian model averaging).

Real lenses differ: some are round to a few 1e-5 of the frame, some are off by 1e-3; refraction squeezes a field near
the zenith by 1e-4 and a low one by 2e-3. A wide prior alone lets a dozen stars of unknown motion bend a narrow field.
"""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache

import numpy as np

from imaging.stars.camera import (
    RADIAL_PRIOR,
    CameraFit,
    Lens,
    is_unknown,
    linearised,
    radial_direction,
    stepped,
)

# factors on the widths of (linear terms, other terms that are not radial), equally likely beforehand
KINDS = ((1.0, 1.0), (1.0, 0.25), (1.0, 0.06), (0.2, 0.25), (0.2, 0.06), (0.05, 0.25), (0.05, 0.06))
_ENOUGH_STARS = 300  # from here on the stars outweigh every prior
_TURNS = 6


def averaged(
    fit: CameraFit,
    lens: Lens,
    x_px: np.ndarray,
    y_px: np.ndarray,
    vectors: np.ndarray,
    sigma_px: np.ndarray,
    shape: tuple[int, int],
) -> CameraFit:
    """Return the fit averaged over kinds of lens, each weighed by its marginal likelihood (Laplace; linear here).

    A lens learned before is known but for its linear terms, which refraction changes. The covariance holds the scatter
    between kinds. Stars weigh as in Student's t by their distance from the fit that the others alone would give, so
    that a precise but blended one cannot bend the fit to itself.
    """
    count = len(x_px)
    if count > _ENOUGH_STARS or not lens.terms:
        return fit
    camera, half = fit.camera, fit.camera.half_diagonal_px
    residual, jacobian = linearised(camera, x_px, y_px, vectors)
    variance = sigma_px**2 + fit.sigma_model_px**2
    now = np.zeros(jacobian.shape[2])
    now[4] = (camera.axis_x_px - (shape[1] - 1) / 2) / half - lens.axis[0]
    now[5] = (camera.axis_y_px - (shape[0] - 1) / 2) / half - lens.axis[1]
    now[6:] = (np.asarray(camera.coefficients) - lens.coefficients).ravel()
    priors, volumes = _priors(lens)
    pulled = priors @ now
    cost_now = pulled @ now
    weight = np.ones(count)
    for _ in range(_TURNS):
        root = np.sqrt(weight / variance)[:, None, None]
        scaled = (jacobian * root).reshape(2 * count, -1)
        seen = (residual * root[:, :, 0]).ravel()
        normal = scaled.T @ scaled + priors
        pull = scaled.T @ seen - pulled
        covariances = np.linalg.inv(normal)
        steps = np.einsum("kij,kj->ki", covariances, pull)
        cost = seen @ seen + cost_now - (steps * pull).sum(axis=1)
        odds = 0.5 * (volumes - np.linalg.slogdet(normal)[1] - cost)
        share = np.exp(odds - odds.max())
        share /= share.sum()
        mean = share @ steps
        away = steps - mean
        covariance = np.einsum("k,kij->ij", share, covariances) + (share * away.T) @ away
        if count < 6:
            break
        left = residual - jacobian @ mean
        carried = (jacobian.reshape(2 * count, -1) @ covariance).reshape(jacobian.shape)
        leverage = (carried @ jacobian.transpose(0, 2, 1)) * (weight / variance)[:, None, None]
        own = np.linalg.solve(np.eye(2) * 1.001 - np.minimum(leverage, 1.0), left[:, :, None])[:, :, 0]
        chi2 = np.maximum((left * own).sum(axis=1), (left**2).sum(axis=1)) / variance
        before, weight = weight, 6.0 / (4.0 + chi2)
        if np.abs(weight - before).max() < 0.02:
            break
    camera = stepped(camera, mean)
    after, _ = linearised(camera, x_px, y_px, vectors)
    return CameraFit(camera, covariance, fit.sigma_model_px, after, weight)


@lru_cache(maxsize=32)
def _priors(lens: Lens) -> tuple[np.ndarray, np.ndarray]:
    """Return the precisions (kinds, parameters, parameters) and the logarithms of their determinants."""
    kinds = sorted({(linear, 1.0) for linear, _ in KINDS}) if not is_unknown(lens) else KINDS
    priors = np.array([narrowed(lens, *kind).precision for kind in kinds])
    return priors, np.linalg.slogdet(priors)[1]


def narrowed(lens: Lens, linear: float, other: float) -> Lens:
    """Return the lens with the widths of its linear and of its higher terms multiplied; what is radial stays as it is.

    `other` below 1 is for lenses never seen before (`unknown_lens`).
    """
    if linear == other == 1.0:
        return lens
    low = np.array([p + q == 1 for p, q in lens.terms] * 2)
    radial = np.zeros_like(lens.covariance)
    if other != 1.0:
        for n, direction in radial_direction(lens.terms).items():
            radial += RADIAL_PRIOR[n] ** 2 * np.outer(direction, direction)
    factor = np.where(low, linear, other)
    rest = (lens.covariance - radial) * np.outer(factor, factor)
    return replace(lens, covariance=rest + radial)
