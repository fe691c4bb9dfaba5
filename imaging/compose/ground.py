"""The sky behind the stars: a smooth surface measured on a frame, so that frames of different nights match."""

from __future__ import annotations

import warnings

import numpy as np

BLOCK_PX = 64


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
    cells = data[: ny * block, : nx * block].reshape(ny, block, nx, block)
    step = max(1, block // 22)
    cells = cells[:, ::step, :, ::step].swapaxes(1, 2).reshape(ny, nx, -1)
    with np.errstate(invalid="ignore"), warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        covered = np.isfinite(cells).mean(axis=-1) > 0.5
        center = np.nanmedian(cells, axis=-1, keepdims=True)
        spread = 1.4826 * np.nanmedian(np.abs(cells - center), axis=-1, keepdims=True)
        for _ in range(3):
            kept = np.where(np.abs(cells - center) <= 2.5 * np.maximum(spread, 1e-6), cells, np.nan)
            center = np.nanmean(kept, axis=-1, keepdims=True)
            spread = np.nanstd(kept, axis=-1, keepdims=True) * 1.15
    return np.where(covered, center[..., 0], np.nan)


def _powers(order: int) -> list[tuple[int, int]]:
    return [(i, j) for i in range(order + 1) for j in range(order + 1 - i)]


def _matrix(powers: list[tuple[int, int]], coefficients: np.ndarray) -> np.ndarray:
    size = max(max(i, j) for i, j in powers) + 1
    matrix = np.zeros((size, size))
    for (i, j), value in zip(powers, coefficients, strict=True):
        matrix[j, i] = value
    return matrix
