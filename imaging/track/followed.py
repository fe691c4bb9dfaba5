"""A star and its comparisons followed through frames, cubes and videos, without a plan: their light, frame by frame."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from imaging.discs.lightcurve import LightCurve
from imaging.discs.photometry import aperture_flux, compared
from imaging.frames.frame import Frame
from imaging.track.result import SetAside
from planner.errors import FrameSetAside, InputError, NoSolutionError

SEARCH_PX = 12.0  # by which stars move from one frame to the next
SETTLE_PX = 5.0  # by which a place may be given wrongly
LEAST_SNR = 6.0  # of a star whose place is believed
DEFAULT_RADIUS_PX = 4.0

Place = tuple[float, float]


@dataclass(frozen=True)
class Stamps:
    """When frames begin that do not say so themselves: TT seconds of the first, seconds from each to the next."""

    start_tt_s: float
    cadence_s: float


@dataclass(frozen=True, eq=False)
class FollowedStar:
    """The light of a star in frames in time order; `curve` counts seconds from `origin_tt_s`, begin of the first.

    `compared`: divided by the comparison stars' light. `moved_px`: how far the field moved, at most.
    """

    curve: LightCurve
    origin_tt_s: float
    compared: bool
    radius_px: float
    moved_px: float
    set_aside: tuple[SetAside, ...]


def follow_star(
    files: Sequence[Path],
    star_px: Place,
    comparisons_px: Sequence[Place] = (),
    radius_px: float | None = None,
    rolling_readout_s: float = 0.0,
    zone: str | None = None,
    stamps: Stamps | None = None,
    tick: Callable[[int, int], None] | None = None,
) -> FollowedStar:
    """Return the light curve of a star at `star_px` of the first frame (0-based array pixels).

    The field is followed by the comparison stars, without them by the star itself while it shines: so it is found where
    it must be while it is hidden. `radius_px`: of the aperture; 1.2 times the width of the stars by default.
    `rolling_readout_s`: from the first row's start to the last row's. `stamps`: times in place of the files'.
    Places need be good to 5 px only where a star is seen in the first frame. Raises InputError when one is not in the
    frame, NoSolutionError when no star is there to follow in the first frames, or too few frames tell their time.
    """
    aside: list[SetAside] = []
    others = list(comparisons_px)
    guides = others or [star_px]
    shift = np.zeros(2)
    moved = 0.0
    rows: list[tuple[float, float, float, float]] = []
    for number, frame in enumerate(_frames(files, zone, stamps is not None, aside, tick)):
        if not rows:
            for place in (star_px, *others):
                _require_inside(place, frame)
            if radius_px is None:
                radius_px = _radius(frame, guides)
            star_px = _settled(frame.data, star_px, radius_px)
            others = [_settled(frame.data, place, radius_px) for place in others]
            guides = others or [star_px]
        assert radius_px is not None
        steps = [_step(frame.data, place, shift, radius_px) for place in guides]
        seen = [step for step in steps if step is not None]
        if seen:
            shift = np.median(seen, axis=0)
        elif not rows:
            raise NoSolutionError("no star stands out of the sky at the places given, in the first frame")
        moved = max(moved, float(np.hypot(*shift)))
        flux = _flux(frame.data, star_px, shift, radius_px)
        other = [_flux(frame.data, place, shift, radius_px) for place in others]
        part = (star_px[1] + shift[1]) / max(frame.data.shape[0] - 1, 1)
        part = part if frame.row_zero == "top" else 1.0 - part
        if stamps is not None:
            begin = stamps.start_tt_s + number * stamps.cadence_s
        else:
            assert frame.time is not None
            begin = frame.time.begin_tt_s
        begin += rolling_readout_s * part
        rows.append((begin, frame.exposure_s or 0.0, flux, float(np.sum(other)) if other else np.nan))
    if len(rows) < 8:
        why = f" ({aside[0].file}: {aside[0].reason}; --start and --cadence tell it)" if aside else ""
        raise NoSolutionError(
            f"{len(rows)} frames tell their time: at least 8 are needed for a light curve{why}"
        )
    begin_s, exposure, flux_adu, other_adu = np.array(sorted(rows)).T
    if not (exposure > 0).all():
        cadence = float(np.median(np.diff(begin_s)))
        exposure = np.where(exposure > 0, exposure, cadence)
    divided = bool(others) and bool(np.isfinite(other_adu).mean() > 0.8)
    flux_adu = compared(flux_adu, other_adu) if divided else flux_adu
    origin = float(begin_s[0])
    curve = LightCurve(begin_s - origin, exposure, flux_adu)
    return FollowedStar(curve, origin, divided, float(radius_px or 0.0), moved, tuple(aside))


def _frames(
    files: Sequence[Path],
    zone: str | None,
    timeless: bool,
    aside: list[SetAside],
    tick: Callable[[int, int], None] | None,
) -> Iterator[Frame]:
    from imaging.frames.reading import frame_count, read_frames

    shape = None
    for number, path in enumerate(files):
        try:
            count = frame_count(path)
            for frame in read_frames(path, zone):
                name = path.name if count == 1 else f"{path.name}[{frame.frame_index}]"
                if frame.time is None and not timeless:
                    reason = frame.time_missing or "tells no time"
                    if not (frame.frame_index and aside and aside[-1].reason == reason):
                        aside.append(SetAside(name, reason))  # once for all planes of a cube
                elif shape is not None and frame.data.shape != shape:
                    aside.append(SetAside(name, "has another size than the first frame"))
                else:
                    shape = frame.data.shape
                    yield frame
                if tick and count > 1:
                    tick(number * count + frame.frame_index + 1, count * len(files))
        except FrameSetAside as bad:
            aside.append(SetAside(path.name, bad.reason))
        if tick:
            tick(number + 1, len(files))


def _require_inside(place: Place, frame: Frame) -> None:
    rows, columns = frame.data.shape
    if not (0 <= place[0] < columns and 0 <= place[1] < rows):
        raise InputError(
            f"found the place {place[0]:g},{place[1]:g}; allowed is X,Y within the frame's {columns} x {rows} pixels"
        )


def _radius(frame: Frame, guides: Sequence[Place]) -> float:
    """Return 1.2 times the width of the guides' images, from their second moments."""
    widths = []
    for place in guides:
        part, x, y = _part(frame.data, place, np.zeros(2), 10)
        light = np.clip(part - np.median(part), 0, None)
        light[light < 0.2 * light.max()] = 0
        total = light.sum()
        if total <= 0:
            continue
        mx, my = (light * x).sum() / total, (light * y).sum() / total
        square = (light * ((x - mx) ** 2 + (y - my) ** 2)).sum() / total / 2
        # cutting at a fifth of the peak leaves 0.6 of a Gaussian's variance
        widths.append(2.355 * np.sqrt(square / 0.6))
    return float(np.clip(1.2 * np.median(widths), 1.5, 12.0)) if widths else DEFAULT_RADIUS_PX


