"""The sky behind the stars: a smooth surface measured on a frame, so that frames of different nights match."""

from __future__ import annotations

import numpy as np

BLOCK_PX = 64
_CHUNK_PIXELS = 60_000  # worked on together: they stay in the processor's cache


def sky_surface(data: np.ndarray, order: int = 3, block_px: int = BLOCK_PX) -> np.ndarray:
    """Return the smooth background (float32, the shape of `data`) as a polynomial through block levels.

    Blocks with a bright body in them are clipped (two-sided, 2.5 sigma, ten rounds). Raises nothing: a frame of few
    blocks gets a lower order, down to a constant.
    """
    import cv2

    rows, columns = data.shape
    block = max(4, min(block_px, rows // 4, columns // 4))
    values = block_levels(data, block)
    y, x = (np.indices(values.shape) + 0.5) * block - 0.5
    u, v = 2 * x / max(columns - 1, 1) - 1, 2 * y / max(rows - 1, 1) - 1
    while order > 0 and values.size < 3 * len(_powers(order)):
        order -= 1
    powers = _powers(order)
    design = np.stack([u.ravel() ** i * v.ravel() ** j for i, j in powers], axis=1)
    flat = values.ravel().astype(float)
    keep = np.isfinite(flat)
    if keep.sum() < 2 * len(powers):
        level = float(np.nanmedian(values)) if keep.any() else 0.0
        return np.full((rows, columns), level, np.float32)
    coefficients = np.zeros(len(powers))
    for _ in range(10):
        coefficients, *_ = np.linalg.lstsq(design[keep], flat[keep], rcond=None)
        residual = flat - design @ coefficients
        spread = 1.4826 * np.median(np.abs(residual[keep])) + 1e-9
        again = np.isfinite(flat) & (np.abs(residual) < 2.5 * spread)
        if again.sum() < 2 * len(powers) or np.array_equal(again, keep):
            break
        keep = again
    # the polynomial is smooth: drawn at one node in 16 pixels and enlarged
    gy, gx = np.linspace(-1, 1, max(2, rows // 16)), np.linspace(-1, 1, max(2, columns // 16))
    grid = np.polynomial.polynomial.polygrid2d(gy, gx, _matrix(powers, coefficients))
    ys = np.linspace(0, len(gy) - 1, rows, dtype=np.float32)
    xs = np.linspace(0, len(gx) - 1, columns, dtype=np.float32)
    return cv2.remap(
        grid.astype(np.float32),
        np.broadcast_to(xs, (rows, columns)).copy(),
        np.broadcast_to(ys[:, None], (rows, columns)).copy(),
        cv2.INTER_LINEAR,
        borderMode=cv2.BORDER_REPLICATE,
    )


def block_levels(data: np.ndarray, block: int) -> np.ndarray:
    """Return the background level of each whole block: the mean of what lies within 2.5 sigma of its median.

    A clipped mean, as the stack makes it: the median of few counted electrons would lie below it and show as seams.
    Blocks less than half covered (NaN) are NaN. At most about 512 pixels of a block are looked at.
    """
    ny, nx = data.shape[0] // block, data.shape[1] // block
    blocks = data[: ny * block, : nx * block].reshape(ny, block, nx, block)
    step = max(1, block // 22)
    each = -(-block // step)
    rows = max(1, _CHUNK_PIXELS // max(nx * each**2, 1))
    return np.concatenate(
        [
            _levels(blocks[first : first + rows, ::step, :, ::step].swapaxes(1, 2))
            for first in range(0, max(ny, 1), rows)
        ]
    )


def _levels(blocks: np.ndarray) -> np.ndarray:
    """Return the clipped mean of blocks (rows, columns, y, x), NaN where less than half of one is finite."""
    cells = blocks.reshape(*blocks.shape[:2], blocks.shape[2] * blocks.shape[3])
    count = np.isfinite(cells).sum(axis=-1)
    covered = count > 0.5 * cells.shape[-1]
    center = _medians(cells, count)
    spread = 1.4826 * _medians(np.abs(cells - center[..., None]), count)
    for _ in range(3):
        away = np.abs(cells - center[..., None])
        kept = away <= 2.5 * np.maximum(spread, 1e-6)[..., None]  # false for NaN
        number = np.maximum(kept.sum(axis=-1), 1)
        rest = np.where(kept, cells - center[..., None], 0)
        mean = rest.sum(axis=-1) / number
        spread = 1.15 * np.sqrt(np.maximum((rest**2).sum(axis=-1) / number - mean**2, 0))
        center = center + mean
    return np.where(covered, center, np.nan)


def _medians(cells: np.ndarray, count: np.ndarray) -> np.ndarray:
    """Return the median of the finite values of each last axis; `count`: how many they are. NaN where none."""
    ordered = np.sort(cells, axis=-1)  # NaN go to the end
    low, high = np.maximum(count - 1, 0) // 2, np.minimum(count // 2, cells.shape[-1] - 1)
    pick = np.stack([low, high], axis=-1)
    return np.take_along_axis(ordered, pick, axis=-1).mean(axis=-1)


def _powers(order: int) -> list[tuple[int, int]]:
    return [(i, j) for i in range(order + 1) for j in range(order + 1 - i)]


def _matrix(powers: list[tuple[int, int]], coefficients: np.ndarray) -> np.ndarray:
    size = max(max(i, j) for i, j in powers) + 1
    matrix = np.zeros((size, size))
    for (i, j), value in zip(powers, coefficients, strict=True):
        matrix[j, i] = value
    return matrix


def measured_falloff(frames: list[np.ndarray]) -> tuple[float, float] | None:
    """Return (a, b) of the vignetting 1 - a r^2 - b r^4 that the sky shows, r = 1 in the corner; None when it does not.

    `frames`: values above bias. The falloff is what all frames have in common and is symmetric about the middle:
    gradients of twilight or moonlight are fitted beside it as a plane a frame. None when the sky is too faint for
    1 % in the corner.
    """
    evens, planes, targets = [], [], []
    for data in frames:
        block = max(8, min(BLOCK_PX, data.shape[0] // 12, data.shape[1] // 12))
        values = block_levels(data, block)
        level = float(np.nanmedian(values))
        known = np.isfinite(values)
        if level <= 0 or known.sum() < 40:
            continue
        y, x = (np.indices(values.shape) + 0.5) * block - 0.5
        half_x, half_y = data.shape[1] / 2, data.shape[0] / 2
        u, v = (x - half_x + 0.5) / half_x, (y - half_y + 0.5) / half_y
        r2 = ((u * half_x) ** 2 + (v * half_y) ** 2) / (half_x**2 + half_y**2)
        evens.append(np.stack([r2, r2**2], axis=-1)[known])
        planes.append(np.stack([np.ones_like(u), u, v], axis=-1)[known])
        targets.append(values[known] / level)
    if not targets:
        return None
    shape = np.zeros(2)
    even = np.concatenate(evens)
    keep = [np.ones(len(target), bool) for target in targets]
    # in turns, for the light is the product of both: the plane of each frame, then what all have in common
    for _ in range(20):
        skies = []
        for index, target in enumerate(targets):
            flat = target / (1 - evens[index] @ shape)
            plane, *_ = np.linalg.lstsq(planes[index][keep[index]], flat[keep[index]], rcond=None)
            skies.append(planes[index] @ plane)
        used = np.concatenate(keep)
        lost = 1 - np.concatenate([target / sky for target, sky in zip(targets, skies, strict=True)])
        shape, *_ = np.linalg.lstsq(even[used], lost[used], rcond=None)
        residual = lost - even @ shape
        spread = 1.4826 * float(np.median(np.abs(residual[used]))) + 1e-9
        bounds = np.cumsum([len(target) for target in targets])[:-1]
        keep = np.split(np.abs(residual) < 3.5 * spread, bounds)
    covariance = np.linalg.pinv(even[used].T @ even[used]) * spread**2
    corner_sigma = float(np.sqrt(np.ones(2) @ covariance @ np.ones(2)))
    a, b = float(shape[0]), float(shape[1])
    return (a, b) if corner_sigma < 0.01 and 0 <= a + b < 0.9 else None


def falloff(shape: tuple[int, int], a: float, b: float) -> np.ndarray:
    """Return the share of light that arrives at each pixel: 1 - a r^2 - b r^4, r = 1 in the corner."""
    y = (np.arange(shape[0]) - (shape[0] - 1) / 2)[:, None]
    x = (np.arange(shape[1]) - (shape[1] - 1) / 2)[None, :]
    r2 = (x**2 + y**2) / ((shape[0] / 2) ** 2 + (shape[1] / 2) ** 2)
    return (1 - a * r2 - b * r2**2).astype(np.float32)
