"""Small groups of stars and their codes: shapes that do not change when the camera turns, mirrors or zooms.

The code of a triple or quad is its mutual distances in falling order, each divided by the longest. It needs no choice
of a first star, is continuous when stars move, and is the same for a mirrored frame. (Geometric hashing: Wolfson &
Rigoutsos 1997, IEEE Comput. Sci. Eng. 4, 10.) Distances are chords between unit vectors, so wide fields need no
tangent plane.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations
from math import comb
from typing import Any

import numpy as np

MIN_EDGE = 0.06  # of the longest: shorter ones are noise and blends
_ALL_GROUPS = 30_000  # up to this many groups are all made, however far apart their stars


@dataclass(frozen=True)
class Groups:
    """n groups of k stars: indices (n, k) in canonical order, codes (n, edges - 1), longest chord (n,).

    `rows`: which of the groups asked for each one is.
    """

    stars: np.ndarray
    codes: np.ndarray
    longest: np.ndarray
    rows: np.ndarray

    def __len__(self) -> int:
        """Return the number of groups."""
        return len(self.stars)


def local_groups(
    vectors: np.ndarray,
    size: int,
    neighbours: int,
    longest_limit: float = np.inf,
    shortest_limit: float = 0.0,
) -> Groups:
    """Return the groups of each star with `size` - 1 of its nearest `neighbours`, each group once.

    `vectors`: (n, 3) unit vectors. Groups longer than `longest_limit` or shorter than `shortest_limit`
    (chord, rad) are left out.
    """
    from scipy.spatial import cKDTree

    count = len(vectors)
    near = min(neighbours, count - 1)
    if near < size - 1:
        return coded(vectors, np.empty((0, size), dtype=int))
    if near == count - 1 and comb(count, size) <= _ALL_GROUPS:
        return coded(vectors, np.array(list(combinations(range(count), size))), longest_limit, shortest_limit)
    stars = local_members(cKDTree(vectors), vectors, size, near)
    key = stars[:, 0].astype(np.int64)
    for column in range(1, size):
        key = key * count + stars[:, column]
    _, first = np.unique(key, return_index=True)
    return coded(vectors, stars[first], longest_limit, shortest_limit)


def local_members(tree: Any, vectors: np.ndarray, size: int, neighbours: int) -> np.ndarray:
    """Return members (n, size), sorted, of the groups that each star (k, 3) forms with its nearest in the tree."""
    _, index = tree.query(vectors, k=neighbours + 1)
    chosen = np.array(list(combinations(range(1, neighbours + 1), size - 1)))
    index = index.astype(np.int32)
    members = np.concatenate(
        [np.repeat(index[:, :1], len(chosen), axis=0), index[:, chosen].reshape(-1, size - 1)], axis=1
    )
    return np.sort(members, axis=1)


def coded(
    vectors: np.ndarray, stars: np.ndarray, longest_limit: float = np.inf, shortest_limit: float = 0.0
) -> Groups:
    """Return groups with their codes and their stars in canonical order (by the sum of distances to the others)."""
    size = stars.shape[1]
    edges = list(combinations(range(size), 2))
    # single precision is 1e-4 of the shortest chord in a field of 0.3 degrees, a fiftieth of the codes' tolerance
    x, y, z = (vectors[:, axis].astype(np.float32)[stars.T] for axis in range(3))
    lengths = np.empty((len(edges), len(stars)), dtype=np.float32)
    for row, (a, b) in zip(lengths, edges, strict=True):
        np.sqrt((x[a] - x[b]) ** 2 + (y[a] - y[b]) ** 2 + (z[a] - z[b]) ** 2, out=row)
    longest = lengths.max(axis=0)
    keep = (lengths.min(axis=0) > MIN_EDGE * longest) & (longest < longest_limit) & (longest > shortest_limit)
    stars, lengths, longest = stars[keep], lengths[:, keep], longest[keep]
    reach = [sum(lengths[i] for i, ends in enumerate(edges) if star in ends) for star in range(size)]
    place = np.zeros((len(stars), size), dtype=np.int64)
    for a, b in edges:
        first = reach[a] >= reach[b]
        place[:, b] += first
        place[:, a] += ~first
    ordered = np.empty_like(stars)
    np.put_along_axis(ordered, place, stars, axis=1)
    _sort_rows(lengths)
    return Groups(ordered, (lengths[1:] / longest).T, longest, np.flatnonzero(keep))


def _sort_rows(table: np.ndarray) -> None:
    """Sort each column of a few rows in falling order, in place: a row at a time is faster than a column at a time."""
    count = len(table)
    for i in range(count):  # odd-even transposition
        for a in range(i % 2, count - 1, 2):
            low = np.minimum(table[a], table[a + 1])
            np.maximum(table[a], table[a + 1], out=table[a])
            table[a + 1] = low
