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
from math import comb
from pathlib import Path

import numpy as np

from imaging.stars.groups import coded, local_members

FORMAT = 5
CODE_STEPS = 255  # codes are kept as 8-bit fractions: an error of 0.001, a tenth of the tolerance
CELL = 0.02  # side of a cell of code space
_CELLS = 51  # cells a side
_CHUNK = 50_000  # stars, or quads, worked on together: bounds the memory


@dataclass(frozen=True)
class Level:
    """Stars of one density over the sky, and how many neighbours of each make its quads."""

    stars: int
    neighbours: int


# Each level holds a quarter of the stars of the one before: fields of 1.8, 3.7, 7.4, 15, 30, 60 degrees see about 40.
LEVELS = (
    Level(1_000_000, 5),
    Level(120_000, 6),
    Level(30_000, 8),
    Level(7_500, 10),
    Level(1_900, 13),
    Level(480, 15),
)


@dataclass(frozen=True)
class QuadIndex:
    """n quads sorted by cell: `keys` (n,) uint32, `codes` (n, 5) uint8, `stars` (n, 4) rows of the star list."""

    keys: np.ndarray
    codes: np.ndarray
    stars: np.ndarray

    def __len__(self) -> int:
        """Return the number of quads."""
        return len(self.keys)

    def like(self, codes: np.ndarray, tolerance: float) -> tuple[np.ndarray, np.ndarray]:
        """Return pairs (row of `codes`, row of the index) whose codes differ by less than `tolerance` (Euclidean)."""
        low = np.clip(((codes - tolerance) / CELL).astype(int), 0, _CELLS - 1)
        high = np.clip(((codes + tolerance) / CELL).astype(int), 0, _CELLS - 1)
        owner, cells = np.arange(len(codes)), low[:, :1] * 0
        for axis in range(5):  # every cell that the ball may touch, axis by axis
            both = np.concatenate([low[owner, axis], high[owner, axis]])
            distinct = np.concatenate([np.ones(len(owner), bool), high[owner, axis] > low[owner, axis]])
            middle = high[owner, axis] - low[owner, axis] > 1
            owner2, cells2 = (
                np.tile(owner, 2)[distinct],
                np.tile(cells[:, 0], 2)[distinct] * _CELLS + both[distinct],
            )
            if middle.any():
                extra = cells[middle, 0] * _CELLS + low[owner[middle], axis] + 1
                owner2, cells2 = np.append(owner2, owner[middle]), np.append(cells2, extra)
            owner, cells = owner2, cells2[:, None]
        start = np.searchsorted(self.keys, cells[:, 0].astype(np.uint32), side="left")
        stop = np.searchsorted(self.keys, cells[:, 0].astype(np.uint32), side="right")
        number = stop - start
        rows = np.repeat(start - np.concatenate([[0], np.cumsum(number)[:-1]]), number) + np.arange(
            number.sum()
        )
        owner = np.repeat(owner, number)
        found_owner, found_rows = [], []
        for part in range(0, len(rows), 500_000):
            here = slice(part, part + 500_000)
            away = self.codes[rows[here]].astype(np.float32) / CODE_STEPS - codes[owner[here]].astype(
                np.float32
            )
            near = np.einsum("ni,ni->n", away, away) < tolerance**2
            found_owner.append(owner[here][near])
            found_rows.append(rows[here][near])
        if not found_rows:
            return np.empty(0, int), np.empty(0, int)
        return np.concatenate(found_owner), np.concatenate(found_rows)


def quad_index(tick: Callable[[int, int], None] | None = None) -> QuadIndex:
    """Return the index, building it where it does not exist yet (about a minute of one core, with progress)."""
    return _loaded(_folder()) or _built(tick)


@lru_cache(maxsize=2)
def _open(folder: Path) -> QuadIndex:
    parts = [
        np.load(folder / f"{name}.npy", mmap_mode="r", allow_pickle=False)
        for name in ("keys", "codes", "stars")
    ]
    if not len(parts[0]) == len(parts[1]) == len(parts[2]):
        raise ValueError("parts of different length")
    return QuadIndex(*parts)


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
    digest.update(repr((FORMAT, LEVELS, CELL)).encode())
    try:
        return user_cache_path("syzygraph") / f"quads-{digest.hexdigest()[:16]}"
    except OSError:
        return None


_IN_MEMORY: list[QuadIndex] = []


def _built(tick: Callable[[int, int], None] | None) -> QuadIndex:
    if _IN_MEMORY:
        return _IN_MEMORY[0]
    index = build_index(tick)
    folder = _folder()
    part: Path | None = None
    try:
        if folder is None:
            raise OSError("no cache folder")
        folder.parent.mkdir(parents=True, exist_ok=True)
        part = Path(tempfile.mkdtemp(prefix=".part-quads-", dir=folder.parent))
        for name in ("keys", "codes", "stars"):
            np.save(part / f"{name}.npy", getattr(index, name), allow_pickle=False)
        if folder.exists() and _loaded(folder) is None:
            shutil.rmtree(folder, ignore_errors=True)  # left damaged by an older run
        os.rename(part, folder)
    except OSError:  # not writable, or another process was first
        if part is not None:
            shutil.rmtree(part, ignore_errors=True)
    loaded = _loaded(folder)
    if loaded is not None:
        return loaded
    _IN_MEMORY.append(index)
    return index


