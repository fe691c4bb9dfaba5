"""A frame of stars measured: solved against the catalogue, then the target looked for where it is predicted."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from imaging.discs.outline import pixel_angle_deg
from imaging.discs.planet import Body, DiscPlace, planet_among_stars
from imaging.frames.frame import Frame
from imaging.stars.detection import Detections
from imaging.stars.solution import PlateSolution
from imaging.stars.solve import detect_frame, solve_frame
from imaging.track.measurement import Measurement, StarReference
from imaging.track.nominal import NEAR_ARCSEC, body_of
from imaging.track.path import tangent_offsets, target_place, unit_vectors
from planner.errors import NoSolutionError
from planner.events.family import Geometry

STRANGER_RATIO = 5.0  # so much brighter than what is near the prediction, a stranger is taken for the target


class AmongStars:
    """Measures frames of one plan against stars; the solution of one frame is the start of the next."""

    def __init__(self) -> None:
        self._solution: PlateSolution | None = None

    def measure(self, frame: Frame, blank: Measurement, geometry: Geometry) -> Measurement:
        """Return the target's direction; raises NoSolutionError when the frame cannot be solved."""
        nominal = blank.nominal
        ra, dec, semidiameter = target_place(geometry)
        bodies = [(float(disc.ra_deg[0]), float(disc.dec_deg[0])) for disc in geometry.discs.values()]
        found = detect_frame(frame)
        solution = solve_frame(
            frame,
            near=(nominal.aim_ra_deg, nominal.aim_dec_deg),
            scale_arcsec_px=nominal.scale_arcsec_px,
            previous=self._solution,
            exclude=bodies,
            detections=found,
        )
        self._solution = solution
        x, y = (float(np.squeeze(v)) for v in solution.sky_to_pixel(ra, dec))
        plate = _plate(solution, frame.row_zero, x, y)
        blank = replace(blank, solved_by="stars", predicted_px=(x, y), stars=plate)
        radius_px = float(semidiameter[0]) / plate.scale_arcsec_px
        body = body_of(
            geometry, radius_px, lambda pa: pixel_angle_deg(pa, plate.local_rotation_deg, plate.parity)
        )
        try:
            place = self._found_among_stars(frame, found, solution, (x, y), body)
        except NoSolutionError as none:
            return replace(blank, reason=str(none))
        plate = _plate(solution, frame.row_zero, place.x_px, place.y_px, place.covariance)
        return replace(
            blank,
            x_px=place.x_px,
            y_px=place.y_px,
            covariance_px2=place.covariance,
            stars=plate,
            reason="; ".join(place.notes),
        )

    def _found_among_stars(
        self,
        frame: Frame,
        found: Detections,
        solution: PlateSolution,
        predicted: tuple[float, float],
        body: Body,
    ) -> DiscPlace:
        """Place the planet near its prediction; or, where a far brighter stranger stands elsewhere, place that."""
        strangers = _strangers(found, solution)
        options: dict[str, Any] = {
            "fwhm_px": float(found.psf_fwhm_px),
            "saturation": frame.saturation_adu,
            "gain_e_adu": frame.gain_e_adu,
        }
        search = max(NEAR_ARCSEC / solution.scale_arcsec_px, 6.0)
        away = np.hypot(found.x_px[strangers] - predicted[0], found.y_px[strangers] - predicted[1])
        if strangers.size and not (away[0] < search):
            near = strangers[away < search]
            brighter = (
                near.size == 0 or found.flux_adu[strangers[0]] > STRANGER_RATIO * found.flux_adu[near[0]]
            )
            if brighter:
                x, y = float(found.x_px[strangers[0]]), float(found.y_px[strangers[0]])
                return planet_among_stars(frame.data, x, y, body, search_px=3.0, **options)
        return planet_among_stars(frame.data, *predicted, body, search_px=search, **options)


def _strangers(found: Detections, solution: PlateSolution) -> np.ndarray:
    """Return the detections that are no catalogue star, as bright as the brighter stars here, brightest first."""
    matched = solution.matched
    apart = np.hypot(
        found.x_px[:, None] - matched.x_px[None, :], found.y_px[:, None] - matched.y_px[None, :]
    ).min(axis=1)
    stars = apart < 2.0
    bright = found.flux_adu > (np.median(found.flux_adu[stars]) if stars.any() else 0.0)
    return np.flatnonzero(~stars & bright & (found.snr > 10))


def _plate(
    solution: PlateSolution, row_zero: str, x_px: float, y_px: float, covariance_px2: np.ndarray | None = None
) -> StarReference:
    """Return the plate solution at a place of the frame; with the covariance of a centroid, of its direction."""
    px = np.array([x_px, x_px + 1.0, x_px]), np.array([y_px, y_px, y_px + 1.0])
    ra, dec = solution.pixel_to_sky(*px)
    center = np.full(2, ra[0]), np.full(2, dec[0])
    east, north = tangent_offsets(*center, unit_vectors(ra[1:], dec[1:]))
    axes = np.array([east, north])  # columns: what one pixel along x, along y is on the sky
    if covariance_px2 is None:
        covariance = np.full((2, 2), np.nan)
    else:
        covariance = axes @ (covariance_px2 + solution.covariance_px2(x_px, y_px)) @ axes.T
    up_is_y = row_zero == "bottom"
    return StarReference(
        ra_deg=float(ra[0]),
        dec_deg=float(dec[0]),
        covariance_arcsec2=covariance,
        scale_arcsec_px=solution.scale_arcsec_px,
        rotation_deg=(solution.position_angle_deg + (0.0 if up_is_y else 180.0)) % 360.0,
        parity=-1 if solution.mirrored == up_is_y else 1,
        local_rotation_deg=float(np.degrees(np.arctan2(east[1], north[1])) % 360.0),
        stars=len(solution.matched.x_px),
        rms_px=solution.rms_px,
        header=solution.wcs.to_header(relax=True).tostring(sep="\n"),
    )
