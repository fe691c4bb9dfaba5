"""Camera RAW through LibRaw: the mosaic as the sensor gave it, black level taken off, EXIF times."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np

from imaging.frames.exif import camera_of, exposure_of, read_tags
from imaging.frames.frame import Frame
from imaging.frames.mosaic import PATTERNS, green_luminance, half_size_colour
from imaging.frames.reading import ReadOptions, check_size
from imaging.frames.times import NoTimeError, time_from_exif
from planner.errors import FrameSetAside

SUFFIXES = (
    ".cr2",
    ".cr3",
    ".crw",
    ".nef",
    ".nrw",
    ".arw",
    ".raf",
    ".orf",
    ".rw2",
    ".pef",
    ".dng",
    ".srw",
    ".raw",
)


def recognises(head: bytes, path: Path) -> bool:
    """Say whether the file is a camera's RAW: by its own magic, or TIFF within and named so."""
    if (
        head.startswith((b"FUJIFILMCCD-RAW", b"IIRO", b"IIRS", b"MMOR", b"IIU\x00"))
        or head[4:12] == b"ftypcrx "
    ):
        return True
    is_tiff = head[:4] in (b"II*\x00", b"MM\x00*")
    return is_tiff and (head[8:10] == b"CR" or path.suffix.lower() in SUFFIXES)


def frames(path: Path, options: ReadOptions, start: int = 0, stop: int | None = None) -> Iterator[Frame]:
    """Yield the one frame of the file: rows as the sensor has them, the picture's top first."""
    if start > 0:
        return
    import rawpy

    try:
        opened = rawpy.imread(str(path))
    except rawpy.LibRawError as error:
        raise FrameSetAside(
            path, f"is named like RAW but cannot be read as RAW ({error!s})".replace("b'", "'")
        ) from None
    with opened as raw:
        check_size(path, raw.sizes.width, raw.sizes.height)
        if raw.raw_pattern is None or raw.raw_pattern.shape != (2, 2):
            raise FrameSetAside(path, "has a sensor without a 2 x 2 Bayer mosaic, which is not read here")
        letters = raw.color_desc.decode("ascii", "replace")
        pattern = "".join(letters[i] for i in raw.raw_pattern.ravel())
        if pattern not in PATTERNS:
            raise FrameSetAside(path, f"has the mosaic {pattern}, which is not read here")
        mosaic = raw.raw_image_visible.astype(np.float32)
        black = np.array([raw.black_level_per_channel[i] for i in raw.raw_pattern.ravel()], dtype=np.float32)
        white = float(raw.white_level)
    for place in range(4):
        mosaic[place // 2 :: 2, place % 2 :: 2] -= black[place]
    tags = read_tags(path)
    length = exposure_of(tags)
    time, missing = None, None
    try:
        time = time_from_exif(tags, options.zone, length)
    except NoTimeError as error:
        missing = str(error)
    yield Frame(
        path=path,
        data=mosaic if options.as_recorded else green_luminance(mosaic, pattern),
        time=time,
        time_missing=missing,
        exposure_s=length,
        row_zero="top",
        colour=half_size_colour(mosaic, pattern) if options.colour and not options.as_recorded else None,
        mosaic=pattern,
        saturation_adu=white - float(black.mean()),
        camera=camera_of(tags),
        header=dict(tags),
    )
