"""A frame of stars measured: solved against the catalogue, then the target looked for where it is predicted."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from imaging.discs.on_trail import planet_on_trail
from imaging.discs.outline import pixel_angle_deg
from imaging.discs.planet import Body, DiscPlace, planet_among_stars
from imaging.frames.frame import Frame
from imaging.stars.air import Air, air_over
from imaging.stars.detection import Detections
from imaging.stars.lens import LearnedLens
from imaging.stars.solution import PlateSolution
from imaging.stars.solve import detect_frame, solve_frame
from imaging.track.measurement import AS_PREDICTED, Measurement, StarReference
from imaging.track.nominal import NEAR_ARCSEC, Nominal, Promise, body_of
from imaging.track.path import ARCSEC_RAD, Expected, tangent_offsets, target_place, unit_vectors
from planner.errors import NoSolutionError
from planner.events.family import Geometry

STRANGER_RATIO = 5.0  # so much brighter than what is near the prediction, a stranger is taken for the target
LEARNED_SCALE = 0.005  # relative, to which a learned scale holds: focus and temperature move it
ENOUGH_STARS = 60  # matched, that tell a lens by themselves: what was learned before can only be older
AS_MANY = 0.9  # of the stars matched freely, which a lens must explain too
KNOWN_SCALE = 0.01  # of a rig file's scale, where the field is too sparse to find it freely
TOO_SHORT = 0.1  # of the longest exposure of its passage: a frame for the disc, not for the stars


class AmongStars:
    """Measures frames of one plan against stars; the solution of one frame is the start of the next.

    `lens`: learned of the rig before; a frame that it does not fit is solved without it.
    """

    def __init__(self, promise: Promise, lens: LearnedLens | None = None) -> None:
        self.promise = promise
        self._lens = lens
        self._solution: PlateSolution | None = None
        self.found: Detections | None = None  # of the last frame

    def measure(
        self, frame: Frame, blank: Measurement, geometry: Geometry, expected: Expected
    ) -> Measurement:
        """Return the target's direction; raises NoSolutionError when the frame cannot be solved."""
        ra, dec, semidiameter = target_place(geometry)
        self.found = found = detect_frame(frame)
        altitude = float(expected.altitude_deg[0])
        # a stamp that is hours off puts the field below the horizon: there no air is known
        air = air_over(self.promise.path.observer, float(expected.tt_s[0])) if altitude > 0 else None
        solution = self._solved(frame, blank.nominal, geometry, found, air)
        self._solution = solution
        x, y = (float(np.squeeze(v)) for v in solution.sky_to_pixel(ra, dec))
        plate = replace(
            _plate(solution, frame.row_zero, x, y),
            by_lens=self._lens is not None and solution.fit_lens is self._lens.lens,
            fwhm_px=float(found.psf_fwhm_px),
            zero_point_adu=_zero_point_adu(found, solution, (x, y)),
        )
        blank = replace(blank, solved_by="stars", predicted_px=(x, y), stars=plate)
        rows, columns = frame.data.shape[:2]
        if not blank.nominal.holds_target and not (0 <= x < columns and 0 <= y < rows):
            return replace(blank, reason=f"{geometry.target.capitalize()} {AS_PREDICTED} beside this panel")
        radius_px = float(semidiameter[0]) / plate.scale_arcsec_px
        body = body_of(
            geometry, radius_px, lambda pa: pixel_angle_deg(pa, plate.local_rotation_deg, plate.parity)
        )
        try:
            place = self._found_among_stars(frame, found, solution, (x, y), body)
        except NoSolutionError as none:
            return replace(blank, reason=str(none))
        plate = replace(
            _plate(solution, frame.row_zero, place.x_px, place.y_px, place.covariance),
            by_lens=plate.by_lens,
            fwhm_px=plate.fwhm_px,
            zero_point_adu=plate.zero_point_adu,
        )
        return replace(
            blank,
            x_px=place.x_px,
            y_px=place.y_px,
            covariance_px2=place.covariance,
            stars=plate,
            reason="; ".join(place.notes),
        )

    def _solved(
        self, frame: Frame, nominal: Nominal, geometry: Geometry, found: Detections, air: Air | None
    ) -> PlateSolution:
        """Solve freely; with few stars by the learned lens; then with roll, mirror and scale as planned.

        Last, as stamps may be wrong, without air.
        """
        bodies = [(float(disc.ra_deg[0]), float(disc.dec_deg[0])) for disc in geometry.discs.values()]
        known: dict[str, Any] = {
            "near": (nominal.aim_ra_deg, nominal.aim_dec_deg),
            "scale_arcsec_px": nominal.scale_arcsec_px,
            "exclude": bodies,
            "detections": found,
            "air": air,
        }
        first: NoSolutionError | None = None

        def tried(**more: Any) -> PlateSolution | None:
            nonlocal first
            try:
                return solve_frame(frame, **{**known, **more})
            except NoSolutionError as none:
                first = first or none
                return None

        free = tried(previous=self._solution)
        scale = None if self._lens is None else self._lens.scale_of(found.width_px, found.height_px)
        if (
            self._lens is not None
            and scale is not None
            and (free is None or len(free.matched.x_px) < ENOUGH_STARS)
        ):
            learned = {
                "scale_arcsec_px": scale,
                "scale_tolerance": LEARNED_SCALE,
                "parity": self._lens.parity,
            }
            held = tried(previous=self._solution, lens=self._lens.lens, **learned)
            # the lens of another camera would leave stars unexplained
            if held and (free is None or len(held.matched.x_px) >= AS_MANY * len(free.matched.x_px)):
                return held
        solution = free or tried(
            rotation_deg=nominal.rotation_deg, parity=nominal.parity, scale_tolerance=KNOWN_SCALE
        )
        if solution is None and air is not None:
            solution = tried(previous=self._solution, air=None)
        if solution is not None:
            return solution
        if nominal.exposure_share < TOO_SHORT:
            raise NoSolutionError(
                f"{geometry.target.capitalize()} {AS_PREDICTED} without stars in so short an exposure "
                f"({frame.exposure_s:.3g} s), and has no place without them"
            )
        assert first is not None
        raise first

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

        def placed(x: float, y: float, search_px: float) -> DiscPlace:
            if found.trailed:
                return planet_on_trail(found, x, y, body, search_px)
            return planet_among_stars(
                frame.data,
                x,
                y,
                body,
                float(found.psf_fwhm_px),
                search_px,
                frame.saturation_adu,
                frame.gain_e_adu,
            )

        search = max(NEAR_ARCSEC / solution.scale_arcsec_px, 6.0)
        away = np.hypot(found.x_px[strangers] - predicted[0], found.y_px[strangers] - predicted[1])
        if strangers.size and not (away[0] < search):
            near = strangers[away < search]
            brighter = (
                near.size == 0 or found.flux_adu[strangers[0]] > STRANGER_RATIO * found.flux_adu[near[0]]
            )
            if brighter:
                x, y = float(found.x_px[strangers[0]]), float(found.y_px[strangers[0]])
                return placed(x, y, 3.0)
        return placed(*predicted, search)


