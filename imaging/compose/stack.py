"""Blending many warped frames into one; what is kept in memory does not grow with their number.

Mean, minimum and maximum keep one picture. Median and clipped mean need every value of a pixel: they keep the
frames while those fit in memory, else in a scratch file that they work through in bands of rows, else (many large
frames) they have the frames come round again; see `rounds`. NaN means "this frame does not reach here".
"""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Protocol

import numpy as np

from imaging.compose.reductions import clipped_mean, median
from imaging.compose.rounds import ClippedRounds, MedianRounds
from planner.errors import InputError

BLENDS = ("mean", "median", "clipped", "min", "max")
MEMORY_BYTES = 1_200_000_000
SCRATCH_BYTES = 4_000_000_000  # beyond it, reading frames again costs less than their copies on a disk
BAND_BYTES = 150_000_000
PIECE_BYTES = 2_000_000
FULL_WEIGHT = 250  # weights are kept in bytes


class Stack(Protocol):
    """Something that frames are added to: for every turn, the frames it names, one at a time.

    `how`: where values are kept, in words.
    """

    how: str

    def turns(self) -> Iterator[Sequence[int]]:
        """Yield the indices of the frames to add now; a stack that keeps no values asks for them several times."""
        ...

    def add(self, image: np.ndarray, weight: np.ndarray | None = None) -> None:
        """Take in one warped frame; `weight` (rows, columns) in 0..1 counts in means."""
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
    again: bool = False,
) -> Stack:
    """Return a stack for up to `frames` frames of this shape.

    `again`: the caller can give every frame several times (`turns`), so that no large scratch file is needed.
    `scratch`: the user's folder for one, used whatever its size. Raises InputError when the blend is unknown, or when
    the scratch folder has no room, before any frame is read.
    """
    if blend == "mean":
        return _Mean(shape, frames)
    if blend in ("min", "max"):
        return _Extreme(shape, frames, np.fmin if blend == "min" else np.fmax)
    if blend not in BLENDS:
        raise InputError(f"--blend: found {blend!r}; allowed are {', '.join(BLENDS)}")
    needed = 4 * frames * int(np.prod(shape))
    if again and scratch is None and needed > memory_bytes:
        if needed > SCRATCH_BYTES or not has_room(Path(tempfile.gettempdir()), needed):
            rounds = MedianRounds if blend == "median" else ClippedRounds
            return rounds(shape, frames, memory_bytes)
    return _Banded(shape, frames, blend, scratch, memory_bytes)


class _Mean:
    def __init__(self, shape: tuple[int, ...], frames: int):
        self.total = np.zeros(shape, np.float64)
        self.share = np.zeros(shape, np.float32)
        self.count = np.zeros(shape, np.uint16 if frames < 65536 else np.uint32)
        self.frames, self.how = frames, "sums are kept in memory"

    def turns(self) -> Iterator[Sequence[int]]:
        yield range(self.frames)

    def add(self, image: np.ndarray, weight: np.ndarray | None = None) -> None:
        reached = np.isfinite(image)
        heavy = np.float32(1) if weight is None else spread_over(weight, image)
        np.add(self.total, image * heavy, out=self.total, where=reached)
        np.add(self.share, heavy, out=self.share, where=reached)
        self.count += reached

    def result(self) -> tuple[np.ndarray, np.ndarray]:
        with np.errstate(invalid="ignore"):
            return (self.total / np.where(self.share, self.share, np.nan)).astype(np.float32), self.count


class _Extreme:
    def __init__(self, shape: tuple[int, ...], frames: int, choose: np.ufunc):
        self.best = np.full(shape, np.nan, np.float32)
        self.count = np.zeros(shape, np.uint16 if frames < 65536 else np.uint32)
        self.choose, self.frames, self.how = choose, frames, "the extreme is kept in memory"

    def turns(self) -> Iterator[Sequence[int]]:
        yield range(self.frames)

    def add(self, image: np.ndarray, weight: np.ndarray | None = None) -> None:
        self.choose(self.best, image, out=self.best)
        self.count += np.isfinite(image)

    def result(self) -> tuple[np.ndarray, np.ndarray]:
        return self.best, self.count


