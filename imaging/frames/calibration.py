"""Bias, dark and flat taken off; bad pixels told from a dark; noise measured where the rig does not state it.

    corrected = (frame - bias - dark * exposure / dark exposure) / flat

Masters are means with outliers rejected over the frames, made once and kept with a hash of what they were made of.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from imaging.frames.frame import Frame
from imaging.frames.reading import read_frame
from planner.errors import FrameSetAside, InputError

_BAD_SIGMAS = 8.0  # of a dark's own scatter
_BAND_ROWS = 256
_EXPOSURE_SLACK = 0.02  # darks within this share of the frame's exposure need no scaling


@dataclass(frozen=True)
class Master:
    """A mean frame: `data` (rows, columns), `exposure_s`, how many frames, and a hash of their bytes."""

    kind: str
    data: np.ndarray
    exposure_s: float
    frames: int
    hash: str


@dataclass(frozen=True)
class Noise:
    """A camera's noise: electrons a count, and read noise in electrons, each with its 1-sigma."""

    gain_e_adu: float
    gain_sigma: float
    read_noise_e: float
    read_noise_sigma: float


def make_master(
    paths: list[Path], kind: str, cache: Path | None = None, bias: Master | None = None
) -> Master:
    """Return the master `bias`, `dark` or `flat` of these frames, from `cache` when it holds one of the same bytes.

    Pixels more than 4 robust sigmas from the median over the frames are left out (cosmic rays). Flats are made mean 1;
    `bias` is taken off darks and flats first. Raises FrameSetAside for a frame that cannot be read, InputError for
    frames of different sizes or none.
    """
    if kind not in ("bias", "dark", "flat"):
        raise InputError(f"kind: found {kind!r}; allowed are bias, dark, flat")
    if not paths:
        raise InputError(f"{kind}: found no frames; allowed are one or more")
    digest = hashlib.sha256(kind.encode() + (bias.hash.encode() if bias else b""))
    for path in sorted(paths):
        digest.update(path.read_bytes())
    name = digest.hexdigest()[:16]
    kept = cache / f"master-{kind}-{name}.fits" if cache is not None else None
    if kept is not None and kept.exists():
        return _kept(kept, kind, name)
    frames = [read_frame(path) for path in paths]
    if len({frame.data.shape for frame in frames}) > 1:
        raise InputError(f"{kind}: found frames of different sizes; allowed is one size")
    exposures = [frame.exposure_s or 0.0 for frame in frames]
    if kind == "dark" and max(exposures) - min(exposures) > _EXPOSURE_SLACK * max(max(exposures), 1e-9):
        raise InputError("dark: found frames of different exposures; allowed is one exposure")
    data = np.empty(frames[0].data.shape, dtype=np.float32)
    for top in range(0, len(data), _BAND_ROWS):  # in bands: the stack never stands in memory twice
        band = np.stack([frame.data[top : top + _BAND_ROWS] for frame in frames])
        if bias is not None:
            band = band - bias.data[top : top + _BAND_ROWS]
        if kind == "flat":
            band = band / np.array([_level(frame, bias) for frame in frames], dtype=np.float32)[:, None, None]
        data[top : top + _BAND_ROWS] = _clipped_mean(band)
    if kind == "flat":
        data /= np.nanmean(data)
    master = Master(kind, data, float(np.mean(exposures)), len(frames), name)
    if kept is not None:
        _keep(master, kept)
    return master


def calibrate(
    frame: Frame,
    bias: Master | None = None,
    dark: Master | None = None,
    flat: Master | None = None,
    *,
    scale_dark: bool = False,
    bad: np.ndarray | None = None,
) -> Frame:
    """Return the frame with its calibration applied; bad pixels and pixels of no sensitivity become NaN.

    A dark of another exposure is scaled when `scale_dark` (then it must have had its bias taken off, and `bias` be
    given), else refused. Raises FrameSetAside when a master does not fit.
    """
    data = frame.data.astype(np.float32, copy=True)
    for master in (bias, dark, flat):
        if master is not None and master.data.shape != data.shape:
            raise FrameSetAside(
                frame.path, f"is {data.shape}, the master {master.kind} is {master.data.shape}"
            )
    if bias is not None:
        data -= bias.data
    if dark is not None:
        share = 1.0
        length = frame.exposure_s
        if length is not None and abs(dark.exposure_s - length) > _EXPOSURE_SLACK * max(
            dark.exposure_s, length
        ):
            if not scale_dark or bias is None:
                raise FrameSetAside(
                    frame.path,
                    f"was exposed {length:g} s, the dark {dark.exposure_s:g} s, and scaling is not allowed",
                )
            share = length / dark.exposure_s
        data -= dark.data * np.float32(share)
    if flat is not None:
        data = np.where(flat.data > 0.05, data / np.maximum(flat.data, 0.05), np.nan)
    if bad is not None:
        data[bad] = np.nan
    shift = float(np.median(bias.data)) if bias is not None else 0.0
    saturation = frame.saturation_adu - shift if frame.saturation_adu is not None else None
    return replace(frame, data=data, saturation_adu=saturation)


