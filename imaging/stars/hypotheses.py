"""Hypotheses of where a frame points, from quads that look alike, the ones that agree with each other first."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.stars.quads import Quads
from imaging.stars.refine import Field, Sky

CODE_TOLERANCE = 0.012  # 1 % of distortion across a frame changes a local quad's ratios by less
_VOTE_CENTER = 0.04  # of the half-diagonal
_VOTE_TURN_RAD = 0.03
_VOTE_SCALE = 0.02
_MAGNITUDE_SPREAD = 2.2  # of four stars between frame and catalogue: stretched pictures, colours, thin cloud


@dataclass(frozen=True)
class Hypotheses:
    """n guesses, most supported first: pairs of four stars, camera axes (n, 3, 3), focal length in pixels, support."""

    image_stars: np.ndarray
    sky_stars: np.ndarray
    axes: np.ndarray
    focal_px: np.ndarray
    votes: np.ndarray

    def __len__(self) -> int:
        """Return the number of hypotheses."""
        return len(self.focal_px)


def pair_quads(
    image: Quads, sky: Quads, scale_tolerance: float, limit: int = 40_000
) -> tuple[np.ndarray, np.ndarray]:
    """Return indices (image quad, sky quad) of quads of like shape and, within the tolerance, like size."""
    from scipy.spatial import cKDTree

    if len(image) == 0 or len(sky) == 0:
        return np.empty(0, int), np.empty(0, int)
    stretch = CODE_TOLERANCE / max(np.log1p(scale_tolerance), 1e-3)
    sky_tree = cKDTree(
        np.column_stack([sky.codes, np.log(sky.longest) * stretch]), balanced_tree=False, compact_nodes=False
    )
    image_points = np.column_stack([image.codes, np.log(image.longest) * stretch])
    found = sky_tree.query_ball_point(image_points, r=CODE_TOLERANCE * 1.2)
    number = np.array([len(one) for one in found])
    first = np.repeat(np.arange(len(image)), number)
    second = (
        np.concatenate([np.asarray(one, dtype=int) for one in found]) if number.sum() else np.empty(0, int)
    )
    if len(first) > limit:
        away = np.abs(image.codes[first] - sky.codes[second]).max(axis=1)
        kept = np.argpartition(away, limit)[:limit]
        first, second = first[kept], second[kept]
    return first, second


def as_bright(field: Field, sky: Sky, image_stars: np.ndarray, sky_stars: np.ndarray) -> np.ndarray:
    """Say which hypotheses (n,) pair stars of like brightness up to a constant; saturated ones are not asked."""
    away = field.magnitude[image_stars] - sky.magnitude[sky_stars]
    counted = ~field.saturated[image_stars]
    high = np.where(counted, away, -np.inf).max(axis=1)
    low = np.where(counted, away, np.inf).min(axis=1)
    return (high - low < _MAGNITUDE_SPREAD) | (counted.sum(axis=1) < 2)


def hypotheses(
    field: Field,
    stars: Sky,
    image_vectors: np.ndarray,
    image: Quads,
    sky: Quads,
    pairs: tuple[np.ndarray, np.ndarray],
    focal_px: float,
    half_diagonal_px: float,
    parity: int | None = None,
) -> Hypotheses:
    """Return the cameras that carry paired quads onto each other, sorted by how many others agree with each.

    `image_vectors` are in camera axes, de-projected with `focal_px`. `parity` as in DEVELOPERS.md, None when unknown.
    """
    from scipy.spatial import cKDTree

    first, second = pairs
    image_stars, sky_stars = image.stars[first], sky.stars[second]
    keep = as_bright(field, stars, image_stars, sky_stars)
    first, second, image_stars, sky_stars = first[keep], second[keep], image_stars[keep], sky_stars[keep]
    seen, true = image_vectors[image_stars], stars.vectors[sky_stars]
    axes = _axes(seen, true, parity)
    residual = np.linalg.norm(np.einsum("nij,nkj->nki", axes, true) - seen, axis=2)
    zoom = image.longest[first] / sky.longest[second]
    # the rotation cannot absorb the zoom, so it is part of the residual of a good pair
    allowed = (0.03 + 0.75 * np.abs(zoom - 1)) * image.longest[first]
    keep = residual.max(axis=1) < allowed
    image_stars, sky_stars, axes, zoom = image_stars[keep], sky_stars[keep], axes[keep], zoom[keep]
    focal = focal_px * zoom
    votes = np.ones(len(focal), dtype=int)
    if len(focal) > 1:
        field_rad = half_diagonal_px / focal_px
        middle = seen[keep].mean(axis=1)
        # where the middle of the frame falls: the quad's own place, then outwards by the quad's own scale
        center = _center(axes, middle, true[keep].mean(axis=1), zoom)
        place = np.column_stack(
            [
                center / (_VOTE_CENTER * field_rad),
                axes[:, 0] / _VOTE_TURN_RAD,
                np.log(zoom)[:, None] / _VOTE_SCALE,
            ]
        )
        tree = cKDTree(place)
        votes = tree.query_ball_point(place, r=1.0, return_length=True)
    order = np.argsort(-votes, kind="stable")
    return Hypotheses(image_stars[order], sky_stars[order], axes[order], focal[order], votes[order])


def _axes(seen: np.ndarray, true: np.ndarray, parity: int | None) -> np.ndarray:
    """Return the orthogonal matrices (n, 3, 3) that turn catalogue vectors into camera vectors, of either parity."""
    seen_mean, true_mean = seen.mean(axis=1), true.mean(axis=1)
    seen_mean /= np.linalg.norm(seen_mean, axis=1)[:, None]
    true_mean /= np.linalg.norm(true_mean, axis=1)[:, None]
    seen_basis, true_basis = _basis(seen_mean), _basis(true_mean)
    a = np.einsum("nki,nji->nkj", seen, seen_basis[:, :2])
    b = np.einsum("nki,nji->nkj", true, true_basis[:, :2])
    za, zb = a[..., 0] + 1j * a[..., 1], b[..., 0] + 1j * b[..., 1]
    straight = (za * zb.conj()).sum(axis=1)
    flipped = (za * zb).sum(axis=1)
    # both bases are right-handed about the direction, so a straight match is a proper rotation: parity -1
    use_flip = np.abs(flipped) > np.abs(straight) if parity is None else np.full(len(za), parity == 1)
    turn = np.where(use_flip, flipped, straight)
    turn = turn / np.maximum(np.abs(turn), 1e-30)
    c, s = turn.real, turn.imag
    sign = np.where(use_flip, -1.0, 1.0)
    plane = np.zeros((len(za), 3, 3))
    plane[:, 0, 0], plane[:, 0, 1] = c, -s * sign
    plane[:, 1, 0], plane[:, 1, 1] = s, c * sign
    plane[:, 2, 2] = 1
    return np.einsum("nji,njk,nkl->nil", seen_basis, plane, true_basis, optimize=True)


def _basis(direction: np.ndarray) -> np.ndarray:
    """Return right-handed orthonormal rows (n, 3, 3) whose third row is the direction."""
    helper = np.where(np.abs(direction[:, 2:3]) < 0.9, [[0.0, 0.0, 1.0]], [[1.0, 0.0, 0.0]])
    first = np.cross(helper, direction)
    first /= np.linalg.norm(first, axis=1)[:, None]
    return np.stack([first, np.cross(direction, first), direction], axis=1)


def _center(axes: np.ndarray, seen: np.ndarray, true: np.ndarray, zoom: np.ndarray) -> np.ndarray:
    """Return the sky direction (n, 3) of the middle of the frame, with the quad's own scale for the way there."""
    offset = np.array([0.0, 0.0, 1.0]) - seen / np.linalg.norm(seen, axis=1)[:, None]
    way = np.einsum("nji,nj->ni", axes, offset) / zoom[:, None]
    center = true / np.linalg.norm(true, axis=1)[:, None] + way
    return center / np.linalg.norm(center, axis=1)[:, None]