def _zero_point_adu(found: Detections, solution: PlateSolution, target: tuple[float, float]) -> float:
    """Return the light of a star of magnitude 0 by the brighter matched stars but the target: what clouds dim alike."""
    from scipy.spatial import cKDTree

    stars = solution.matched
    apart, at = cKDTree(np.column_stack([found.x_px, found.y_px])).query(
        np.column_stack([stars.x_px, stars.y_px]), distance_upper_bound=2.0
    )
    known = np.isfinite(apart) & (np.hypot(stars.x_px - target[0], stars.y_px - target[1]) > 8.0)
    bright = np.flatnonzero(known)[np.argsort(stars.magnitude[known])[:8]]
    if not bright.size:
        return float("nan")
    # the light of all over what the catalogue has: the brightest count most, as their light is known best
    return float(found.flux_adu[at[bright]].sum() / np.sum(10 ** (-0.4 * stars.magnitude[bright])))


def _strangers(found: Detections, solution: PlateSolution) -> np.ndarray:
    """Return the detections that are no catalogue star, as bright as the brighter stars here, brightest first."""
    from scipy.spatial import cKDTree

    matched = solution.matched
    stars = np.zeros(len(found), dtype=bool)
    if len(matched.x_px):
        tree = cKDTree(np.column_stack([matched.x_px, matched.y_px]))
        apart, _ = tree.query(np.column_stack([found.x_px, found.y_px]), distance_upper_bound=2.0)
        stars = np.isfinite(apart)
    bright = found.flux_adu > (np.median(found.flux_adu[stars]) if stars.any() else 0.0)
    return np.flatnonzero(~stars & bright & (found.snr > 10))


def _as_seen(solution: PlateSolution, row_zero: str) -> tuple[float, float]:
    """Return scale and rotation of the array in the middle of the frame, of the sky as it is seen through the air.

    That is where the rig file's scale holds and a mount keeps its roll; near the horizon the sky itself is sheared by a
    degree against it.
    """
    if solution.air is None or solution.fit is None:
        up_is_y = row_zero == "bottom"
        return solution.scale_arcsec_px, (solution.position_angle_deg + (0.0 if up_is_y else 180.0)) % 360.0
    x, y = (solution.width_px - 1) / 2, (solution.height_px - 1) / 2
    here, right, up = solution.fit.camera.vectors(np.array([x, x + 1, x]), np.array([y, y, y + 1]))
    scale = float(np.sqrt(np.linalg.norm(np.cross(right - here, up - here))) * ARCSEC_RAD)
    east = np.cross([0.0, 0.0, 1.0], here)
    rotation = np.degrees(np.arctan2((up - here) @ east, (up - here) @ np.cross(here, east))) % 360.0
    return scale, float(rotation)


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
    scale, rotation = _as_seen(solution, row_zero)
    return StarReference(
        ra_deg=float(ra[0]),
        dec_deg=float(dec[0]),
        covariance_arcsec2=covariance,
        scale_arcsec_px=scale,
        rotation_deg=rotation,
        parity=-1 if solution.mirrored == (row_zero == "bottom") else 1,
        local_rotation_deg=float(np.degrees(np.arctan2(east[1], north[1])) % 360.0),
        stars=len(solution.matched.x_px),
        rms_px=solution.rms_px,
        header=solution.wcs.to_header(relax=True).tostring(sep="\n"),
    )
