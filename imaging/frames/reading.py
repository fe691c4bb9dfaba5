"""The one door through which frames come in: finds the dialect by what the file holds, and checks what came out."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from datetime import timezone
from importlib import import_module
from pathlib import Path
from typing import TYPE_CHECKING
from zoneinfo import ZoneInfo

import numpy as np

from imaging.frames.frame import Frame
from imaging.frames.mosaic import taken_apart
from imaging.frames.times import time_from_file_date, zone_of
from planner.errors import FrameSetAside, InputError

if TYPE_CHECKING:
    from imaging.frames.calibrating import Calibration

MAX_PIXELS = 200_000_000  # a luminance of 0.8 GB; above it a frame is refused before it is read
MIN_SIDE_PX = 8
MOST_SATURATED = 0.9


@dataclass(frozen=True)
class ReadOptions:
    """What a reader may need: a zone for stamps without one, whether colour is wanted.

    `as_recorded`: a mosaic is left as the sensor gave it, for calibration before it is taken apart.
    """

    zone: timezone | ZoneInfo | None = None
    colour: bool = False
    as_recorded: bool = False


# One line a dialect: name, module, file suffixes. The first whose `recognises(head, path)` says yes reads.
DIALECTS = {
    "FITS": ("imaging.frames.dialects.fits", (".fits", ".fit", ".fts", ".fz")),
    "PNG or JPEG": ("imaging.frames.dialects.raster", (".png", ".jpg", ".jpeg")),
    "camera RAW": (
        "imaging.frames.dialects.raw",
        (".cr2", ".cr3", ".nef", ".arw", ".raf", ".orf", ".rw2", ".dng"),
    ),
    "TIFF": ("imaging.frames.dialects.tiff", (".tif", ".tiff")),
    "SER": ("imaging.frames.dialects.ser", (".ser",)),
    "video": ("imaging.frames.dialects.video", (".mp4", ".mov", ".avi", ".mkv")),
}


def read_frame(
    path: str | Path,
    zone: str | None = None,
    *,
    index: int = 0,
    colour: bool = False,
    file_time: bool = False,
    calibration: Calibration | None = None,
) -> Frame:
    """Return one frame of a file: the frame itself, or number `index` of a cube or a video.

    `zone`: of stamps that lack one (`+02:00` or an IANA name). `colour`: keep the colour planes. `file_time`:
    fall back on the modification time. `calibration`: what to take off the sensor's values, before a mosaic is taken
    apart. A frame that tells no time has `time=None` and `time_missing`.
    Raises FrameSetAside with a reason in one line, InputError for a zone that is none.
    """
    options = {"colour": colour, "file_time": file_time, "calibration": calibration}
    for frame in read_frames(path, zone, start=index, stop=index + 1, **options):  # type: ignore[arg-type]
        return frame
    raise FrameSetAside(path, f"has no frame number {index}")


def read_frames(
    path: str | Path,
    zone: str | None = None,
    *,
    colour: bool = False,
    file_time: bool = False,
    calibration: Calibration | None = None,
    as_recorded: bool = False,
    start: int = 0,
    stop: int | None = None,
) -> Iterator[Frame]:
    """Yield the frames of a file, one at a time in memory; see `read_frame`.

    `as_recorded`: mosaics as the sensor gave them, not taken apart.
    """
    path = Path(path)
    # colours that are no mosaic cannot be calibrated, and must be seen to say so
    options = ReadOptions(
        zone_of(zone), colour or calibration is not None, as_recorded or calibration is not None
    )
    module = _dialect(path)
    try:
        for frame in module.frames(path, options, start, stop):
            reason = _unusable(frame.data, frame.saturation_adu)
            if reason is not None:
                raise FrameSetAside(path, reason)
            if calibration is not None:
                frame = calibration.apply(frame)
                frame = frame if as_recorded else taken_apart(frame, colour)
            if frame.time is None and file_time:
                frame = replace(
                    frame, time=time_from_file_date(path.stat().st_mtime, frame.exposure_s), time_missing=None
                )
            yield frame
    except (FrameSetAside, InputError):
        raise
    except MemoryError:
        raise FrameSetAside(path, "does not fit into memory") from None
    except OSError as error:
        raise FrameSetAside(path, f"cannot be read: {_one_line(error)}") from None
    except Exception as error:  # libraries raise anything on a damaged file; the run must go on
        raise FrameSetAside(path, f"is damaged or not what it seems ({_one_line(error)})") from None


def frame_count(path: str | Path) -> int:
    """Return how many frames a file holds; raises FrameSetAside when it cannot be read."""
    path = Path(path)
    module = _dialect(path)
    try:
        return module.count(path) if hasattr(module, "count") else 1
    except FrameSetAside:
        raise
    except Exception as error:
        raise FrameSetAside(path, f"is damaged or not what it seems ({_one_line(error)})") from None


def check_size(path: Path, width_px: int, height_px: int) -> None:
    """Refuse sizes that no frame has, before anything is allocated; raises FrameSetAside."""
    if width_px < MIN_SIDE_PX or height_px < MIN_SIDE_PX:
        raise FrameSetAside(
            path, f"is {width_px} x {height_px} pixels; a frame needs {MIN_SIDE_PX} x {MIN_SIDE_PX}"
        )
    if width_px * height_px > MAX_PIXELS:
        limit = MAX_PIXELS // 1_000_000
        raise FrameSetAside(
            path, f"is {width_px} x {height_px} pixels; more than {limit} megapixels are refused"
        )


def _dialect(path: Path):  # type: ignore[no-untyped-def]
    try:
        if path.is_dir():
            raise FrameSetAside(path, "is a folder, not a frame")
        size = path.stat().st_size
        with open(path, "rb") as file:
            head = file.read(4096)
    except OSError as error:
        raise FrameSetAside(path, f"cannot be opened: {error.strerror or error}") from None
    if size == 0:
        raise FrameSetAside(path, "is empty (0 bytes)")
    for module_name, _ in DIALECTS.values():
        module = import_module(module_name)
        if module.recognises(head, path):
            return module
    by_suffix = [name for name, (_, suffixes) in DIALECTS.items() if path.suffix.lower() in suffixes]
    if by_suffix:
        raise FrameSetAside(
            path, f"is named like {by_suffix[0]} but does not begin like one (damaged or encrypted)"
        )
    raise FrameSetAside(path, f"is none of the formats read here ({', '.join(DIALECTS)})")


def _unusable(data: np.ndarray, saturation_adu: float | None) -> str | None:
    """Return why an array cannot be measured, or None."""
    sample = data[:: max(1, data.shape[0] // 512), :: max(1, data.shape[1] // 512)]
    low, high = np.nanmin(data, initial=np.inf), np.nanmax(data, initial=-np.inf)
    if not np.isfinite(sample).any() and not np.isfinite(data).any():
        return "holds no number (all pixels are blank or NaN)"
    if low == high:
        return "is all black (every pixel is 0)" if low == 0 else f"is constant (every pixel is {low:g})"
    if np.isfinite(sample).mean() < 0.25:
        return f"is mostly blank ({100 * (1 - np.isfinite(sample).mean()):.0f} % of the pixels)"
    if saturation_adu is not None and (full := float((sample >= saturation_adu).mean())) > MOST_SATURATED:
        return f"is saturated ({100 * full:.0f} % of the pixels are at {saturation_adu:g})"
    return None


def _one_line(error: Exception) -> str:
    text = " ".join(str(error).split()) or type(error).__name__
    return text if len(text) <= 160 else text[:157] + "..."
