"""One frame in, its pointing out: tries what is known first, and says what was tried when nothing can be defended."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from contextlib import suppress
from dataclasses import dataclass
from typing import TypedDict

import numpy as np

from imaging.frames.frame import Frame
from imaging.stars.air import Air, fitted_wcs
from imaging.stars.camera import ARCSEC_RAD, Camera, Lens, order_for, to_wcs, unknown_lens
from imaging.stars.catalogue import density_of, stars_near, vectors_of
from imaging.stars.detection import Detections, detect
from imaging.stars.hinted import SCALE_TOLERANCE, Attempt, solve_hinted
from imaging.stars.memory import Memory, remembered, together
from imaging.stars.previous import solve_from_previous
from imaging.stars.refine import STARS_LOOKED_AT, Field, Sky, field_of, settle
from imaging.stars.solution import MatchedStars, PlateSolution
from imaging.stars.sparse import WIDEST_SCALE_TOLERANCE, solve_sparse
from planner.errors import NoSolutionError

_ROUGHEST_PX, _ROUGHEST = 2.0, 1e-3  # residuals beyond are no solution: px, half-diagonals
_FISHEYE_DEG = 75.0  # of the diagonal, from which an equidistant lens is tried too
_WELL_MATCHED = 60  # catalogue stars, from which on nothing need be learned
_CENTROID_FLOOR_PX = 0.01  # below it the model of the star's profile, not noise, limits (measured)


@dataclass(frozen=True)
class Hint:
    """What is known of the pointing: centre (deg, ICRS), scale and how far each may be off, roll, mirror, lens.

    `parity` and `rotation_deg` as in DEVELOPERS.md, of the array.
    """

    near: tuple[float, float] | None = None
    scale_arcsec_px: float | None = None
    scale_tolerance: float = SCALE_TOLERANCE
    rotation_deg: float | None = None
    parity: int | None = None
    lens: Lens | None = None


def solve_frame(
    frame: Frame,
    near: tuple[float, float] | None = None,
    scale_arcsec_px: float | None = None,
    previous: PlateSolution | None = None,
    rotation_deg: float | None = None,
    parity: int | None = None,
    exclude: Sequence[tuple[float, float]] = (),
    *,
    detections: Detections | None = None,
    scale_tolerance: float = SCALE_TOLERANCE,
    lens: Lens | None = None,
    blind: bool | None = None,
    air: Air | None = None,
    tick: Callable[[int, int], None] | None = None,
) -> PlateSolution:
    """Return where a frame points.

    `near`: rough centre (ra_deg, dec_deg, ICRS), within four field radii. `scale_arcsec_px`: within
    `scale_tolerance`. `previous`: the solution of a frame of the same rig shortly before. `rotation_deg`, `parity`:
    of the array, where known. `exclude`: ICRS places of bodies that are not stars, whose light is not matched.
    `blind`: search the whole sky when the hints fail; by default only without `near` and `previous`. `air`: lifts the
    stars of a search that is not blind as it does in the frame. `tick`: progress of the index that the first blind
    solution builds.
    Raises NoSolutionError when no pointing has a false-alarm probability below 1e-6; the
    message says what was tried and what would help.
    """
    found = detections if detections is not None else detect_frame(frame)
    tt_s = frame.time.middle_tt_s if frame.time is not None else DEFAULT_EPOCH_TT_S
    hint = Hint(near, scale_arcsec_px, scale_tolerance, rotation_deg, parity, lens)
    if blind is None:
        blind = near is None and previous is None
    return solve_detections(found, tt_s, frame.row_zero, hint, previous, exclude, blind, air, tick)


DEFAULT_EPOCH_TT_S = 25.0 * 365.25 * 86400.0  # a frame without time is solved with the stars of 2025.0


def detect_frame(frame: Frame) -> Detections:
    """Return the stars of a frame, with its own saturation and gain."""
    return detect(frame.data, saturation_adu=frame.saturation_adu, gain_e_adu=frame.gain_e_adu)


def solve_detections(
    found: Detections,
    tt_s: float,
    row_zero: str,
    hint: Hint,
    previous: PlateSolution | None = None,
    exclude: Sequence[tuple[float, float]] = (),
    blind: bool = False,
    air: Air | None = None,
    tick: Callable[[int, int], None] | None = None,
) -> PlateSolution:
    """Return where a frame with these stars points; see `solve_frame`."""
    shape = (found.height_px, found.width_px)
    field = _field(found)
    if len(field.x_px) < 3:
        raise NoSolutionError(
            f"{len(field.x_px)} stars found, at least 3 are needed; a longer exposure or a darker sky would help"
        )
    tried: list[str] = []
    if previous is not None and previous.fit is not None:
        lens, near = previous.fit_lens, _seen_stars(tt_s, air)
        attempt = solve_from_previous(field, previous, near)
        if attempt.match is not None:
            return _solution(
                attempt, lens, field, shape, tt_s, row_zero, exclude, "previous", air, previous.memory
            )
        learned = None if previous.memory is None else previous.memory.stars(previous.scale_arcsec_px)
        if learned is not None and len(learned) >= 3:
            extra = learned if air is None else air.over(learned)
            attempt = solve_from_previous(field, previous, lambda *cone: together(near(*cone), extra))
            if attempt.match is not None:
                return _solution(
                    attempt,
                    lens,
                    field,
                    shape,
                    tt_s,
                    row_zero,
                    exclude,
                    "previous",
                    air,
                    previous.memory,
                    learned,
                )
            tried.append(f"from the previous frame, with {len(learned)} stars learned on the way")
        else:
            tried.append("from the previous frame")
        hint = Hint(
            hint.near or (previous.center_ra_deg, previous.center_dec_deg),
            previous.scale_arcsec_px,
            min(hint.scale_tolerance, 0.03),
            hint.rotation_deg,
            hint.parity or previous.fit.camera.parity,
            hint.lens,
        )
    if hint.near is not None and hint.scale_arcsec_px is not None:
        true_center = vectors_of(np.array(hint.near[0]), np.array(hint.near[1]))
        center = true_center if air is None else air.lifted(true_center)
        lens = hint.lens or unknown_lens(3)
        field_deg = 2 * np.degrees(field.half_diagonal_px * hint.scale_arcsec_px / ARCSEC_RAD)
        lenses = [lens]
        if hint.lens is None and field_deg > _FISHEYE_DEG:
            lenses.append(unknown_lens(5, "ARC"))  # no lens makes a flat picture of so wide a sky

        def sky_near(radius_rad: float, stars_per_sr: float):  # type: ignore[no-untyped-def]
            sky = stars_near(true_center, radius_rad, tt_s, stars_per_sr)
            return sky if air is None else air.over(sky)

        solutions = []
        for lens in lenses:
            attempt = solve_hinted(
                field,
                sky_near,
                center,
                hint.scale_arcsec_px,
                lens,
                scale_tolerance=hint.scale_tolerance,
                parity=hint.parity,
                rotation_deg=hint.rotation_deg,
            )
            if attempt.match is not None:
                with suppress(NoSolutionError):
                    solutions.append(
                        _solution(attempt, hint.lens, field, shape, tt_s, row_zero, exclude, "hinted", air)
                    )
        if solutions:  # flat or equidistant: the one that explains more stars
            return max(solutions, key=lambda one: (len(one.matched.x_px), -one.rms_px))
        if hint.scale_tolerance <= WIDEST_SCALE_TOLERANCE:
            attempt = solve_sparse(
                field,
                sky_near,
                center,
                hint.scale_arcsec_px,
                hint.scale_tolerance,
                hint.lens or unknown_lens(3),
                hint.parity,
                hint.rotation_deg,
            )
            if attempt.match is not None:
                return _solution(attempt, hint.lens, field, shape, tt_s, row_zero, exclude, "sparse", air)
        tried.append(
            f"around {hint.near[0]:.3f} {hint.near[1]:+.3f} at {hint.scale_arcsec_px:.3f} arcsec/px "
            f"(+-{100 * hint.scale_tolerance:.0f} %), best chance 1e{attempt.best_log10:.0f}"
        )
    if blind:
        from imaging.stars.blind import solve_blind
        from imaging.stars.index import quad_index

        ranges: list[tuple[float, float] | None] = [None]
        if hint.scale_arcsec_px is not None:  # a stated scale may be wrong: a picture that was resized
            focal, slack = ARCSEC_RAD / hint.scale_arcsec_px, 1 + hint.scale_tolerance
            ranges.insert(0, (focal / slack, focal * slack))
        for allowed in ranges:
            held = hint.lens if allowed is not None else None
            attempt = solve_blind(
                field,
                quad_index(tick),
                tt_s,
                held or unknown_lens(3),
                parity=hint.parity if allowed is not None else None,
                focal_range_px=allowed,
            )
            if attempt.match is not None:
                return _solution(attempt, held, field, shape, tt_s, row_zero, exclude, "blind")
        tried.append(
            f"the whole sky, for fields of 0.2 to 90 degrees of a lens that is no fisheye, best chance "
            f"1e{attempt.best_log10:.0f}"
        )
    raise NoSolutionError(
        f"{len(found)} stars found, no pointing defended; tried {'; '.join(tried) or 'nothing, for want of a hint'}; "
        f"{_would_help(len(found), hint)}"
    )


def _would_help(stars: int, hint: Hint) -> str:
    if stars < 12:
        return "more stars would help: a longer exposure, better focus, less cloud"
    if hint.near is None or hint.scale_arcsec_px is None:
        return "a rough centre and scale would help (--near, --scale or --rig), for a fisheye both are needed"
    if hint.lens is None:
        return "a lens learned from better frames of the rig would help (--learn), or a field with more bright stars"
    return "the roll, or a frame solved shortly before, would help, or a field with more bright stars"


def _seen_stars(tt_s: float, air: Air | None):  # type: ignore[no-untyped-def]
    """Return a function of a direction, as seen, a radius and a density that gives the stars about it, as seen."""
    if air is None:
        return lambda center, radius_rad, per_sr: stars_near(center, radius_rad, tt_s, per_sr)
    return lambda center, radius_rad, per_sr: air.over(
        stars_near(air.unlifted(center), radius_rad, tt_s, per_sr)
    )


def _field(found: Detections) -> Field:
    sigma = np.sqrt((found.sigma_x_px**2 + found.sigma_y_px**2) / 2 + _CENTROID_FLOOR_PX**2)
    sigma = np.where(found.saturated, np.maximum(sigma, 0.1), sigma)
    magnitude = -2.5 * np.log10(np.maximum(found.flux_adu, 1e-9))
    shape = (found.height_px, found.width_px)
    return field_of(found.x_px, found.y_px, sigma, magnitude, found.saturated, shape)


def _solution(
    attempt: Attempt,
    lens: Lens | None,
    field: Field,
    shape: tuple[int, int],
    tt_s: float,
    row_zero: str,
    exclude: Sequence[tuple[float, float]],
    how: str,
    air: Air | None = None,
    memory: Memory | None = None,
    learned: Sky | None = None,
) -> PlateSolution:
    """Settle a match over the whole catalogue and write it down."""
    assert attempt.match is not None
    match, camera = attempt.match, attempt.match.fit.camera
    height, width = shape
    middle = camera.vectors(np.array([(width - 1) / 2]), np.array([(height - 1) / 2]))[0]
    corners = camera.vectors(np.array([0, width - 1, 0, width - 1]), np.array([0, 0, height - 1, height - 1]))
    radius = float(np.arccos(np.clip((corners @ middle).min(), -1, 1))) * 1.02
    catalogue = stars_near(
        middle if air is None else air.unlifted(middle), radius, tt_s, density_of(STARS_LOOKED_AT, radius)
    )
    if learned is not None:
        catalogue = together(catalogue, learned)
    sky = catalogue if air is None else air.over(catalogue)
    field = _without_bodies(field, camera, exclude, air)
    # the number of pairs decides the order of the distortion, and that the number of pairs
    prior = lens or unknown_lens(order_for(min(len(field.x_px), len(sky)) // 2), camera.projection)
    match = settle(match, prior, field, sky)
    if lens is None and order_for(len(match.star)) != max(p + q for p, q in prior.terms):
        prior = unknown_lens(order_for(len(match.star)), camera.projection)
        match = settle(match, prior, field, sky)
    camera = match.fit.camera
    rms_px = float(np.sqrt((match.fit.residual_px**2).sum(axis=1).mean()))
    if rms_px > max(_ROUGHEST_PX, _ROUGHEST * field.half_diagonal_px):
        raise NoSolutionError(
            f"a pointing was found, but its {len(match.star)} stars scatter by {rms_px:.1f} px: the lens is not of "
            "the kind assumed; a rough scale nearer to the truth would help"
        )
    matched = MatchedStars(
        x_px=field.x_px[match.detection],
        y_px=field.y_px[match.detection],
        ra_deg=np.degrees(np.arctan2(catalogue.vectors[match.star, 1], catalogue.vectors[match.star, 0]))
        % 360,
        dec_deg=np.degrees(np.arcsin(np.clip(catalogue.vectors[match.star, 2], -1, 1))),
        magnitude=sky.magnitude[match.star],
        residual_x_px=match.fit.residual_px[:, 0],
        residual_y_px=match.fit.residual_px[:, 1],
        index=sky.index[match.star],
    )
    center_x, center_y = (width - 1) / 2, (height - 1) / 2
    return PlateSolution(
        wcs=_wcs(camera, width, height, air),
        width_px=width,
        height_px=height,
        matched=matched,
        rms_px=rms_px,
        false_alarm_log10=attempt.false_alarm_log10,
        how=how,
        sigma_model_px=match.fit.sigma_model_px,
        covariance_at_center_px2=match.fit.covariance_at(np.array([center_x]), np.array([center_y]))[0],
        fit=match.fit,
        fit_lens=prior,
        air=air,
        memory=remembered(memory, match, field, air) if len(match.star) < _WELL_MATCHED else memory,
        **_orientation(camera, width, height, row_zero, air),
    )


def _wcs(camera: Camera, width: int, height: int, air: Air | None):  # type: ignore[no-untyped-def]
    if air is None:
        return to_wcs(camera, width, height)

    def vectors_at(x_px: np.ndarray, y_px: np.ndarray) -> np.ndarray:
        return air.unlifted(camera.vectors(x_px, y_px))

    axis_px = camera.axis_x_px, camera.axis_y_px
    return fitted_wcs(vectors_at, axis_px, (width, height), camera.projection)


class _Orientation(TypedDict):
    center_ra_deg: float
    center_dec_deg: float
    scale_arcsec_px: float
    position_angle_deg: float
    mirrored: bool


def _orientation(camera: Camera, width: int, height: int, row_zero: str, air: Air | None) -> _Orientation:
    """Return centre, scale and orientation of the middle of the frame, as a user sees it."""
    x, y = (width - 1) / 2, (height - 1) / 2
    seen = camera.vectors(np.array([x, x + 1, x]), np.array([y, y, y + 1]))
    here, right, up = seen if air is None else air.unlifted(seen)
    ra, dec = np.arctan2(here[1], here[0]), np.arcsin(np.clip(here[2], -1, 1))
    east = np.array([-np.sin(ra), np.cos(ra), 0.0])
    north = np.cross(here, east)
    area = np.abs(np.dot(here, np.cross(right - here, up - here)))
    seen_up = up - here if row_zero == "bottom" else here - up
    angle = float(np.degrees(np.arctan2(seen_up @ east, seen_up @ north)) % 360)
    as_seen = camera.parity == (1 if row_zero == "bottom" else -1)
    return {
        "center_ra_deg": float(np.degrees(ra) % 360),
        "center_dec_deg": float(np.degrees(dec)),
        "scale_arcsec_px": float(np.sqrt(area)) * ARCSEC_RAD,
        "position_angle_deg": angle,
        "mirrored": not as_seen,
    }


def _without_bodies(
    field: Field, camera: Camera, exclude: Sequence[tuple[float, float]], air: Air | None
) -> Field:
    """Return the field without the light of bodies that are not stars."""
    if not len(exclude):
        return field
    places = np.atleast_2d(np.asarray(exclude, dtype=float))
    vectors = vectors_of(places[:, 0], places[:, 1])
    x, y = camera.pixels(vectors if air is None else air.lifted(vectors))
    keep = np.ones(len(field.x_px), dtype=bool)
    for one_x, one_y in zip(x, y, strict=True):
        if np.isfinite(one_x) and np.isfinite(one_y):
            keep &= np.hypot(field.x_px - one_x, field.y_px - one_y) > 8.0
    return field.take(keep)
