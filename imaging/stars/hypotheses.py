"""Hypotheses of where a frame points, from groups of stars that look alike, the likeliest first."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from imaging.stars.camera import unproject
from imaging.stars.groups import Groups
from imaging.stars.refine import Field, Sky

# of true groups over the fields of benchmarks/drawn_fields.py and real frames: median 4e-4, 95 % below 1.5e-3
_SHAPE_ERROR, _PLACE_ERROR_PX = 6e-4, 0.3
_SPREAD_MAG = 0.25
_POINTED = 0.3  # how near to the hint, in radii of the field, all places are alike
_LOOSEST = 0.05  # residual of a group, in its own radius
_MAGNITUDE_SPREAD = 2.2  # of four stars between frame and catalogue: stretched pictures, colours, thin cloud


@dataclass(frozen=True)
class Hypotheses:
    """n guesses, the likeliest first: pairs of stars (n, k), axes (n, 3, 3), focal length (px).

    `weight`: how much likelier the group's own shape and brightness are for a true pairing, up to a constant factor.
    """

    image_stars: np.ndarray
    sky_stars: np.ndarray
    axes: np.ndarray
    focal_px: np.ndarray
    weight: np.ndarray

    def __len__(self) -> int:
        """Return the number of hypotheses."""
        return len(self.focal_px)

    def take(self, chosen: np.ndarray) -> Hypotheses:
        """Return these of the hypotheses."""
        return Hypotheses(
            self.image_stars[chosen],
            self.sky_stars[chosen],
            self.axes[chosen],
            self.focal_px[chosen],
            self.weight[chosen],
        )

    def near(self, center: np.ndarray, radius_rad: float, reach: float) -> Hypotheses:
        """Return those whose middle lies within `reach` radii of a direction; the nearer, the likelier beforehand."""
        away = np.arccos(np.clip(self.axes[:, 2] @ center, -1, 1)) / radius_rad
        weighed = replace(self, weight=self.weight / (_POINTED**2 + away**2))
        kept = np.flatnonzero(away < reach)
        return weighed.take(kept[np.argsort(-weighed.weight[kept], kind="stable")])

    def log_share(self, i: int) -> float:
        """Return the logarithm of the share of the odds that the i-th hypothesis has beforehand."""
        return float(np.log(self.weight[i]) - np.log(self.weight.sum()))


def turned_by(guesses: Hypotheses, rotation_deg: float) -> np.ndarray:
    """Return how far (n,), in degrees, the array's +y of each lies from a position angle (ICRS)."""
    here, up = guesses.axes[:, 2], guesses.axes[:, 1]
    east = np.column_stack([-here[:, 1], here[:, 0], np.zeros(len(here))])
    north = np.cross(here, east)
    angle = np.degrees(np.arctan2((up * east).sum(axis=1), (up * north).sum(axis=1)))
    return np.abs((angle - rotation_deg + 180) % 360 - 180)


def pair_groups(
    image: Groups, sky: Groups, scale_tolerance: float, tolerance: float, limit: int = 20_000
) -> tuple[np.ndarray, np.ndarray]:
    """Return indices (image group, sky group) of groups of like shape and, within the tolerance, like size."""
    from scipy.spatial import cKDTree

    if len(image) == 0 or len(sky) == 0:
        return np.empty(0, int), np.empty(0, int)
    stretch = tolerance / max(np.log1p(scale_tolerance), 1e-3)
    image_points = np.column_stack([image.codes, np.log(image.longest) * stretch])
    sky_points = np.column_stack([sky.codes, np.log(sky.longest) * stretch])
    row = np.flatnonzero(_among(sky_points, image_points, tolerance * 1.2))
    image_tree, sky_tree = (
        cKDTree(points, balanced_tree=False, compact_nodes=False)
        for points in (image_points, sky_points[row])
    )
    near = image_tree.sparse_distance_matrix(sky_tree, tolerance * 1.2, output_type="ndarray")
    first, second = near["i"], near["j"]
    second = row[second]
    if len(first) > limit:
        away = np.abs(image.codes[first] - sky.codes[second]).max(axis=1)
        kept = np.argpartition(away, limit)[:limit]
        first, second = first[kept], second[kept]
    return first, second


