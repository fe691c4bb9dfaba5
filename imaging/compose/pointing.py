"""How one frame lies on the sky: from its plate solution, or from the limb of the Sun or Moon in it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

import numpy as np

from imaging.compose.plane import ARCSEC_PER_RADIAN, Values, plane_to_sky, sky_to_plane

if TYPE_CHECKING:
    from astropy.wcs import WCS

    from planner.sky.observer import Observer


class Pointing(Protocol):
    """What the warp needs to know of a frame."""

    @property
    def scale_arcsec_px(self) -> float:
        """Scale in the middle of the field."""
        ...

    def sky_to_pixel(self, ra_deg: np.ndarray, dec_deg: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return 0-based array pixels (x_px, y_px) of ICRS directions; NaN where they do not project."""
        ...

    def pixel_to_sky(self, x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return ICRS directions (ra_deg, dec_deg) of array pixels, good enough to tell what a frame covers."""
        ...


@dataclass(frozen=True)
class StarPointing:
    """A frame registered on stars: its WCS with distortion, as the plate solution left it."""

    wcs: WCS
    scale_arcsec_px: float

    def sky_to_pixel(self, ra_deg: np.ndarray, dec_deg: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return 0-based array pixels of ICRS directions; distortion included."""
        x_px, y_px = self.wcs.all_world2pix(ra_deg, dec_deg, 0, quiet=True)
        return np.asarray(x_px), np.asarray(y_px)

    def pixel_to_sky(self, x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return ICRS directions of array pixels."""
        ra_deg, dec_deg = self.wcs.all_pix2world(x_px, y_px, 0)
        return np.asarray(ra_deg), np.asarray(dec_deg)


@dataclass(frozen=True)
class ShiftedPointing:
    """A frame that borrows the pointing of another, off it by so many pixels."""

    base: Pointing
    dx_px: float
    dy_px: float

    @property
    def scale_arcsec_px(self) -> float:
        """Scale in the middle of the field."""
        return self.base.scale_arcsec_px

    def sky_to_pixel(self, ra_deg: np.ndarray, dec_deg: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return 0-based array pixels of ICRS directions."""
        x_px, y_px = self.base.sky_to_pixel(ra_deg, dec_deg)
        return x_px + self.dx_px, y_px + self.dy_px

    def pixel_to_sky(self, x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return ICRS directions of array pixels."""
        return self.base.pixel_to_sky(np.asarray(x_px) - self.dx_px, np.asarray(y_px) - self.dy_px)


@dataclass(frozen=True)
class Air:
    """The refracting air over a frame: lifts directions toward the zenith (unit vector, ICRS axes)."""

    zenith: tuple[float, float, float]
    observer: Observer

    def lifted(self, direction: np.ndarray) -> np.ndarray:
        """Return unit vectors (..., 3) as seen; what lies more than 3 degrees below the horizon stays."""
        from planner.sky.refraction import refraction_arcsec

        zenith = np.asarray(self.zenith)
        height = direction @ zenith
        altitude_deg = np.degrees(np.arcsin(np.clip(height, -1.0, 1.0)))
        lift = (refraction_arcsec(altitude_deg, self.observer) / ARCSEC_PER_RADIAN)[..., None]
        along = zenith - height[..., None] * direction
        along /= np.maximum(np.linalg.norm(along, axis=-1, keepdims=True), 1e-12)
        return np.cos(lift) * direction + np.sin(lift) * along


def _unit(ra_deg: Values, dec_deg: Values) -> np.ndarray:
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    return np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=-1)


def _radec(vector: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    return np.degrees(np.arctan2(vector[..., 1], vector[..., 0])), np.degrees(
        np.arcsin(np.clip(vector[..., 2], -1, 1))
    )


@dataclass(frozen=True)
class DiscPointing:
    """A frame registered on the limb of a disc, whose place on the sky (`ra_deg`, `dec_deg`) is the predicted one.

    `x_px`, `y_px`: where the refracted centre of the disc was found. `rotation_deg`: position angle of the array's +y
    direction; `parity`: +1 when +x lies 90 degrees west of it, -1 when east.
    """

    x_px: float
    y_px: float
    scale_arcsec_px: float
    rotation_deg: float
    parity: int
    ra_deg: float
    dec_deg: float
    air: Air | None = None

    def sky_to_pixel(self, ra_deg: np.ndarray, dec_deg: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return 0-based array pixels of ICRS directions, refracted; the field is taken as undistorted."""
        center = self.ra_deg, self.dec_deg
        if self.air is not None:
            lifted_ra, lifted_dec = _radec(self.air.lifted(_unit(*center)))
            center = float(lifted_ra), float(lifted_dec)
            ra_deg, dec_deg = _radec(self.air.lifted(_unit(ra_deg, dec_deg)))
        east, north = sky_to_plane(*center, ra_deg, dec_deg)
        sin, cos = np.sin(np.radians(self.rotation_deg)), np.cos(np.radians(self.rotation_deg))
        along_y = (east * sin + north * cos) / self.scale_arcsec_px
        along_x = self.parity * (north * sin - east * cos) / self.scale_arcsec_px
        return self.x_px + along_x, self.y_px + along_y

    def pixel_to_sky(self, x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return ICRS directions of array pixels without refraction: up to 0.1 % of the field off near the horizon."""
        along_x = self.parity * (np.asarray(x_px) - self.x_px) * self.scale_arcsec_px
        along_y = (np.asarray(y_px) - self.y_px) * self.scale_arcsec_px
        sin, cos = np.sin(np.radians(self.rotation_deg)), np.cos(np.radians(self.rotation_deg))
        return plane_to_sky(
            self.ra_deg, self.dec_deg, along_y * sin - along_x * cos, along_y * cos + along_x * sin
        )
