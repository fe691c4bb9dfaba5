"""Lines of a sky grid in the plane of a plot: right ascension and declination, or position angles about a disc."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from imaging.compose.canvas import Canvas
from imaging.compose.plane import plane_to_sky

_RA_STEPS_DEG = tuple(
    15 * s / 3600
    for s in (0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 1200, 1800, 3600, 7200)
)
_DEC_STEPS_DEG = tuple(
    s / 3600
    for s in (0.1, 0.2, 0.5, 1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 1200, 1800, 3600, 7200, 18000, 36000)
)


@dataclass(frozen=True)
class GridLine:
    """One line of a grid, (2, n) right and up in arcseconds, with its label."""

    points: np.ndarray
    label: str
    kind: str


View = tuple[float, float, float, float]


def radec_grid(canvas: Canvas, anchor_deg: tuple[float, float], view: View, lines: int = 6) -> list[GridLine]:
    """Return RA and Dec lines through a view (left, right, low, high in arcsec from the anchor)."""
    return _grid(canvas, anchor_deg, view, lines, _RA_STEPS_DEG, ra_label)


def altaz_grid(canvas: Canvas, anchor_deg: tuple[float, float], view: View, lines: int = 6) -> list[GridLine]:
    """Return lines of azimuth and altitude; the anchor is (minus azimuth, altitude), so that azimuth runs right."""
    return _grid(canvas, anchor_deg, view, lines, _DEC_STEPS_DEG, azimuth_label)


def _grid(
    canvas: Canvas,
    anchor_deg: tuple[float, float],
    view: View,
    lines: int,
    steps_deg: tuple[float, ...],
    label: Callable[[float, float], str],
) -> list[GridLine]:
    edge = np.linspace(0, 1, 60)
    left, right, low, high = view
    rim_x = np.concatenate([left + (right - left) * edge, np.full(60, right), right + (left - right) * edge,
                            np.full(60, left)])  # fmt: skip
    rim_y = np.concatenate(
        [np.full(60, low), low + (high - low) * edge, np.full(60, high), high + (low - high) * edge]
    )
    ra, dec = plane_to_sky(*anchor_deg, *canvas.to_plane(rim_x, rim_y))
    turn = (ra - anchor_deg[0] + 180.0) % 360.0 - 180.0
    ra_low, ra_high, dec_low, dec_high = turn.min(), turn.max(), dec.min(), dec.max()
    found = []
    ra_step = _step(steps_deg, ra_high - ra_low, lines)
    dec_step = _step(_DEC_STEPS_DEG, dec_high - dec_low, lines)
    decs = np.linspace(max(-89.9, dec_low - dec_step), min(89.9, dec_high + dec_step), 300)
    ras = np.linspace(ra_low - ra_step, ra_high + ra_step, 300) + anchor_deg[0]
    first = np.ceil((ra_low + anchor_deg[0]) / ra_step)
    for value in np.arange(first, np.floor((ra_high + anchor_deg[0]) / ra_step) + 1) * ra_step:
        points = np.array(canvas.from_sky(*anchor_deg, np.full(300, value), decs))
        found.append(GridLine(points, label(value, ra_step), "ra"))
    for value in np.arange(np.ceil(dec_low / dec_step), np.floor(dec_high / dec_step) + 1) * dec_step:
        points = np.array(canvas.from_sky(*anchor_deg, ras, np.full(300, value)))
        found.append(GridLine(points, dec_label(value, dec_step), "dec"))
    return found


def _step(steps: tuple[float, ...], span: float, lines: int) -> float:
    return next((step for step in steps if span / step <= lines), steps[-1])


def ra_label(ra_deg: float, step_deg: float) -> str:
    """Return right ascension in hours, with minutes and seconds as far as the step needs them."""
    places = _places(step_deg * 240.0)
    seconds = round((ra_deg % 360.0) * 240.0, places) % 86400
    hours, minutes, left = int(seconds // 3600), int(seconds % 3600 // 60), seconds % 60
    text = f"{hours}h"
    if step_deg < 15:
        text += f" {minutes:02d}m"
    return text + (f" {_seconds(left, places)}s" if step_deg < 0.25 else "")


def _places(step_seconds: float) -> int:
    """Return the decimals that tell steps of this many seconds apart."""
    return max(0, int(np.ceil(-np.log10(step_seconds) - 1e-9)))


def _seconds(value: float, places: int) -> str:
    return f"{value:0{3 + places if places else 2}.{places}f}"


def azimuth_label(minus_azimuth_deg: float, step_deg: float) -> str:
    """Return azimuth from north through east, with the name of the direction where it has one."""
    azimuth = -minus_azimuth_deg % 360.0
    names = ("N", "NE", "E", "SE", "S", "SW", "W", "NW")
    text = dec_label(azimuth, step_deg).lstrip("+")
    return (
        f"{text} {names[round(azimuth / 45.0) % 8]}" if abs((azimuth + 22.5) % 45.0 - 22.5) < 1e-6 else text
    )


def dec_label(dec_deg: float, step_deg: float) -> str:
    """Return declination in degrees, with minutes and seconds of arc as far as the step needs them."""
    places = _places(step_deg * 3600.0)
    seconds = round(abs(dec_deg) * 3600.0, places)
    degrees, minutes, left = int(seconds // 3600), int(seconds % 3600 // 60), seconds % 60
    text = f"{'−' if dec_deg < 0 and seconds else '+' if seconds else ''}{degrees}°"
    if step_deg < 1:
        text += f" {minutes:02d}′"
    return text + (f" {_seconds(left, places)}″" if step_deg < 1 / 60 else "")


def edge_crossing(line: np.ndarray, view: tuple[float, float, float, float], edge: str) -> float | None:
    """Return where a line crosses the `left` or `bottom` edge of a view, or None."""
    axis, other = (0, 1) if edge == "left" else (1, 0)
    at = view[0] if edge == "left" else view[2]
    value, along = line[axis] - at, line[other]
    crossing = np.flatnonzero(np.diff(np.sign(value)) != 0)
    for i in crossing:
        share = value[i] / (value[i] - value[i + 1])
        place = along[i] + share * (along[i + 1] - along[i])
        low, high = (view[2], view[3]) if edge == "left" else (view[0], view[1])
        if low <= place <= high:
            return float(place)
    return None
