"""Gain and read noise of a camera, measured from pairs of like frames.

Mean-variance method (Janesick 2007, Photon Transfer, chapter 5): the difference of two like frames has twice the
variance of one, and fixed patterns cancel. The frame is cut into blocks, each a point of the curve, so that vignetting
and the colours of a mosaic give a range of light instead of spoiling one point.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.errors import InputError

_BLOCK_PX = 24
_CUT = 4.0  # sigmas beyond which a difference is a cosmic ray
_CUT_LOSS = 0.99893  # a Gaussian cut there keeps this share of its variance


@dataclass(frozen=True)
class Noise:
    """A camera's noise: electrons a count, and read noise in electrons, each with its 1-sigma.

    `bias_adu`: the value of no light.
    """

    gain_e_adu: float
    gain_sigma: float
    read_noise_e: float
    read_noise_sigma: float
    bias_adu: float = 0.0


def photon_transfer(
    flats: list[tuple[np.ndarray, np.ndarray]],
    biases: list[tuple[np.ndarray, np.ndarray]],
    mosaic: str | None = None,
    saturation_adu: float | None = None,
) -> Noise:
    """Return gain and read noise from pairs of flats and pairs of biases (rows, columns), two of the same light each.

    Flats of one pair may differ by a few percent in light: the second is brought to the level of the first.
    `mosaic`: frames are as recorded, and each of the four planes is cut into blocks of its own. Blocks above 0.9 of
    `saturation_adu` are left out. The slope of variance against signal is fitted through the read noise.
    Raises InputError without a pair of each, or without light.
    """
    if not flats or not biases:
        raise InputError(
            "photon transfer: found no pair of flats or of biases; allowed is one pair of each or more"
        )
    levels = [_blocks(one, other, mosaic, 0.0) for one, other in biases]
    dark_mean, dark_variance, dark_error = (np.concatenate(part) for part in zip(*levels, strict=True))
    bias_level = float(np.median(dark_mean))
    read = _weighted(dark_variance, dark_error)
    read_sigma = float(1 / np.sqrt((dark_error**-2.0).sum()))
    points = [_blocks(one, other, mosaic, bias_level) for one, other in flats]
    mean, variance, error = (np.concatenate(part) for part in zip(*points, strict=True))
    signal = mean - bias_level
    use = signal > 3 * np.sqrt(max(read, 1e-12))
    if saturation_adu is not None:
        use &= mean < 0.9 * saturation_adu
    if not use.any():
        raise InputError("photon transfer: found flats no brighter than the bias; allowed are exposed flats")
    signal, variance, relative = signal[use], variance[use], error[use] / variance[use]
    expected = np.maximum(variance.mean() * signal / signal.mean(), read)
    slope, slope_error = 0.0, 0.0
    for _ in range(4):
        # the scatter of a variance follows from what it should be, not from what it happened to be
        weight = (relative * expected) ** -2.0
        slope = float((weight * signal * (variance - read)).sum() / (weight * signal**2).sum())
        slope_error = float(1 / np.sqrt((weight * signal**2).sum()))
        expected = np.maximum(read + slope * signal, 1e-12)
        keep = (
            np.abs(variance - expected) < 5 * relative * expected
        )  # a block that holds a defect is off the line
        if keep.sum() < max(3, 0.5 * len(signal)):
            break
        signal, variance, relative, expected = (part[keep] for part in (signal, variance, relative, expected))
    if not slope > 0:
        raise InputError(
            "photon transfer: found flats whose noise does not grow with light; allowed are raw flats"
        )
    gain = 1 / slope
    return Noise(
        gain,
        gain * slope_error / slope,
        gain * float(np.sqrt(max(read, 0.0))),
        gain
        * float(np.sqrt(max(read, 0.0)))
        * float(np.hypot(slope_error / slope, 0.5 * read_sigma / max(read, 1e-12))),
        bias_level,
    )


def _blocks(
    one: np.ndarray, other: np.ndarray, mosaic: str | None, bias_adu: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return mean, variance of one frame, and the 1-sigma of that variance, of each block."""
    from imaging.frames.calibration import planes_of

    parts = [
        _of_plane(a, b, bias_adu)
        for a, b in zip(planes_of(one, mosaic), planes_of(other, mosaic), strict=True)
    ]
    mean, variance, error = (np.concatenate(part) for part in zip(*parts, strict=True))
    return mean, variance, error


def _of_plane(
    one: np.ndarray, other: np.ndarray, bias_adu: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    one, other = (np.asarray(plane, float) for plane in (one, other))
    if bias_adu:
        ratio = (np.nanmedian(one) - bias_adu) / max(np.nanmedian(other) - bias_adu, 1e-12)
        if 0.8 < ratio < 1.25:
            other = bias_adu + (other - bias_adu) * ratio
    else:
        ratio = 1.0
    side = min(_BLOCK_PX, *one.shape)
    rows, columns = one.shape[0] // side, one.shape[1] // side

    def cut(plane: np.ndarray) -> np.ndarray:
        plane = plane[: rows * side, : columns * side].reshape(rows, side, columns, side)
        return plane.transpose(0, 2, 1, 3).reshape(rows * columns, -1)

    difference, total = cut(one - other), cut(one + other)
    with np.errstate(invalid="ignore"):
        difference = difference - np.nanmedian(difference, axis=1)[:, None]
        spread = 1.4826 * np.nanmedian(np.abs(difference), axis=1)
        # counts are whole numbers: a spread of a fraction of one is no spread to cut at
        limit = _CUT * np.maximum(spread, 0.6)[:, None]
        kept = np.abs(difference) < limit
        number = kept.sum(axis=1)
        square = np.where(kept, difference**2, 0.0).sum(axis=1) / np.maximum(number - 1, 1) / _CUT_LOSS
    # var(a - r b) = (1 + r^2) variances where noise is the same, r near 1
    variance = square / (1 + ratio**2)
    mean = np.nanmean(total, axis=1) / 2
    fine = (number > side * side / 2) & (variance > 0) & np.isfinite(mean)
    return mean[fine], variance[fine], (variance * np.sqrt(2 / np.maximum(number, 1)))[fine]


def _weighted(values: np.ndarray, errors: np.ndarray) -> float:
    """Return the mean of block variances, outliers left out; weighting by their own values would favour small ones."""
    middle = np.median(values)
    keep = np.abs(values - middle) < 5 * np.median(errors)
    return float(values[keep].mean()) if keep.any() else float(middle)
