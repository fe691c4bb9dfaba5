"""A night's calibration: the masters of a folder, and what they do to each frame as it comes in.

The folder holds `bias`, `dark` and `flat` folders, each optional. Darks are grouped by exposure, flats by filter. A
frame gets the dark of its own exposure; else, where there is a bias, the longest dark scaled to it.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path

import numpy as np

from imaging.frames.calibration import (
    EXPOSURE_SLACK,
    NOT_RECORDED,
    Master,
    bad_pixels,
    calibrate,
    make_master,
    recorded,
    repaired,
)
from imaging.frames.frame import Frame
from imaging.frames.photontransfer import Noise, photon_transfer
from planner.errors import FrameSetAside, InputError

KINDS = ("bias", "dark", "flat")
_PAIRS = 2


@dataclass(frozen=True)
class Calibration:
    """What is taken off each frame; apply it before a mosaic is taken apart (`read_frame(..., calibration=...)`).

    `bad` (rows, columns): pixels that are replaced by their neighbours; `hot`: those that the frames themselves show to
    be hot (see `hotpixels`), in frames of that size. `noise`: what frames get whose own file does not state gain or
    read noise.
    """

    bias: Master | None = None
    darks: tuple[Master, ...] = ()
    flats: tuple[Master, ...] = ()
    bad: np.ndarray | None = None
    noise: Noise | None = None
    hot: np.ndarray | None = None

    def apply(self, frame: Frame) -> Frame:
        """Return the frame calibrated, bad pixels mended; raises FrameSetAside when no master fits it."""
        if frame.colour is not None:
            if self.bias is None and not self.darks and not self.flats:
                return frame
            raise FrameSetAside(frame.path, NOT_RECORDED)
        frame = calibrate(frame, self.bias, self._dark(frame), self._flat(frame), scale_dark=True)
        data, bad = frame.data, self.bad
        if bad is not None:
            if bad.shape != data.shape:
                raise FrameSetAside(
                    frame.path,
                    f"is {data.shape[1]} x {data.shape[0]} pixels, the dark {bad.shape[1]} x {bad.shape[0]}",
                )
            data = repaired(data, bad, frame.mosaic)
        if self.hot is not None and self.hot.shape == data.shape:
            data = repaired(data, self.hot, frame.mosaic)
        noise = self.noise
        if noise is None:
            return replace(frame, data=data)
        return replace(
            frame,
            data=data,
            gain_e_adu=frame.gain_e_adu or noise.gain_e_adu,
            read_noise_e=frame.read_noise_e or noise.read_noise_e,
        )

    def provenance(self) -> dict[str, str]:
        """Return what was used, with the hash of its frames' bytes, for the header of a result."""
        said = {}
        for master in (self.bias, *self.darks, *self.flats):
            if master is not None:
                name = f"master {master.kind}"
                if master.kind == "dark":
                    name += f" {master.exposure_s:g} s"
                if master.filter:
                    name += f" {master.filter}"
                said[name] = f"{master.frames} frames, {master.hash}"
        if self.bad is not None:
            said["bad pixels"] = str(int(self.bad.sum()))
        if self.hot is not None:
            said["hot pixels by time"] = str(int(self.hot.sum()))
        if self.noise is not None:
            said["noise by photon transfer"] = (
                f"{self.noise.gain_e_adu:.4f} +- {self.noise.gain_sigma:.4f} e/ADU, "
                f"read noise {self.noise.read_noise_e:.2f} +- {self.noise.read_noise_sigma:.2f} e"
            )
        return said

    def _dark(self, frame: Frame) -> Master | None:
        if not self.darks:
            return None
        length = frame.exposure_s
        if length is None:
            raise FrameSetAside(
                frame.path, "does not state its exposure, so that no dark can be chosen for it"
            )
        nearest = min(self.darks, key=lambda dark: abs(dark.exposure_s - length))
        if abs(nearest.exposure_s - length) <= EXPOSURE_SLACK * max(nearest.exposure_s, length):
            return nearest
        return max(self.darks, key=lambda dark: dark.exposure_s)

    def _flat(self, frame: Frame) -> Master | None:
        if not self.flats:
            return None
        if len(self.flats) == 1 and (self.flats[0].filter is None or frame.filter is None):
            return self.flats[0]
        for flat in self.flats:
            if flat.filter == frame.filter:
                return flat
        there = ", ".join(flat.filter or "no filter" for flat in self.flats)
        raise FrameSetAside(
            frame.path, f"was taken through {frame.filter or 'no filter'}; flats are there for {there}"
        )


