"""Hot pixels told by time: what is one pixel sharp at the same place in frame after frame is the sensor's own.

One frame cannot tell a hot pixel from a cosmic ray, and a gradient test takes a sharp limb for thousands of either;
over frames, a ray never strikes twice, and a star is wider than a pixel.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from imaging.frames.calibration import planes_of
from imaging.frames.frame import Frame
from imaging.frames.reading import read_frames
from planner.errors import FrameSetAside

SAMPLE = 5  # frames looked at, spread over the sequence
_SIGMAS = 8.0
_NEIGHBOURS_SHARE = (
    0.12  # of the middle's light in the mean of its four neighbours; a star of FWHM 1.5 px has 0.3
)


def hot_pixels(paths: Sequence[Path]) -> np.ndarray | None:
    """Return which pixels (rows, columns) are hot, told from a few frames of a sequence; None when too few are alike.

    Mosaics are judged plane by plane. A pixel must stand out in all of the frames looked at. At least `SAMPLE` files.
    """
    if len(paths) < SAMPLE:
        return None
    chosen = [paths[i] for i in np.unique(np.linspace(0, len(paths) - 1, SAMPLE).round().astype(int))]
    hot: np.ndarray | None = None
    seen = 0
    for path in chosen:
        frame = _recorded(path)
        if frame is None or (hot is not None and hot.shape != frame.data.shape):
            continue
        sharp = spikes(frame.data, frame.mosaic)
        hot = sharp if hot is None else hot & sharp
        seen += 1
    return hot if hot is not None and seen >= SAMPLE - 1 and hot.any() else None


def spikes(data: np.ndarray, mosaic: str | None = None) -> np.ndarray:
    """Return which pixels (rows, columns) stand out alone: above 8 sigmas, their neighbours without a star's share."""
    import cv2

    found = np.zeros(data.shape, dtype=bool)
    for plane, out in zip(planes_of(data, mosaic), planes_of(found, mosaic), strict=True):
        plane = np.ascontiguousarray(np.nan_to_num(plane), dtype=np.float32)
        if min(plane.shape) < 5:
            continue
        level = cv2.medianBlur(plane, 5)
        over = plane - level
        sample = over[::5, ::5]
        sigma = 1.4826 * float(np.median(np.abs(sample - np.median(sample))))
        cross = np.array([[0, 0.25, 0], [0.25, 0, 0.25], [0, 0.25, 0]], dtype=np.float32)
        around = cv2.filter2D(plane, -1, cross, borderType=cv2.BORDER_REFLECT_101) - level
        out[...] = (over > _SIGMAS * max(sigma, 1e-6)) & (around < _NEIGHBOURS_SHARE * over + 0.5 * sigma)
    return found


def _recorded(path: Path) -> Frame | None:
    try:
        for frame in read_frames(path, colour=True, as_recorded=True, stop=1):
            return frame if frame.colour is None else None
    except FrameSetAside:
        pass
    return None
