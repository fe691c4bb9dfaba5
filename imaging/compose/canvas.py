"""The picture's own pixel grid: undistorted, right side up, at one scale.

Row 0 is the bottom of the picture (as in FITS), north is up where `up_pa_deg` is 0, and east is to the left.
The canvas is a tangent plane about an anchor on the sky; the anchor may move from frame to frame (a picture
registered on the Sun is anchored on the Sun), the plane does not.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from imaging.compose.plane import Values, sky_to_plane
from planner.errors import InputError

LARGEST_PX = 20000


@dataclass(frozen=True)
class Canvas:
    """A grid of `width_px` by `height_px` pixels; the anchor lies at pixel (`anchor_x_px`, `anchor_y_px`).

    `up_pa_deg` is the position angle (ICRS north through east) of the picture's up direction.
    """

    width_px: int
    height_px: int
    scale_arcsec_px: float
    anchor_x_px: float
    anchor_y_px: float
    up_pa_deg: float = 0.0

    def to_plane(self, x_px: Values, y_px: Values) -> tuple[np.ndarray, np.ndarray]:
        """Return offsets (east_arcsec, north_arcsec) from the anchor of canvas pixels."""
        right = (np.asarray(x_px) - self.anchor_x_px) * self.scale_arcsec_px
        up = (np.asarray(y_px) - self.anchor_y_px) * self.scale_arcsec_px
        sin, cos = np.sin(np.radians(self.up_pa_deg)), np.cos(np.radians(self.up_pa_deg))
        return up * sin - right * cos, up * cos + right * sin

    def from_plane(self, east_arcsec: Values, north_arcsec: Values) -> tuple[np.ndarray, np.ndarray]:
        """Return canvas pixels (x_px, y_px) of offsets from the anchor."""
        sin, cos = np.sin(np.radians(self.up_pa_deg)), np.cos(np.radians(self.up_pa_deg))
        east, north = np.asarray(east_arcsec), np.asarray(north_arcsec)
        up, right = east * sin + north * cos, north * sin - east * cos
        return (
            self.anchor_x_px + right / self.scale_arcsec_px,
            self.anchor_y_px + up / self.scale_arcsec_px,
        )

    def from_sky(
        self, anchor_ra_deg: float, anchor_dec_deg: float, ra_deg: Values, dec_deg: Values
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return canvas pixels of ICRS directions when the anchor is there."""
        return self.from_plane(*sky_to_plane(anchor_ra_deg, anchor_dec_deg, ra_deg, dec_deg))

    def window(self, rows: slice, columns: slice) -> Canvas:
        """Return the part of the canvas in these rows and columns."""
        return replace(
            self,
            width_px=columns.stop - columns.start,
            height_px=rows.stop - rows.start,
            anchor_x_px=self.anchor_x_px - columns.start,
            anchor_y_px=self.anchor_y_px - rows.start,
        )

    def at_scale(self, scale_arcsec_px: float) -> Canvas:
        """Return the same piece of sky at another scale."""
        factor = self.scale_arcsec_px / scale_arcsec_px
        return replace(
            self,
            width_px=max(1, round(self.width_px * factor)),
            height_px=max(1, round(self.height_px * factor)),
            scale_arcsec_px=scale_arcsec_px,
            anchor_x_px=(self.anchor_x_px + 0.5) * factor - 0.5,
            anchor_y_px=(self.anchor_y_px + 0.5) * factor - 0.5,
        )

    def wcs_header(self, anchor_ra_deg: float, anchor_dec_deg: float):
        """Return a FITS header with the TAN WCS of the canvas (FITS WCS papers I and II), ICRS."""
        from astropy.wcs import WCS

        wcs = WCS(naxis=2)
        wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
        wcs.wcs.radesys = "ICRS"
        wcs.wcs.crval = [anchor_ra_deg, anchor_dec_deg]
        wcs.wcs.crpix = [self.anchor_x_px + 1, self.anchor_y_px + 1]
        sin, cos = np.sin(np.radians(self.up_pa_deg)), np.cos(np.radians(self.up_pa_deg))
        wcs.wcs.cd = np.array([[-cos, sin], [sin, cos]]) * self.scale_arcsec_px / 3600
        wcs.wcs.cunit = ["deg", "deg"]
        return wcs.to_header()


def canvas_around(
    east_arcsec: np.ndarray,
    north_arcsec: np.ndarray,
    margin_arcsec: float,
    scale_arcsec_px: float,
    up_pa_deg: float = 0.0,
    largest_px: int = LARGEST_PX,
) -> Canvas:
    """Return the canvas that holds these offsets from its anchor with a margin.

    Raises InputError when it would be larger than `largest_px` on a side.
    """
    unit = Canvas(1, 1, scale_arcsec_px, 0.0, 0.0, up_pa_deg)
    x_px, y_px = unit.from_plane(np.asarray(east_arcsec, float), np.asarray(north_arcsec, float))
    margin = margin_arcsec / scale_arcsec_px
    left, right = np.nanmin(x_px) - margin, np.nanmax(x_px) + margin
    bottom, top = np.nanmin(y_px) - margin, np.nanmax(y_px) + margin
    width, height = int(np.ceil(right - left)) + 1, int(np.ceil(top - bottom)) + 1
    if max(width, height) > largest_px:
        raise InputError(
            f"the picture would be {width} x {height} pixels at {scale_arcsec_px:.3g} arcsec/px; "
            f"allowed are {largest_px} on a side: choose a larger --scale"
        )
    return Canvas(width, height, scale_arcsec_px, -left, -bottom, up_pa_deg)