def _among(points: np.ndarray, others: np.ndarray, reach: float) -> np.ndarray:
    """Say which points (n, d) lie in a cell next to one of the others, by their last four coordinates."""
    low = others[:, -4:].min(axis=0) - 2 * reach
    cells = np.floor((others[:, -4:] - low) / reach).astype(np.int64)
    size = cells.max(axis=0) + 2
    occupied = np.zeros(int(size.prod()), dtype=bool)
    step = np.append(np.cumprod(size[:0:-1])[::-1], 1)
    around = np.stack(np.meshgrid(*[[-1, 0, 1]] * cells.shape[1], indexing="ij"), -1).reshape(
        -1, cells.shape[1]
    )
    occupied[((cells[:, None] + around) @ step).ravel()] = True
    mine = np.floor((points[:, -4:] - low) / reach).astype(np.int64)
    inside = ((mine >= 0) & (mine < size)).all(axis=1)
    return inside & occupied[np.where(inside, mine @ step, 0)]


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
    image: Groups,
    sky: Groups,
    pairs: tuple[np.ndarray, np.ndarray],
    focal_px: float,
    focal_range_px: tuple[float, float],
    parity: int | None = None,
    projection: str = "TAN",
) -> Hypotheses:
    """Return the cameras that carry paired groups onto each other, the likeliest first.

    The groups of the image were made with `focal_px`; each hypothesis gets its own focal length, within
    `focal_range_px`. `parity` as in DEVELOPERS.md, None when unknown.
    """
    first, second = pairs
    return hypotheses_of(
        field,
        stars,
        image.stars[first],
        sky.stars[second],
        focal_px * image.longest[first] / sky.longest[second],
        focal_range_px,
        parity,
        projection,
    )


def hypotheses_of(
    field: Field,
    stars: Sky,
    image_stars: np.ndarray,
    sky_stars: np.ndarray,
    focal: np.ndarray,
    focal_range_px: tuple[float, float],
    parity: int | None = None,
    projection: str = "TAN",
    prior: np.ndarray | None = None,
) -> Hypotheses:
    """Return the cameras that carry these groups (n, k), with these focal lengths (n,), onto each other.

    `prior` (n,): how likely each pairing is beforehand, up to a constant factor; all alike where not given.
    """
    prior = np.ones(len(focal)) if prior is None else prior
    keep = (focal > focal_range_px[0]) & (focal < focal_range_px[1])
    keep &= as_bright(field, stars, image_stars, sky_stars)
    image_stars, sky_stars, focal, prior = image_stars[keep], sky_stars[keep], focal[keep], prior[keep]
    height, width = field.shape
    u, v = field.x_px[image_stars] - (width - 1) / 2, field.y_px[image_stars] - (height - 1) / 2
    seen = unproject(u, v, focal[:, None], projection)
    true = stars.vectors[sky_stars]
    axes = _axes(seen, true, parity)
    residual = np.linalg.norm(np.einsum("nij,nkj->nki", axes, true) - seen, axis=2)
    size = np.linalg.norm(true - true.mean(axis=1, keepdims=True), axis=2).max(axis=1)
    keep = residual.max(axis=1) < _LOOSEST * size
    image_stars, sky_stars, axes, focal = image_stars[keep], sky_stars[keep], axes[keep], focal[keep]
    misshapen = np.sqrt((residual[keep] ** 2).mean(axis=1)) / size[keep]
    weight = prior[keep] * _weight(field, stars, image_stars, sky_stars, misshapen, size[keep] * focal)
    order = np.argsort(-weight, kind="stable")
    return Hypotheses(image_stars[order], sky_stars[order], axes[order], focal[order], weight[order])


def _weight(
    field: Field,
    stars: Sky,
    image_stars: np.ndarray,
    sky_stars: np.ndarray,
    misshapen: np.ndarray,
    size_px: np.ndarray,
) -> np.ndarray:
    """Return densities of shape and brightness for true pairings; those of false ones are flat by comparison.

    Multivariate Student's t of one degree of freedom, so that no true one is ruled out: 2 k - 4 ratios of shape, k - 1
    differences of magnitude.
    """
    size = image_stars.shape[1]
    shape = misshapen / (_SHAPE_ERROR + _PLACE_ERROR_PX / np.maximum(size_px, 1.0))
    away = field.magnitude[image_stars] - stars.magnitude[sky_stars]
    counted = ~field.saturated[image_stars]
    number = np.maximum(counted.sum(axis=1), 1)
    mean = np.where(counted, away, 0.0).sum(axis=1) / number
    spread2 = (np.where(counted, away - mean[:, None], 0.0) ** 2).sum(axis=1) / number
    shape_weight = (1 + shape**2) ** -((2 * size - 3) / 2)
    return shape_weight * (1 + spread2 / _SPREAD_MAG**2) ** -(number / 2)


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
