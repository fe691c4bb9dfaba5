"""Quads of stars and their codes: shapes that do not change when the camera turns, mirrors or zooms.

The code of a quad is its six mutual distances in falling order, each divided by the longest. It needs no choice of
a first star, is continuous when stars move, and is the same for a mirrored frame. (Geometric hashing: Wolfson &
Rigoutsos 1997, IEEE Comput. Sci. Eng. 4, 10.) Distances are chords between unit vectors, so wide fields need no
tangent plane.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations

import numpy as np

_EDGES = np.array(list(combinations(range(4), 2)))
# with the edges in the order above, the three edges that meet at each star
_AT_STAR = np.array([[i for i, edge in enumerate(_EDGES) if star in edge] for star in range(4)])
MIN_EDGE = 0.06  # of the longest: shorter ones are noise and blends


@dataclass(frozen=True)
class Quads:
    """n quads: star indices (n, 4) with the stars in canonical order, codes (n, 5), longest chord (n,)."""

    stars: np.ndarray
    codes: np.ndarray
    longest: np.ndarray

    def __len__(self) -> int:
        """Return the number of quads."""
        return len(self.stars)


def local_quads(vectors: np.ndarray, neighbours: int, longest_limit: float = np.inf) -> Quads:
    """Return the quads of each star with three of its nearest `neighbours`, each quad once (all quads of few stars).

    `vectors`: (n, 3) unit vectors. Quads longer than `longest_limit` (chord, rad) are left out.
    """
    from scipy.spatial import cKDTree

    count = len(vectors)
    near = min(neighbours, count - 1)
    if near < 3:
        return Quads(np.empty((0, 4), int), np.empty((0, 5)), np.empty(0))
    if near == count - 1 and count <= 40:
        return coded(vectors, np.array(list(combinations(range(count), 4))), longest_limit)
    _, index = cKDTree(vectors).query(vectors, k=near + 1)
    triples = np.array(list(combinations(range(1, near + 1), 3)))
    stars = np.concatenate(
        [np.repeat(index[:, :1], len(triples), axis=0).reshape(-1, 1), index[:, triples].reshape(-1, 3)],
        axis=1,
    )
    stars = np.sort(stars, axis=1).astype(np.int64)
    key = ((stars[:, 0] * count + stars[:, 1]) * count + stars[:, 2]) * count + stars[:, 3]
    _, first = np.unique(key, return_index=True)
    return coded(vectors, stars[first], longest_limit)


def coded(vectors: np.ndarray, stars: np.ndarray, longest_limit: float = np.inf) -> Quads:
    """Return quads with their codes and their stars in canonical order (by the sum of distances to the others)."""
    points = vectors[stars]
    edges = np.linalg.norm(points[:, _EDGES[:, 0]] - points[:, _EDGES[:, 1]], axis=2)
    ordered = np.sort(edges, axis=1)[:, ::-1]
    keep = (ordered[:, 5] > MIN_EDGE * ordered[:, 0]) & (ordered[:, 0] < longest_limit)
    stars, edges, ordered = stars[keep], edges[keep], ordered[keep]
    reach = edges[:, _AT_STAR].sum(axis=2)
    stars = np.take_along_axis(stars, np.argsort(-reach, axis=1), axis=1)
    return Quads(stars, ordered[:, 1:] / ordered[:, :1], ordered[:, 0])
