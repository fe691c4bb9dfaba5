"""The timeline of a plan as a picture: altitude, twilight, passages; for a campaign its nights.

Drawn in greys and line styles, so that it reads by red light and prints in black and white.
"""

from __future__ import annotations

from datetime import UTC, timedelta
from itertools import pairwise
from typing import Any

import numpy as np

from planner.sequence.capacity import end_utc
from planner.sequence.outlook import Outlook

_TWILIGHTS = ((-18.0, "0.68"), (-12.0, "0.77"), (-6.0, "0.86"), (-0.833, "0.94"))
_BOX = {"facecolor": "white", "edgecolor": "none", "pad": 0.8, "alpha": 0.85}
_HOURS_CLOSE = 3.0
DAY_COLOUR, NIGHT_COLOUR = "1.0", "0.58"


def draw_timeline(axes: Any, outlook: Outlook) -> None:
    """Draw the timeline of a plan on matplotlib axes."""
    if outlook.campaign:
        _draw_nights(axes, outlook)
    else:
        _draw_hours(axes, outlook)


def sky_shade(sun_altitude_deg: float) -> str:
    """Return the grey of the sky for an altitude of the Sun: white by day, darkest at night."""
    if sun_altitude_deg >= _TWILIGHTS[-1][0]:
        return DAY_COLOUR
    for limit, shade in reversed(_TWILIGHTS):
        if sun_altitude_deg >= limit:
            return shade
    return NIGHT_COLOUR if sun_altitude_deg < _TWILIGHTS[0][0] else _TWILIGHTS[0][1]


def _draw_hours(axes: Any, outlook: Outlook) -> None:
    import matplotlib.dates as mdates

    from planner.sky.timescale import datetime_from_tt_s, tt_s_from_datetime

    plan = outlook.plan
    length = outlook.last_utc - outlook.first_utc
    margin = max(length * 0.06, timedelta(minutes=5))
    start, end = outlook.first_utc - margin, outlook.last_utc + margin
    tt_s = np.linspace(float(tt_s_from_datetime(start)), float(tt_s_from_datetime(end)), 241)
    sky = outlook.geometry(tt_s)
    times = mdates.date2num(datetime_from_tt_s(tt_s))
    shades = [sky_shade(value) for value in sky.sun_altitude_deg]
    edges = [
        0,
        *(np.flatnonzero([a != b for a, b in pairwise(shades)]) + 1),
        len(times) - 1,
    ]
    for first, last in pairwise(edges):
        axes.axvspan(times[first], times[last], color=shades[first], lw=0, zorder=0)
    top = max(20.0, float(np.nanmax(sky.altitude_deg)) * 1.28 + 6)
    axes.plot(times, sky.altitude_deg, color="black", lw=2.2, zorder=4)
    limit = np.maximum(_horizon_deg(outlook, sky.azimuth_deg), plan.rig.mount.min_altitude_deg)
    axes.fill_between(times, 0, limit, facecolor="0.85", edgecolor="0.3", hatch="///", lw=0.6, zorder=3)
    bar, gap = top * 0.075, top * 0.012
    for passage in plan.passages:
        first = mdates.date2num(min(shot.start_utc for shot in passage.shots))
        width = mdates.date2num(end_utc(passage)) - first
        dense = passage.shots[0].cadence_s < 5
        axes.barh(
            -bar, width, left=first, height=bar, color="0.15" if dense else "0.75", edgecolor="black", lw=0.6,
            align="edge", zorder=5,
        )  # fmt: skip
        if width > (times[-1] - times[0]) * 0.055:
            axes.text(
                first + width / 2, -bar / 2, passage.name, ha="center", va="center", fontsize=7.5,
                color="white" if dense else "black", zorder=6,
            )  # fmt: skip
    _draw_instants(axes, outlook, times, sky.altitude_deg, top)
    axes.set_xlim(times[0], times[-1])
    axes.set_ylim(-bar - gap, top)
    axes.set_ylabel(f"altitude of {sky.target.capitalize() if not sky.stars else sky.target}, degrees")
    axes.yaxis.set_major_locator(_whole_ticks(top))
    axes.xaxis.set_major_locator(mdates.AutoDateLocator(minticks=4, maxticks=9))
    axes.xaxis.set_major_formatter(mdates.DateFormatter("%H:%M", tz=UTC))
    axes.set_xlabel(
        f"UTC, {outlook.first_utc:%Y-%m-%d}      bars: frames, dark where dense; hatched: out of reach"
    )
    _local_axis(axes, plan.site.timezone)


