"""Which quads the blind index holds: each star with three of its nearest, at six densities of stars over the sky.

A quad is told by a number, not by its four stars: the star it was made from and which of its neighbours. That takes a
quarter of the room, so that the index holds three times as many.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from itertools import combinations

import numpy as np

_CHUNK_QUADS = 400_000  # worked on together: bounds the memory


@dataclass(frozen=True)
class Level:
    """Stars of one density over the sky, and how many neighbours of each make its quads."""

    stars: int
    neighbours: int


# Each level holds a quarter of the stars of the one before: fields of 1.8, 3.7, 7.4, 15, 30, 60 degrees see about 40.
LEVELS = (
    Level(1_000_000, 8),
    Level(120_000, 6),
    Level(30_000, 8),
    Level(7_500, 10),
    Level(1_900, 13),
    Level(480, 15),
)


@dataclass(frozen=True)
class Neighbours:
    """The stars of a level: `rows` (n,) in the star list, `near` (n, k) which of them are each one's nearest."""

    rows: np.ndarray
    near: np.ndarray

    @cached_property
    def _chosen(self) -> np.ndarray:
        return np.array(list(combinations(range(self.near.shape[1]), 3)))

    @property
    def numbered(self) -> int:
        """How many quads are numbered in all, made earlier by another star or not."""
        return len(self._chosen) * len(self.rows)

    def quads(self, numbers: np.ndarray) -> np.ndarray:
        """Return the stars (n, 4) of the quads with these numbers, as rows of the level."""
        star, which = np.divmod(numbers.astype(np.int64), len(self._chosen))
        others = np.take_along_axis(self.near[star], self._chosen[which], axis=1)
        return np.column_stack([star, others])

    def numbers(self) -> Iterator[np.ndarray]:
        """Yield the numbers of the quads, each set of four stars once, some hundred thousand at a time."""
        number = len(self._chosen)
        each = max(1, _CHUNK_QUADS // number)
        for first in range(0, len(self.rows), each):
            star = np.arange(first, min(first + each, len(self.rows)))
            yield (star[:, None] * number + np.arange(number))[self._new(star)]

    def _new(self, star: np.ndarray) -> np.ndarray:
        """Say which quads (star, combination) no star of a smaller number makes too."""
        near = self.near[star]
        theirs = self.near[near]  # (n, k, k): the neighbours of the neighbours
        has_star = (theirs == star[:, None, None]).any(axis=2) & (near < star[:, None])
        has_other = (theirs[:, :, None, :] == near[:, None, :, None]).any(axis=3)
        new = np.ones((len(star), len(self._chosen)), dtype=bool)
        for a, b, c in ((0, 1, 2), (1, 0, 2), (2, 0, 1)):
            one, two, three = self._chosen[:, a], self._chosen[:, b], self._chosen[:, c]
            new &= ~(has_star[:, one] & has_other[:, one, two] & has_other[:, one, three])
        return new


def neighbours_of(vectors: np.ndarray, by_magnitude: np.ndarray, level: Level) -> Neighbours:
    """Return the stars of a level and their nearest; `vectors` (n, 3) of the star list, its rows by magnitude."""
    from scipy.spatial import cKDTree

    rows = _evenly_bright(vectors[by_magnitude], by_magnitude, level.stars)
    here = vectors[rows]
    _, near = cKDTree(here).query(here, k=min(level.neighbours, len(rows) - 1) + 1)
    # a star that stands where another does may not come first among its own
    itself = near == np.arange(len(rows))[:, None]
    itself[~itself.any(axis=1), -1] = True
    return Neighbours(rows.astype(np.int32), near[~itself].reshape(len(rows), -1).astype(np.int32))


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
