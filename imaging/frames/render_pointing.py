"""Where the sky falls on the sensor: gnomonic projection about the axis, through the refracting air."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

ARCSEC = np.pi / 648000.0


def unit_vector(ra_deg: np.ndarray | float, dec_deg: np.ndarray | float) -> np.ndarray:
    """Return unit vectors, shape (3, ...)."""
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    return np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])


def ra_dec_deg(vector: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return (ra_deg, dec_deg) of vectors of any length."""
    ra = np.degrees(np.arctan2(vector[1], vector[0])) % 360.0
    return ra, np.degrees(np.arctan2(vector[2], np.hypot(vector[0], vector[1])))


def east_north(vector: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the unit vectors to the east and to the north at a direction."""
    east = np.array([-vector[1], vector[0], 0.0])
    east /= np.linalg.norm(east)
    return east, np.cross(vector, east)


def moved(ra_deg: float, dec_deg: float, distance_arcsec: float, position_angle_deg: float) -> np.ndarray:
    """Return the unit vector at a distance along a position angle."""
    start = unit_vector(ra_deg, dec_deg)
    east, north = east_north(start)
    angle = np.radians(position_angle_deg)
    arc = distance_arcsec * ARCSEC
    return np.cos(arc) * start + np.sin(arc) * (np.sin(angle) * east + np.cos(angle) * north)


@dataclass(frozen=True)
class Air:
    """The refracting air: the zenith, and refraction (arcsec) as a function of true altitude (degrees)."""

    zenith: np.ndarray
    refraction_arcsec: Callable[[np.ndarray], np.ndarray]

    def refracted(self, vector: np.ndarray) -> np.ndarray:
        """Return directions lifted toward the zenith; vectors of shape (3, ...), of unit length."""
        cos_z = np.tensordot(self.zenith, vector, axes=(0, 0))
        altitude = np.degrees(np.arcsin(np.clip(cos_z, -1, 1)))
        lift = self.refraction_arcsec(np.maximum(altitude, -1.0)) * ARCSEC
        zenith = self.zenith.reshape((3,) + (1,) * (vector.ndim - 1))
        along = zenith - cos_z * vector
        along /= np.maximum(np.sqrt(np.sum(along**2, axis=0)), 1e-12)
        return np.cos(lift) * vector + np.sin(lift) * along

    def unrefracted(self, vector: np.ndarray) -> np.ndarray:
        """Return where light that arrives from here came from; inverts `refracted` to a microarcsecond."""
        guess = vector
        for _ in range(5):
            guess = guess + (vector - self.refracted(guess))
            guess = guess / np.sqrt(np.sum(guess**2, axis=0))
        return guess


@dataclass(frozen=True)
class Pointing:
    """A camera on the sky: optical axis (a unit vector after refraction), roll, parity, scale and size.

    `rotation_deg`, `parity` as in the conventions of DEVELOPERS.md. The axis meets the middle of the sensor.
    """

    axis: np.ndarray
    rotation_deg: float
    parity: int
    scale_arcsec_px: float
    width_px: int
    height_px: int
    air: Air | None = None

    @property
    def middle_px(self) -> tuple[float, float]:
        """The pixel on the optical axis."""
        return (self.width_px - 1) / 2, (self.height_px - 1) / 2

    def pixel_steps(self) -> tuple[tuple[float, float], tuple[float, float]]:
        """Return (east, north) of one step to the right (+x) and one up (+y), in pixels."""
        up = np.radians(self.rotation_deg)
        right = np.radians(self.rotation_deg - 90.0)
        return (
            (self.parity * float(np.sin(right)), self.parity * float(np.cos(right))),
            (float(np.sin(up)), float(np.cos(up))),
        )

    def _axes(self) -> tuple[np.ndarray, np.ndarray]:
        east, north = east_north(self.axis)
        right, up = self.pixel_steps()
        return right[0] * east + right[1] * north, up[0] * east + up[1] * north

    def project(self, vector: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return 0-based pixels of true directions (3, ...); NaN behind the camera."""
        if self.air is not None:
            vector = self.air.refracted(vector)
        x_axis, y_axis = self._axes()
        depth = np.tensordot(self.axis, vector, axes=(0, 0))
        depth = np.where(depth > 0.05, depth, np.nan)
        unit = self.scale_arcsec_px * ARCSEC
        x0, y0 = self.middle_px
        x = x0 + np.tensordot(x_axis, vector, axes=(0, 0)) / depth / unit
        y = y0 + np.tensordot(y_axis, vector, axes=(0, 0)) / depth / unit
        return x, y

    def unproject(self, x_px: np.ndarray, y_px: np.ndarray) -> np.ndarray:
        """Return the true directions (3, ...) of pixels."""
        x_axis, y_axis = self._axes()
        x0, y0 = self.middle_px
        unit = self.scale_arcsec_px * ARCSEC
        x = (np.asarray(x_px, float) - x0) * unit
        y = (np.asarray(y_px, float) - y0) * unit
        grow = (3,) + (1,) * x.ndim
        vector = self.axis.reshape(grow) + x * x_axis.reshape(grow) + y * y_axis.reshape(grow)
        vector /= np.sqrt(np.sum(vector**2, axis=0))
        return vector if self.air is None else self.air.unrefracted(vector)

    def measured_at_middle(self) -> tuple[float, float, float, float]:
        """Return (ra_deg, dec_deg, rotation_deg, scale_arcsec_px) of the true sky in the middle of the frame.

        By differences over 20 pixels of this projection, so that refraction is in them.
        """
        x0, y0 = self.middle_px
        middle = self.unproject(np.array(x0), np.array(y0))
        east, north = east_north(middle)
        up = self.unproject(np.array(x0), np.array(y0 + 10)) - self.unproject(np.array(x0), np.array(y0 - 10))
        right = self.unproject(np.array(x0 + 10), np.array(y0)) - self.unproject(
            np.array(x0 - 10), np.array(y0)
        )
        up_angle = np.arctan2(up @ east, up @ north)
        right_angle = np.arctan2(right @ east, right @ north) + self.parity * np.pi / 2
        both = np.angle(np.exp(1j * up_angle) + np.exp(1j * right_angle))
        area = abs((up @ east) * (right @ north) - (up @ north) * (right @ east))
        ra, dec = ra_dec_deg(middle)
        return float(ra), float(dec), float(np.degrees(both)), float(np.sqrt(area) / 20 / ARCSEC)


@dataclass(frozen=True)
class PlaneMap:
    """Pixels to offsets (east, north, arcsec, gnomonic) about a direction, as polynomials over a box of pixels.

    The exact map is sampled at 7 x 7 Chebyshev nodes and fitted to degree 5: within 1 mas over the Sun's disc down to
    5 degrees' altitude.
    """

    x0_px: float
    y0_px: float
    half_px: float
    east: np.ndarray
    north: np.ndarray

    @classmethod
    def about(
        cls, pointing: Pointing, center: np.ndarray, box: tuple[float, float, float, float]
    ) -> PlaneMap:
        """Fit the map over `box` = (x_low, x_high, y_low, y_high) for offsets about the unit vector `center`."""
        x_low, x_high, y_low, y_high = box
        x0, y0 = (x_low + x_high) / 2, (y_low + y_high) / 2
        half = max(x_high - x_low, y_high - y_low, 2.0) / 2
        nodes = np.cos(np.pi * (np.arange(7) + 0.5) / 7)
        u, v = np.meshgrid(nodes, nodes)
        vector = pointing.unproject(x0 + half * u, y0 + half * v)
        east, north = east_north(center)
        depth = np.tensordot(center, vector, axes=(0, 0))
        basis = np.linalg.pinv(np.polynomial.chebyshev.chebvander2d(u.ravel(), v.ravel(), [5, 5]))
        fitted = [
            (basis @ (np.tensordot(axis, vector, axes=(0, 0)) / depth / ARCSEC).ravel()).reshape(6, 6)
            for axis in (east, north)
        ]
        return cls(x0, y0, half, fitted[0], fitted[1])

    def grid(self, x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return offsets (east, north) on the grid of columns `x_px` (n,) and rows `y_px` (m,): arrays (m, n)."""
        vander = np.polynomial.chebyshev.chebvander
        u = vander((np.asarray(x_px, float) - self.x0_px) / self.half_px, 5)
        v = vander((np.asarray(y_px, float) - self.y0_px) / self.half_px, 5)
        return v @ self.east.T @ u.T, v @ self.north.T @ u.T

    def points(self, x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return offsets (east, north) of single pixels."""
        u = (np.asarray(x_px, float) - self.x0_px) / self.half_px
        v = (np.asarray(y_px, float) - self.y0_px) / self.half_px
        value = np.polynomial.chebyshev.chebval2d
        return value(u, v, self.east), value(u, v, self.north)
