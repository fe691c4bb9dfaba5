"""Blending many warped frames into one: each frame is seen once, and what is kept does not grow with their number.

Mean, minimum and maximum keep one picture in memory. Median and clipped mean need every value of a pixel at once:
they keep the frames in memory while those fit, else in a scratch file, and work through it in bands of rows.
NaN means "this frame does not reach here" and takes no part.
"""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Protocol

import numpy as np

from planner.errors import InputError

BLENDS = ("mean", "median", "clipped", "min", "max")
MEMORY_BYTES = 1_200_000_000
BAND_BYTES = 150_000_000
PIECE_BYTES = 2_000_000


class Stack(Protocol):
    """Something that frames are added to, one at a time."""

    def add(self, image: np.ndarray) -> None:
        """Take in one warped frame."""
        ...

    def result(self) -> tuple[np.ndarray, np.ndarray]:
        """Return the blend (float32, NaN where no frame reaches) and the number of values used at each pixel."""
        ...


def new_stack(
    blend: str,
    shape: tuple[int, ...],
    frames: int,
    scratch: Path | None = None,
    memory_bytes: int = MEMORY_BYTES,
    kappa: float = 3.0,
) -> Stack:
    """Return a stack for up to `frames` frames of this shape.

    Raises InputError when the blend is unknown, or when the scratch folder has no room, before any frame is read.
    """
    if blend == "mean":
        return _Mean(shape)
    if blend in ("min", "max"):
        return _Extreme(shape, np.fmin if blend == "min" else np.fmax)
    if blend not in BLENDS:
        raise InputError(f"--blend: found {blend!r}; allowed are {', '.join(BLENDS)}")
    reduce = median if blend == "median" else lambda cube: clipped_mean(cube, kappa)
    return _Banded(shape, frames, reduce, scratch, memory_bytes)


class _Mean:
    def __init__(self, shape: tuple[int, ...]):
        self.total = np.zeros(shape, np.float64)
        self.count = np.zeros(shape, np.int32)

    def add(self, image: np.ndarray) -> None:
        reached = np.isfinite(image)
        np.add(self.total, image, out=self.total, where=reached)
        self.count += reached

    def result(self) -> tuple[np.ndarray, np.ndarray]:
        with np.errstate(invalid="ignore"):
            return (self.total / np.where(self.count, self.count, np.nan)).astype(np.float32), self.count


class _Extreme:
    def __init__(self, shape: tuple[int, ...], choose: np.ufunc):
        self.best = np.full(shape, np.nan, np.float32)
        self.count = np.zeros(shape, np.int32)
        self.choose = choose

    def add(self, image: np.ndarray) -> None:
        self.choose(self.best, image, out=self.best)
        self.count += np.isfinite(image)

    def result(self) -> tuple[np.ndarray, np.ndarray]:
        return self.best, self.count


