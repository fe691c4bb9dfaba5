"""SER: the openly specified container of high-speed planetary cameras (SER format description, version 3, 2014)."""

from __future__ import annotations

import struct
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from imaging.frames.frame import Frame
from imaging.frames.mosaic import green_luminance, half_size_colour
from imaging.frames.reading import ReadOptions, check_size
from imaging.frames.times import NoTimeError, time_from_ticks
from planner.errors import FrameSetAside

_MAGIC = b"LUCAM-RECORDER"
_HEADER = struct.Struct("<14siiiiiii40s40s40sqq")
_MOSAICS = {8: "RGGB", 9: "GRBG", 10: "GBRG", 11: "BGGR"}
_MONO, _RGB, _BGR = 0, 100, 101


def recognises(head: bytes, path: Path) -> bool:
    """Say whether the file begins as SER does."""
    return head.startswith(_MAGIC)


def count(path: Path) -> int:
    """Return the number of frames."""
    with open(path, "rb") as file:
        return int(_header(path, file.read(_HEADER.size))[7])


def frames(path: Path, options: ReadOptions, start: int = 0, stop: int | None = None) -> Iterator[Frame]:
    """Yield the frames of the file, read one by one from a memory map."""
    with open(path, "rb") as file:
        header = _header(path, file.read(_HEADER.size))
    _, _, colour_id, _, width, height, depth, total, _, instrument, _, _, _ = header
    check_size(path, width, height)
    planes = 3 if colour_id in (_RGB, _BGR) else 1
    if colour_id not in (_MONO, _RGB, _BGR, *_MOSAICS):
        raise FrameSetAside(path, f"has SER colour kind {colour_id}, which is not read here")
    bytes_each = 1 if depth <= 8 else 2
    frame_bytes = width * height * planes * bytes_each
    size = path.stat().st_size
    if size < _HEADER.size + frame_bytes * total:
        raise FrameSetAside(
            path, f"is cut short: {total} frames promised, {(size - _HEADER.size) // frame_bytes} there"
        )
    stamps = _stamps(path, _HEADER.size + frame_bytes * total, total, size)
    pixels = np.memmap(path, dtype=np.uint8, mode="r")
    order = None
    for index in range(start, total if stop is None else min(stop, total)):
        at = _HEADER.size + index * frame_bytes
        raw = pixels[at : at + frame_bytes]
        if bytes_each == 2:
            order = order or _byte_order(raw, width)
            raw = raw.view(order)
        picture = raw.reshape((height, width, 3) if planes == 3 else (height, width))
        time, missing = None, None
        try:
            if stamps is None:
                raise NoTimeError("the file has no time stamps of its frames")
            time = time_from_ticks(int(stamps[index]), f"SER time stamp {index}")
        except NoTimeError as error:
            missing = str(error)
        mosaic = _MOSAICS.get(colour_id)
        data, colour = picture.astype(np.float32), None
        if planes == 3:
            colour = data[..., ::-1] if colour_id == _BGR else data
            data = data.mean(axis=-1, dtype=np.float32)
        elif mosaic is not None and not options.as_recorded:
            colour = half_size_colour(data, mosaic) if options.colour else None
            data = green_luminance(data, mosaic)
        yield Frame(
            path=path,
            data=data,
            time=time,
            time_missing=missing,
            exposure_s=None,
            row_zero="top",
            colour=colour if options.colour else None,
            mosaic=mosaic,
            saturation_adu=float(2**depth - 1),
            camera=instrument.split(b"\0")[0].decode("ascii", "replace").strip() or None,
            frame_index=index,
        )


def _header(path: Path, head: bytes) -> tuple:
    if len(head) < _HEADER.size:
        raise FrameSetAside(path, "is cut short within its header")
    found = _HEADER.unpack(head)
    _, _, _, _, width, height, depth, total, *_ = found
    if not (0 < width < 65536 and 0 < height < 65536 and 1 <= depth <= 16 and total > 0):
        raise FrameSetAside(
            path, f"has an impossible SER header ({width} x {height}, {depth} bit, {total} frames)"
        )
    return found


def _stamps(path: Path, at: int, total: int, size: int) -> np.ndarray | None:
    if size < at + 8 * total:
        return None
    stamps = np.fromfile(path, dtype="<i8", count=total, offset=at)
    return stamps if (stamps > 0).all() else None


def _byte_order(raw: np.ndarray, width: int) -> str:
    """Return the byte order in which neighbouring pixels are more alike: writers disagree on what the flag means."""
    rough = {}
    for order in ("<u2", ">u2"):
        row = raw[: 2 * width * 64].view(order).astype(np.float64)
        rough[order] = np.abs(np.diff(row)).mean()
    return min(rough, key=lambda order: rough[order])
