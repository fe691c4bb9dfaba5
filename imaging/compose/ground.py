"""The sky behind the stars: a smooth surface measured on a frame, so that frames of different nights match."""

from __future__ import annotations

import numpy as np

BLOCK_PX = 64


def sky_surface(data: np.ndarray, order: int = 3, block_px: int = BLOCK_PX) -> np.ndarray:
    """Return the smooth background (float32, the shape of `data`) as a polynomial through block medians.

    Blocks with a bright body in them are clipped (two-sided, 2.5 sigma, ten rounds). Raises nothing: a frame of few
    blocks gets a lower order, down to a constant.
    """
    import cv2

    rows, columns = data.shape
    block = max(4, min(block_px, rows // 4, columns // 4))
    ny, nx = rows // block, columns // block
    cells = data[: ny * block, : nx * block].reshape(ny, block, nx, block).swapaxes(1, 2).reshape(ny, nx, -1)
    values = np.median(cells[..., :: max(1, cells.shape[-1] // 256)], axis=-1)
    y, x = (np.indices(values.shape) + 0.5) * block - 0.5
    u, v = 2 * x / max(columns - 1, 1) - 1, 2 * y / max(rows - 1, 1) - 1
    while order > 0 and values.size < 3 * len(_powers(order)):
        order -= 1
    powers = _powers(order)
    design = np.stack([u.ravel() ** i * v.ravel() ** j for i, j in powers], axis=1)
    flat = values.ravel().astype(float)
    keep = np.isfinite(flat)
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


def _powers(order: int) -> list[tuple[int, int]]:
    return [(i, j) for i in range(order + 1) for j in range(order + 1 - i)]


def _matrix(powers: list[tuple[int, int]], coefficients: np.ndarray) -> np.ndarray:
    size = max(max(i, j) for i, j in powers) + 1
    matrix = np.zeros((size, size))
    for (i, j), value in zip(powers, coefficients, strict=True):
        matrix[j, i] = value
    return matrix
