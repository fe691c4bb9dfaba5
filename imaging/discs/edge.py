"""The brightness across a limb: a parametric profile, blurred, from which radius and seeing follow without bias."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

FWHM_OVER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))
# The blur is a Gaussian and a wider one, as seeing has wings.
WING_RATIO = 2.2


@dataclass(frozen=True)
class Blur:
    """Two round Gaussians: `sigma_px`, and `WING_RATIO` times that for the part `wing` of the light."""

    sigma_px: float
    wing: float = 0.0

    @property
    def fwhm_px(self) -> float:
        """Full width at half maximum of the narrow part."""
        return FWHM_OVER_SIGMA * self.sigma_px

    def parts(self) -> tuple[tuple[float, float], ...]:
        """Return (weight, sigma_px) of each Gaussian."""
        if self.wing <= 0:
            return ((1.0, self.sigma_px),)
        return (1 - self.wing, self.sigma_px), (self.wing, WING_RATIO * self.sigma_px)


@lru_cache(maxsize=1)
def _nodes() -> tuple[np.ndarray, np.ndarray]:
    return np.polynomial.legendre.leggauss(40)


def blurred_powers(offset_px: np.ndarray, radius_px: float, blur: Blur) -> np.ndarray:
    """Return blurred mu^k (k = 0, 1, 2) inside a disc, at distances `radius_px + offset_px` from its centre.

    mu = sqrt(1 - (r / radius)^2). One-dimensional blur across the limb, with the first-order effect of the limb's
    curvature, so good to 1e-3 of the step when the disc is ten blurs wide. Shape (3, n).
    """
    node, weight = _nodes()
    out = np.zeros((3, offset_px.size))
    for share, sigma in blur.parts():
        low = np.maximum(offset_px - 6 * sigma, -radius_px)
        high = np.minimum(offset_px + 6 * sigma, 0.0)
        top = np.sqrt(np.maximum(high - low, 0.0))[:, None]
        # u' = high - t^2 removes the square root at the limb
        t = 0.5 * top * (node + 1)
        source = high[:, None] - t**2
        distance = radius_px + source
        here = radius_px + offset_px[:, None]
        kernel = np.exp(-((here - distance) ** 2) / (2 * sigma**2)) / (np.sqrt(2 * np.pi) * sigma)
        kernel = kernel * np.sqrt(np.maximum(distance, 0) / np.maximum(here, 1e-3))
        step = 0.5 * top * weight * 2 * t * kernel
        mu = np.sqrt(np.clip(1 - (distance / radius_px) ** 2, 0, 1))
        for power in range(3):
            out[power] += share * np.sum(step * mu**power, axis=1)
    return out


@dataclass(frozen=True)
class EdgeFit:
    """A limb profile fitted: the true limb is at `shift_px` from where offsets were counted; `blur` is the seeing's.

    `power`: coefficients of mu^0, mu^1, mu^2 just inside the limb, `sky` the level outside.
    """

    shift_px: float
    shift_sigma_px: float
    blur: Blur
    power: tuple[float, float, float]
    sky: float
    residual: float


def fit_edge(
    offset_px: np.ndarray, value: np.ndarray, sigma: np.ndarray, radius_px: float, sigma_guess_px: float
) -> EdgeFit:
    """Fit the blurred limb to a mean radial profile.

    `offset_px`: distance outward from the provisional limb; `value`, `sigma`: brightness and its error there. Pixels
    have averaged the light over one pixel, which adds 1/12 px^2 to the variance of the blur.
    """
    from scipy.optimize import least_squares

    good = np.isfinite(value) & (sigma > 0)
    u, v, s = offset_px[good], value[good], sigma[good]

    def linear(parameters: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        shift, log_sigma, wing = parameters
        seen = Blur(np.sqrt(np.exp(2 * log_sigma) + 1 / 12), wing)
        columns = np.vstack([blurred_powers(u - shift, radius_px + shift, seen), np.ones_like(u)])
        design = (columns / s).T
        solution, *_ = np.linalg.lstsq(design, v / s, rcond=None)
        return solution, design @ solution - v / s

    fit = least_squares(
        lambda p: linear(p)[1],
        [0.0, np.log(max(sigma_guess_px, 0.3)), 0.1],
        bounds=([u.min() * 0.6, np.log(0.1), 0.0], [u.max() * 0.6, np.log(np.ptp(u)), 0.6]),
        x_scale=[0.2, 0.2, 0.1],
        max_nfev=40,
    )
    solution, residual = linear(fit.x)
    freedom = max(u.size - 7, 1)
    chi2 = float(np.sum(residual**2) / freedom)
    information = fit.jac.T @ fit.jac
    covariance = np.linalg.pinv(information) * max(chi2, 1.0)
    return EdgeFit(
        float(fit.x[0]),
        float(np.sqrt(max(covariance[0, 0], 0))),
        Blur(float(np.exp(fit.x[1])), float(fit.x[2])),
        (float(solution[0]), float(solution[1]), float(solution[2])),
        float(solution[3]),
        chi2,
    )
