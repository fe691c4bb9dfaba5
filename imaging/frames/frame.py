"""One frame in memory: its pixels, when they were exposed, and how its rows are seen.

Pixels are 0-based, x counts columns, y counts rows of the array as the file holds it (nothing is flipped), and
the centre of a pixel is an integer: the same numbers that `astropy.wcs` calls origin 0.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np


@dataclass(frozen=True)
class FrameTime:
    """Beginning, middle and end of an exposure in TT seconds from J2000.0, with where they came from.

    `sigma_s` is the 1-sigma of the middle as far as the file itself tells (resolution of the stamp); `source`
    names the keys used, `notes` what had to be assumed.
    """

    begin_tt_s: float
    middle_tt_s: float
    end_tt_s: float
    sigma_s: float
    source: str
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class Frame:
    """One exposure.

    `data`: (rows, columns) float32, a luminance fit for measuring (green plane of a mosaic, mean of colours).
    `colour`: (rows, columns, 3) float32 or None; `mosaic`: Bayer pattern such as `RGGB`, or None.
    `row_zero`: `bottom` (FITS) or `top` (rasters): which edge of the picture row 0 is when it is looked at.
    `saturation_adu`: value at and above which a pixel is not linear, or None when unknown.
    `bias_adu`: the value of no light where known: 0 once the bias was taken off, None when the rig alone can tell.
    `gain_e_adu`, `read_noise_e`: for the noise model, None when unknown.
    `site`: (latitude_deg, longitude_deg, height_m) from the file, or None.
    `time_missing`: why `time` is None, in one line.
    """

    path: Path
    data: np.ndarray
    time: FrameTime | None
    exposure_s: float | None
    row_zero: str = "bottom"
    colour: np.ndarray | None = None
    mosaic: str | None = None
    binning: int = 1
    saturation_adu: float | None = None
    gain_e_adu: float | None = None
    read_noise_e: float | None = None
    camera: str | None = None
    filter: str | None = None
    site: tuple[float, float, float] | None = None
    scale_hint_arcsec_px: float | None = None
    header: dict[str, Any] = field(default_factory=dict)
    frame_index: int = 0
    time_missing: str | None = None
    bias_adu: float | None = None
