"""The sky between the stars, and its noise, on a coarse grid: sources are left out by medians."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

CELL_PX = 64  # side of a background cell: many times a star, a fraction of the vignetting
FINE_CELL_PX = 24  # where the sky is steep: the glare of the Moon
_STEEP_SHARE = 0.005  # of the cells
_STEEP = 0.1  # of a cell's variance that its slope may make
_COARSE_STEP = 0.1  # of the noise: from here on the steps of the counts are told apart within a step


@dataclass(frozen=True)
class Background:
    """The sky on a grid of cells, and its noise; see `level`. `steep`: slopes more within a cell than noise does."""

    grid: np.ndarray
    sigma_grid: np.ndarray
    width_px: int
    height_px: int
    steep: bool = False

    def level(self, top: int, bottom: int, of: np.ndarray | None = None) -> np.ndarray:
        """Return the sky of the rows `top` to `bottom` as float32, interpolated between cell centres."""
        grid = _extended(self.grid if of is None else of)
        rows, columns = grid.shape[0] - 2, grid.shape[1] - 2
        y = (np.arange(top, bottom) + 0.5) * rows / self.height_px + 0.5
        x = (np.arange(self.width_px) + 0.5) * columns / self.width_px + 0.5
        i, j = np.minimum(y.astype(int), rows), np.minimum(x.astype(int), columns)
        across = (x - j).astype(np.float32)
        first, last = int(i[0]), int(i[-1]) + 2
        wide = grid[first:last, j] * (1 - across) + grid[first:last, j + 1] * across
        down = (y - i).astype(np.float32)[:, None]
        return wide[i - first] * (1 - down) + wide[i - first + 1] * down


def _extended(grid: np.ndarray) -> np.ndarray:
    """Return the grid with one cell more on every side, continued straight, so that a gradient has no edge."""
    if min(grid.shape) < 2:
        return np.pad(grid, 1, mode="edge")
    return np.pad(grid, 1, mode="reflect", reflect_type="odd")


def background(data: np.ndarray, cell_px: int = CELL_PX) -> Background:
    """Return sky and noise of a frame on a grid, sources left out.

    Each cell gives the median of its pixels within 3 sigma of a first median; sigma comes from the lower half of
    the pixels, which stars do not touch. A quarter of the pixels is looked at. Where the counts come in steps as
    coarse as the noise (8-bit video, frames averaged and rounded), the quantiles are those of grouped data: the
    pixels of one step are spread over it evenly.
    """
    import cv2

    height, width = data.shape
    rows, columns = max(1, round(height / cell_px)), max(1, round(width / cell_px))
    cell_h, cell_w = height // rows, width // columns
    step = 2 if min(cell_h, cell_w) >= 24 else 1
    grid = np.empty((rows, columns), dtype=np.float32)
    sigma = np.empty_like(grid)
    top_edges = np.linspace(0, height - cell_h, rows).round().astype(int)
    left_edges = np.linspace(0, width - cell_w, columns).round().astype(int)
    take = (left_edges[:, None] + np.arange(0, cell_w, step)[None, :]).ravel()
    for row, top in enumerate(top_edges):
        block = data[top : top + cell_h : step][:, take].reshape(-1, columns, len(take) // columns)
        sample = np.sort(block.transpose(1, 0, 2).reshape(columns, -1), axis=1)  # NaN sort to the end
        grid[row], sigma[row] = _clipped(sample, _step_between(sample))
    good = np.isfinite(grid) & np.isfinite(sigma)
    if not good.all():
        fill, spread = (np.median(grid[good]), np.median(sigma[good])) if good.any() else (0.0, 1.0)
        grid, sigma = (
            np.where(good, grid, fill).astype(np.float32),
            np.where(good, sigma, spread).astype(np.float32),
        )
    steep = np.zeros_like(good)
    if min(rows, columns) >= 3:
        grid = cv2.medianBlur(_extended(grid), 3)[1:-1, 1:-1]
        down, across = np.gradient(grid)
        steep = (down**2 + across**2) / 12 > _STEEP * sigma**2
        if steep.any():  # near the Moon the slope of the sky within a cell would pass for noise
            first = Background(grid, sigma, width, height)
            sigma = sigma.copy()
            for row in np.flatnonzero(steep.any(axis=1)).tolist():
                top = top_edges[row]
                block = (data[top : top + cell_h] - first.level(top, top + cell_h))[::step][:, take]
                block = block.reshape(len(block), columns, -1).transpose(1, 0, 2).reshape(columns, -1)
                spread = _clipped(np.sort(block, axis=1))[1]  # the slope has spread the steps
                better = steep[row] & np.isfinite(spread)
                sigma[row, better] = spread[better]
        sigma = cv2.medianBlur(_extended(sigma), 3)[1:-1, 1:-1]
    positive = sigma[sigma > 0]
    floor = 0.2 * float(np.median(positive)) if positive.size else 1e-3
    return Background(
        grid, np.maximum(sigma, max(floor, 1e-6)), width, height, bool(steep.mean() > _STEEP_SHARE)
    )


def _step_between(sample: np.ndarray) -> float:
    """Return the least step between two different counts; 0 when there is none."""
    steps = np.diff(sample[len(sample) // 2])
    steps = steps[np.isfinite(steps) & (steps > 0)]
    return float(steps.min()) if steps.size else 0.0


def _clipped(sample: np.ndarray, step_adu: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
    """Return clipped median and sigma of each sorted row, whose counts come in steps."""
    number = np.isfinite(sample).sum(axis=1)
    last = np.maximum(number - 1, 0)
    spread = _at(sample, last // 2) - _at(sample, (last * 0.1587).astype(int))
    coarse = step_adu > _COARSE_STEP * float(np.median(spread[number >= 8])) if (number >= 8).any() else False
    step_adu = step_adu if coarse else 0.0
    middle = _at(sample, last // 2, step_adu)
    spread = middle - _at(sample, (last * 0.1587).astype(int), step_adu)
    kept_low = (sample < (middle - 3 * spread)[:, None]).sum(axis=1)
    kept_high = (sample <= (middle + 3 * spread)[:, None]).sum(axis=1)
    number_kept = np.maximum(kept_high - kept_low, 1)
    middle = _at(sample, np.minimum(kept_low + number_kept // 2, sample.shape[1] - 1), step_adu)
    at_low = np.minimum(kept_low + (number_kept * 0.1587).astype(int), sample.shape[1] - 1)
    spread = middle - _at(sample, at_low, step_adu)
    empty = number < 8
    return np.where(empty, np.nan, middle), np.where(empty, np.nan, spread)


def _at(sample: np.ndarray, index: np.ndarray, step_adu: float = 0.0) -> np.ndarray:
    """Return one value of each sorted row, its place among its equals spread over their step (grouped data)."""
    value = sample[np.arange(len(sample)), index]
    if step_adu <= 0:
        return value
    below = (sample < value[:, None]).sum(axis=1)
    equal = np.maximum((sample == value[:, None]).sum(axis=1), 1)
    return value + step_adu * ((index + 0.5 - below) / equal - 0.5)
