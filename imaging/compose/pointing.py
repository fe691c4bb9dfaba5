"""How one frame lies on the sky: from its plate solution, or from the limb of the Sun or Moon in it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

import numpy as np

from imaging.compose.plane import sky_to_plane

if TYPE_CHECKING:
    from astropy.wcs import WCS


class Pointing(Protocol):
    """What the warp needs to know of a frame."""

    scale_arcsec_px: float

    def sky_to_pixel(self, ra_deg: np.ndarray, dec_deg: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return 0-based array pixels (x_px, y_px) of ICRS directions; NaN where they do not project."""
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


@dataclass(frozen=True)
class DiscPointing:
    """A frame registered on the limb of a disc, whose place on the sky (`ra_deg`, `dec_deg`) is the predicted one.

    `rotation_deg` is the position angle of the array's +y direction, `parity` +1 when +x lies 90 degrees west of it.
    """

    x_px: float
    y_px: float
    scale_arcsec_px: float
    rotation_deg: float
    parity: int
    ra_deg: float
    dec_deg: float

    def sky_to_pixel(self, ra_deg: np.ndarray, dec_deg: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return 0-based array pixels of ICRS directions; the field is taken as undistorted about the disc."""
        east, north = sky_to_plane(self.ra_deg, self.dec_deg, ra_deg, dec_deg)
        sin, cos = np.sin(np.radians(self.rotation_deg)), np.cos(np.radians(self.rotation_deg))
        along_y = (east * sin + north * cos) / self.scale_arcsec_px
        along_x = self.parity * (north * sin - east * cos) / self.scale_arcsec_px
        return self.x_px + along_x, self.y_px + along_y
