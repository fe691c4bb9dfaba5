"""The path over the horizon: altitude and azimuth as the site has them, refraction included."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from imaging.compose.canvas import Canvas
from imaging.compose.material import Material, Registered
from imaging.compose.pathdata import PathData, TimeTick, time_ticks
from imaging.compose.plane import sky_to_plane
from planner.errors import InputError

MOST_TICKS = 13


def over_horizon(data: PathData, material: Material) -> PathData:
    """Return the path in the plane of altitude and azimuth about its middle; azimuth runs to the right.

    A night's path is the target's whole way over the sky; a campaign's goes from visit to visit. Raises InputError when
    the plan has no site.
    """
    if data.campaign:
        frames = [group[len(group) // 2] for _, group in material.passages()]
        tt_s = np.array([frame.tt_s for frame in frames])
    else:
        tt_s = data.line_tt_s
    geometry = material.geometry_at(tt_s)
    if not np.isfinite(geometry.altitude_deg).all():
        raise InputError("--grid altaz: the plan has no site that a horizon could belong to")
    turn = np.unwrap(geometry.azimuth_deg, period=360.0)
    anchor = -0.5 * float(turn.min() + turn.max()), float(np.mean(geometry.altitude_deg))
    canvas = Canvas(1, 1, 1.0, 0.0, 0.0, 0.0)
    line = np.array(canvas.from_sky(*anchor, -geometry.azimuth_deg, geometry.altitude_deg), float)
    measured = [frame for frame in material.frames if frame.measured]
    points = _points(material, measured, canvas, anchor)
    ticks = time_ticks(tt_s, line, data.zone, False) if not data.campaign else _visit_ticks(data, tt_s, line)
    return replace(
        data, canvas=canvas, anchor_deg=anchor, line=line, line_tt_s=tt_s, points=points, ticks=ticks, on_disc=None,
        disc_radius_arcsec=float("nan"), up_pa_deg=0.0, horizontal=True, second=None,
        passing=None,
    )  # fmt: skip


def _points(
    material: Material, measured: list[Registered], canvas: Canvas, anchor: tuple[float, float]
) -> np.ndarray:
    """Return the measured places: the predicted altitude and azimuth, moved by the residual."""
    if not measured:
        return np.zeros((2, 0))
    geometry = material.geometry_at(np.array([frame.tt_s for frame in measured]))
    right, up = canvas.from_sky(*anchor, -geometry.azimuth_deg, geometry.altitude_deg)
    off = [
        sky_to_plane(f.predicted_ra_deg, f.predicted_dec_deg, f.measured_ra_deg, f.measured_dec_deg)
        for f in measured
    ]
    east, north = np.array(off, float).T
    pa = np.radians(geometry.zenith_pa_deg)
    return np.stack(
        [right + north * np.sin(pa) - east * np.cos(pa), up + east * np.sin(pa) + north * np.cos(pa)]
    )


def _visit_ticks(data: PathData, tt_s: np.ndarray, line: np.ndarray) -> tuple[TimeTick, ...]:
    """Return a tick at every visit, or at some of many, with its date."""
    from imaging.compose.pathdata import MONTHS
    from planner.sky.timescale import datetime_from_tt_s

    chosen = np.unique(np.linspace(0, len(tt_s) - 1, min(len(tt_s), MOST_TICKS)).round().astype(int))
    run = np.stack([np.gradient(axis) if len(axis) > 1 else np.ones(1) for axis in line])
    run /= np.maximum(np.hypot(*run), 1e-9)
    ticks = []
    for index in chosen.tolist():
        day = datetime_from_tt_s(float(tt_s[index])).astimezone(data.zone)  # type: ignore[union-attr]
        label = f"{day.day} {MONTHS[day.month - 1]}"
        along = float(run[0, index]), float(run[1, index])
        ticks.append(TimeTick(float(line[0, index]), float(line[1, index]), along, label))
    return tuple(ticks)
