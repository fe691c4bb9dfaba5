"""Short exposures through moving air: a smooth random displacement of every point of the picture."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.frames.render_pointing import Pointing


def image_motion_arcsec(
    seeing_arcsec: float, aperture_mm: float, exposure_s: float, wavelength_nm: float = 550.0
) -> float:
    """Return the rms motion (one axis) of a point that an exposure freezes.

    Sarazin & Roddier 1990, A&A 227, 294, eq. 13 for one aperture: 0.179 wavelength^2 r0^(-5/3) D^(-1/3), with
    r0 = 0.98 wavelength / seeing; longer exposures average independent moments of 0.03 s (assumed).
    """
    wavelength = wavelength_nm * 1e-9
    seeing = np.radians(seeing_arcsec / 3600)
    fried = 0.98 * wavelength / seeing
    variance = 0.179 * wavelength**2 * fried ** (-5 / 3) * (aperture_mm * 1e-3) ** (-1 / 3)
    averaged = max(1.0, exposure_s / 0.03)
    return float(np.degrees(np.sqrt(variance / averaged)) * 3600)


@dataclass(frozen=True)
class LimbMotion:
    """A field of displacements over a frame: `dx_px`, `dy_px` on a coarse grid of `step_px` pixels."""

    dx_px: np.ndarray
    dy_px: np.ndarray
    step_px: float

    @classmethod
    def random(
        cls,
        pointing: Pointing,
        rms_arcsec: float,
        correlation_arcsec: float,
        generator: np.random.Generator,
        margin_px: int = 64,
    ) -> LimbMotion:
        """Draw a field whose correlation falls to 1/e at `correlation_arcsec` (a Gaussian law)."""
        from scipy.ndimage import gaussian_filter

        length = max(correlation_arcsec / pointing.scale_arcsec_px, 2.0)
        step = length / 4
        rows = int((pointing.height_px + 2 * margin_px) / step) + 4
        columns = int((pointing.width_px + 2 * margin_px) / step) + 4
        sigma = length / 2 / step
        fields = []
        for _ in range(2):
            field = gaussian_filter(generator.standard_normal((rows, columns)), sigma, mode="wrap")
            # white noise through a Gaussian keeps 1 / (4 pi sigma^2) of its variance
            field *= 2 * np.sqrt(np.pi) * sigma * rms_arcsec / pointing.scale_arcsec_px
            fields.append(field)
        return cls(fields[0], fields[1], step)

    def at(self, x_px: np.ndarray, y_px: np.ndarray, margin_px: int = 64) -> tuple[np.ndarray, np.ndarray]:
        """Return displacements on the grid of columns `x_px` and rows `y_px`; beyond the margin the edge is held."""
        from scipy.interpolate import RectBivariateSpline

        out = []
        for field in (self.dx_px, self.dy_px):
            rows = np.arange(field.shape[0]) * self.step_px - margin_px
            columns = np.arange(field.shape[1]) * self.step_px - margin_px
            spline = RectBivariateSpline(rows, columns, field, kx=3, ky=3)
            out.append(spline(np.clip(y_px, rows[0], rows[-1]), np.clip(x_px, columns[0], columns[-1])))
        return out[0], out[1]

    def shift_points(
        self, pointing: Pointing, x_px: np.ndarray, y_px: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return the displacement in arcsec (east, north) on a grid of pixels."""
        dx, dy = self.at(x_px, y_px)
        right, up = pointing.pixel_steps()
        unit = pointing.scale_arcsec_px
        return unit * (dx * right[0] + dy * up[0]), unit * (dx * right[1] + dy * up[1])

    def shift_grid(
        self, east: np.ndarray, north: np.ndarray, pointing: Pointing, x_low: int, y_low: int
    ) -> None:
        """Displace offsets (arcsec) given on whole pixels from (x_low, y_low), in place."""
        rows, columns = east.shape
        de, dn = self.shift_points(pointing, x_low + np.arange(columns), y_low + np.arange(rows))
        east += de
        north += dn
