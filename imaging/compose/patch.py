"""Own place: a small piece of one frame laid into the picture where that frame has it, with a soft edge."""

from __future__ import annotations

import numpy as np


def feather(distance_px: np.ndarray, radius_px: float, feather_px: float) -> np.ndarray:
    """Return weights: 1 inside `radius_px`, 0 beyond `radius_px + feather_px`, a smooth cosine between."""
    share = np.clip((distance_px - radius_px) / max(feather_px, 1e-6), 0.0, 1.0)
    return 0.5 * (1.0 + np.cos(np.pi * share))


def patch_box(
    shape: tuple[int, ...], x_px: float, y_px: float, reach_px: float
) -> tuple[slice, slice] | None:
    """Return the (rows, columns) of the picture within `reach_px` of a place, or None when there are none."""
    rows = slice(max(0, int(np.floor(y_px - reach_px))), min(shape[0], int(np.ceil(y_px + reach_px)) + 1))
    columns = slice(max(0, int(np.floor(x_px - reach_px))), min(shape[1], int(np.ceil(x_px + reach_px)) + 1))
    if rows.start >= rows.stop or columns.start >= columns.stop:
        return None
    return rows, columns


def lay_patch(
    picture: np.ndarray,
    piece: np.ndarray,
    x_px: float,
    y_px: float,
    radius_px: float,
    feather_px: float,
    how: str = "over",
) -> None:
    """Blend `piece` (same grid as `picture`) into it around a place, in place.

    `how`: `over` replaces, `darker` and `lighter` keep the darker or lighter of both, for bodies that overlap.
    NaN in the piece leaves the picture; NaN in the picture takes the piece.
    """
    box = patch_box(picture.shape, x_px, y_px, radius_px + feather_px)
    if box is None:
        return
    y, x = np.ogrid[box[0], box[1]]
    weight = feather(np.hypot(x - x_px, y - y_px), radius_px, feather_px)
    if picture.ndim == 3:
        weight = weight[..., None]
    under, over = picture[box], piece[box]
    wanted = {"over": over, "darker": np.fmin(under, over), "lighter": np.fmax(under, over)}[how]
    blended = under + weight * (wanted - under)
    blended = np.where(np.isfinite(under), blended, np.where(weight > 0.5, wanted, under))
    picture[box] = np.where(np.isfinite(over), blended, under)