def _draw_instants(
    axes: Any, outlook: Outlook, times: np.ndarray, altitude_deg: np.ndarray, top: float
) -> None:
    import matplotlib.dates as mdates

    span = times[-1] - times[0]
    shown = [(name, mdates.date2num(moment)) for name, moment, _ in outlook.instants()]
    shown = [(name, x) for name, x in shown if times[0] <= x <= times[-1]]
    last_x = {0: -np.inf, 1: -np.inf}
    for name, x in sorted(shown, key=lambda each: each[1]):
        axes.axvline(x, color="black", lw=0.8, ls=(0, (4, 3)), zorder=3)
        # labels that would touch go to a second row, side by side where even that is full
        row = 0 if x - last_x[0] > span * 0.13 else 1
        right = x - last_x[row] <= span * 0.13
        last_x[row] = x
        axes.text(
            x + span * (0.006 if right or x < times[0] + span * 0.12 else -0.006),
            top * (0.975 - 0.075 * row),
            name.replace("_", " "),
            ha="left" if right or x < times[0] + span * 0.12 else "right",
            va="top",
            fontsize=7.5,
            zorder=7,
            bbox=_BOX,
        )
        axes.plot(x, np.interp(x, times, altitude_deg), "o", ms=4, mfc="white", mec="black", zorder=6)


