"""Centroids of stars, all at once: Gaussian-windowed moments, then a fit of the frame's own profile.

Windowed moments as in Bertin & Arnouts (1996, A&AS 117, 393) and its later XWIN positions; the fit is a Gauss-Newton
step on a Gaussian profile with the noise of each pixel as weight, which reaches the Cramer-Rao bound.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np

from imaging.stars.background import Background

_COLUMNS = ("x", "y", "flux", "vx", "vy", "vxy", "size", "long", "tilt", "line")
_LINE_RATIO = 5.0  # a thing longer than this many widths is no star, nor two
_CHUNK = 4000  # stars measured together: bounds the memory of their stamps


@dataclass(frozen=True)
class Measured:
    """Measurements of n candidates, in their order; `good` says which are stars, `tilt_rad` along which they are long.

    `on_line`: as bright on both sides along a line as in the middle, such as a satellite's trail.
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
    good: np.ndarray
    tilt_rad: np.ndarray
    on_line: np.ndarray
    blended: np.ndarray
    psf_sigma_px: float

    def take(self, rows: np.ndarray) -> Measured:
        """Return these of the candidates."""
        chosen: dict[str, Any] = {name: column[rows] for name, column in self._columns().items()}
        return replace(self, **chosen)

    def followed_by(self, others: Measured) -> Measured:
        """Return these candidates and then the others, of the same frame."""
        more = others._columns()
        both: dict[str, Any] = {
            name: np.concatenate([column, more[name]]) for name, column in self._columns().items()
        }
        return replace(self, **both)

    def _columns(self) -> dict[str, np.ndarray]:
        return {item.name: getattr(self, item.name) for item in fields(self) if item.name != "psf_sigma_px"}


def measure(
    data: np.ndarray,
    sky: Background,
    x_px: np.ndarray,
    y_px: np.ndarray,
    snr: np.ndarray,
    width_sigma: float,
    saturation_adu: float | None,
    gain_e_adu: float | None,
) -> Measured:
    """Return centroid, flux and shape of candidates at whole pixels.

    `width_sigma`: Gaussian sigma of the stars in pixels, as far as known. Without a gain, pixels are weighted as
    if the noise were the sky's alone.
    """
    count = len(x_px)
    out = {
        name: np.full(count, np.nan)
        for name in ("x", "y", "flux", "vx", "vy", "vxy", "size", "long", "tilt", "line")
    }
    saturated = np.zeros(count, dtype=bool)
    for start in range(0, count, _CHUNK):
        part = slice(start, start + _CHUNK)
        stamps = stamps_of(data, sky, x_px[part], y_px[part], max(4, int(np.ceil(4 * width_sigma))))
        values, hit = _windowed(*stamps, width_sigma, saturation_adu, gain_e_adu)
        for name, value in values.items():
            out[name][part] = value
        saturated[part] = hit
    out["x"] += x_px
    out["y"] += y_px
    moved = np.hypot(out["x"] - x_px, out["y"] - y_px)
    good = np.isfinite(out["x"]) & (moved < 2 + 1.5 * width_sigma) & (out["flux"] > 0)
    good &= ~doubled(out["x"], out["y"], out["flux"], good, width_sigma)
    clear = good & ~saturated & (snr > 15) & np.isfinite(out["size"]) & (out["size"] > 0.2)
    psf = float(np.median(out["size"][clear])) if clear.sum() >= 3 else width_sigma
    return Measured(
        x_px=out["x"],
        y_px=out["y"],
        flux_adu=np.nan_to_num(out["flux"]),
        snr=snr,
        sigma_x_px=np.sqrt(out["vx"]),
        sigma_y_px=np.sqrt(out["vy"]),
        covariance_xy_px2=out["vxy"],
        fwhm_px=np.where(snr > 10, out["size"] * 2.3548200450309493, np.nan),
        elongation=np.where(snr > 10, out["long"], np.nan),
        saturated=saturated,
        good=good,
        tilt_rad=np.nan_to_num(out["tilt"]),
        on_line=(out["line"] > 0) & (snr > 10) & ~saturated,
        blended=np.zeros(count, dtype=bool),
        psf_sigma_px=psf,
    )


