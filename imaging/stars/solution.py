"""What a plate solution is: where a frame points, how well, and how likely it is to be chance."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from astropy.wcs import WCS

    from imaging.stars.air import Air
    from imaging.stars.camera import CameraFit, Lens
    from imaging.stars.memory import Memory


@dataclass(frozen=True)
class MatchedStars:
    """Pairs of detections and catalogue stars; every array has shape (n,); `index` counts rows of the star list."""

    x_px: np.ndarray
    y_px: np.ndarray
    ra_deg: np.ndarray
    dec_deg: np.ndarray
    magnitude: np.ndarray
    residual_x_px: np.ndarray
    residual_y_px: np.ndarray
    index: np.ndarray

    @property
    def name(self) -> tuple[str, ...]:
        """Names of the stars, made when asked for: `HIP 21421`, `Gaia DR3 ...`, or `learned` from earlier frames."""
        from planner.sky.stars import star_names

        names = iter(star_names(self.index[self.index >= 0]))
        return tuple(next(names) if row >= 0 else "learned" for row in self.index)


@dataclass(frozen=True)
class PlateSolution:
    """The pointing of one frame.

    `wcs`: ICRS, valid for 0-based array pixels, with SIP and its inverse where the stars support it.
    `position_angle_deg`: of the frame's up direction as it is looked at, from ICRS north through east.
    `mirrored`: True when, looked at with north up, east is to the right.
    `how`: `hinted`, `blind`, `previous` or `sparse`. `rms_px`: of the residuals (both axes together).
    `sigma_model_px`: scatter of the residuals beyond the stated errors of stars and centroids (one axis).
    `fit`: the camera with the covariance of its parameters; `fit_lens`: what was held of the lens.
    `memory`: what this frame and those before it show beyond the catalogue. `air`: when given,
    the camera was fitted to the stars as this air lifts them; all that is told here is without air.
    """

    wcs: WCS
    width_px: int
    height_px: int
    center_ra_deg: float
    center_dec_deg: float
    scale_arcsec_px: float
    position_angle_deg: float
    mirrored: bool
    matched: MatchedStars
    rms_px: float
    false_alarm_log10: float
    how: str
    sigma_model_px: float
    covariance_at_center_px2: np.ndarray
    fit: CameraFit | None = None
    fit_lens: Lens | None = None
    air: Air | None = None
    memory: Memory | None = None

    def pixel_to_sky(self, x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return ICRS (ra_deg, dec_deg) of 0-based array pixels."""
        if self.air is not None and self.fit is not None:
            x, y, z = np.moveaxis(self.air.unlifted(self.fit.camera.vectors(x_px, y_px)), -1, 0)
            return np.degrees(np.arctan2(y, x)) % 360.0, np.degrees(np.arctan2(z, np.hypot(x, y)))
        ra_deg, dec_deg = self.wcs.all_pix2world(x_px, y_px, 0)
        return np.asarray(ra_deg), np.asarray(dec_deg)

    def sky_to_pixel(self, ra_deg: np.ndarray, dec_deg: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return 0-based array pixels (x_px, y_px) of ICRS directions; NaN where they do not project."""
        if self.air is not None and self.fit is not None:
            from imaging.stars.catalogue import vectors_of

            return self.fit.camera.pixels(self.air.lifted(vectors_of(ra_deg, dec_deg)))
        x_px, y_px = self.wcs.all_world2pix(ra_deg, dec_deg, 0, quiet=True)
        return np.asarray(x_px), np.asarray(y_px)

    def covariance_px2(self, x_px: float, y_px: float) -> np.ndarray:
        """Return the (2, 2) covariance in px^2 of where the solution puts a direction at this place of the frame."""
        if self.fit is None:
            return self.covariance_at_center_px2
        return self.fit.covariance_at(np.array([float(x_px)]), np.array([float(y_px)]))[0]

    def sigma_px_at(self, x_px: float, y_px: float) -> float:
        """Return the 1-sigma, of one axis, in pixels, of the solution at this place of the frame."""
        return float(np.sqrt(np.trace(self.covariance_px2(x_px, y_px)) / 2))