def _draw_nights(axes: Any, outlook: Outlook) -> None:
    """Draw dates against the hours of the night: darkness, when the target is up, the Moon, the visits."""
    import matplotlib.dates as mdates
    from matplotlib.ticker import MultipleLocator

    from planner.sky.discs import sky_disc
    from planner.sky.places import altaz
    from planner.sky.timescale import tt_s_from_datetime

    plan = outlook.plan
    longitude_h = ((plan.site.longitude_deg + 180) % 360 - 180) / 15
    days = np.arange((outlook.last_utc - outlook.first_utc).days + 9)
    step = max(1, len(days) // 90)
    noon = (outlook.first_utc - timedelta(days=4)).replace(hour=12, minute=0, second=0, microsecond=0)
    noon -= timedelta(hours=round(longitude_h))
    days = days[::step]
    hours = np.arange(0, 24.01, 0.25)
    start = float(tt_s_from_datetime(noon))
    tt_s = (start + days[:, None] * 86400.0 + hours[None, :] * 3600.0).ravel()
    sky = outlook.geometry(tt_s)
    moon = sky_disc("moon", outlook.observer, tt_s)
    moon_up = altaz((moon.ra_deg, moon.dec_deg), outlook.observer, tt_s)[0].reshape(len(days), -1)
    lit = ((1 + np.cos(np.radians(moon.phase_angle_deg))) / 2).reshape(len(days), -1)
    sun = sky.sun_altitude_deg.reshape(len(days), -1).T
    up = sky.altitude_deg.reshape(len(days), -1).T
    dates = mdates.date2num(noon) + days
    levels = [-90.0, *(limit for limit, _ in _TWILIGHTS), 90.0]
    colours = [NIGHT_COLOUR, *(shade for _, shade in _TWILIGHTS[:-1]), _TWILIGHTS[-1][1], DAY_COLOUR][
        : len(levels) - 1
    ]
    axes.contourf(dates, hours, sun, levels=levels, colors=colours, zorder=0)
    bright = np.where((moon_up.T > 0) & (lit.T > 0.25), 1.0, 0.0)
    if bright.any():
        axes.contourf(dates, hours, bright, levels=[0.5, 1.5], colors="none", hatches=["...."], zorder=1)
    low = np.where(up < plan.rig.mount.min_altitude_deg, 1.0, 0.0)
    if low.any():
        axes.contourf(dates, hours, low, levels=[0.5, 1.5], colors="none", hatches=["///"], zorder=2)
    visited = []
    for passage in (visit[0] for visit in plan.visits()):
        first = min(shot.start_utc for shot in passage.shots)
        hour = ((first - noon).total_seconds() / 3600) % 24
        visited.append(hour)
        x = mdates.date2num(first) - hour / 24
        axes.plot(
            x, hour, "s" if passage.done else "o", ms=6.5, mfc="black" if passage.done else "white", mec="black",
            mew=1.3, zorder=5,
        )  # fmt: skip
        for reserve in passage.reserve_utc:
            hour = ((reserve - noon).total_seconds() / 3600) % 24
            axes.plot(
                mdates.date2num(reserve) - hour / 24, hour, "x", ms=4.5, color="black", mew=1.0, zorder=4
            )
    shown = hours[(sun < 0).any(axis=1)]
    if np.ptp(visited) < _HOURS_CLOSE:
        # visits at one time of the evening are looked at closely
        shown = np.array([min(visited) - 1.0, max(visited) + 1.0])
    axes.set_ylim(shown.min() - 0.5, shown.max() + 0.5)
    axes.set_xlim(dates[0], dates[-1])
    offset = (noon - noon.replace(hour=0)).total_seconds() / 3600

    def clock(hour: float, _position: object = None) -> str:
        minutes = round((hour + offset) * 60) % 1440
        return f"{minutes // 60:02d}:{minutes % 60:02d}"

    axes.yaxis.set_major_locator(MultipleLocator(2 if np.ptp(shown) > _HOURS_CLOSE + 2 else 0.5))
    axes.yaxis.set_major_formatter(clock)
    axes.set_ylabel("UTC")
    axes.xaxis.set_major_locator(mdates.AutoDateLocator(minticks=4, maxticks=9))
    axes.xaxis.set_major_formatter(mdates.ConciseDateFormatter(axes.xaxis.get_major_locator()))
    axes.set_title(
        "o visit   x reserve   /// target low   ... Moon up, over a quarter lit   shaded: night",
        fontsize=8,
        loc="left",
    )


def _horizon_deg(outlook: Outlook, azimuth_deg: np.ndarray) -> np.ndarray:
    from planner.sky.observer import horizon_altitude_deg

    return horizon_altitude_deg(outlook.observer, azimuth_deg)


def _whole_ticks(top: float) -> Any:
    from matplotlib.ticker import MultipleLocator

    return MultipleLocator(10 if top > 45 else 5)


def _local_axis(axes: Any, timezone: str) -> None:
    """Add the site's civil time along the top."""
    from zoneinfo import ZoneInfo

    import matplotlib.dates as mdates

    if timezone == "UTC":
        return
    upper = axes.secondary_xaxis("top")
    upper.xaxis.set_major_locator(mdates.AutoDateLocator(minticks=4, maxticks=9, tz=ZoneInfo(timezone)))
    upper.xaxis.set_major_formatter(mdates.DateFormatter("%H:%M", tz=ZoneInfo(timezone)))
    upper.set_xlabel(timezone)


def timeline_figure(outlook: Outlook, width_in: float = 9.0, height_in: float = 4.2) -> Any:
    """Return the timeline as a matplotlib figure."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width_in, height_in), layout="constrained")
    draw_timeline(figure.add_subplot(), outlook)
    figure.suptitle(outlook.plan.title, fontsize=11, x=0.01, ha="left")
    return figure
