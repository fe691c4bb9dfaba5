"""Bias, dark and flat taken off; bad pixels told from a dark and mended.

    corrected = (frame - bias - dark * exposure / dark exposure) / flat

Masters are means with outliers rejected over the frames, made once and kept with a hash of what they were made of.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from imaging.frames.frame import Frame
from imaging.frames.reading import read_frames
from planner.errors import FrameSetAside, InputError

_FORMAT = 2  # of what is kept
_TOGETHER = 7  # frames in memory at once
_BAD_SIGMAS = 8.0  # of a dark's own scatter
_BAND_ROWS = 256
NOT_RECORDED = (
    "holds colours already made of the sensor's values; calibration needs the values themselves (RAW, FITS)"
)
EXPOSURE_SLACK = 0.02  # darks within this share of the frame's exposure need no scaling


@dataclass(frozen=True)
class Master:
    """A mean frame: `data` (rows, columns), `exposure_s`, how many frames, a hash of their bytes, and their filter."""

    kind: str
    data: np.ndarray
    exposure_s: float
    frames: int
    hash: str
    filter: str | None = None


def make_master(
    paths: list[Path],
    kind: str,
    cache: Path | None = None,
    bias: Master | None = None,
    tick: Callable[[int, int], None] | None = None,
) -> Master:
    """Return the master `bias`, `dark` or `flat` of these frames, from `cache` when it holds one of the same bytes.

    Mosaics stay as the sensor gave them. Frames are averaged seven at a time, so that memory does not grow with their
    number; in each seven, pixels more than 4 robust sigmas from the median are left out (cosmic rays). Flats are made
    mean 1 (each colour of a mosaic by itself); `bias` is taken off darks and flats first. Raises FrameSetAside for a
    frame that cannot be read, InputError for frames of different sizes or none.
    """
    if kind not in ("bias", "dark", "flat"):
        raise InputError(f"kind: found {kind!r}; allowed are bias, dark, flat")
    if not paths:
        raise InputError(f"{kind}: found no frames; allowed are one or more")
    digest = hashlib.sha256(f"{_FORMAT} {kind} ".encode() + (bias.hash.encode() if bias else b""))
    for path in sorted(paths):
        with open(path, "rb") as file:
            digest.update(hashlib.file_digest(file, "sha256").digest())
    name = digest.hexdigest()[:16]
    kept = cache / f"master-{kind}-{name}.fits" if cache is not None else None
    if kept is not None and kept.exists():
        with suppress(OSError, KeyError, ValueError):  # a damaged one is made again
            return _kept(kept, kind, name)
    groups = np.array_split(np.array(sorted(paths), dtype=object), -(-len(paths) // _TOGETHER))
    total: np.ndarray | None = None
    exposures: list[float] = []
    first: Frame | None = None
    for group in groups:
        frames = [recorded(path) for path in group]
        first = first or frames[0]
        for frame in frames:
            if frame.data.shape != first.data.shape:
                raise InputError(
                    f"{kind}: found {frame.path.name} of {_size(frame)} pixels beside {first.path.name} of "
                    f"{_size(first)}; allowed is one size"
                )
        exposures += [frame.exposure_s or 0.0 for frame in frames]
        part = _mean_of(frames, kind, bias) * np.float32(len(frames))
        total = part if total is None else total + part
        if tick is not None:
            tick(len(exposures), len(paths))
    if kind == "dark" and max(exposures) - min(exposures) > EXPOSURE_SLACK * max(max(exposures), 1e-9):
        raise InputError("dark: found frames of different exposures; allowed is one exposure")
    assert total is not None
    assert first is not None
    data = total / np.float32(len(paths))
    if kind == "flat":
        for plane in planes_of(data, first.mosaic):
            plane /= np.nanmean(plane)
    master = Master(kind, data, float(np.mean(exposures)), len(paths), name, first.filter)
    if kept is not None:
        with suppress(OSError):  # a folder that cannot be written costs time, nothing else
            _keep(master, kept)
    return master


def planes_of(data: np.ndarray, mosaic: str | None) -> list[np.ndarray]:
    """Return views of the four planes of a mosaic, or of the whole."""
    if mosaic is None:
        return [data]
    return [data[row::2, column::2] for row in (0, 1) for column in (0, 1)]


def recorded(path: Path) -> Frame:
    """Return the first frame of a file as the sensor gave it; raises FrameSetAside when it holds made colours."""
    for frame in read_frames(path, colour=True, as_recorded=True, stop=1):
        if frame.colour is None:
            return frame
    raise FrameSetAside(path, NOT_RECORDED)


def _size(frame: Frame) -> str:
    return f"{frame.data.shape[1]} x {frame.data.shape[0]}"


def _mean_of(frames: list[Frame], kind: str, bias: Master | None) -> np.ndarray:
    """Return the clipped mean of a few frames, in bands: the stack never stands in memory twice."""
    data = np.empty(frames[0].data.shape, dtype=np.float32)
    if bias is not None and bias.data.shape != data.shape:
        raise InputError(f"{kind}: found frames of another size than the bias; allowed is one size")
    levels = np.array([_level(frame, bias) for frame in frames], np.float32) if kind == "flat" else None
    for top in range(0, len(data), _BAND_ROWS):
        band = np.stack([frame.data[top : top + _BAND_ROWS] for frame in frames])
        if bias is not None:
            band = band - bias.data[top : top + _BAND_ROWS]
        if levels is not None:
            band = band / levels[:, None, None]
        data[top : top + _BAND_ROWS] = _clipped_mean(band)
    return data


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
    given), else refused. The bias is taken off the saturation too, and `bias_adu` says what is left of it.
    Raises FrameSetAside when a master does not fit.
    """
    data = frame.data.astype(np.float32, copy=True)
    for master in (bias, dark, flat):
        if master is not None and master.data.shape != data.shape:
            raise FrameSetAside(
                frame.path,
                f"is {_size(frame)} pixels, the master {master.kind} is "
                f"{master.data.shape[1]} x {master.data.shape[0]}",
            )
    if bias is not None:
        data -= bias.data
    if dark is not None:
        share = 1.0
        length = frame.exposure_s
        if length is not None and abs(dark.exposure_s - length) > EXPOSURE_SLACK * max(
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
    taken_off = bias if bias is not None else dark
    shift = float(np.median(taken_off.data)) if taken_off is not None else 0.0
    saturation = None
    if frame.saturation_adu is not None:  # where the flat is brightest, saturation comes first
        brightest = float(np.percentile(flat.data, 99.9)) if flat is not None else 1.0
        saturation = (frame.saturation_adu - shift) / max(brightest, 1.0)
    left = 0.0 if taken_off is not None else frame.bias_adu
    return replace(frame, data=data, saturation_adu=saturation, bias_adu=left)


def bad_pixels(dark: Master) -> np.ndarray:
    """Return which pixels (rows, columns) of a dark lie 8 robust sigmas or more off its median: hot or dead."""
    middle = np.nanmedian(dark.data)
    spread = 1.4826 * np.nanmedian(np.abs(dark.data - middle))
    with np.errstate(invalid="ignore"):
        return ~(np.abs(dark.data - middle) < _BAD_SIGMAS * max(float(spread), 1e-6))


def repaired(data: np.ndarray, bad: np.ndarray, mosaic: str | None = None) -> np.ndarray:
    """Return the data with bad pixels replaced by the median of the good ones of their colour around them.

    Neighbours reach 2 pixels (of the colour) each way; a pixel without a good one becomes NaN.
    """
    data = data.copy()
    step = 1 if mosaic is None else 2
    rows, columns = np.nonzero(bad)
    if not len(rows):
        return data
    reach = step * np.arange(-2, 3)
    y = rows[:, None, None] + reach[None, :, None]
    x = columns[:, None, None] + reach[None, None, :]
    inside = (y >= 0) & (y < data.shape[0]) & (x >= 0) & (x < data.shape[1])
    y, x = np.clip(y, 0, data.shape[0] - 1), np.clip(x, 0, data.shape[1] - 1)
    around = np.where(inside & ~bad[y, x], data[y, x], np.nan).reshape(len(rows), -1)
    nothing = ~np.isfinite(around).any(axis=1)
    around[nothing] = 0.0
    data[rows, columns] = np.where(nothing, np.nan, np.nanmedian(around, axis=1))
    return data


def outliers_in_time(stack: np.ndarray, sigma: np.ndarray | float, sigmas: float = 6.0) -> np.ndarray:
    """Return which pixels (frames, rows, columns) of registered frames are struck: cosmic rays, satellites.

    A pixel is struck when it is brighter than the median over the frames by `sigmas` of its noise. Sharp limbs are
    kept, where a gradient test would flag thousands of pixels. At least three frames are needed.
    """
    if len(stack) < 3:
        raise InputError(f"outliers in time: found {len(stack)} frames; allowed are three or more")
    return stack - np.median(stack, axis=0) > sigmas * np.asarray(sigma)


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
    if master.filter:
        header["FILTER"] = master.filter
    with whole_file(path, force=True) as part:
        fits.PrimaryHDU(master.data, header).writeto(part, overwrite=True)


def _kept(path: Path, kind: str, name: str) -> Master:
    from astropy.io import fits

    with fits.open(path, memmap=False) as hdus:
        header, data = hdus[0].header, np.asarray(hdus[0].data, dtype=np.float32)
    return Master(kind, data, float(header["EXPTIME"]), int(header["NFRAMES"]), name, header.get("FILTER"))
