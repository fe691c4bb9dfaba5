"""PNG and JPEG: 8 and 16 bits, grey or colour, with EXIF times and the orientation flag."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np

from imaging.frames.exif import camera_of, exposure_of, read_tags, turned
from imaging.frames.frame import Frame
from imaging.frames.reading import ReadOptions, check_size
from imaging.frames.times import NoTimeError, time_from_exif


def recognises(head: bytes, path: Path) -> bool:
    """Say whether the file begins as PNG or JPEG does."""
    return head.startswith((b"\x89PNG\r\n\x1a\n", b"\xff\xd8\xff"))


def frames(path: Path, options: ReadOptions, start: int = 0, stop: int | None = None) -> Iterator[Frame]:
    """Yield the one frame of the file."""
    if start > 0:
        return
    from PIL import Image

    Image.MAX_IMAGE_PIXELS = None  # our own limit below speaks of frames, not of bombs
    with Image.open(path) as image:
        check_size(path, *image.size)
        is_deep = image.mode.startswith("I;16") or (image.format == "PNG" and image.mode in ("I", "RGB"))
        pixels: np.ndarray | None = None
        if is_deep:  # Pillow reads 16-bit colour as 8-bit; OpenCV keeps it
            import cv2

            found = cv2.imread(str(path), cv2.IMREAD_UNCHANGED | cv2.IMREAD_IGNORE_ORIENTATION)
            if found is not None:
                pixels = found if found.ndim == 2 else found[..., 2::-1]
        if pixels is None:
            pixels = np.asarray(image if image.mode in ("L", "RGB") else image.convert("RGB"))
    tags = read_tags(path)
    pixels = turned(pixels, tags)
    length = exposure_of(tags)
    time, missing = None, None
    try:
        time = time_from_exif(tags, options.zone, length)
    except NoTimeError as error:
        missing = str(error)
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
    )
