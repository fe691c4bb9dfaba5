"""Whether a detection is as bright as the catalogue star it would be: a straight relation, learned while matching.

Instrumental magnitude = a + b (catalogue magnitude - pivot). `b` is 1 for linear pixels and smaller for stretched
pictures; its prior, and that of the scatter (colour, variability, thin cloud), are wide. (Common practice, no source.)
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

_SLOPE_PRIOR = (0.9, 0.35)
_SCATTER_PRIOR_MAG = 0.4
_PRIOR_STARS = 4  # how many stars the prior of the scatter counts for
_OUTER_MAG = 0.25  # never narrower than this


@dataclass(frozen=True)
class Brightness:
    """The relation and its uncertainty."""

    zero: float
    slope: float
    pivot: float
    scatter_mag: float
    zero_variance: float
    slope_variance: float

    def expected(self, magnitude: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return instrumental magnitudes of catalogue magnitudes, and their 1-sigma."""
        away = np.asarray(magnitude) - self.pivot
        sigma2 = self.scatter_mag**2 + self.zero_variance + self.slope_variance * away**2
        return self.zero + self.slope * away, np.sqrt(sigma2)


def fit_brightness(instrumental: np.ndarray, catalogue: np.ndarray, saturated: np.ndarray) -> Brightness:
    """Return the relation of matched stars; saturated ones only bound it and are left out where others are there."""
    use = ~saturated if (~saturated).sum() >= 2 else np.ones(len(saturated), dtype=bool)
    y, m = instrumental[use], catalogue[use]
    pivot = float(np.mean(m))
    x = m - pivot
    scatter, residual = _SCATTER_PRIOR_MAG, np.zeros_like(y)
    for _ in range(3):
        w = 1 / (scatter**2 + (residual / 2) ** 2)
        normal = np.array(
            [[w.sum(), (w * x).sum()], [(w * x).sum(), (w * x * x).sum() + 1 / _SLOPE_PRIOR[1] ** 2]]
        )
        right = np.array([(w * y).sum(), (w * x * y).sum() + _SLOPE_PRIOR[0] / _SLOPE_PRIOR[1] ** 2])
        covariance = np.linalg.inv(normal)
        zero, slope = covariance @ right
        residual = y - zero - slope * x
        spread2 = (1.4826 * np.median(np.abs(residual))) ** 2 if len(y) > 6 else _SCATTER_PRIOR_MAG**2
        scatter = np.sqrt((len(y) * spread2 + _PRIOR_STARS * _SCATTER_PRIOR_MAG**2) / (len(y) + _PRIOR_STARS))
    return Brightness(
        float(zero), float(slope), pivot, float(max(scatter, _OUTER_MAG)), covariance[0, 0], covariance[1, 1]
    )


def likeness(away_sigmas: np.ndarray) -> np.ndarray:
    """Return how likely a magnitude is that lies so far off, relative to one as expected; colours give it wings."""
    return 0.85 * np.exp(-0.5 * away_sigmas**2) + 0.15 * np.exp(-0.5 * (away_sigmas / 3) ** 2)


def consistent(
    expected: np.ndarray, half_width: np.ndarray, instrumental: np.ndarray, saturated: np.ndarray
) -> np.ndarray:
    """Say which detections (n, k) are as bright as expected (n,); a saturated one may be expected brighter."""
    away = instrumental - expected[:, None]
    return (np.abs(away) < half_width[:, None]) | (saturated & (away > -half_width[:, None]))