class _Banded:
    """Every value is kept, in memory or in a scratch file; weights as bytes beside them."""

    def __init__(
        self, shape: tuple[int, ...], frames: int, blend: str, scratch: Path | None, memory_bytes: int
    ):
        self.shape, self.blend, self.frames, self.added = shape, blend, frames, 0
        values = frames * int(np.prod(shape))
        self.weighted: bool | None = None
        self.in_memory = 4 * values <= memory_bytes
        self.how = f"all values are kept in memory ({4 * values / 1e9:.2g} GB)"
        if self.in_memory:
            self.cube = np.empty((frames, *shape), np.float32)
            return
        self.folder = Path(scratch) if scratch else Path(tempfile.gettempdir())
        require_room(self.folder, 5 * values, f"blending {frames} frames by median or clipped mean")
        self.file = tempfile.TemporaryFile(dir=self.folder)
        self.file.truncate(4 * values)
        self.how = f"all values are kept in a scratch file ({4 * values / 1e9:.2g} GB)"

    def turns(self) -> Iterator[Sequence[int]]:
        yield range(self.frames)

    def add(self, image: np.ndarray, weight: np.ndarray | None = None) -> None:
        if self.weighted is None:
            self.weighted = weight is not None and self.blend == "clipped"
            if self.weighted and self.in_memory:
                self.weights = np.empty((self.frames, *self.shape[:2]), np.uint8)
            elif self.weighted:
                self.weight_file = tempfile.TemporaryFile(dir=self.folder)
        if self.in_memory:
            self.cube[self.added] = image
        else:
            # written, not mapped: mapped pages of the scratch file would count as memory of the process
            self.file.write(np.ascontiguousarray(image, np.float32).data)
        if self.weighted:
            assert weight is not None
            heavy = np.ceil(FULL_WEIGHT * weight).astype(np.uint8)
            if self.in_memory:
                self.weights[self.added] = heavy
            else:
                self.weight_file.write(heavy.data)
        self.added += 1

    def result(self) -> tuple[np.ndarray, np.ndarray]:
        image = np.full(self.shape, np.nan, np.float32)
        count = np.zeros(self.shape, np.int32)
        if self.added:
            row_values = int(np.prod(self.shape[1:]))
            rows = max(1, BAND_BYTES // (4 * self.added * row_values))
            for first in range(0, self.shape[0], rows):
                band = slice(first, min(first + rows, self.shape[0]))
                cube, weight = self._band(band)
                # small pieces stay in the processor's cache, and two threads share them
                step = max(1, PIECE_BYTES // (4 * self.added * row_values))

                def piece(
                    low: int,
                    cube: np.ndarray = cube,
                    weight: np.ndarray | None = weight,
                    first: int = first,
                    step: int = step,
                ) -> None:
                    high = min(low + step, cube.shape[1])
                    into = slice(first + low, first + high)
                    part = None if weight is None else weight[:, low:high]
                    image[into], count[into] = self._reduced(cube[:, low:high], part)

                with ThreadPoolExecutor(2) as pool:
                    list(pool.map(piece, range(0, cube.shape[1], step)))
        if not self.in_memory:
            self.file.close()
            if self.weighted:
                self.weight_file.close()
        return image, count

    def _reduced(self, cube: np.ndarray, weight: np.ndarray | None) -> tuple[np.ndarray, np.ndarray]:
        if self.blend == "median":
            return median(cube)
        if weight is not None:
            weight = np.broadcast_to(
                weight.reshape(weight.shape + (1,) * (cube.ndim - weight.ndim)).astype(np.float32), cube.shape
            )
        return clipped_mean(cube, weight=weight)

    def _band(self, band: slice) -> tuple[np.ndarray, np.ndarray | None]:
        """Return the values, and the weights if any, of these rows of every frame."""
        if self.in_memory:
            return self.cube[: self.added, band], self.weights[: self.added, band] if self.weighted else None
        cube = np.empty((self.added, band.stop - band.start, *self.shape[1:]), np.float32)
        self._read(self.file, cube, self.shape, band)
        if not self.weighted:
            return cube, None
        weight = np.empty(cube.shape[:3], np.uint8)
        self._read(self.weight_file, weight, self.shape[:2], band)
        return cube, weight

    def _read(self, file, into: np.ndarray, shape: tuple[int, ...], band: slice) -> None:  # type: ignore[no-untyped-def]
        row = int(np.prod(shape[1:]))
        for index in range(self.added):
            file.seek(into.itemsize * row * (index * shape[0] + band.start))
            file.readinto(into[index].data)


def spread_over(weight: np.ndarray, image: np.ndarray) -> np.ndarray:
    """Return a weight (rows, columns) in a shape that multiplies an image of one or three planes."""
    return weight if image.ndim == 2 else weight[..., None]


def _free_bytes(folder: Path) -> int:
    while not folder.exists():
        folder = folder.parent
    return shutil.disk_usage(folder).free


def has_room(folder: Path, needed_bytes: int) -> bool:
    """Return whether the disk of `folder` has room for as much and a twentieth."""
    return _free_bytes(folder) >= 1.05 * needed_bytes


CURE = "fewer frames, a coarser --scale, --scratch on a larger disk, or --blend mean"


def require_room(folder: Path, needed_bytes: int, purpose: str, cure: str = CURE) -> None:
    """Raise InputError when the disk of `folder` has less room than needed and a twentieth."""
    if not has_room(folder, needed_bytes):
        raise InputError(
            f"{folder}: {purpose} needs {needed_bytes / 1e9:.2g} GB of disk, {_free_bytes(folder) / 1e9:.2g} GB are "
            f"free; choose {cure}"
        )
