"""TIFF: 8 and 16 bits and float, grey or colour, one page a frame, with EXIF times."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from imaging.frames.exif import camera_of, exposure_of, read_tags, turned
from imaging.frames.frame import Frame
from imaging.frames.reading import ReadOptions, check_size
from imaging.frames.times import NoTimeError, time_from_exif
from planner.errors import FrameSetAside

_GREY, _COLOUR = (0, 1), (2,)  # PhotometricInterpretation (TIFF 6.0, section 3)


def recognises(head: bytes, path: Path) -> bool:
    """Say whether the file begins as TIFF does (camera RAW files do too; they are asked before)."""
    return head[:4] in (b"II*\x00", b"MM\x00*", b"II+\x00", b"MM\x00+")


def count(path: Path) -> int:
    """Return the number of pages."""
    import tifffile

    with tifffile.TiffFile(path) as file:
        return len(file.pages)


def frames(path: Path, options: ReadOptions, start: int = 0, stop: int | None = None) -> Iterator[Frame]:
    """Yield the pages of the file."""
    import tifffile

    tags = read_tags(path)
    length = exposure_of(tags)
    time, missing = None, None
    with tifffile.TiffFile(path) as file:
        total = len(file.pages)
        try:
            if total > 1:
                raise NoTimeError(f"EXIF tells no time for single pages of {total}")
            time = time_from_exif(tags, options.zone, length)
        except NoTimeError as error:
            missing = str(error)
        for index in range(start, total if stop is None else min(stop, total)):
            page: Any = file.pages[index]
            check_size(path, page.imagewidth, page.imagelength)
            if int(page.photometric) not in _GREY + _COLOUR:
                raise FrameSetAside(
                    path, f"holds TIFF pixels of kind {page.photometric!s}, which are not read here"
                )
            pixels = page.asarray()
            if pixels.ndim == 3 and pixels.shape[0] in (3, 4) and pixels.shape[2] not in (3, 4):
                pixels = np.moveaxis(pixels, 0, -1)
            if pixels.ndim == 3:
                pixels = pixels[..., :3] if pixels.shape[2] >= 3 else pixels[..., 0]
            if pixels.ndim != 2 + (pixels.shape[-1] == 3 and pixels.ndim == 3):
                raise FrameSetAside(path, f"holds an array of shape {pixels.shape}, which is no picture")
            if int(page.photometric) == 0 and pixels.dtype.kind == "u":
                pixels = np.iinfo(pixels.dtype).max - pixels  # WhiteIsZero
            pixels = turned(pixels, tags)
            is_colour = pixels.ndim == 3
            yield Frame(
                path=path,
                data=pixels.mean(axis=-1, dtype=np.float32) if is_colour else pixels.astype(np.float32),
                time=time,
                time_missing=missing,
                exposure_s=length,
                row_zero="top",
                colour=pixels.astype(np.float32) if is_colour and options.colour else None,
                saturation_adu=float(np.iinfo(pixels.dtype).max) if pixels.dtype.kind == "u" else None,
                camera=camera_of(tags),
                header=dict(tags),
                frame_index=index,
            )
