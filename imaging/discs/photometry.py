"""The light of a star in an aperture, sky taken off, in one frame or in many at once."""

from __future__ import annotations

import warnings

import numpy as np

from planner.errors import NoSolutionError

_RING = (2.0, 3.5)  # radii of the ring that gives the sky, in radii of the aperture
_MOST_BYTES = 6e7


def aperture_flux(
    frames: np.ndarray,
    x_px: np.ndarray | float,
    y_px: np.ndarray | float,
    radius_px: float,
    comparison_px: tuple[float, float] | None = None,
) -> np.ndarray:
    """Return a star's flux in each of `frames` (n, rows, columns), sky taken off, divided by a comparison star's.

    `x_px`, `y_px`: one place, or one a frame. The sky is the clipped mean of a ring of 2 to 3.5 radii: symmetrical, so
    that a slope does no harm, and no median, which whole numbers would make jump. The quotient is scaled to keep the
    star's own mean. NaN pixels are left out; a frame that lacks a tenth of the aperture gives NaN. Raises
    NoSolutionError when an aperture leaves the frame.
    """
    frames = np.asarray(frames)
    flux = _one(frames, x_px, y_px, radius_px)
    if comparison_px is None:
        return flux
    return compared(flux, _one(frames, *comparison_px, radius_px))


def compared(flux: np.ndarray, other: np.ndarray) -> np.ndarray:
    """Return a flux divided by a comparison's, scaled to keep its mean; raises NoSolutionError when that is dark."""
    usual = float(np.nanmedian(other)) if np.isfinite(other).any() else 0.0
    if usual <= 0:
        raise NoSolutionError("the comparison star is not there")
    return flux * usual / np.maximum(other, 0.05 * usual)


def _one(
    frames: np.ndarray, x_px: np.ndarray | float, y_px: np.ndarray | float, radius_px: float
) -> np.ndarray:
    x, y = (np.broadcast_to(np.asarray(v, float), frames.shape[:1]) for v in (x_px, y_px))
    reach = int(np.ceil(_RING[1] * radius_px))
    column, row = np.rint(x).astype(int), np.rint(y).astype(int)
    low, high = min(column.min(), row.min()), max(column.max() - frames.shape[2], row.max() - frames.shape[1])
    if low < reach or high + reach >= 0:
        raise NoSolutionError("the star's aperture or its sky ring leaves the frame")
    line = np.arange(-reach, reach + 1)
    portion = max(1, int(_MOST_BYTES / (8 * line.size**2)))
    out = np.empty(frames.shape[0])
    for start in range(0, frames.shape[0], portion):
        some = slice(start, start + portion)
        at = np.arange(frames.shape[0])[some]
        part = frames[
            at[:, None, None], (row[some, None] + line)[:, :, None], (column[some, None] + line)[:, None, :]
        ].astype(float)
        v = line - (y - row)[some, None]
        u = line - (x - column)[some, None]
        away = np.hypot(u[:, None, :], v[:, :, None])
        out[some] = _sums(part, away, radius_px)
    return out


def _sums(part: np.ndarray, away: np.ndarray, radius: float) -> np.ndarray:
    inside = np.clip(radius + 0.5 - away, 0, 1)
    ring = (away > _RING[0] * radius) & (away < _RING[1] * radius) & np.isfinite(part)
    values = np.where(ring, part, np.nan).reshape(part.shape[0], -1)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # a ring without a pixel gives NaN
        middle = np.nanmedian(values, axis=1, keepdims=True)
        scale = 1.48 * np.nanmedian(np.abs(values - middle), axis=1, keepdims=True)
        # a scale of whole numbers may be 0
        values = np.where(np.abs(values - middle) < 3 * np.maximum(scale, 1.0), values, np.nan)
        sky = np.nanmean(values, axis=1)
    area = inside.sum(axis=(1, 2))
    seen = np.where(np.isfinite(part), inside, 0.0)
    held = seen.sum(axis=(1, 2))
    light = np.sum(seen * np.nan_to_num(part), axis=(1, 2)) - sky * held
    return np.where(held > 0.9 * area, light, np.nan)
