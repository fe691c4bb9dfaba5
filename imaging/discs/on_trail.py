"""A planet in a frame whose camera did not follow the sky: its place is the middle of its trail."""

from __future__ import annotations

import numpy as np

from imaging.discs.among_stars import MODEL_FLOOR_PX
from imaging.discs.edge import FWHM_OVER_SIGMA, Blur
from imaging.discs.lit import Body
from imaging.discs.stamp import DiscPlace
from imaging.stars.detection import Detections
from planner.errors import NoSolutionError

WIDEST_RADII = 1.0  # of the stars' width: a disc larger than that has no trail of their profile


def planet_on_trail(
    found: Detections, x_px: float, y_px: float, body: Body | None = None, search_px: float = 12.0
) -> DiscPlace:
    """Place a planet at mid-exposure: the brightest trail whose middle lies within `search_px` of where it is expected.

    The centre of figure follows from the phase. The covariance is that of the trail's fit, long along the trail.
    Raises NoSolutionError when there is no trail, or the disc is larger than the stars are wide.
    """
    body = body or Body()
    if body.radius_px > WIDEST_RADII * found.psf_fwhm_px:
        raise NoSolutionError(
            f"the frame is trailed by {np.median(found.trail_length_px):.0f} px, and a disc of {body.radius_px:.1f} px "
            "radius has no place in it"
        )
    away = np.hypot(found.x_px - x_px, found.y_px - y_px)
    near = np.flatnonzero(away <= search_px)
    if not near.size:
        raise NoSolutionError(f"no trail within {search_px:.0f} px of where the planet is expected")
    one = int(near[np.argmax(found.flux_adu[near])])
    light_x, light_y = float(found.x_px[one]), float(found.y_px[one])
    dx, dy = body.light_offset_px()
    xy = float(found.covariance_xy_px2[one])
    covariance = np.array([[float(found.sigma_x_px[one]) ** 2, xy], [xy, float(found.sigma_y_px[one]) ** 2]])
    notes = [f"the middle of a trail of {found.trail_length_px[one]:.1f} px"]
    if found.saturated[one]:
        notes.append("saturated pixels left out")
    return DiscPlace(
        x_px=light_x - dx,
        y_px=light_y - dy,
        covariance=covariance + MODEL_FLOOR_PX**2 * np.eye(2),
        radius_px=body.radius_px,
        radius_sigma_px=float("nan"),
        blur=Blur(found.psf_fwhm_px / FWHM_OVER_SIGMA),
        light_x_px=light_x,
        light_y_px=light_y,
        contrast=float(found.snr[one]),
        chi2=1.0,
        method="trail",
        notes=tuple(notes),
    )
