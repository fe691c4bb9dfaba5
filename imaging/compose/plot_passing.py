"""On a path plot: the body that passes before a star, and below it the star's light against time."""

from __future__ import annotations

from typing import Any

import numpy as np

from imaging.compose.palette import Palette
from imaging.compose.passing import LightCurve, Passing
from imaging.compose.pathdata import PathData
from imaging.compose.plot_residuals import quiet_axes, time_axis


def draw_passing(axes: Any, passing: Passing, palette: Palette) -> None:
    """Draw the body's predicted path, and its disc where it is nearest to the star."""
    from matplotlib.patches import Circle

    axes.plot(*passing.line, color=palette.other, linewidth=1.2, linestyle=(0, (5, 2)), zorder=3,
              label=f"predicted, the {passing.name}")  # fmt: skip
    place = passing.line[:, passing.nearest]
    axes.add_patch(
        Circle((float(place[0]), float(place[1])), passing.radius_arcsec, facecolor=palette.other, alpha=0.25,
               edgecolor="none", zorder=2.9)
    )  # fmt: skip
    axes.add_patch(
        Circle((float(place[0]), float(place[1])), passing.radius_arcsec, fill=False, edgecolor=palette.other,
               linewidth=0.9, zorder=3.2)
    )  # fmt: skip


def draw_light(
    figure: Any, data: PathData, light: LightCurve, palette: Palette, place: tuple[float, float, float, float]
) -> None:
    """Draw the star's light into `place` (left, low, wide, tall in shares of the figure), with its contacts."""
    from planner.sky.timescale import datetime_from_tt_s

    axes = figure.add_axes(place)
    first, last = light.span_tt_s()
    shown = (light.tt_s >= first) & (light.tt_s <= last)
    times = np.asarray(datetime_from_tt_s(light.tt_s[shown]))
    axes.axhline(0, color=palette.faint, linewidth=0.7)
    axes.axhline(1, color=palette.faint, linewidth=0.7)
    axes.plot(times, light.light[shown], "o", markersize=3.2, color=palette.measured, markeredgewidth=0)
    top = max(1.15, float(np.nanmax(light.light[shown])) * 1.08)
    low = min(-0.12, float(np.nanmin(light.light[shown])) - 0.08)
    axes.set_ylim(low, top + 0.3)
    for tt_s, sigma_s, name in zip(
        light.contact_tt_s, light.contact_sigma_s, light.contact_names, strict=True
    ):
        moment = datetime_from_tt_s(float(tt_s))
        if moment is None:
            continue
        axes.axvline(moment, color=palette.predicted, linewidth=0.9, linestyle=(0, (2, 2)))
        share = (tt_s - first) / (last - first)
        rightward = share < 0.3 if not 0.3 <= share <= 0.7 else tt_s > np.median(light.contact_tt_s)
        error = f" ± {sigma_s:.2g} s" if np.isfinite(sigma_s) else ""
        seconds = f"{moment.astimezone(data.zone):%H:%M:%S.%f}"[: -3 if sigma_s < 0.1 else -5]
        axes.annotate(
            f"{name} {seconds}{error}", (moment, top + 0.26), xytext=(5 if rightward else -5, 0),
            textcoords="offset points", ha="left" if rightward else "right", va="top", fontsize=8, color=palette.ink,
        )  # fmt: skip
    bounds = [datetime_from_tt_s(value) for value in (first, last)]
    margin = 0.02 * (bounds[1] - bounds[0])  # type: ignore[operator]
    axes.set_xlim(bounds[0] - margin, bounds[1] + margin)  # type: ignore[operator]
    axes.set_ylabel("light of the star\n(whole = 1)", color=palette.ink, fontsize=8)
    axes.set_yticks([0, 0.5, 1])
    quiet_axes(axes, palette)
    time_axis(axes, data)
    axes.xaxis.get_offset_text().set_visible(not data.points.size)  # the residuals below name the date
