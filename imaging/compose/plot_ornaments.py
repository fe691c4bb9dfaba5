"""What tells a reader of a path plot where he is: directions, length, legend."""

from __future__ import annotations

from typing import Any

import numpy as np

from imaging.compose.files import round_length
from imaging.compose.labels import Crowd
from imaging.compose.palette import Palette
from imaging.compose.pathdata import PathData
from imaging.compose.plot_marks import arcsec_a_point


def draw_compass(axes: Any, data: PathData, palette: Palette, crowd: Crowd) -> None:
    """North, east, and the zenith at mid-event where it is known."""
    box = axes.get_window_extent()
    dots = axes.figure.dpi / 72
    x, y = box.x0 + 58 * dots, box.y1 - 56 * dots
    if _on_path(crowd, _about(x, y, dots)) and not _on_path(crowd, _about(box.x1 - 62 * dots, y, dots)):
        x = box.x1 - 62 * dots
    arms = [("N", data.north_of_date_pa_deg if data.on_disc else 0.0, 24.0)]
    arms.append(("E", arms[0][1] + 90.0, 24.0))
    if np.isfinite(data.zenith_pa_deg) and not data.campaign:
        arms.append(("zenith", data.zenith_pa_deg, 20.0))
        crowded = min(abs((data.zenith_pa_deg - pa + 180) % 360 - 180) for _, pa, _ in arms[:2]) < 35
        arms[-1] = ("zenith", data.zenith_pa_deg, 37.0 if crowded else 20.0)
    for label, pa, length in arms:
        angle = np.radians(pa - data.up_pa_deg)
        step = np.array([-np.sin(angle), np.cos(angle)]) * length * dots
        start, end = axes.transData.inverted().transform([(x, y), (x + step[0], y + step[1])])
        thin = label == "zenith"
        axes.annotate(
            "", end, start, zorder=7,
            arrowprops={"arrowstyle": "-|>", "color": palette.quiet if thin else palette.ink,
                        "linewidth": 0.7 if thin else 1.1, "shrinkA": 0, "shrinkB": 0,
                        "mutation_scale": 6 if thin else 9, "linestyle": ":" if thin else "-"},
        )  # fmt: skip
        aside = np.zeros(2)
        if label == "N" and len(arms) == 3:  # out of the way of the zenith's arrow
            apart = (data.zenith_pa_deg - pa + 180) % 360 - 180
            if abs(apart) < 20:
                aside = np.array([step[1], -step[0]]) / np.hypot(*step) * 8 * dots * (1 if apart > 0 else -1)
        name = axes.transData.inverted().transform(
            np.array([x, y]) + step * (1 + 10 * dots / np.hypot(*step)) + aside
        )
        axes.text(*name, label, fontsize=7 if thin else 9, color=palette.quiet if thin else palette.ink,
                  ha="center", va="center", zorder=7)  # fmt: skip
    crowd.boxes.append(_about(x, y, dots))


Box = tuple[float, float, float, float]


def _about(x: float, y: float, dots: float) -> Box:
    """Return the room that a compass takes about its middle."""
    return x - 56 * dots, y - 40 * dots, x + 46 * dots, y + 52 * dots


def _on_path(crowd: Crowd, box: Box) -> bool:
    """Return whether what is drawn already runs under a box."""
    x, y = crowd.points
    left, low, right, high = box
    return bool(((x > left) & (x < right) & (y > low) & (y < high)).any())


def draw_scale_bar(
    axes: Any, view: tuple[float, float, float, float], palette: Palette, crowd: Crowd
) -> None:
    """Draw a bar of a round length at the lower right, or the lower left where the path runs under it."""
    length, label = round_length(0.2 * (view[1] - view[0]))
    box = axes.get_window_extent()
    dots = axes.figure.dpi / 72
    long = length / (view[1] - view[0]) * box.width
    low, high = box.y0 + 8 * dots, box.y0 + 30 * dots
    places = [(box.x1 - 16 * dots - long, low, box.x1, high), (box.x0, low, box.x0 + 16 * dots + long, high)]
    at_left = _on_path(crowd, places[0]) and not _on_path(crowd, places[1])
    end_px = box.x0 + 16 * dots + long if at_left else box.x1 - 16 * dots
    (x, y) = axes.transData.inverted().transform((end_px, box.y0 + 14 * dots))
    axes.plot([x - length, x], [y, y], color=palette.ink, linewidth=1.4, zorder=7, solid_capstyle="butt")
    axes.annotate(label, (x - length / 2, y), xytext=(0, 3), textcoords="offset points", ha="center", va="bottom",
                  fontsize=8.5, color=palette.ink, zorder=7)  # fmt: skip
    crowd.boxes.append(places[1 if at_left else 0])


