"""Finding stars: background on a coarse grid, matched filter, local maxima, hot pixels told from stars.

A lean replacement of general source extraction for point sources, measured against it in `benchmarks/bench_detect.py`.
The matched filter is a Gaussian as wide as the stars (Turin 1960; it maximises signal to noise in white noise).
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from imaging.stars.centroids import measure

CELL_PX = 64  # side of a background cell: many times a star, a fraction of the vignetting
_STRIP_ROWS = 768
_MAX_CANDIDATES = 60_000
FWHM_PER_SIGMA = 2.3548200450309493  # 2 sqrt(2 ln 2)


@dataclass(frozen=True)
class Background:
    """The sky on a grid of cells, and its noise; see `level`."""

    grid: np.ndarray
    sigma_grid: np.ndarray
    width_px: int
    height_px: int

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


@dataclass(frozen=True)
class Detections:
    """Stars of a frame, brightest first; every array has shape (n,), pixels are 0-based.

    `sigma_x_px`, `sigma_y_px`, `covariance_xy_px2`: 1-sigma errors of the centroid. `flux_adu`: of the fitted
    profile. `snr`: of the matched filter. `fwhm_px`, `elongation`: of the star itself, NaN when too faint to tell.
    `saturated`: holds pixels at the frame's limit. The scalars `psf_fwhm_px` and `noise_adu` are of the frame.
    """

    x_px: np.ndarray
    y_px: np.ndarray
    flux_adu: np.ndarray
    snr: np.ndarray
    sigma_x_px: np.ndarray
    sigma_y_px: np.ndarray
    covariance_xy_px2: np.ndarray
    fwhm_px: np.ndarray
    elongation: np.ndarray
    saturated: np.ndarray
    width_px: int
    height_px: int
    psf_fwhm_px: float
    noise_adu: float

    def __len__(self) -> int:
        """Return the number of stars."""
        return len(self.x_px)

    def take(self, index: np.ndarray) -> Detections:
        """Return these of the detections, in the order of `index`."""
        chosen = {
            item.name: value[index] if isinstance(value := getattr(self, item.name), np.ndarray) else value
            for item in fields(self)
        }
        return Detections(**chosen)


def background(data: np.ndarray, cell_px: int = CELL_PX) -> Background:
    """Return sky and noise of a frame on a grid, sources left out.

    Each cell gives the median of its pixels within 3 sigma of a first median; sigma comes from the lower half of
    the pixels, which stars do not touch. A quarter of the pixels is looked at.
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
        grid[row], sigma[row] = _clipped(sample)
    good = np.isfinite(grid) & np.isfinite(sigma)
    if not good.all():
        fill, spread = (np.median(grid[good]), np.median(sigma[good])) if good.any() else (0.0, 1.0)
        grid, sigma = (
            np.where(good, grid, fill).astype(np.float32),
            np.where(good, sigma, spread).astype(np.float32),
        )
    if min(rows, columns) >= 3:
        grid, sigma = (cv2.medianBlur(_extended(one), 3)[1:-1, 1:-1] for one in (grid, sigma))
    positive = sigma[sigma > 0]
    floor = 0.2 * float(np.median(positive)) if positive.size else 1e-3
    return Background(grid, np.maximum(sigma, max(floor, 1e-6)), width, height)


def detect(
    data: np.ndarray,
    *,
    saturation_adu: float | None = None,
    gain_e_adu: float | None = None,
    threshold: float = 5.0,
    max_stars: int = 5000,
    fwhm_px: float | None = None,
) -> Detections:
    """Return the stars of a frame, brightest first.

    `data`: (rows, columns), any sky level; NaN are blanks. `threshold` is in sigmas of the matched filter: 5 gives
    about one false star in 24 megapixels of white noise. Centroids: see `imaging.stars.centroids`.
    Memory beyond the frame stays near 60 MB, because the frame is worked on in strips.
    """
    data = np.ascontiguousarray(data, dtype=np.float32)
    sky = background(data)
    width_sigma = (fwhm_px or 2.8) / FWHM_PER_SIGMA
    candidates = _local_maxima(data, sky, width_sigma, threshold)
    measured = measure(data, sky, *candidates, width_sigma, saturation_adu, gain_e_adu)
    if fwhm_px is None:
        found = measured.psf_sigma_px
        if not 0.72 < found / width_sigma < 1.4:  # beyond, the filter loses more than 5 % of the signal
            width_sigma = float(np.clip(found, 0.6, 6.0))
            candidates = _local_maxima(data, sky, width_sigma, threshold)
            measured = measure(data, sky, *candidates, width_sigma, saturation_adu, gain_e_adu)
    order = np.argsort(-measured.flux_adu, kind="stable")
    order = order[measured.good[order]][:max_stars]
    return Detections(
        x_px=measured.x_px[order],
        y_px=measured.y_px[order],
        flux_adu=measured.flux_adu[order],
        snr=measured.snr[order],
        sigma_x_px=measured.sigma_x_px[order],
        sigma_y_px=measured.sigma_y_px[order],
        covariance_xy_px2=measured.covariance_xy_px2[order],
        fwhm_px=measured.fwhm_px[order],
        elongation=measured.elongation[order],
        saturated=measured.saturated[order],
        width_px=data.shape[1],
        height_px=data.shape[0],
        psf_fwhm_px=measured.psf_sigma_px * FWHM_PER_SIGMA,
        noise_adu=float(np.median(sky.sigma_grid)),
    )


