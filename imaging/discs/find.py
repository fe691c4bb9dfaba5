"""Where a large disc roughly is: its limb's gradients vote for a centre, so that clouds and cut discs do no harm."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.errors import NoSolutionError

_COARSE_SIDE = 256


@dataclass(frozen=True)
class RoughDisc:
    """A disc found: centre and radius in pixels, good to about `error_px`.

    `arc`: the part of the circumference that voted. `rival`: votes of the best other centre over those of this one.
    """

    x_px: float
    y_px: float
    radius_px: float
    error_px: float
    arc: float
    rival: float


def find_disc(data: np.ndarray, radius_px: float | None = None, radius_tolerance: float = 0.04) -> RoughDisc:
    """Find the brightest disc; its centre may lie outside the frame when `radius_px` is given.

    `radius_px` is the expected radius, good to `radius_tolerance` (a fraction); without it radii from 3 % to 120 % of
    the frame's shorter side are tried. Raises NoSolutionError when no circle is seen.
    """
    import cv2

    rows, columns = data.shape
    side = _COARSE_SIDE
    if radius_px is not None:
        # a disc must stay 20 coarse pixels in radius, and need not be more than 120
        side = int(np.clip(max(rows, columns) * 60.0 / radius_px, _COARSE_SIDE, 1024))
    factor = max(1, int(np.ceil(max(rows, columns) / side)))
    small = _shrink(data, factor)
    gx, gy = _gradient(small)
    strength = np.hypot(gx, gy)
    x, y, weight = _edges(small, strength)
    if x.size < 12:
        raise NoSolutionError("no edge stands out of the noise: no disc in this frame")
    ux, uy = gx[y, x] / strength[y, x], gy[y, x] / strength[y, x]
    if radius_px is not None:
        radii = radius_px / factor * np.array([1.0])
    else:
        radii = np.geomspace(max(0.03 * min(small.shape), 3.0), 1.2 * min(small.shape), 48)
    best = None
    for radius in radii:
        votes, x0, y0 = _votes(x + radius * ux, y + radius * uy, weight, radius, small.shape)
        smooth = cv2.GaussianBlur(votes, (0, 0), max(1.0, 0.02 * radius))
        row, column = np.unravel_index(np.argmax(smooth), smooth.shape)
        score = smooth[row, column] * max(1.0, 0.02 * radius) ** 2 / np.sqrt(radius)
        if best is None or score > best[0]:
            best = (score, radius, column + x0, row + y0, smooth, x0, y0)
    assert best is not None
    radius, xc, yc = float(best[1]), float(best[2]), float(best[3])
    smooth, x0, y0 = best[4:]
    xc, yc, radius, support, arc = _refined(
        x, y, ux, uy, xc, yc, radius, radius_px is not None, radius_tolerance
    )
    if support < 10 or arc < 0.06:
        raise NoSolutionError("no circle fits the edges of this frame: no disc, or clouds hide it")
    rival = _rival(smooth, xc - x0, yc - y0, radius)
    factor_x, factor_y = columns / small.shape[1], rows / small.shape[0]
    return RoughDisc(
        (xc + 0.5) * factor_x - 0.5,
        (yc + 0.5) * factor_y - 0.5,
        radius * float(np.sqrt(factor_x * factor_y)),
        0.7 * factor + 1.0,
        arc,
        rival,
    )


def _shrink(data: np.ndarray, factor: int) -> np.ndarray:
    import cv2

    if factor == 1:
        return np.nan_to_num(data).astype(np.float32)
    # whole rows, so that nothing is copied; a side that the factor does not divide stretches by less than 1 in 250
    rows, columns = max(data.shape[0] // factor, 1), max(data.shape[1] // factor, 1)
    # a few rows of each coarse pixel are enough
    step = max(1, factor // 4)
    part = np.ascontiguousarray(data[(step - 1) // 2 :: step], dtype=np.float32)
    return np.nan_to_num(cv2.resize(part, (columns, rows), interpolation=cv2.INTER_AREA))


def _gradient(small: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    import cv2

    smooth = cv2.GaussianBlur(small, (0, 0), 1.0, borderType=cv2.BORDER_REPLICATE)
    return (
        cv2.Scharr(smooth, cv2.CV_32F, 1, 0, borderType=cv2.BORDER_REPLICATE),
        cv2.Scharr(smooth, cv2.CV_32F, 0, 1, borderType=cv2.BORDER_REPLICATE),
    )


def _edges(small: np.ndarray, strength: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return (x, y, weight) of pixels with a strong gradient; the frame's own border is left out."""
    inner = np.zeros_like(strength, bool)
    inner[2:-2, 2:-2] = True
    noise = np.median(strength[inner])
    top = np.quantile(strength[inner], 0.998)
    keep = inner & (strength > max(0.15 * top, 4 * noise))
    y, x = np.nonzero(keep)
    # a strong edge counts for more, but not in proportion: a thin cloud must not silence half a limb
    return x, y, np.sqrt(strength[y, x] / max(top, 1e-12)).clip(0, 1.5)