def _part(
    data: np.ndarray, place: Place, shift: np.ndarray, half: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    column, row = round(place[0] + shift[0]), round(place[1] + shift[1])
    low_y, low_x = max(row - half, 0), max(column - half, 0)
    part = np.nan_to_num(data[low_y : row + half + 1, low_x : column + half + 1].astype(float))
    x = low_x + np.arange(part.shape[1])[None, :] + np.zeros_like(part)
    y = low_y + np.arange(part.shape[0])[:, None] + np.zeros_like(part)
    return part, x, y


def _settled(data: np.ndarray, place: Place, radius: float) -> Place:
    """Return a place moved to the star that is seen there, where one is."""
    step = _step(data, place, np.zeros(2), radius, SETTLE_PX)
    return place if step is None else (place[0] + float(step[0]), place[1] + float(step[1]))


def _step(
    data: np.ndarray, place: Place, shift: np.ndarray, radius: float, search: float = SEARCH_PX
) -> np.ndarray | None:
    """Return how far a guide lies now from its place in the first frame; None when it is not seen."""
    import cv2

    part, x, y = _part(data, place, shift, int(SEARCH_PX + 2 * radius))
    if min(part.shape) < 5:
        return None
    level = float(np.median(part))
    noise = 1.48 * float(np.median(np.abs(part - level))) + 1e-6
    smooth = cv2.GaussianBlur(part - level, (0, 0), max(radius / 2.4, 0.6))
    away = np.hypot(x - place[0] - shift[0], y - place[1] - shift[1])
    smooth = np.where(away <= search, smooth, -np.inf)
    at = np.unravel_index(np.argmax(smooth), smooth.shape)
    if smooth[at] * np.sqrt(4 * np.pi) * max(radius / 2.4, 0.6) < LEAST_SNR * noise:
        return None
    cx, cy = float(x[at]), float(y[at])
    for _ in range(6):
        weight = np.clip(part - level, 0, None) * np.exp(-((x - cx) ** 2 + (y - cy) ** 2) / radius**2)
        total = weight.sum()
        if total <= 0:
            return None
        # a Gaussian window pulls half way toward its own middle
        cx += 2 * (float((weight * x).sum() / total) - cx)
        cy += 2 * (float((weight * y).sum() / total) - cy)
    return np.array([cx - place[0], cy - place[1]])


def _flux(data: np.ndarray, place: Place, shift: np.ndarray, radius: float) -> float:
    try:
        return float(aperture_flux(data[None], place[0] + shift[0], place[1] + shift[1], radius)[0])
    except NoSolutionError:  # too near the edge
        return float("nan")