def _clipped(sample: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return clipped median and sigma of each sorted row."""
    line = np.arange(len(sample))
    number = np.isfinite(sample).sum(axis=1)
    last = np.maximum(number - 1, 0)
    middle, low = sample[line, last // 2], sample[line, (last * 0.1587).astype(int)]
    spread = middle - low
    kept_low = (sample < (middle - 3 * spread)[:, None]).sum(axis=1)
    kept_high = (sample <= (middle + 3 * spread)[:, None]).sum(axis=1)
    number_kept = np.maximum(kept_high - kept_low, 1)
    at = np.minimum(kept_low + number_kept // 2, sample.shape[1] - 1)
    at_low = np.minimum(kept_low + (number_kept * 0.1587).astype(int), sample.shape[1] - 1)
    middle = sample[line, at]
    spread = middle - sample[line, at_low]
    empty = number < 8
    return np.where(empty, np.nan, middle), np.where(empty, np.nan, spread)


def _local_maxima(
    data: np.ndarray, sky: Background, width_sigma: float, threshold: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return (x, y, snr) of the maxima of the filtered frame that stand out of its noise, hot pixels left out."""
    import cv2

    height, width = data.shape
    margin = int(np.ceil(4 * width_sigma)) + 2
    size = 2 * int(np.ceil(3 * width_sigma)) + 1
    kernel_1d = cv2.getGaussianKernel(size, width_sigma, cv2.CV_32F)
    square = np.ones((3, 3), dtype=np.uint8)
    found: list[tuple[np.ndarray, np.ndarray, np.ndarray]] = []
    noise = None
    for top in range(0, height, _STRIP_ROWS):
        first, last = max(0, top - margin), min(height, top + _STRIP_ROWS + margin)
        strip = data[first:last] - sky.level(first, last)
        sigma = sky.level(first, last, sky.sigma_grid)
        bad = ~np.isfinite(strip)
        if bad.any():
            strip[bad] = 0.0
        smooth: np.ndarray = cv2.sepFilter2D(
            strip, -1, kernel_1d, kernel_1d, borderType=cv2.BORDER_REFLECT_101
        )
        smooth /= sigma
        if noise is None:  # measured, because interpolation and compression correlate the noise
            sample = smooth[::3, ::3].ravel()
            low, middle = np.quantile(sample, [0.1587, 0.5])
            noise = max(float(middle - low), 1e-3 * float(np.sqrt((kernel_1d**2).sum() ** 2)))
        peak = (smooth >= cv2.dilate(smooth, square)) & (smooth > threshold * noise)
        y, x = np.nonzero(peak)
        keep = (y + first >= top) & (y + first < top + _STRIP_ROWS)
        y, x = y[keep], x[keep]
        keep = ~_is_hot(strip, sigma, x, y)
        y, x = y[keep], x[keep]
        found.append((x, y + first, smooth[y, x] / noise))
    x, y, snr = (np.concatenate(part) for part in zip(*found, strict=True))
    if len(x) > _MAX_CANDIDATES:
        order = np.argsort(-snr)[:_MAX_CANDIDATES]
        x, y, snr = x[order], y[order], snr[order]
    inside = (x >= 2) & (y >= 2) & (x < width - 2) & (y < height - 2)
    return x[inside].astype(float), y[inside].astype(float), snr[inside]


def _is_hot(strip: np.ndarray, sigma: np.ndarray, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Say which maxima are one pixel wide: its four neighbours hold less light than any star's would.

    A star of FWHM 1.5 px gives its neighbours 0.3 of the light of its middle pixel in the mean; 0.12 is the limit.
    """
    height, width = strip.shape
    inner_x, inner_y = np.clip(x, 1, width - 2), np.clip(y, 1, height - 2)
    middle = strip[inner_y, inner_x]
    around = (
        strip[inner_y, inner_x - 1]
        + strip[inner_y, inner_x + 1]
        + strip[inner_y - 1, inner_x]
        + strip[inner_y + 1, inner_x]
    ) / 4
    return (around < 0.12 * middle + 0.25 * sigma[inner_y, inner_x]) & (middle > 6 * sigma[inner_y, inner_x])
