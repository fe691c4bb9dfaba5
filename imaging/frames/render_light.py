"""How light spreads and how bodies shine: point spread, solar limb darkening, lit spheres.

Nothing here is used by a room that measures.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.sequence.radiometry import disc_law, surface_law

FWHM_OVER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))

# Three Gaussians for a Moffat profile with exponent 4.765, which Kolmogorov seeing has (Trujillo et al. 2001,
# MNRAS 328, 977, section 2): fitted by least squares, within 0.5 % of the peak; sigmas in units of the FWHM.
_SEEING_WEIGHT = np.array([0.3667, 0.5370, 0.0963])
_SEEING_SIGMA = np.array([0.36388, 0.54576, 0.89341])
# The aureole: one part in a hundred, eight times as wide (assumed; King 1971, PASP 83, 199 has its shape).
_AUREOLE_WEIGHT, _AUREOLE_SIGMA = 0.01, 3.4


@dataclass(frozen=True)
class PointSpread:
    """A sum of round Gaussians: `weight` sums to 1, `sigma_px` in pixels."""

    weight: np.ndarray
    sigma_px: np.ndarray

    @classmethod
    def gaussian(cls, fwhm_px: float) -> PointSpread:
        """One Gaussian."""
        return cls(np.array([1.0]), np.array([fwhm_px / FWHM_OVER_SIGMA]))

    @classmethod
    def seeing(cls, fwhm_px: float) -> PointSpread:
        """The long-exposure image of a star in Kolmogorov seeing, with a faint aureole."""
        weight = np.append(_SEEING_WEIGHT * (1 - _AUREOLE_WEIGHT), _AUREOLE_WEIGHT)
        return cls(weight / weight.sum(), np.append(_SEEING_SIGMA, _AUREOLE_SIGMA) * fwhm_px)

    @property
    def reach_px(self) -> float:
        """Radius beyond which less than 1e-5 of the light falls."""
        return float(np.max(self.sigma_px * np.sqrt(2 * np.log(np.maximum(self.weight / 1e-5, 1.0)))))

    def finer(self, factor: float) -> PointSpread:
        """The same spread on pixels `factor` times smaller."""
        return PointSpread(self.weight, self.sigma_px * factor)

    def blur(self, image: np.ndarray) -> np.ndarray:
        """Return the image convolved with this spread; the edges see zeros."""
        import cv2

        image = np.ascontiguousarray(image, dtype=np.float32)
        out = np.zeros_like(image)
        for weight, sigma in zip(self.weight, self.sigma_px, strict=True):
            size = 2 * int(np.ceil(4.5 * sigma)) + 1
            kernel = cv2.getGaussianKernel(size, float(sigma), cv2.CV_64F)
            out += float(weight) * cv2.sepFilter2D(image, -1, kernel, kernel, borderType=cv2.BORDER_CONSTANT)
        return out


# Neckel & Labs 1994, Solar Physics 153, 91: I(mu)/I(1) = sum A_k mu^k at these wavelengths (nm).
_NECKEL_LABS = {
    401.970: (0.12323, 1.08648, -0.43974, 0.45912, -0.32759, 0.09850),
    457.345: (0.16604, 1.38544, -1.52275, 2.00232, -1.45969, 0.42864),
    519.930: (0.23695, 1.29927, -1.28034, 1.37760, -0.85054, 0.21706),
    559.950: (0.26892, 1.34319, -1.58427, 1.91271, -1.31350, 0.37295),
    610.975: (0.30854, 1.36620, -1.83572, 2.33221, -1.63082, 0.45959),
    669.400: (0.34685, 1.37539, -2.04425, 2.70493, -1.94290, 0.55999),
    748.710: (0.40627, 1.22842, -1.67877, 2.05535, -1.39972, 0.38845),
    869.600: (0.45396, 1.25101, -2.02958, 2.75410, -2.02287, 0.59338),
}


def limb_darkening(mu: np.ndarray, wavelength_nm: float = 550.0) -> np.ndarray:
    """Return the Sun's intensity over that of the middle of its disc.

    `mu` is the cosine of the angle between line of sight and vertical. Neckel & Labs 1994, linear in wavelength
    between tabulated ones; valid 402-870 nm, clipped outside.
    """
    table = np.array(list(_NECKEL_LABS.values()))
    nodes = np.array(list(_NECKEL_LABS))
    coefficients = [np.interp(wavelength_nm, nodes, column) for column in table.T]
    return np.polynomial.polynomial.polyval(np.clip(mu, 0.0, 1.0), coefficients)


def mean_over_centre(wavelength_nm: float = 550.0) -> float:
    """Return the mean intensity of the solar disc over that of its middle (0.80 in green light)."""
    mu, weight = np.polynomial.legendre.leggauss(32)
    mu = 0.5 * (mu + 1)
    return float(np.sum(weight * mu * limb_darkening(mu, wavelength_nm)))


@dataclass(frozen=True)
class RadialProfile:
    """A round body's brightness against distance from its centre, already blurred; pixels and per-pixel values."""

    radius_px: np.ndarray
    value: np.ndarray

    def at(self, distance_px: np.ndarray) -> np.ndarray:
        """Return the brightness at these distances."""
        return np.interp(distance_px, self.radius_px, self.value, right=0.0)


