"""Exposures too short for stars, registered on the planets in them.

A frame for a planet's disc shows no star to solve by. The frame of the same passage nearest in time that was solved
lends its plate solution, shifted so that the planets of the event lie where they are predicted. What such a frame
then shows of a planet's place is the prediction, so that it counts as no measurement.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path

import numpy as np

from imaging.compose.light import Light
from imaging.compose.material import Material, Registered, Starless
from imaging.compose.plane import sky_to_plane
from imaging.compose.pointing import Pointing, ShiftedPointing
from imaging.discs.lit import Body
from imaging.frames.frame import Frame
from planner.errors import FrameSetAside, NoSolutionError
from planner.events.family import Geometry

SHORT = 0.1  # of the longest exposure of the passage: a frame for the disc, not for the stars
# A mount that tracks leaves a planet this near to where the neighbouring frames had it, refraction included; in so
# short an exposure nothing else shines there.
NEAR_ARCSEC = 60.0
FWHM_PX = 2.5
# 1-sigma that no fit of a small lit disc is believed to beat: rehearsed Venus, 4 px in radius, 13 to 19 degrees up, was
# 0.04 to 0.12 px off
LEAST_SIGMA_PX = 0.1
LAW_SHARE = 0.05  # of the radius: how far the law of scattering may put the centre of light off (assumed)
SEEN = 50.0  # noise of the sky: a planet in an exposure made for it stands out by thousands


@dataclass(frozen=True)
class _Shift:
    """By how much a frame lies off the solution it borrows, and the 1-sigma of that an axis."""

    x_px: float
    y_px: float
    sigma_px: float


def with_short_exposures(
    material: Material, light: Light, tick: Callable[[int, int], None] = lambda done, total: None
) -> Material:
    """Return the material with its short exposures among the frames, each registered on the planets in it.

    Only where the stars are the reference and the target is a planet. A frame without a solved neighbour, or without a
    planet to be seen, stays set aside, with the reason.
    """
    short = _short(material)
    if material.reference != "stars" or material.target not in material.geometry.discs or not short:
        return material
    found: list[Registered] = []
    refused: list[FrameSetAside] = []
    for number, frame in enumerate(short):
        tick(number, len(short))
        try:
            found.append(_registered(material, frame, light))
        except (FrameSetAside, NoSolutionError) as problem:
            reason = problem.reason if isinstance(problem, FrameSetAside) else str(problem)
            refused.append(FrameSetAside(frame.path.name, reason))
    tick(len(short), len(short))
    names = {frame.path.name for frame in short}
    others = tuple(item for item in material.set_aside if Path(item.path).name not in names)
    note = (
        f"{len(found)} exposures too short for stars were registered on the planets in them, by the plate solution of "
        "the frame nearest in time"
    )
    return replace(
        material,
        frames=tuple(sorted((*material.frames, *found), key=lambda frame: frame.tt_s)),
        set_aside=(*others, *refused),
        notes=(*material.notes, note) if found else material.notes,
        starless=(),
    )


def _short(material: Material) -> list[Starless]:
    longest: dict[str, float] = {}
    for frame in material.frames:
        longest[frame.passage] = max(longest.get(frame.passage, 0.0), frame.exposure_s)
    return [
        frame for frame in material.starless if frame.exposure_s < SHORT * longest.get(frame.passage, 0.0)
    ]


def _registered(material: Material, frame: Starless, light: Light) -> Registered:
    geometry = material.geometry_at(np.array([frame.tt_s]))
    lender, places = _expected(material, frame, geometry)
    pixels = light.read_file(frame.path, frame.frame_index, lender.camera)
    shift = _shift(pixels, lender, places, geometry)
    target = geometry.discs[geometry.target]
    nan = float("nan")
    return replace(
        lender,
        path=frame.path,
        frame_index=frame.frame_index,
        tt_s=frame.tt_s,
        exposure_s=frame.exposure_s,
        solved_by="planets",
        pointing=ShiftedPointing(lender.pointing, shift.x_px, shift.y_px),
        predicted_ra_deg=float(target.ra_deg[0]),
        predicted_dec_deg=float(target.dec_deg[0]),
        measured_ra_deg=nan,
        measured_dec_deg=nan,
        sigma_along_arcsec=nan,
        sigma_across_arcsec=nan,
        verdict="unmeasured",
        registration_sigma_arcsec=shift.sigma_px * lender.scale_arcsec_px,
    )


def _expected(
    material: Material, frame: Starless, geometry: Geometry
) -> tuple[Registered, dict[str, tuple[float, float]]]:
    """Return the solved frame nearest in time, and where the planets should stand by the ones before and after."""
    solved = [each for each in material.frames if each.passage == frame.passage and each.solved_by == "stars"]
    if not solved:
        raise FrameSetAside(frame.path.name, "shows no stars, and no frame of its passage was solved")
    before = [each for each in solved if each.tt_s <= frame.tt_s][-1:]
    after = [each for each in solved if each.tt_s > frame.tt_s][:1]
    beside = before + after
    lender = min(beside, key=lambda each: abs(each.tt_s - frame.tt_s))
    share = 0.0 if len(beside) == 1 else (frame.tt_s - beside[0].tt_s) / (beside[1].tt_s - beside[0].tt_s)
    places = {}
    for name, disc in geometry.discs.items():
        at = [np.array(_pixel(each.pointing, disc.ra_deg, disc.dec_deg)) for each in beside]
        x_px, y_px = at[0] + share * (at[-1] - at[0])
        places[name] = float(x_px), float(y_px)
    return lender, places


def _pixel(pointing: Pointing, ra_deg: np.ndarray, dec_deg: np.ndarray) -> tuple[float, float]:
    x_px, y_px = pointing.sky_to_pixel(ra_deg, dec_deg)
    return float(np.squeeze(x_px)), float(np.squeeze(y_px))


def _pixel_angle_deg(pointing: Pointing, x_px: float, y_px: float, position_angle_deg: float) -> float:
    """Return the polar angle in the array (from +x toward +y) of a position angle, at a place of the frame."""
    step = np.array([0.0, 1.0, 0.0]), np.array([0.0, 0.0, 1.0])
    ra, dec = pointing.pixel_to_sky(x_px + step[0], y_px + step[1])
    axes = np.array(sky_to_plane(float(ra[0]), float(dec[0]), ra[1:], dec[1:]))
    pa = np.radians(position_angle_deg)
    x, y = np.linalg.solve(axes, [np.sin(pa), np.cos(pa)])
    return float(np.degrees(np.arctan2(y, x)))


def _placed(
    pixels: Frame, x_px: float, y_px: float, body: Body, search_px: float
) -> tuple[float, float, float] | None:
    """Return a planet's centre of figure and its 1-sigma an axis, by its disc, else by its light; None when unseen."""
    from imaging.discs.planet import planet_among_stars

    try:
        place = planet_among_stars(
            pixels.data, x_px, y_px, body, FWHM_PX, search_px, pixels.saturation_adu, pixels.gain_e_adu
        )
        return place.x_px, place.y_px, max(*place.sigma_px, LEAST_SIGMA_PX)
    except NoSolutionError:
        pass
    half = int(search_px + 2 * body.reach_px + 3 * FWHM_PX)
    row, column = round(y_px), round(x_px)
    rows = slice(max(0, row - half), min(pixels.data.shape[0], row + half + 1))
    columns = slice(max(0, column - half), min(pixels.data.shape[1], column + half + 1))
    stamp = pixels.data[rows, columns].astype(float)
    if stamp.size < 50:
        return None
    level = float(np.median(stamp))
    light = stamp - level
    noise = 1.4826 * float(np.median(np.abs(light))) + 1e-9
    peak = np.unravel_index(int(np.argmax(light)), light.shape)
    if light[peak] < SEEN * noise:
        return None
    y, x = np.mgrid[rows, columns]
    close = np.hypot(x - x[peak], y - y[peak]) < 2 * body.reach_px + 3 * FWHM_PX
    weight = np.where(close & (light > 3 * noise), light, 0.0)
    off_x, off_y = body.light_offset_px()
    center = float((weight * x).sum() / weight.sum()), float((weight * y).sum() / weight.sum())
    sigma = float(np.hypot(LEAST_SIGMA_PX, LAW_SHARE * body.radius_px))
    return center[0] - off_x, center[1] - off_y, sigma