def draw_legend(
    figure: Any, axes: Any, data: PathData, palette: Palette, note: str | None, below_points: float
) -> None:
    """Write what is what below the plot, where nothing runs under it; `note` at the right end of the same line."""
    handles, labels = axes.get_legend_handles_labels()
    sigma = data.point_sigma[np.isfinite(data.point_sigma)]
    if sigma.size and "measured" in labels:
        smaller = np.median(sigma) < 2.0 * arcsec_a_point(axes)
        words = f"1σ {np.median(sigma):.2g}″" + (", smaller than the points" if smaller else "")
        labels[labels.index("measured")] = f"measured ({words})"
    box = axes.get_window_extent()
    tall = figure.bbox.height
    top = (box.y0 - (below_points + 1) * figure.dpi / 72) / tall
    left = box.x0 / figure.bbox.width
    legend = figure.legend(
        handles, labels, loc="upper left", bbox_to_anchor=(left, top), ncols=3 if data.second is None else 2,
        frameon=False, fontsize=8.5, labelcolor=palette.ink, handlelength=2.0, columnspacing=1.6, borderpad=0.1,
        borderaxespad=0.1,
    )  # fmt: skip
    legend.set_zorder(8)
    if note is not None:
        figure.text(
            box.x1 / figure.bbox.width, top - 3 * figure.dpi / 72 / tall, note, ha="right", va="top", fontsize=8,
            color=palette.quiet,
        )  # fmt: skip


def draw_inset(
    axes: Any, data: PathData, view: tuple[float, float, float, float], palette: Palette, crowd: Crowd
) -> None:
    """Show both sites' paths enlarged about the middle of the first, in the corner that the path keeps off."""
    from matplotlib.patches import Circle, Rectangle

    assert data.second is not None
    middle = data.line[:, data.line.shape[1] // 2]
    apart = float(np.hypot(*(data.second.line - middle[:, None])).min())
    half = max(4.0 * apart, 2.5 * data.target_radius_arcsec, 1.0)
    share = 0.25
    enlarged = share * (view[1] - view[0]) / (2 * half)
    if enlarged < 2.5:  # the two paths can be told apart as they are
        return
    corners = {(0.02, 0.02): (view[0], view[2]), (0.73, 0.70): (view[1], view[3])}
    away = {
        at: float(np.hypot(*(data.line - np.array(place)[:, None])).min()) for at, place in corners.items()
    }
    at = max(away, key=lambda key: away[key])
    inset = axes.inset_axes((*at, share, share), zorder=6.5)
    inset.set_facecolor(palette.disc if data.on_disc == "sun" else palette.paper)
    inset.set_xticks([])
    inset.set_yticks([])
    inset.set_aspect("equal")
    inset.set_xlim(middle[0] - half, middle[0] + half)
    inset.set_ylim(middle[1] - half, middle[1] + half)
    for spine in inset.spines.values():
        spine.set_color(palette.quiet)
        spine.set_linewidth(0.8)
    paths = ((data.line, data.points, palette.predicted, palette.measured, "-", "o"),
             (data.second.line, data.second.points, palette.other, palette.other, (0, (5, 2)), "s"))  # fmt: skip
    for line, points, colour, dots, style, marker in paths:
        inset.plot(*line, color=colour, linewidth=1.2, linestyle=style)
        inset.plot(*points, color=dots, marker=marker, markersize=4.0, linestyle="none")
        near = line[:, np.hypot(*(line - middle[:, None])).argmin()]
        nearest = float(near[0]), float(near[1])
        inset.add_patch(
            Circle(nearest, data.target_radius_arcsec, fill=False, edgecolor=colour, linewidth=0.8)
        )
    length, label = round_length(0.8 * half)
    x, y = middle[0] + 0.9 * half, middle[1] - 0.85 * half
    inset.plot([x - length, x], [y, y], color=palette.ink, linewidth=1.4, solid_capstyle="butt")
    inset.annotate(label, (x - length / 2, y), xytext=(0, 2), textcoords="offset points", ha="center", va="bottom",
                   fontsize=7.5, color=palette.ink)  # fmt: skip
    inset.annotate(f"enlarged ×{enlarged:.0f}", (0, 1), xycoords="axes fraction", xytext=(4, -4),
                   textcoords="offset points", ha="left", va="top", fontsize=7.5, color=palette.quiet)  # fmt: skip
    axes.add_patch(
        Rectangle(
            (float(middle[0] - half), float(middle[1] - half)),
            2 * half,
            2 * half,
            fill=False,
            edgecolor=palette.quiet,
            linewidth=0.7,
            zorder=4.5,
        )
    )
    box = axes.get_window_extent()
    left, low = box.x0 + at[0] * box.width, box.y0 + at[1] * box.height
    crowd.boxes.append((left, low, left + share * box.width, low + share * box.height))