def build_index(tick: Callable[[int, int], None] | None = None) -> QuadIndex:
    """Return the index of the installed catalogue, made in memory.

    Positions are of 2016.0; the proper motion of a century changes a quad's code by less than the tolerance for all but
    a few stars.
    """
    from planner.sky.starlist import star_list

    table = star_list()
    ra, dec = np.radians(table["ra_deg"]), np.radians(table["dec_deg"])
    vectors = np.column_stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
    by_magnitude = np.argsort(table["v"], kind="stable")
    most = sum(min(level.stars, len(table)) * comb(level.neighbours, 3) for level in LEVELS)
    # filled from the front: what is never written to takes no memory
    keys, codes, stars = (
        np.empty(most, np.uint32),
        np.empty((most, 5), np.uint8),
        np.empty((most, 4), np.uint32),
    )
    count = 0
    total = sum(min(level.stars, len(table)) for level in LEVELS)
    done = 0
    for level in LEVELS:
        rows = _evenly_bright(vectors[by_magnitude], by_magnitude, level.stars)
        here = vectors[rows]
        members = _members(here, level.neighbours)
        for part in range(0, len(members), _CHUNK):
            groups = coded(here, members[part : part + _CHUNK])
            keep = groups.codes[:, -1] > 0.12  # flat or cramped quads are the first to be lost to noise
            new = slice(count, count + int(keep.sum()))
            keys[new] = _cell_keys(groups.codes[keep])
            codes[new] = np.round(groups.codes[keep] * CODE_STEPS)
            stars[new] = rows[groups.stars[keep]]
            count = new.stop
            if tick is not None:
                tick(done + len(rows) * min(part + _CHUNK, len(members)) // len(members), total)
        done += len(rows)
    del vectors, members, here
    order = np.argsort(keys[:count], kind="stable").astype(np.uint32)
    for table_part in (keys[:, None], codes, stars):  # a column at a time, in place
        for column in table_part.T:
            column[:count] = column[:count][order]
    return QuadIndex(keys[:count], codes[:count], stars[:count])


def _members(vectors: np.ndarray, neighbours: int) -> np.ndarray:
    """Return the members (n, 4) of the quads of all stars with their nearest neighbours, each quad once."""
    from scipy.spatial import cKDTree

    tree = cKDTree(vectors)
    each = comb(neighbours, 3)
    members = np.empty((len(vectors) * each, 4), np.int32)
    for first in range(0, len(vectors), _CHUNK):
        part = local_members(tree, vectors[first : first + _CHUNK], 4, neighbours)
        members[first * each : first * each + len(part)] = part
    _, unique = np.unique(_mixed(members), return_index=True)
    return members[unique]


def _cell_keys(codes: np.ndarray) -> np.ndarray:
    cells = np.clip((codes / CELL).astype(np.int64), 0, _CELLS - 1)
    key = cells[:, 0]
    for axis in range(1, 5):
        key = key * _CELLS + cells[:, axis]
    return key.astype(np.uint32)


def _mixed(members: np.ndarray) -> np.ndarray:
    """Return one 64-bit number a group (sorted members), different for different groups but for 1 in 1e5 tables."""
    key = np.zeros(len(members), dtype=np.uint64)
    with np.errstate(over="ignore"):
        for column in range(members.shape[1]):
            key = (key ^ members[:, column].astype(np.uint64)) * np.uint64(0x9E3779B97F4A7C15)
            key ^= key >> np.uint64(29)
    return key


def _evenly_bright(vectors: np.ndarray, rows: np.ndarray, count: int) -> np.ndarray:
    """Return rows of about `count` stars, the brightest of their neighbourhood: a field shows its own brightest."""
    if count >= len(rows):
        return rows
    z_bins = max(4, round(np.sqrt(count / 6 / np.pi) * 2))  # cells of equal area with about six stars
    z = np.minimum(((vectors[:, 2] + 1) / 2 * z_bins).astype(int), z_bins - 1)
    ring = np.sqrt(np.maximum(1 - (2 * (z + 0.5) / z_bins - 1) ** 2, 1e-3))
    around = np.maximum(3, np.round(ring * z_bins * np.pi / 2 * (2 / np.pi) * 1.57).astype(int))
    azimuth = np.arctan2(vectors[:, 1], vectors[:, 0]) / (2 * np.pi) % 1
    cell = z * 100_000 + np.minimum((azimuth * around).astype(int), around - 1)
    order = np.argsort(cell, kind="stable")  # within a cell the order stays that of brightness
    ordered = cell[order]
    start = np.flatnonzero(np.append(True, ordered[1:] != ordered[:-1]))
    rank = np.arange(len(ordered)) - np.repeat(start, np.diff(np.append(start, len(ordered))))
    share = max(1, round(count / len(start)))
    return rows[np.sort(order[rank < share])]