def _shift(
    pixels: Frame, lender: Registered, places: dict[str, tuple[float, float]], geometry: Geometry
) -> _Shift:
    """Return the mean shift of the planets in the frame; raises NoSolutionError when the target is not seen."""
    from imaging.track.nominal import body_of

    scale, rows, columns = lender.scale_arcsec_px, *pixels.data.shape
    found: dict[str, tuple[float, float, float]] = {}
    near = NEAR_ARCSEC / scale
    for name in places:
        apart = [np.hypot(*np.subtract(places[name], places[other])) for other in places if other != name]
        near = min([near, *(0.4 * float(each) for each in apart if np.isfinite(each))])
    for name, (x_px, y_px) in places.items():
        if not (np.isfinite([x_px, y_px]).all() and 0 <= x_px < columns and 0 <= y_px < rows):
            continue
        disc = geometry.discs[name]
        body = body_of(
            replace(geometry, target=name),
            float(disc.semidiameter_arcsec[0]) / scale,
            partial(_pixel_angle_deg, lender.pointing, x_px, y_px),
        )
        place = _placed(pixels, x_px, y_px, body, max(near, 6.0))
        if place is None:
            continue
        at = _pixel(lender.pointing, disc.ra_deg, disc.dec_deg)
        found[name] = place[0] - at[0], place[1] - at[1], place[2]
    if geometry.target not in found:
        raise NoSolutionError(f"shows neither stars nor {geometry.target.capitalize()} where it should be")
    shifts = np.array([item[:2] for item in found.values()])
    weight = np.array([item[2] for item in found.values()]) ** -2.0
    mean = (weight[:, None] * shifts).sum(axis=0) / weight.sum()
    sigma = float(weight.sum() ** -0.5)
    if len(found) > 1:  # what the planets say against each other counts, if it is more
        sigma = max(sigma, float(np.sqrt(((shifts - mean) ** 2).mean())))
    return _Shift(float(mean[0]), float(mean[1]), sigma)
