"""Finding stars: background on a coarse grid, matched filter, local maxima, hot pixels told from stars.

A lean replacement of general source extraction for point sources, measured against it in `benchmarks/bench_detect.py`.
The matched filter is a Gaussian as wide as the stars (Turin 1960; it maximises signal to noise in white noise).
"""

from __future__ import annotations

from dataclasses import dataclass, field, fields

import numpy as np

from imaging.stars.background import FINE_CELL_PX, Background, background
from imaging.stars.blends import deblend
from imaging.stars.centroids import measure
from imaging.stars.trails import Trails, looks_trailed, measure_trails, trail_field

_STRIP_ROWS = 768
_MAX_CANDIDATES = 60_000
FWHM_PER_SIGMA = 2.3548200450309493  # 2 sqrt(2 ln 2)


@dataclass(frozen=True)
class Detections:
    """Stars of a frame, brightest first; every array has shape (n,), pixels are 0-based.

    `sigma_x_px`, `sigma_y_px`, `covariance_xy_px2`: 1-sigma errors of the centroid. `flux_adu`: of the fitted
    profile. `snr`: of the matched filter. `fwhm_px`, `elongation`: of the star itself, NaN when too faint to tell.
    `saturated`: holds pixels at the frame's limit. `blended`: shares its light with a neighbour, and was measured
    together with it. `trail_length_px`, `trail_angle_deg` (from +x towards +y): of stars measured along their trail,
    whose place is the trail's middle; 0 in a frame that followed the sky. The scalars `psf_fwhm_px` (across a trail)
    and `noise_adu` are of the frame.
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
    blended: np.ndarray = field(default_factory=lambda: np.zeros(0, dtype=bool))
    trail_length_px: np.ndarray = field(default_factory=lambda: np.zeros(0))
    trail_angle_deg: np.ndarray = field(default_factory=lambda: np.zeros(0))

    def __post_init__(self) -> None:
        """Fill in what a frame of round, lone stars need not state."""
        for name, kind in (("blended", bool), ("trail_length_px", float), ("trail_angle_deg", float)):
            if len(getattr(self, name)) != len(self.x_px):
                object.__setattr__(self, name, np.zeros(len(self.x_px), dtype=kind))

    @property
    def trailed(self) -> bool:
        """True when the stars were measured along their trails."""
        return bool((self.trail_length_px > 0).any())

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
    if sky.steep:
        sky = background(data, FINE_CELL_PX)
    width_sigma = (fwhm_px or 2.8) / FWHM_PER_SIGMA
    candidates = _local_maxima(data, sky, width_sigma, threshold)
    measured = measure(data, sky, *candidates, width_sigma, saturation_adu, gain_e_adu)
    if fwhm_px is None:
        found = measured.psf_sigma_px
        if not 0.72 < found / width_sigma < 1.4:  # beyond, the filter loses more than 5 % of the signal
            width_sigma = float(np.clip(found, 0.6, 6.0))
            candidates = _local_maxima(data, sky, width_sigma, threshold)
            measured = measure(data, sky, *candidates, width_sigma, saturation_adu, gain_e_adu)
    clear = (measured.snr > 15) & ~measured.saturated
    if looks_trailed(measured.elongation, clear):
        trail = trail_field(data, sky, saturation_adu, gain_e_adu)
        if trail is not None:
            trails = measure_trails(
                data, sky, trail, threshold, saturation_adu, gain_e_adu, min(2 * max_stars, _MAX_CANDIDATES)
            )
            return _of_trails(trails, data.shape, trail.sigma_px, sky, max_stars)
    measured = deblend(data, sky, candidates[0], candidates[1], measured, gain_e_adu)
    order = np.argsort(-measured.flux_adu, kind="stable")
    order = order[(measured.good & ~measured.on_line)[order]][:max_stars]
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
        blended=measured.blended[order],
    )


def _of_trails(
    trails: Trails, shape: tuple[int, ...], sigma_px: float, sky: Background, max_stars: int
) -> Detections:
    order = np.argsort(-trails.flux_adu, kind="stable")
    order = order[trails.good[order]][:max_stars]
    covariance = trails.covariance[order]
    fwhm_px = sigma_px * FWHM_PER_SIGMA
    count = len(order)
    return Detections(
        x_px=trails.x_px[order],
        y_px=trails.y_px[order],
        flux_adu=trails.flux_adu[order],
        snr=trails.snr[order],
        sigma_x_px=np.sqrt(covariance[:, 1, 1]),
        sigma_y_px=np.sqrt(covariance[:, 2, 2]),
        covariance_xy_px2=covariance[:, 1, 2],
        fwhm_px=np.full(count, fwhm_px),
        elongation=1 + trails.length_px[order] / fwhm_px,
        saturated=trails.saturated[order],
        width_px=shape[1],
        height_px=shape[0],
        psf_fwhm_px=fwhm_px,
        noise_adu=float(np.median(sky.sigma_grid)),
        trail_length_px=trails.length_px[order],
        trail_angle_deg=np.degrees(trails.angle_rad[order]),
    )


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
