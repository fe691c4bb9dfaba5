"""The path plot: predicted line, measured points with error bars, time ticks, sky, orientation, residuals.

Light for paper and dark for screens; PNG, SVG and PDF by the suffix.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from imaging.compose.palette import DARK, LIGHT, Palette
from imaging.compose.pathdata import STANDS_STILL_ARCSEC, PathData
from imaging.compose.plot_marks import (
    arcsec_a_point,
    at_pa,
    crowd_of,
    draw_stars,
    star_places,
    write_limb_angles,
    write_tick_labels,
)
from imaging.compose.plot_ornaments import draw_compass, draw_inset, draw_legend, draw_scale_bar
from imaging.compose.plot_passing import draw_light, draw_passing
from imaging.compose.plot_residuals import draw_residuals
from imaging.compose.skygrid import View, altaz_grid, edge_crossing, radec_grid
from planner.outputs import whole_file

__all__ = ["DARK", "FORMATS", "LIGHT", "draw_path_plot", "write_path_plot"]
FORMATS = ("png", "svg", "pdf")
WIDE_IN, LEFT, RIGHT = 9.0, 0.095, 0.975
LEGEND_IN, AXIS_LABELS_IN = 0.30, 0.22


def draw_path_plot(data: PathData, palette: Palette = LIGHT, stars: bool = True, residuals: bool = True):
    """Return a matplotlib Figure (no global state is touched)."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    view = _view(data)
    aspect = (view[3] - view[2]) / (view[1] - view[0])
    lower = 2.3 if residuals and data.points.size else 0.0
    panel = 1.75 if data.light is not None else 0.0
    main = WIDE_IN * (RIGHT - LEFT) * aspect
    labels = 0.06 if data.on_disc else AXIS_LABELS_IN
    below = labels + LEGEND_IN * (2 if data.second else 1) + 0.08 + panel
    tall = main + lower + below + 0.78
    figure = Figure(figsize=(WIDE_IN, tall), facecolor=palette.paper)
    FigureCanvasAgg(figure)
    axes = figure.add_axes((LEFT, (lower + below) / tall, RIGHT - LEFT, main / tall))
    _frame_axes(axes, palette)
    axes.set_aspect("equal")
    axes.set_xlim(view[0], view[1])
    axes.set_ylim(view[2], view[3])
    figure.text(
        LEFT, 1 - 0.30 / tall, data.title, color=palette.ink, fontsize=14, fontweight="bold", va="center"
    )
    sites = data.site if data.second is None else f"{data.site} · and {data.second.site}"
    line = f"{sites} · times in {data.zone_label}"
    figure.text(LEFT, 1 - 0.55 / tall, line, color=palette.quiet, fontsize=9, va="center")
    axes.apply_aspect()
    field = None
    if data.on_disc:
        _disc(axes, data, palette)
    else:
        _sky(axes, data, palette, view)
        if stars and not data.horizontal:
            field = star_places(data, view)
    _path(axes, data, palette)
    if data.passing is not None:
        draw_passing(axes, data.passing, palette)
    crowd = crowd_of(axes, data)
    if not data.horizontal:
        draw_compass(axes, data, palette, crowd)
    draw_scale_bar(axes, view, palette, crowd)
    if data.second is not None:
        draw_inset(axes, data, view, palette, crowd)
    if field is not None:
        draw_stars(axes, field, palette, crowd)
    note = None if field is None else f"stars to magnitude {field.faintest:.1f}"
    draw_legend(figure, axes, data, palette, note, labels * 72)
    write_tick_labels(figure, axes, data, palette, crowd)
    if data.on_disc:
        write_limb_angles(figure, axes, data, palette, crowd)
    elif field is not None:
        field.write_names(figure, axes, palette, crowd)
    if data.light is not None:
        draw_light(figure, data, data.light, palette, (LEFT, (lower + 0.42) / tall, RIGHT - LEFT, 1.2 / tall))
    if lower:
        draw_residuals(figure, data, palette, (LEFT, 0.42 / tall, RIGHT - LEFT, (lower - 0.35) / tall))
    return figure


