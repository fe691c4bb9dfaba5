"""Discs drawn for tests: a Sun with limb darkening and blur, with what spoils it put on top."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from scipy.ndimage import gaussian_filter, map_coordinates

from imaging.frames.render_light import PointSpread, blurred_sun, limb_darkening


@dataclass(frozen=True)
class Disc:
    """A disc and its surroundings, in electrons; `sigma_px` of a Gaussian blur."""

    x: float = 230.3
    y: float = 219.6
    radius: float = 160.0
    sigma_px: float = 1.2
    peak: float = 20000.0
    sky: float = 200.0
    shape: tuple[int, int] = (440, 460)

    @property
    def spread(self) -> PointSpread:
        return PointSpread(np.array([1.0]), np.array([self.sigma_px]))

    @cache  # noqa: B019 - a few discs in a run of tests
    def profile(self):
        return blurred_sun(self.radius, self.spread)

    def expected(self, motion: tuple[np.ndarray, np.ndarray] | None = None) -> np.ndarray:
        """Return expected electrons; `motion` displaces each pixel's point (dx, dy)."""
        y, x = np.mgrid[: self.shape[0], : self.shape[1]].astype(float)
        if motion is not None:
            x, y = x + motion[0], y + motion[1]
        return self.peak * self.profile().at(np.hypot(x - self.x, y - self.y)) + self.sky

    def bound_px(self) -> float:
        """Return the Cramér-Rao bound of the centre, one coordinate, with Poisson noise."""
        image = self.expected()
        step = 0.05
        moved = Disc(self.x + step, self.y, self.radius, self.sigma_px, self.peak, self.sky, self.shape)
        slope = (moved.expected() - image) / step
        return float(1 / np.sqrt(np.sum(slope**2 / image)))


def recorded(expected: np.ndarray, generator: np.random.Generator) -> np.ndarray:
    """Return photon counts."""
    return generator.poisson(expected).astype(np.float32)


def limb_motion(shape, rms_px, length_px, generator):
    """Return displacements (dx, dy) with correlation exp(-(d/length)^2)."""
    fields = []
    for _ in range(2):
        field = gaussian_filter(generator.standard_normal(shape), length_px / 2, mode="wrap")
        fields.append(field / field.std() * rms_px)
    return tuple(fields)


def clouds(shape, generator, depth=0.5, length_px=60.0):
    """Return a transparency between 1 - depth and 1 that changes over `length_px`, and a gradient of a third."""
    field = gaussian_filter(generator.standard_normal(shape), length_px, mode="wrap")
    field = (field - field.min()) / np.ptp(field)
    ramp = np.linspace(0.75, 1.0, shape[1])[None, :]
    return (1 - depth * field) * ramp


def with_spots(image: np.ndarray, disc: Disc, generator, count=12) -> np.ndarray:
    """Return the disc with dark spots, some of them close to the limb."""
    y, x = np.mgrid[: image.shape[0], : image.shape[1]]
    out = image.copy()
    for _ in range(count):
        angle, place = generator.uniform(0, 2 * np.pi), disc.radius * generator.uniform(0.5, 0.99)
        size = generator.uniform(1.5, 6.0)
        away = np.hypot(x - disc.x - place * np.cos(angle), y - disc.y - place * np.sin(angle))
        out -= (out - disc.sky) * 0.7 * np.exp(-((away / size) ** 2))
    return out


def sun_with_planet(disc: Disc, x: float, y: float, radius: float, finer: int = 10) -> np.ndarray:
    """Return the Sun with a black disc in front, drawn on sub-pixels about the planet (a way of its own)."""
    image = disc.expected()
    half = int(np.ceil(radius + 6 * disc.sigma_px)) + 2
    x0, y0 = round(x) - half, round(y) - half
    line = (np.arange((2 * half + 1) * finer) + 0.5) / finer - 0.5
    fx, fy = np.meshgrid(x0 + line, y0 + line)
    r2 = ((fx - disc.x) ** 2 + (fy - disc.y) ** 2) / disc.radius**2
    light = np.where(r2 < 1, limb_darkening(np.sqrt(np.clip(1 - r2, 0, 1))), 0.0) * disc.peak
    hidden = np.where((fx - x) ** 2 + (fy - y) ** 2 < radius**2, light, 0.0)
    blurred = gaussian_filter(hidden, disc.sigma_px * finer, mode="constant")
    small = blurred.reshape(2 * half + 1, finer, 2 * half + 1, finer).mean(axis=(1, 3))
    image[y0 : y0 + 2 * half + 1, x0 : x0 + 2 * half + 1] -= small
    return image


def shifted(image: np.ndarray, dx: np.ndarray, dy: np.ndarray) -> np.ndarray:
    """Return the image with every point displaced."""
    y, x = np.mgrid[: image.shape[0], : image.shape[1]]
    return map_coordinates(image, [y + dy, x + dx], order=3, mode="nearest")
