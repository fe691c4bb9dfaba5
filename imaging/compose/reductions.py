"""Median and clipped mean of a cube of values along its first axis; NaN takes no part."""

from __future__ import annotations

import numpy as np


def _sorted(cube: np.ndarray) -> np.ndarray:
    """Return the cube sorted along axis 0, NaN last as infinity.

    Up to 40 planes by Batcher's merge exchange (Knuth 1998, The Art of Computer Programming 3, 5.2.2, algorithm M):
    every exchange is a minimum and a maximum of whole planes, several times faster here than sorting pixel by pixel.
    """
    ordered = np.where(np.isfinite(cube), cube, np.float32(np.inf))
    n = len(ordered)
    if n > 40:
        ordered.sort(axis=0)
        return ordered
    top = 1 << max(0, (n - 1).bit_length() - 1)
    p = top if n > 1 else 0
    low = np.empty(ordered.shape[1:], ordered.dtype)
    while p > 0:
        q, r, d = top, 0, p
        while d > 0:
            for i in range(n - d):
                if i & p == r:
                    np.minimum(ordered[i], ordered[i + d], out=low)
                    np.maximum(ordered[i], ordered[i + d], out=ordered[i + d])
                    ordered[i] = low
            d, q, r = q - p, q >> 1, p
        p >>= 1
    return ordered


def _middle(ordered: np.ndarray, count: np.ndarray) -> np.ndarray:
    """Return the median along axis 0 of sorted values of which the first `count` are finite."""
    n = len(ordered)
    if count.min() == n:
        return 0.5 * (ordered[(n - 1) // 2] + ordered[n // 2])
    low = np.take_along_axis(ordered, np.maximum((count - 1) // 2, 0)[None], axis=0)[0]
    high = np.take_along_axis(ordered, np.minimum(count // 2, n - 1)[None], axis=0)[0]
    return np.where(count > 0, 0.5 * (low + high), np.nan)


def median(cube: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the median along axis 0 without NaN, and the number of values."""
    count = np.isfinite(cube).sum(axis=0)
    with np.errstate(invalid="ignore"):
        return _middle(_sorted(cube), count).astype(np.float32), count


def clipped_mean(
    cube: np.ndarray, kappa: float = 3.0, rounds: int = 3, weight: np.ndarray | None = None
) -> tuple[np.ndarray, np.ndarray]:
    """Return the mean along axis 0 of what lies within `kappa` sigma of the median, and the number of values.

    `weight` (shape of the cube) counts in the mean of what is kept, not in what is kept.

    The first sigma is 1.4826 times the median absolute deviation, not below 0.8 of its median over the cube (a
    handful of values that happen to agree would else reject their neighbours); later ones are the standard
    deviation of what is left, corrected for the cut. Pixels with fewer than 3 values are plain means.
    """
    cube = np.asarray(cube, np.float32)
    finite = np.isfinite(cube)
    count = finite.sum(axis=0, dtype=np.int32)
    filled = np.where(finite, cube, np.float32(0))
    with np.errstate(invalid="ignore", divide="ignore"):
        if len(cube) < 3:
            return _weighted(filled, finite, weight, count), count
        center = _middle(_sorted(cube), count).astype(np.float32)
        sigma = 1.4826 * _middle(_sorted(np.abs(cube - center)), count)
        enough = count >= 3
        if enough.any():
            sigma = np.maximum(sigma, 0.8 * np.median(sigma[enough]))
        # about the median, so that squares of large levels do not drown small spreads in float32
        away = np.where(finite, cube - center, np.float32(0))
        limit = np.maximum(kappa * sigma, 1e-6 * np.abs(center))
        limit = np.where(enough, limit, np.inf).astype(np.float32)
        keep = (np.abs(away) <= limit) & finite
        used, mean = count, np.zeros_like(center)
        for _ in range(rounds):
            used = keep.sum(axis=0, dtype=np.int32)
            kept = np.where(keep, away, np.float32(0))
            mean = kept.sum(axis=0) / np.maximum(used, 1)
            variance = np.einsum("i...,i...->...", kept, kept) / np.maximum(used, 1) - mean**2
            spread = np.sqrt(np.maximum(variance, 0) * used / np.maximum(used - 1, 1))
            limit = np.maximum(kappa * np.maximum(1.03 * spread, 0.8 * sigma), 1e-6 * np.abs(center))
            limit = np.where(enough, limit, np.inf).astype(np.float32)
            again = (np.abs(away - mean) <= limit) & finite
            if np.array_equal(again, keep):
                break
            keep = again
        used = keep.sum(axis=0, dtype=np.int32)
        mean = _weighted(np.where(keep, away, np.float32(0)), keep, weight, used)
        return np.where(count > 0, center + np.nan_to_num(mean), np.nan).astype(np.float32), used


def _weighted(
    values: np.ndarray, keep: np.ndarray, weight: np.ndarray | None, count: np.ndarray
) -> np.ndarray:
    """Return the mean along axis 0 of what is kept (`values` are 0 elsewhere), NaN where nothing is."""
    if weight is None:
        return (values.sum(axis=0) / np.where(count, count, np.nan)).astype(np.float32)
    heavy = np.where(keep, weight, np.float32(0))
    return np.asarray(np.einsum("i...,i...->...", values, heavy) / heavy.sum(axis=0), np.float32)