def write_path_plot(
    path: Path, data: PathData, palette: Palette, force: bool = False, dpi: int = 300
) -> None:
    """Draw and write one version; the suffix (png, svg, pdf) is the format. Text in SVG and PDF stays text."""
    from matplotlib import rc_context

    with rc_context({"svg.fonttype": "none", "pdf.fonttype": 42, "font.family": "DejaVu Sans"}):
        figure = draw_path_plot(data, palette)
        with whole_file(path, force) as part:
            figure.savefig(part, dpi=dpi, facecolor=figure.get_facecolor(), metadata=_metadata(path, data))


def _metadata(path: Path, data: PathData) -> dict[str, Any]:
    if path.suffix == ".svg":
        return {"Title": data.title, "Creator": "Syzygraph", "Date": None}
    return {"Title": data.title, "Creator" if path.suffix == ".pdf" else "Software": "Syzygraph"}


def _view(data: PathData) -> View:
    if data.on_disc:
        away = np.hypot(*data.points).max(initial=0.0) / data.disc_radius_arcsec
        reach = max(1.17, min(away + 0.1, 1.8)) * data.disc_radius_arcsec
        return -reach, reach, -reach, reach
    if data.passing is not None:
        half = data.passing.half_arcsec
        return -half, half, -0.6 * half, 0.6 * half
    x, y = data.line
    length = max(np.ptp(x), np.ptp(y))
    # a target that stands still, a star, is shown in its neighbourhood
    length = max(length, min(60.0, 4.0 * length)) if length > STANDS_STILL_ARCSEC else 7200.0
    low, high = float(y.min()), float(y.max())
    if data.horizontal:
        horizon = -data.anchor_deg[1] * 3600.0
        if low - horizon < 0.6 * length:  # near enough to be shown
            low = horizon
    pad = 0.16 * length
    wide, tall = np.ptp(x) + 2 * pad, high - low + 2 * pad
    tall = max(tall, 0.45 * wide)
    wide = max(wide, 0.85 * tall)
    middle_x, middle_y = (x.min() + x.max()) / 2, (low + high) / 2
    return middle_x - wide / 2, middle_x + wide / 2, middle_y - tall / 2, middle_y + tall / 2


def _frame_axes(axes: Any, palette: Palette) -> None:
    axes.set_facecolor(palette.paper)
    axes.set_xticks([])
    axes.set_yticks([])
    for spine in axes.spines.values():
        spine.set_color(palette.quiet)
        spine.set_linewidth(0.8)


def _disc(axes: Any, data: PathData, palette: Palette) -> None:
    from matplotlib.patches import Circle

    radius = data.disc_radius_arcsec
    fill = palette.disc if data.on_disc == "sun" else palette.paper
    axes.add_patch(Circle((0, 0), radius, facecolor=fill, edgecolor=palette.quiet, linewidth=1.0, zorder=1))
    if data.phase_angle_deg > 0:
        axes.add_patch(_lit_part(data, palette))
    for share in (0.25, 0.5, 0.75):
        ring = Circle((0, 0), share * radius, fill=False, edgecolor=palette.faint, linewidth=0.5, zorder=1.1)
        axes.add_patch(ring)
    for pa in range(0, 360, 30):
        x, y = at_pa(data, pa, radius)
        axes.plot([0.25 * x, x], [0.25 * y, y], color=palette.faint, linewidth=0.5, zorder=1.1)