def _votes(
    vx: np.ndarray, vy: np.ndarray, weight: np.ndarray, radius: float, shape: tuple[int, int]
) -> tuple[np.ndarray, int, int]:
    margin = int(radius) + 2
    rows, columns = shape[0] + 2 * margin, shape[1] + 2 * margin
    ix, iy = np.rint(vx).astype(int) + margin, np.rint(vy).astype(int) + margin
    good = (ix >= 0) & (ix < columns) & (iy >= 0) & (iy < rows)
    flat = np.bincount(iy[good] * columns + ix[good], weight[good], rows * columns)
    return flat.reshape(rows, columns).astype(np.float32), -margin, -margin


def _refined(
    x: np.ndarray,
    y: np.ndarray,
    ux: np.ndarray,
    uy: np.ndarray,
    xc: float,
    yc: float,
    radius: float,
    held: bool,
    tolerance: float,
) -> tuple[float, float, float, int, float]:
    """Fit a circle to the edges that belong to it; returns centre, radius, number of edges, arc as a fraction."""
    nominal = radius
    reach = max(4.0, 0.08 * radius)
    used = np.zeros(x.size, bool)
    for _ in range(8):
        dx, dy = x - xc, y - yc
        distance = np.hypot(dx, dy)
        inward = -(dx * ux + dy * uy) / np.maximum(distance, 1e-6)
        used = (np.abs(distance - radius) < reach) & (inward > 0.9)
        if used.sum() < 6:
            break
        cos, sin = dx[used] / distance[used], dy[used] / distance[used]
        residual = distance[used] - radius
        scale = 1.48 * np.median(np.abs(residual)) + 0.3
        weight = 1 / (1 + (residual / (2 * scale)) ** 2)
        design = np.stack([cos, sin, np.ones_like(cos)], axis=1)
        prior = np.array([0.0, 0.0, (1.0 / (tolerance * nominal + 1.0)) ** 2 if held else 0.0])
        normal = design.T @ (design * weight[:, None]) + np.diag(prior + 1e-9)
        right = design.T @ (weight * residual) + prior * np.array([0, 0, nominal - radius])
        step = np.linalg.solve(normal, right)
        xc, yc, radius = xc + step[0], yc + step[1], radius + step[2]
        reach = max(1.5, min(reach, 4 * scale))
        if np.hypot(step[0], step[1]) < 0.02:
            break
    angle = np.arctan2(y[used] - yc, x[used] - xc)
    bins = max(int(2 * np.pi * radius / 3), 12)
    seen = np.unique(((angle + np.pi) / (2 * np.pi) * bins).astype(int)).size / bins
    return float(xc), float(yc), float(radius), int(used.sum()), float(seen)


def _rival(smooth: np.ndarray, column: float, row: float, radius: float) -> float:
    """Return the votes of the best centre half a radius and more away, over those of the one chosen."""
    r, c = (
        int(np.clip(round(row), 0, smooth.shape[0] - 1)),
        int(np.clip(round(column), 0, smooth.shape[1] - 1)),
    )
    own = smooth[max(r - 3, 0) : r + 4, max(c - 3, 0) : c + 4].max()
    y, x = np.ogrid[: smooth.shape[0], : smooth.shape[1]]
    away = (y - row) ** 2 + (x - column) ** 2 > (0.5 * radius) ** 2
    return float(smooth[away].max() / own) if away.any() and own > 0 else 0.0
