"""One frame in memory: its pixels, when they were exposed, and how its rows are seen.

Pixels are 0-based, x counts columns, y counts rows of the array as the file holds it (nothing is flipped), and
the centre of a pixel is an integer: the same numbers that `astropy.wcs` calls origin 0.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from planner.sequence.models import Sensor


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

    def later(self, delay_s: float, why: str) -> FrameTime:
        """Return the times of a part of the frame that was exposed `delay_s` after what the stamp tells of."""
        if delay_s == 0:
            return self
        return replace(
            self,
            begin_tt_s=self.begin_tt_s + delay_s,
            middle_tt_s=self.middle_tt_s + delay_s,
            end_tt_s=self.end_tt_s + delay_s,
            source=f"{self.source}; {why}",
        )

    def at_row(self, y_px: float, rows: int, row_zero: str, shutter: Shutter) -> FrameTime:
        """Return beginning, middle and end at a row of the array, read line by line (rolling shutter).

        The stamp tells of the row that is read first (common practice, no source). `rows` of the frame, `row_zero` as
        in `Frame`. A row beyond the frame, or NaN, counts as the nearest, or the middle one.
        """
        return self.later(shutter.delay_s(y_px, rows, row_zero), "rolling shutter, at the target's row")


@dataclass(frozen=True)
class Shutter:
    """How a sensor is read: `line_s` from a row to the next (0: all at once), from which edge of the picture."""

    line_s: float = 0.0
    first: str = "top"

    @classmethod
    def of(cls, sensor: Sensor, binning: int = 1) -> Shutter:
        """Return that of a rig's sensor, for frames of `binning` pixels a side summed."""
        if sensor.shutter != "rolling":
            return cls()
        line_s = sensor.rolling_readout_s / max(sensor.height_px - 1, 1) * binning
        return cls(line_s, sensor.rolling_from)

    def delay_s(self, y_px: float, rows: int, row_zero: str) -> float:
        """Return how much later than the first row of a frame a row is exposed; see `FrameTime.at_row`."""
        y = (rows - 1) / 2 if y_px != y_px else min(max(y_px, 0.0), rows - 1.0)
        return self.line_s * (y if row_zero == self.first else rows - 1 - y)


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