def calibration_of(
    folder: Path, cache: Path | None = None, tick: Callable[[int, int], None] | None = None
) -> Calibration:
    """Return the calibration of a folder; masters are kept in `cache` (default: the user's cache folder).

    Raises InputError when the folder holds none of `bias`, `dark`, `flat`, or frames that do not belong together.
    """
    if not folder.is_dir():
        raise InputError(f"{folder}: is not a folder of calibration frames")
    files = {kind: _files(folder / kind) for kind in KINDS}
    if not any(files.values()):
        there = ", ".join(sorted(path.name for path in folder.iterdir())[:6]) or "nothing"
        raise InputError(
            f"{folder}: found {there}; allowed are folders named bias, dark, flat with frames in them"
        )
    cache = cache or _cache()
    total, done = sum(len(paths) for paths in files.values()), 0

    def made(paths: list[Path], kind: str, bias: Master | None) -> Master:
        nonlocal done
        try:
            master = make_master(
                paths, kind, cache, bias, lambda n, _: tick(done + n, total) if tick else None
            )
        except (
            FrameSetAside
        ) as aside:  # a master of fewer frames than the user thinks would be a quiet surprise
            raise InputError(f"{kind}: found {aside}; allowed are frames of this camera alone") from None
        done += len(paths)
        return master

    bias = made(files["bias"], "bias", None) if files["bias"] else None
    darks = tuple(made(paths, "dark", bias) for paths in _by_exposure(files["dark"]))
    flats = tuple(made(paths, "flat", bias or _without_light(darks)) for paths in _by_filter(files["flat"]))
    sizes = {master.data.shape for master in (bias, *darks, *flats) if master is not None}
    if len(sizes) > 1:
        said = ", ".join(f"{width} x {height}" for height, width in sorted(sizes))
        raise InputError(f"{folder}: found calibration frames of {said} pixels; allowed is one size")
    bad = bad_pixels(max(darks, key=lambda dark: dark.exposure_s)) if darks else None
    return Calibration(bias, darks, flats, bad, _noise(files["flat"], files["bias"]))


def _without_light(darks: Sequence[Master]) -> Master | None:
    """Return what stands for the bias of flats where there is none: the shortest dark."""
    return min(darks, key=lambda dark: dark.exposure_s) if darks else None


def _files(folder: Path) -> list[Path]:
    if not folder.is_dir():
        return []
    return sorted(path for path in folder.iterdir() if path.is_file() and not path.name.startswith("."))


def _by_exposure(paths: list[Path]) -> list[list[Path]]:
    """Return groups of one exposure each, shortest first."""
    lengths = sorted((_told(path).exposure_s or 0.0, path) for path in paths)
    groups: list[list[Path]] = []
    for index, (length, path) in enumerate(lengths):
        if index == 0 or length - lengths[index - 1][0] > EXPOSURE_SLACK * length:
            groups.append([])
        groups[-1].append(path)
    return groups


def _by_filter(paths: list[Path]) -> list[list[Path]]:
    groups: dict[str, list[Path]] = {}
    for path in paths:
        groups.setdefault(_told(path).filter or "", []).append(path)
    return list(groups.values())


def _told(path: Path) -> Frame:
    try:
        return recorded(path)
    except FrameSetAside as aside:
        raise InputError(
            f"{aside.path}: found a file that {aside.reason}; allowed are frames alone"
        ) from None


def _noise(flats: list[Path], biases: list[Path]) -> Noise | None:
    """Return the noise measured from the first pairs of flats of one light, and of biases; None without them."""
    if len(flats) < 2 or len(biases) < 2:
        return None
    bright = [recorded(path) for path in flats[: 2 * _PAIRS]]
    dark = [recorded(path) for path in biases[: 2 * _PAIRS]]

    def pairs(frames: list[Frame]) -> list[tuple[np.ndarray, np.ndarray]]:
        return [(one.data, two.data) for one, two in list(pairwise(frames))[::2]]

    try:
        return photon_transfer(pairs(bright), pairs(dark), bright[0].mosaic, bright[0].saturation_adu)
    except InputError:  # flats without light enough do not measure noise; they may still flatten
        return None


def _cache() -> Path | None:
    from platformdirs import user_cache_path

    try:
        return user_cache_path("syzygraph") / "masters"
    except (OSError, RuntimeError):
        return None
