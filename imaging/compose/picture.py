"""A composite in linear light, with what was drawn where, before it becomes a file."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from imaging.compose.canvas import Canvas
from imaging.compose.material import Registered


@dataclass(frozen=True)
class Drawn:
    """The target as drawn at one instant: canvas pixels of its measured and of its predicted place.

    `displacement_arcsec`: between where it is drawn and where the prediction has it; NaN when it was not measured.
    """

    frame: Registered
    x_px: float
    y_px: float
    predicted_x_px: float
    predicted_y_px: float
    displacement_arcsec: float
    radius_px: float


@dataclass(frozen=True)
class Picture:
    """A composite.

    `image`: (rows, columns) or (rows, columns, 3), float32, linear, NaN where no frame reaches; row 0 is the bottom.
    `anchor_ra_deg`, `anchor_dec_deg`: what the canvas is anchored on at `reference_tt_s`.
    `used`: every frame that went in, with its role. `tone`: for the stretch, see there.
    `enlargement`: by how much bodies are drawn larger than true (1 for none). `left_out`: frames and why.
    `labels`: words written into the picture with its caption, each centred on canvas pixels (x_px, y_px).
    """

    kind: str
    registered_on: str
    blend: str
    image: np.ndarray
    count: np.ndarray
    canvas: Canvas
    anchor_ra_deg: float
    anchor_dec_deg: float
    reference_tt_s: float
    drawn: tuple[Drawn, ...]
    used: tuple[tuple[Registered, str], ...]
    tone: str
    notes: tuple[str, ...] = ()
    enlargement: float = 1.0
    left_out: tuple[tuple[str, str], ...] = field(default=())
    labels: tuple[tuple[float, float, str], ...] = ()

    def holds_path_about(self, disc: str | None) -> bool:
        """Return whether a path about this disc, or among stars (None), can be drawn on the picture."""
        if disc is None:
            return self.kind in ("sky-path", "sky-series")
        return self.kind in ("disc-path", "two-sites") and disc == self.registered_on

    def faintest_peak(self) -> float:
        """Return the peak value of the faintest target drawn on the sky beside a disc, infinity when there is none."""
        if self.registered_on != "moon" and self.kind != "sky-series":
            return np.inf
        plane = self.image if self.image.ndim == 2 else self.image.mean(axis=2)
        peaks = []
        for item in self.drawn:
            reach = int(max(2, item.radius_px + 1))
            row, column = round(item.y_px), round(item.x_px)
            box = plane[max(0, row - reach) : row + reach + 1, max(0, column - reach) : column + reach + 1]
            if box.size and np.isfinite(box).any():
                peaks.append(float(np.nanmax(box)))
        return min(peaks, default=np.inf)