def bad_pixels(dark: Master) -> np.ndarray:
    """Return which pixels (rows, columns) of a dark lie 8 robust sigmas or more off its median: hot or dead."""
    middle = np.nanmedian(dark.data)
    spread = 1.4826 * np.nanmedian(np.abs(dark.data - middle))
    with np.errstate(invalid="ignore"):
        return ~(np.abs(dark.data - middle) < _BAD_SIGMAS * max(float(spread), 1e-6))


def photon_transfer(
    flats: list[tuple[np.ndarray, np.ndarray]], biases: list[tuple[np.ndarray, np.ndarray]]
) -> Noise:
    """Return gain and read noise from pairs of flats and pairs of biases, of the same light each.

    Mean-variance method (Janesick 2007, Photon Transfer, chapter 5): the difference of two like frames has twice the
    variance of one, and fixed patterns cancel. Variances are robust (trimmed at 4 sigma), the slope is fitted through
    the read noise. Raises InputError without a pair of each.
    """
    if not flats or not biases:
        raise InputError(
            "photon transfer: found no pair of flats or of biases; allowed is one pair of each or more"
        )
    read_variance, read_error, level = _pair_statistics(biases)
    bias_level, read = float(np.mean(level)), float(np.mean(read_variance))
    variance, error, mean = _pair_statistics(flats)
    signal = mean - bias_level
    use = signal > 3 * np.sqrt(read)
    if not use.any():
        raise InputError("photon transfer: found flats no brighter than the bias; allowed are exposed flats")
    weight = 1 / error[use] ** 2
    slope = float((weight * signal[use] * (variance[use] - read)).sum() / (weight * signal[use] ** 2).sum())
    slope_error = float(1 / np.sqrt((weight * signal[use] ** 2).sum()))
    gain = 1 / slope
    read_sigma = float(np.mean(read_error) / np.sqrt(len(read_error)))
    return Noise(
        gain,
        gain * slope_error / slope,
        gain * np.sqrt(read),
        gain * np.sqrt(read) * float(np.hypot(slope_error / slope, 0.5 * read_sigma / read)),
    )


def outliers_in_time(stack: np.ndarray, sigma: np.ndarray | float, sigmas: float = 6.0) -> np.ndarray:
    """Return which pixels (frames, rows, columns) of registered frames are struck: cosmic rays, satellites.

    A pixel is struck when it is brighter than the median over the frames by `sigmas` of its noise. Sharp limbs are
    kept, where a gradient test would flag thousands of pixels. At least three frames are needed.
    """
    if len(stack) < 3:
        raise InputError(f"outliers in time: found {len(stack)} frames; allowed are three or more")
    return stack - np.median(stack, axis=0) > sigmas * np.asarray(sigma)


def _pair_statistics(pairs: list[tuple[np.ndarray, np.ndarray]]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    variances, errors, means = [], [], []
    for one, other in pairs:
        one, other = np.asarray(one, float), np.asarray(other, float)
        difference = (one - other).ravel()
        difference = difference[np.isfinite(difference)]
        difference -= np.median(difference)
        spread = 1.4826 * np.median(np.abs(difference))
        kept = difference[np.abs(difference) < 4 * max(spread, 1e-9)]
        # a Gaussian cut at 4 sigma has lost 0.107 % of its variance
        variance = float(np.mean(kept**2)) / 2 / 0.99893
        variances.append(variance)
        errors.append(variance * np.sqrt(2 / len(kept)))
        means.append(float((np.nanmean(one) + np.nanmean(other)) / 2))
    return np.array(variances), np.array(errors), np.array(means)


def _level(frame: Frame, bias: Master | None) -> float:
    level = float(np.nanmedian(frame.data)) - (float(np.median(bias.data)) if bias is not None else 0.0)
    if level <= 0:
        raise FrameSetAside(frame.path, "is a flat without light")
    return level


def _clipped_mean(stack: np.ndarray) -> np.ndarray:
    if len(stack) < 3:
        return np.nanmean(stack, axis=0)
    middle = np.nanmedian(stack, axis=0)
    spread = 1.4826 * np.nanmedian(np.abs(stack - middle), axis=0)
    floor = max(float(np.nanmedian(spread)), 1e-6)
    kept = np.where(np.abs(stack - middle) <= 4 * np.maximum(spread, floor), stack, np.nan)
    return np.nanmean(kept, axis=0)


def _keep(master: Master, path: Path) -> None:
    from astropy.io import fits

    from planner.outputs import whole_file

    header = fits.Header()
    header["IMAGETYP"], header["EXPTIME"] = f"master {master.kind}", master.exposure_s
    header["NFRAMES"], header["INPUTS"] = (
        (master.frames, "frames averaged"),
        (master.hash, "hash of their bytes"),
    )
    with whole_file(path, force=True) as part:
        fits.PrimaryHDU(master.data, header).writeto(part, overwrite=True)


def _kept(path: Path, kind: str, name: str) -> Master:
    from astropy.io import fits

    with fits.open(path, memmap=False) as hdus:
        header, data = hdus[0].header, np.asarray(hdus[0].data, dtype=np.float32)
    return Master(kind, data, float(header["EXPTIME"]), int(header["NFRAMES"]), name)