def _lit_part(data: PathData, palette: Palette) -> Any:
    """Return the sunlit part of the Moon as a patch: half the limb, and the ellipse of the terminator."""
    from matplotlib.patches import Polygon

    turn = np.radians(np.linspace(-90, 90, 91))
    toward = np.concatenate([np.cos(turn), -np.cos(np.radians(data.phase_angle_deg)) * np.cos(turn[::-1])])
    aside = np.concatenate([np.sin(turn), np.sin(turn[::-1])])
    angle = np.radians(data.bright_limb_pa_deg - data.up_pa_deg)
    x = -np.sin(angle) * toward - np.cos(angle) * aside
    y = np.cos(angle) * toward - np.sin(angle) * aside
    points = np.column_stack([x, y]) * data.disc_radius_arcsec
    return Polygon(points, closed=True, facecolor=palette.lit, edgecolor="none", zorder=1.05)


def _sky(axes: Any, data: PathData, palette: Palette, view: View) -> None:
    grid = altaz_grid if data.horizontal else radec_grid
    for line in grid(data.canvas, data.anchor_deg, view):
        ground = data.horizontal and line.kind == "dec" and line.label in ("0°", "0° 00′")
        axes.plot(
            *line.points,
            color=palette.ink if ground else palette.faint,
            linewidth=1.2 if ground else 0.6,
            zorder=1,
        )
        edge = "bottom" if line.kind == "ra" else "left"
        place = edge_crossing(line.points, view, edge)
        if place is None:
            continue
        at = (place, view[2]) if edge == "bottom" else (view[0], place)
        axes.annotate(
            line.label,
            at,
            xytext=(0, -4) if edge == "bottom" else (-4, 0),
            textcoords="offset points",
            ha="center" if edge == "bottom" else "right",
            va="top" if edge == "bottom" else "center",
            fontsize=8 if len(line.label) < 13 or edge == "bottom" else 7,
            color=palette.quiet,
            annotation_clip=False,
        )


def _path(axes: Any, data: PathData, palette: Palette) -> None:
    from matplotlib.patches import Circle

    first = "predicted" if data.second is None else f"predicted, {data.site.split(',')[0]}"
    if data.passing is not None:
        first = "_"  # a star stands still: what moves is the body
    axes.plot(*data.line, color=palette.predicted, linewidth=1.2, zorder=3, label=first)
    pixel = arcsec_a_point(axes)
    for tick in data.ticks:
        across = np.array([-tick.along[1], tick.along[0]]) * 4.0 * pixel
        axes.plot(
            [tick.right_arcsec - across[0], tick.right_arcsec + across[0]],
            [tick.up_arcsec - across[1], tick.up_arcsec + across[1]],
            color=palette.predicted if data.passing is None else palette.other,
            linewidth=1.2,
            zorder=3.1,
        )
    if data.target_radius_arcsec > 2.0 * pixel:
        half = data.line.shape[1] // 2
        middle = float(data.line[0, half]), float(data.line[1, half])
        ring = Circle(
            middle,
            data.target_radius_arcsec,
            fill=False,
            edgecolor=palette.predicted,
            linewidth=0.8,
            zorder=3.2,
        )
        axes.add_patch(ring)
    if data.points.size:
        _points(axes, data.points, data.point_sigma, palette.measured, "o", "measured")
    if data.second is not None:
        label = f"predicted, {data.second.site}"
        axes.plot(
            *data.second.line,
            color=palette.other,
            linewidth=1.2,
            linestyle=(0, (5, 2)),
            zorder=3,
            label=label,
        )
        if data.second.points.size:
            _points(axes, data.second.points, data.second.point_sigma, palette.other, "s", "measured")


def _points(axes: Any, places: np.ndarray, sigma: np.ndarray, colour: str, marker: str, label: str) -> None:
    count = places.shape[1]
    axes.errorbar(
        *places,
        xerr=sigma,
        yerr=sigma,
        fmt=marker,
        markersize=4.2 if count <= 40 else 3.0 if count <= 200 else 1.8,
        color=colour,
        ecolor=colour,
        elinewidth=0.7,
        markeredgewidth=0,
        linestyle="none",
        alpha=1.0 if count <= 200 else 0.6,
        zorder=4,
        label=label,
    )
