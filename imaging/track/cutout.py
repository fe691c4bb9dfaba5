"""A small picture of what was measured, for the report: the neighbourhood of the target, stretched to be seen."""

from __future__ import annotations

import base64
import io
from dataclasses import dataclass

import numpy as np

SIDE_PX = 72


@dataclass(frozen=True)
class Cutout:
    """A piece of a frame as JPEG, as it is looked at (up is up), and where things lie in it.

    Places are fractions of the side from the left and the top; NaN where unknown.
    """

    jpeg: bytes
    side_px: int
    measured: tuple[float, float]
    predicted: tuple[float, float]

    @property
    def data_uri(self) -> str:
        """Return the picture as it goes into a page."""
        return "data:image/jpeg;base64," + base64.b64encode(self.jpeg).decode("ascii")


def cut_out(
    data: np.ndarray,
    row_zero: str,
    measured_px: tuple[float, float] | None,
    predicted_px: tuple[float, float] | None,
    side_px: int = SIDE_PX,
) -> Cutout | None:
    """Return the neighbourhood of the measured place (or of the predicted one), or None when it is off the frame."""
    from PIL import Image

    center = measured_px if measured_px is not None else predicted_px
    if center is None or not np.isfinite(center).all():
        return None
    if measured_px is not None and predicted_px is not None:
        apart = 2.6 * max(abs(a - b) for a, b in zip(measured_px, predicted_px, strict=True))
        side_px = int(min(max(side_px, apart), 6 * side_px))
    half = side_px // 2
    x0, y0 = round(center[0]) - half, round(center[1]) - half
    rows, columns = data.shape
    if x0 + side_px <= 0 or y0 + side_px <= 0 or x0 >= columns or y0 >= rows:
        return None
    piece = np.full((side_px, side_px), np.nan, np.float32)
    inside = data[max(y0, 0) : min(y0 + side_px, rows), max(x0, 0) : min(x0 + side_px, columns)]
    piece[max(-y0, 0) :, max(-x0, 0) :][: inside.shape[0], : inside.shape[1]] = inside
    if not np.isfinite(piece).any():
        return None
    low, high = np.nanpercentile(piece, [1.0, 99.7])
    shown = np.nan_to_num((piece - low) / max(high - low, 1e-6), nan=0.0).clip(0, 1) ** 0.6
    bottom = row_zero == "bottom"
    picture = shown[::-1] if bottom else shown
    store = io.BytesIO()
    Image.fromarray((255 * picture).astype(np.uint8)).save(store, format="JPEG", quality=72)

    def place(point: tuple[float, float] | None) -> tuple[float, float]:
        if point is None:
            return float("nan"), float("nan")
        across = (point[0] - x0 + 0.5) / side_px
        up = (point[1] - y0 + 0.5) / side_px
        return float(across), float(1.0 - up if bottom else up)

    return Cutout(store.getvalue(), side_px, place(measured_px), place(predicted_px))