def blurred_sun(radius_px: float, spread: PointSpread, wavelength_nm: float = 550.0) -> RadialProfile:
    """Return the solar disc (1 in the middle) seen through a point spread and averaged over square pixels.

    The blur of a round disc by a round Gaussian is a one-dimensional integral with the Bessel function I0; a pixel
    adds its variance of 1/12 px^2 to each Gaussian, exact to second order.
    """
    from scipy.special import i0e

    sigmas = np.sqrt(spread.sigma_px**2 + 1.0 / 12.0)
    reach = spread.reach_px + 2.0
    inner = np.linspace(0.0, max(radius_px - 4 * reach, 0.0), 200)
    limb = np.linspace(max(radius_px - 4 * reach, 0.0), radius_px + reach, 2400)[1:]
    radius = np.concatenate([inner, limb])
    node, node_weight = np.polynomial.legendre.leggauss(96)
    total = np.zeros_like(radius)
    for weight, sigma in zip(spread.weight, sigmas, strict=True):
        low = np.maximum(radius - 7 * sigma, 0.0)
        high = np.minimum(radius + 7 * sigma, radius_px)
        inside = high > low
        # r' = high - t^2 removes the square root at the limb
        top = np.sqrt(np.maximum(high - low, 0.0))[:, None]
        t = 0.5 * top * (node + 1)
        source = high[:, None] - t**2
        mu = np.sqrt(np.clip(1 - (source / radius_px) ** 2, 0, 1))
        kernel = (
            np.exp(-((radius[:, None] - source) ** 2) / (2 * sigma**2))
            * i0e(radius[:, None] * source / sigma**2)
            * source
            / sigma**2
        )
        integral = np.sum(
            0.5 * top * node_weight * kernel * limb_darkening(mu, wavelength_nm) * 2 * t, axis=1
        )
        total += weight * np.where(inside, integral, 0.0)
    return RadialProfile(radius, total)


def sphere_brightness(
    body: str, toward_limb: np.ndarray, across: np.ndarray, phase_angle_deg: float
) -> np.ndarray:
    """Return the brightness over a sphere lit from one side, in no fixed unit; 0 off the disc.

    `toward_limb`, `across`: offsets from the centre in radii, the first toward the middle of the lit limb.
    """
    toward_observer = np.sqrt(np.clip(1 - toward_limb**2 - across**2, 0, 1))
    angle = np.radians(phase_angle_deg)
    cos_in = np.sin(angle) * toward_limb + np.cos(angle) * toward_observer
    bright = surface_law(disc_law(body), cos_in, toward_observer)
    return np.where(toward_limb**2 + across**2 < 1, bright, 0.0)


def mean_sphere_brightness(body: str, phase_angle_deg: float) -> float:
    """Return the mean over the whole disc (dark part included) of `sphere_brightness`."""
    edge = np.linspace(-1, 1, 601)
    middle = 0.5 * (edge[1:] + edge[:-1])
    x, y = np.meshgrid(middle, middle)
    inside = x**2 + y**2 < 1
    return float(np.sum(sphere_brightness(body, x, y, phase_angle_deg)) / inside.sum())
