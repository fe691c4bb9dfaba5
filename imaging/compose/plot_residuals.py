"""Below a path plot: measured minus predicted along and across the motion, against time."""

from __future__ import annotations

from typing import Any

import numpy as np

from imaging.compose.palette import Palette
from imaging.compose.pathdata import PathData


def draw_residuals(
    figure: Any, data: PathData, palette: Palette, place: tuple[float, float, float, float]
) -> None:
    """Draw both panels into `place` (left, low, wide, tall in shares of the figure)."""
    left, low, wide, tall = place
    from planner.sky.timescale import datetime_from_tt_s

    residuals = data.residuals
    times = np.asarray(datetime_from_tt_s(residuals.tt_s))
    rows = (
        ("along", residuals.along_arcsec, residuals.sigma_along_arcsec),
        ("across", residuals.across_arcsec, residuals.sigma_across_arcsec),
    )
    height = tall * 0.44
    for number, (name, value, sigma) in enumerate(rows):
        axes = figure.add_axes((left, low + (1 - number) * (tall * 0.5) + tall * 0.06, wide, height))
        axes.axhline(0, color=palette.predicted, linewidth=0.9)
        count = len(value)
        axes.errorbar(
            times, value, yerr=sigma, fmt="o", markersize=3.2 if count <= 200 else 1.6, color=palette.measured,
            elinewidth=0.6, markeredgewidth=0, linestyle="none", alpha=1.0 if count <= 200 else 0.55,
        )  # fmt: skip
        shown = np.abs(np.concatenate([value, value + np.nan_to_num(sigma), value - np.nan_to_num(sigma)]))
        reach = float(np.nanpercentile(shown, 99.5)) * 1.2 or 1.0
        axes.set_ylim(-reach, reach)
        rms = float(np.sqrt(np.nanmean(value**2)))
        axes.set_ylabel(f"{name} (″)\nrms {rms:.2g}″", color=palette.ink, fontsize=8)
        quiet_axes(axes, palette)
        time_axis(axes, data)
        if number == 0:
            axes.tick_params(labelbottom=False)
            axes.xaxis.get_offset_text().set_visible(False)


def quiet_axes(axes: Any, palette: Palette) -> None:
    """Give a panel the look of the others."""
    axes.set_facecolor(palette.paper)
    axes.tick_params(colors=palette.quiet, labelcolor=palette.quiet, labelsize=8, length=3)
    for spine in axes.spines.values():
        spine.set_color(palette.quiet)
        spine.set_linewidth(0.7)


def time_axis(axes: Any, data: PathData) -> None:
    """Label instants in the zone of the plot."""
    from matplotlib.dates import AutoDateLocator, ConciseDateFormatter

    locator = AutoDateLocator(minticks=4, maxticks=9, tz=data.zone)
    axes.xaxis.set_major_locator(locator)
    formatter = ConciseDateFormatter(locator, tz=data.zone, show_offset=not data.campaign)
    formatter.formats = ["%Y", "%b", "%-d %b", "%H:%M", "%H:%M", "%H:%M:%S"]
    formatter.zero_formats = ["", "%Y", "%-d %b", "%-d %b", "%H:%M", "%H:%M"]
    formatter.offset_formats = ["", "%Y", "%Y", "%-d %B %Y", "%-d %B %Y", "%-d %B %Y"]
    axes.xaxis.set_major_formatter(formatter)
    axes.xaxis.get_offset_text().set_fontsize(8)
    axes.xaxis.get_offset_text().set_color(axes.xaxis.get_ticklabels()[0].get_color())