class _Banded:
    def __init__(
        self,
        shape: tuple[int, ...],
        frames: int,
        reduce: Callable[[np.ndarray], tuple[np.ndarray, np.ndarray]],
        scratch: Path | None,
        memory_bytes: int,
    ):
        self.shape, self.reduce, self.added = shape, reduce, 0
        needed = 4 * frames * int(np.prod(shape))
        self.file = None
        if needed <= memory_bytes:
            self.cube = np.empty((frames, *shape), np.float32)
        else:
            folder = Path(scratch) if scratch else Path(tempfile.gettempdir())
            require_room(folder, needed, f"blending {frames} frames by median or clipped mean")
            self.file = tempfile.TemporaryFile(dir=folder)
            self.file.truncate(needed)

    def add(self, image: np.ndarray) -> None:
        if self.file is None:
            self.cube[self.added] = image
        else:
            # written, not mapped: mapped pages of the scratch file would count as memory of the process
            self.file.write(np.ascontiguousarray(image, np.float32).data)
        self.added += 1

    def result(self) -> tuple[np.ndarray, np.ndarray]:
        image = np.full(self.shape, np.nan, np.float32)
        count = np.zeros(self.shape, np.int32)
        if self.added:
            row_values = int(np.prod(self.shape[1:]))
            rows = max(1, BAND_BYTES // (4 * self.added * row_values))
            for first in range(0, self.shape[0], rows):
                band = slice(first, min(first + rows, self.shape[0]))
                cube = self._band(band, row_values)
                # small pieces stay in the processor's cache, and two threads share them
                step = max(1, PIECE_BYTES // (4 * self.added * row_values))

                def piece(low: int, cube: np.ndarray = cube, first: int = first, step: int = step) -> None:
                    high = min(low + step, cube.shape[1])
                    into = slice(first + low, first + high)
                    image[into], count[into] = self.reduce(cube[:, low:high])

                with ThreadPoolExecutor(2) as pool:
                    list(pool.map(piece, range(0, cube.shape[1], step)))
        if self.file is not None:
            self.file.close()
        return image, count

    def _band(self, band: slice, row_values: int) -> np.ndarray:
        if self.file is None:
            return self.cube[: self.added, band]
        cube = np.empty((self.added, band.stop - band.start, *self.shape[1:]), np.float32)
        frame_values = self.shape[0] * row_values
        for index in range(self.added):
            self.file.seek(4 * (index * frame_values + band.start * row_values))
            self.file.readinto(cube[index].data)
        return cube


def require_room(folder: Path, needed_bytes: int, purpose: str) -> None:
    """Raise InputError when the disk of `folder` has less room than needed and a twentieth."""
    while not folder.exists():
        folder = folder.parent
    free = shutil.disk_usage(folder).free
    if free < 1.05 * needed_bytes:
        raise InputError(
            f"{folder}: {purpose} needs {needed_bytes / 1e9:.1f} GB of disk, {free / 1e9:.1f} GB are free; "
            "choose fewer frames, a coarser --scale, --scratch on a larger disk, or --blend mean"
        )


def _sorted(cube: np.ndarray) -> np.ndarray:
    """Return the cube sorted along axis 0, NaN last as infinity.

    Up to 40 planes by Batcher's merge exchange (Knuth 1998, The Art of Computer Programming 3, 5.2.2, algorithm M):
    every exchange is a minimum and a maximum of whole planes, several times faster here than sorting pixel by pixel.
    """
    ordered = np.where(np.isfinite(cube), cube, np.float32(np.inf))
    n = len(ordered)
    if n > 40:
        ordered.sort(axis=0)
        return ordered
    top = 1 << max(0, (n - 1).bit_length() - 1)
    p = top if n > 1 else 0
    low = np.empty(ordered.shape[1:], ordered.dtype)
    while p > 0:
        q, r, d = top, 0, p
        while d > 0:
            for i in range(n - d):
                if i & p == r:
                    np.minimum(ordered[i], ordered[i + d], out=low)
                    np.maximum(ordered[i], ordered[i + d], out=ordered[i + d])
                    ordered[i] = low
            d, q, r = q - p, q >> 1, p
        p >>= 1
    return ordered


def _middle(ordered: np.ndarray, count: np.ndarray) -> np.ndarray:
    """Return the median along axis 0 of sorted values of which the first `count` are finite."""
    n = len(ordered)
    if count.min() == n:
        return 0.5 * (ordered[(n - 1) // 2] + ordered[n // 2])
    low = np.take_along_axis(ordered, np.maximum((count - 1) // 2, 0)[None], axis=0)[0]
    high = np.take_along_axis(ordered, np.minimum(count // 2, n - 1)[None], axis=0)[0]
    return np.where(count > 0, 0.5 * (low + high), np.nan)


def median(cube: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the median along axis 0 without NaN, and the number of values."""
    count = np.isfinite(cube).sum(axis=0)
    with np.errstate(invalid="ignore"):
        return _middle(_sorted(cube), count).astype(np.float32), count


def clipped_mean(cube: np.ndarray, kappa: float = 3.0, rounds: int = 3) -> tuple[np.ndarray, np.ndarray]:
    """Return the mean along axis 0 of what lies within `kappa` sigma of the median, and the number of values.

    The first sigma is 1.4826 times the median absolute deviation, not below 0.8 of its median over the cube (a
    handful of values that happen to agree would else reject their neighbours); later ones are the standard
    deviation of what is left, corrected for the cut. Pixels with fewer than 3 values are plain means.
    """
    cube = np.asarray(cube, np.float32)
    finite = np.isfinite(cube)
    count = finite.sum(axis=0, dtype=np.int32)
    filled = np.where(finite, cube, np.float32(0))
    with np.errstate(invalid="ignore", divide="ignore"):
        if len(cube) < 3:
            return (filled.sum(axis=0) / np.where(count, count, np.nan)).astype(np.float32), count
        center = _middle(_sorted(cube), count).astype(np.float32)
        sigma = 1.4826 * _middle(_sorted(np.abs(cube - center)), count)
        enough = count >= 3
        if enough.any():
            sigma = np.maximum(sigma, 0.8 * np.median(sigma[enough]))
        # about the median, so that squares of large levels do not drown small spreads in float32
        away = np.where(finite, cube - center, np.float32(0))
        limit = np.maximum(kappa * sigma, 1e-6 * np.abs(center))
        limit = np.where(enough, limit, np.inf).astype(np.float32)
        keep = (np.abs(away) <= limit) & finite
        used, mean = count, np.zeros_like(center)
        for _ in range(rounds):
            used = keep.sum(axis=0, dtype=np.int32)
            kept = np.where(keep, away, np.float32(0))
            mean = kept.sum(axis=0) / np.maximum(used, 1)
            variance = np.einsum("i...,i...->...", kept, kept) / np.maximum(used, 1) - mean**2
            spread = np.sqrt(np.maximum(variance, 0) * used / np.maximum(used - 1, 1))
            limit = np.maximum(kappa * np.maximum(1.03 * spread, 0.8 * sigma), 1e-6 * np.abs(center))
            limit = np.where(enough, limit, np.inf).astype(np.float32)
            again = (np.abs(away - mean) <= limit) & finite
            if np.array_equal(again, keep):
                break
            keep = again
        used = keep.sum(axis=0, dtype=np.int32)
        mean = np.where(keep, away, np.float32(0)).sum(axis=0) / np.maximum(used, 1)
        return np.where(count > 0, center + mean, np.nan).astype(np.float32), used
