"""Long and short exposures of one visit, merged: what the long ones burn out is taken from the short ones."""

from __future__ import annotations

import numpy as np

from imaging.compose.material import Registered
from imaging.frames.frame import Frame

SAME_EXPOSURE = 1.3
UNDER_SATURATION = 0.9


def by_exposure(frames: list[Registered]) -> list[list[Registered]]:
    """Return the frames in groups of about the same exposure, the longest first; unknown exposures are one group."""
    known = sorted(
        (frame for frame in frames if np.isfinite(frame.exposure_s)), key=lambda frame: -frame.exposure_s
    )
    groups: list[list[Registered]] = []
    for frame in known:
        if groups and groups[-1][0].exposure_s < SAME_EXPOSURE * frame.exposure_s:
            groups[-1].append(frame)
        else:
            groups.append([frame])
    unknown = [frame for frame in frames if not np.isfinite(frame.exposure_s)]
    return groups + ([unknown] if unknown else [])


def not_burnt_out(frame: Frame, saturation_adu: float) -> np.ndarray:
    """Return the mask of pixels that are linear, with a pixel's width of doubt about those that are not."""
    import cv2

    limit = UNDER_SATURATION * (frame.saturation_adu or saturation_adu)
    burnt = (frame.data >= limit).astype(np.uint8)
    return cv2.dilate(burnt, np.ones((3, 3), np.uint8)) == 0


def merged(layers: list[np.ndarray], shortest_whole: np.ndarray | None = None) -> np.ndarray:
    """Return one picture in linear light of layers with holes (NaN), the longest exposure first.

    Holes are filled from the next shorter layer, what is left from `shortest_whole` (burnt out in every exposure).
    """
    image = layers[0].copy()
    for layer in [*layers[1:], *([shortest_whole] if shortest_whole is not None else [])]:
        hole = ~np.isfinite(image)
        image[hole] = layer[hole]
    return image