def stamps_of(
    data: np.ndarray, sky: Background, x_px: np.ndarray, y_px: np.ndarray, radius: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Return (n, s, s) sky-subtracted pixels, their raw maximum (n,), the sky's sigma (n,) and the offsets (s,)."""
    height, width = data.shape
    reach = np.arange(-radius, radius + 1)
    rows = y_px.astype(int)[:, None] + reach
    columns = x_px.astype(int)[:, None] + reach
    inside = ((rows >= 0) & (rows < height))[:, :, None] & ((columns >= 0) & (columns < width))[:, None, :]
    raw = data[np.clip(rows, 0, height - 1)[:, :, None], np.clip(columns, 0, width - 1)[:, None, :]]
    grid = sky.grid
    gy = np.clip((y_px / height * grid.shape[0]).astype(int), 0, grid.shape[0] - 1)
    gx = np.clip((x_px / width * grid.shape[1]).astype(int), 0, grid.shape[1] - 1)
    sigma = sky.sigma_grid[gy, gx].astype(float)
    border = np.concatenate([raw[:, 0], raw[:, -1], raw[:, 1:-1, 0], raw[:, 1:-1, -1]], axis=1)
    with np.errstate(invalid="ignore"):
        level = np.nanmedian(border, axis=1)
    level = np.where(np.isfinite(level), level, grid[gy, gx])
    stamp = raw - level[:, None, None].astype(np.float32)
    stamp = np.where(inside & np.isfinite(stamp), stamp, 0.0).astype(float)
    return stamp, np.nanmax(raw, axis=(1, 2)), sigma, reach.astype(float)


def _windowed(
    stamp: np.ndarray,
    peak: np.ndarray,
    sigma: np.ndarray,
    reach: np.ndarray,
    width_sigma: float,
    saturation_adu: float | None,
    gain_e_adu: float | None,
) -> tuple[dict[str, np.ndarray], np.ndarray]:
    x = np.zeros(len(stamp))
    y = np.zeros(len(stamp))
    inverse = 0.5 / width_sigma**2
    for _ in range(12):
        wx = np.exp(-inverse * (reach - x[:, None]) ** 2)
        wy = np.exp(-inverse * (reach - y[:, None]) ** 2)
        total = np.einsum("nij,ni,nj->n", stamp, wy, wx, optimize=True)
        mx = np.einsum("nij,ni,nj->n", stamp, wy, wx * (reach - x[:, None]), optimize=True)
        my = np.einsum("nij,ni,nj->n", stamp, wy * (reach - y[:, None]), wx, optimize=True)
        with np.errstate(divide="ignore", invalid="ignore"):
            dx, dy = 2 * mx / total, 2 * my / total
        ok = (total > 0) & np.isfinite(dx) & np.isfinite(dy)
        dx, dy = np.where(ok, np.clip(dx, -1, 1), 0), np.where(ok, np.clip(dy, -1, 1), 0)
        x, y = x + dx, y + dy
        if max(np.abs(dx).max(initial=0), np.abs(dy).max(initial=0)) < 1e-4:
            break
    wx = np.exp(-inverse * (reach - x[:, None]) ** 2)
    wy = np.exp(-inverse * (reach - y[:, None]) ** 2)
    ox, oy = reach - x[:, None], reach - y[:, None]
    variance = sigma[:, None, None] ** 2 + (np.maximum(stamp, 0) / gain_e_adu if gain_e_adu else 0.0)
    total = np.einsum("nij,ni,nj->n", stamp, wy, wx, optimize=True)
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = 4 / total**2
        vx = scale * np.einsum("nij,ni,nj->n", variance, wy**2, (wx * ox) ** 2, optimize=True)
        vy = scale * np.einsum("nij,ni,nj->n", variance, (wy * oy) ** 2, wx**2, optimize=True)
        vxy = scale * np.einsum("nij,ni,nj->n", variance, wy**2 * oy, wx**2 * ox, optimize=True)
        sxx = np.einsum("nij,ni,nj->n", stamp, wy, wx * ox**2, optimize=True) / total
        syy = np.einsum("nij,ni,nj->n", stamp, wy * oy**2, wx, optimize=True) / total
        sxy = np.einsum("nij,ni,nj->n", stamp, wy * oy, wx * ox, optimize=True) / total
        half, root = (sxx + syy) / 2, np.hypot((sxx - syy) / 2, sxy)
        # a Gaussian of variance v seen through a window of variance w has v w / (v + w)
        big, small = (1 / (1 / axis - 1 / width_sigma**2) for axis in (half + root, half - root))
        line = (big <= 0) | ~np.isfinite(big) | (big > _LINE_RATIO**2 * np.maximum(small, 0.04))
        size = np.sqrt(np.sqrt(np.maximum(big, 0) * np.maximum(small, 0)))
        long = np.sqrt(big / small)
        # the window halves a star as wide as itself
        flux = total * (1 + np.where(size > 0, size, width_sigma) ** 2 / width_sigma**2)
    hit = peak >= 0.98 * saturation_adu if saturation_adu else np.zeros(len(stamp), dtype=bool)
    ok = total > 0
    values = {"x": x, "y": y, "flux": flux, "vx": vx, "vy": vy, "vxy": vxy, "size": size, "long": long}
    values |= {"tilt": 0.5 * np.arctan2(2 * sxy, sxx - syy), "line": line.astype(float)}
    return {name: np.where(ok, value, np.nan) for name, value in values.items()}, hit & ok


def doubled(
    x: np.ndarray, y: np.ndarray, flux: np.ndarray, good: np.ndarray, width_sigma: float
) -> np.ndarray:
    """Say which candidates ended on a brighter one (several maxima on one saturated or ragged star)."""
    from scipy.spatial import cKDTree

    index = np.flatnonzero(good)
    double = np.zeros(len(x), dtype=bool)
    if len(index) < 2:
        return double
    pairs = cKDTree(np.column_stack([x[index], y[index]])).query_pairs(
        1.2 * width_sigma, output_type="ndarray"
    )
    first, second = index[pairs[:, 0]], index[pairs[:, 1]]
    double[np.where(flux[first] >= flux[second], second, first)] = True
    return double
