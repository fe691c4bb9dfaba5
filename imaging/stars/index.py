"""The blind index: codes of star quads over the whole sky, sorted so that like shapes lie together.

Built from the installed catalogue on first use into the user's cache folder, memory mapped afterwards; in memory when
the folder cannot be written. Safe under two processes: each builds under a name of its own and renames it at the end.
"""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np

from imaging.stars.gathering import (
    CELL_STEPS,
    CELLS,
    CODE_STEPS,
    FINE_CELLS,
    SHAPE_BITS,
    WITHIN_CELL,
    Gathered,
    gathered,
)
from imaging.stars.neighbours import LEVELS, Neighbours

FORMAT = 6
_CHUNK = 500_000  # quads looked at together: bounds the memory
_POWERS = (4, 3, 2, 1, 0)
# where in its cell a quad lies, in steps of each code
_PLACES = np.stack(
    [np.arange(WITHIN_CELL) // CELL_STEPS**power % CELL_STEPS for power in _POWERS], axis=1
).astype(np.float32)


@dataclass(frozen=True)
class QuadIndex:
    """n quads in the order of their shapes: `packed` (n, 3) uint16, see `imaging.stars.gathering`.

    `directory`: where the quads of each cell of the first three codes begin.
    """

    directory: np.ndarray
    packed: np.ndarray
    levels: tuple[Neighbours, ...]

    def __len__(self) -> int:
        """Return the number of quads."""
        return len(self.packed)

    @property
    def nbytes(self) -> int:
        """How much room the index takes, in memory or on disk."""
        levels = sum(level.rows.nbytes + level.near.nbytes for level in self.levels)
        return self.directory.nbytes + self.packed.nbytes + levels

    def quads(self, rows: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return the stars (n, 4) of the quads in these rows of the index, as rows of the star list, and their share.

        The share (n,) is what a quad has of its level: a field may be of any size, so that quads of a level count less
        the more there are.
        """
        stars = np.empty((len(rows), 4), dtype=np.int64)
        share = np.empty(len(rows))
        whole = np.zeros((len(rows), 4), dtype="<u2")
        whole[:, :3] = self.packed[rows]
        numbers = whole.view("<i8")[:, 0] >> SHAPE_BITS
        first = 0
        for level in self.levels:
            here = (numbers >= first) & (numbers < first + level.numbered)
            stars[here] = level.rows[level.quads(numbers[here] - first)]
            share[here] = 1 / level.numbered
            first += level.numbered
        return stars, share

    def like(self, codes: np.ndarray, tolerance: float) -> tuple[np.ndarray, np.ndarray]:
        """Return pairs (row of `codes`, row of the index) whose codes differ by less than `tolerance` (Euclidean)."""
        steps = codes * CODE_STEPS
        reach = tolerance * CODE_STEPS + 0.5  # the codes kept are rounded
        low = np.clip(np.ceil(steps - reach) // CELL_STEPS, 0, CELLS - 1).astype(np.int64)
        high = np.clip(np.floor(steps + reach) // CELL_STEPS, 0, CELLS - 1).astype(np.int64)
        owner, cells = np.arange(len(codes)), np.zeros(len(codes), dtype=np.int64)
        away2 = np.zeros(len(codes))  # of the cell from the code
        for axis in range(5):  # every cell that the ball may touch, axis by axis
            number = high[owner, axis] - low[owner, axis] + 1
            owner, cells, away2 = np.repeat(owner, number), np.repeat(cells, number), np.repeat(away2, number)
            nth = np.arange(len(owner)) - np.repeat(np.cumsum(number) - number, number)
            cell = low[owner, axis] + nth
            beyond = np.abs(steps[owner, axis] - (cell + 0.5) * CELL_STEPS + 0.5) - CELL_STEPS / 2
            away2 = away2 + np.maximum(beyond, 0) ** 2
            touched = away2 < reach**2
            owner, cells, away2 = owner[touched], cells[touched] * CELLS + cell[touched], away2[touched]
        start, stop = self._first(cells), self._first(cells + 1)
        corner = np.stack([cells // CELLS**power % CELLS for power in _POWERS], axis=1) * CELL_STEPS
        corner = (corner - steps[owner]).astype(np.float32)
        found_owner, found_rows = [np.empty(0, int)], [np.empty(0, int)]
        ends = np.cumsum(stop - start)
        for part in range(0, int(ends[-1]) if len(ends) else 0, _CHUNK):
            nth = np.arange(part, min(part + _CHUNK, int(ends[-1])))
            box = np.searchsorted(ends, nth, side="right")
            rows = stop[box] - (ends[box] - nth)
            away = _PLACES[self._shape(rows) % WITHIN_CELL] + corner[box]
            near = np.einsum("ni,ni->n", away, away) < (tolerance * CODE_STEPS) ** 2
            found_owner.append(owner[box[near]])
            found_rows.append(rows[near])
        return np.concatenate(found_owner), np.concatenate(found_rows)

    def _first(self, cells: np.ndarray) -> np.ndarray:
        """Return the first row at or after each cell, halving what is left of its entry of the directory."""
        coarse, fine = np.divmod(cells, FINE_CELLS)
        low, high = self.directory[coarse].astype(np.int64), self.directory[coarse + 1].astype(np.int64)
        still = np.flatnonzero(low < high)
        while len(still):
            middle = (low[still] + high[still]) // 2
            before = self._shape(middle) < fine[still] * WITHIN_CELL
            low[still[before]] = middle[before] + 1
            high[still[~before]] = middle[~before]
            still = still[low[still] < high[still]]
        return low

    def _shape(self, rows: np.ndarray) -> np.ndarray:
        """Return the cell of the last two codes and the place in the cell of all five, as one number (n,)."""
        low = np.ndarray((len(self),), "<u4", self.packed.data, 0, self.packed.strides[:1])
        return low[rows] & np.uint32((1 << SHAPE_BITS) - 1)


def quad_index(tick: Callable[[int, int], None] | None = None) -> QuadIndex:
    """Return the index, building it where it does not exist yet (about a minute of one core, with progress)."""
    return _loaded(_folder()) or _built(tick)


@lru_cache(maxsize=2)
def _open(folder: Path) -> QuadIndex:
    def part(name: str) -> np.ndarray:
        return np.load(folder / f"{name}.npy", mmap_mode="r", allow_pickle=False)

    levels = tuple(Neighbours(part(f"rows-{i}"), part(f"near-{i}")) for i in range(len(LEVELS)))
    index = QuadIndex(part("directory"), part("packed"), levels)
    if len(index) != index.directory[-1]:
        raise ValueError("parts of different length")
    return index


def _loaded(folder: Path | None) -> QuadIndex | None:
    if folder is None:
        return None
    with suppress(OSError, ValueError, EOFError):
        return _open(folder)
    return None


def _folder() -> Path | None:
    import hashlib

    from platformdirs import user_cache_path

    from planner.sky.starlist import star_list

    stars = star_list()
    digest = hashlib.sha256()
    for name in ("source", "hip", "v"):
        digest.update(np.ascontiguousarray(stars[name]).tobytes())
    digest.update(repr((FORMAT, LEVELS, CELL_STEPS)).encode())
    try:
        return user_cache_path("syzygraph") / f"quads-{digest.hexdigest()[:16]}"
    except OSError:
        return None


_IN_MEMORY: list[QuadIndex] = []


def _built(tick: Callable[[int, int], None] | None) -> QuadIndex:
    if _IN_MEMORY:
        return _IN_MEMORY[0]
    quads = gathered(tick)
    folder = _folder()
    part: Path | None = None
    try:
        if folder is None:
            raise OSError("no cache folder")
        folder.parent.mkdir(parents=True, exist_ok=True)
        part = Path(tempfile.mkdtemp(prefix=".part-quads-", dir=folder.parent))
        _write(quads, part)
        if folder.exists() and _loaded(folder) is None:
            shutil.rmtree(folder, ignore_errors=True)  # left damaged by an older run
        os.rename(part, folder)
    except OSError:  # not writable, or another process was first
        if part is not None:
            shutil.rmtree(part, ignore_errors=True)
    loaded = _loaded(folder)
    if loaded is None:
        loaded = QuadIndex(quads.directory(), np.concatenate(list(quads.in_order())), quads.levels)
        _IN_MEMORY.append(loaded)
    return loaded


def _write(quads: Gathered, folder: Path) -> None:
    """Write the index, a part of the quads at a time: they are never all in memory twice."""
    np.save(folder / "directory.npy", quads.directory(), allow_pickle=False)
    for i, level in enumerate(quads.levels):
        np.save(folder / f"rows-{i}.npy", level.rows, allow_pickle=False)
        np.save(folder / f"near-{i}.npy", level.near, allow_pickle=False)
    header = {"descr": "<u2", "fortran_order": False, "shape": (len(quads), 3)}
    with (folder / "packed.npy").open("wb") as file:
        np.lib.format.write_array_header_1_0(file, header)
        for packed in quads.in_order():
            file.write(packed.tobytes())
