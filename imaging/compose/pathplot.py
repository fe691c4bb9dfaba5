"""The path plot: predicted line, measured points with error bars, time ticks, sky, orientation, residuals.

Light for paper and dark for screens; PNG, SVG and PDF by the suffix.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from imaging.compose.files import round_length
from imaging.compose.labels import Crowd
from imaging.compose.pathdata import PathData
from imaging.compose.plane import sky_to_plane
from imaging.compose.skygrid import edge_crossing, radec_grid
from planner.outputs import whole_file

FORMATS = ("png", "svg", "pdf")


@dataclass(frozen=True)
class Palette:
    """Colours of a version; line styles and markers alone tell series apart, so that grey copies stay readable."""

    paper: str
    ink: str
    quiet: str
    faint: str
    predicted: str
    measured: str
    disc: str
    lit: str
    star: str


LIGHT = Palette(
    "#ffffff", "#1c2126", "#5d6770", "#c9d0d6", "#2b5c8a", "#b3401f", "#fbf3df", "#fbf3df", "#39424a"
)
DARK = Palette(
    "#0e1216", "#e8e4da", "#9aa3ab", "#38424b", "#79b4e3", "#f2a65a", "#22211c", "#45423a", "#e9ecef"
)


def draw_path_plot(data: PathData, palette: Palette = LIGHT, stars: bool = True, residuals: bool = True):
    """Return a matplotlib Figure (no global state is touched)."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    view = _view(data)
    wide = 9.0
    aspect = (view[3] - view[2]) / (view[1] - view[0])
    lower = 2.3 if residuals and data.points.size else 0.0
    left, right = 0.095, 0.975
    main = wide * (right - left) * aspect
    below = 0.22 if data.on_disc else 0.42
    tall = main + lower + below + 0.78
    figure = Figure(figsize=(wide, tall), facecolor=palette.paper)
    FigureCanvasAgg(figure)
    axes = figure.add_axes((left, (lower + below) / tall, right - left, main / tall))
    _frame_axes(axes, palette)
    axes.set_aspect("equal")
    axes.set_xlim(view[0], view[1])
    axes.set_ylim(view[2], view[3])
    figure.text(
        left, 1 - 0.30 / tall, data.title, color=palette.ink, fontsize=14, fontweight="bold", va="center"
    )
    figure.text(
        left,
        1 - 0.55 / tall,
        f"{data.site} · times in {data.zone_label}",
        color=palette.quiet,
        fontsize=9,
        va="center",
    )
    axes.apply_aspect()
    if data.on_disc:
        _disc(axes, data, palette)
    else:
        _sky(axes, data, palette, view)
    _path(axes, data, palette)
    crowd = _crowd(figure, axes, data)
    _compass(axes, data, palette, crowd)
    _scale_bar(axes, view, palette, crowd)
    _legend(axes, data, palette, crowd)
    _tick_labels(figure, axes, data, palette, crowd)
    if data.on_disc:
        _limb_angles(figure, axes, data, palette, crowd)
    elif stars:
        _stars(figure, axes, data, palette, view, crowd)
    if lower:
        _residual_panel(figure, data, palette, (left, 0.42 / tall, right - left, (lower - 0.35) / tall))
    return figure


def write_path_plot(
    path: Path, data: PathData, palette: Palette, force: bool = False, dpi: int = 200
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


def _view(data: PathData) -> tuple[float, float, float, float]:
    if data.on_disc:
        away = np.hypot(*data.points).max(initial=0.0) / data.disc_radius_arcsec
        reach = max(1.17, min(away + 0.1, 1.8)) * data.disc_radius_arcsec
        return -reach, reach, -reach, reach
    x, y = data.line
    pad = 0.16 * max(np.ptp(x), np.ptp(y))
    wide, tall = np.ptp(x) + 2 * pad, np.ptp(y) + 2 * pad
    tall = max(tall, 0.45 * wide)
    wide = max(wide, 0.85 * tall)
    middle_x, middle_y = (x.min() + x.max()) / 2, (y.min() + y.max()) / 2
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
    axes.add_patch(
        Circle(
            (0, 0),
            radius,
            facecolor=palette.disc if data.on_disc == "sun" else palette.paper,
            edgecolor=palette.quiet,
            linewidth=1.0,
            zorder=1,
        )
    )
    if data.phase_angle_deg > 0:
        axes.add_patch(_lit_part(data, palette))
    for share in (0.25, 0.5, 0.75):
        axes.add_patch(
            Circle((0, 0), share * radius, fill=False, edgecolor=palette.faint, linewidth=0.5, zorder=1.1)
        )
    for pa in range(0, 360, 30):
        x, y = _at_pa(data, pa, radius)
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


def _at_pa(data: PathData, pa_deg: float, reach: float) -> tuple[float, float]:
    """Return the point at a position angle from celestial north of date."""
    angle = np.radians(pa_deg + data.north_of_date_pa_deg - data.up_pa_deg)
    return float(-np.sin(angle) * reach), float(np.cos(angle) * reach)


def _limb_angles(figure: Any, axes: Any, data: PathData, palette: Palette, crowd: Crowd) -> None:
    for pa in range(0, 360, 30):
        x, y = _at_pa(data, pa, data.disc_radius_arcsec)
        out = _at_pa(data, pa, 1.0)
        _write(figure, axes, crowd, (x, y), f"{pa}°", out, palette.quiet, 7.5, gap=5, optional=True)


def _sky(axes: Any, data: PathData, palette: Palette, view: tuple[float, float, float, float]) -> None:
    for line in radec_grid(data.canvas, data.anchor_deg, view):
        axes.plot(*line.points, color=palette.faint, linewidth=0.6, zorder=1)
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
            fontsize=8,
            color=palette.quiet,
            annotation_clip=False,
        )


def _path(axes: Any, data: PathData, palette: Palette) -> None:
    from matplotlib.patches import Circle

    axes.plot(*data.line, color=palette.predicted, linewidth=1.2, zorder=3, label="predicted")
    pixel = _arcsec_a_point(axes)
    for tick in data.ticks:
        across = np.array([-tick.along[1], tick.along[0]]) * 4.0 * pixel
        axes.plot(
            [tick.right_arcsec - across[0], tick.right_arcsec + across[0]],
            [tick.up_arcsec - across[1], tick.up_arcsec + across[1]],
            color=palette.predicted,
            linewidth=1.2,
            zorder=3.1,
        )
    if data.target_radius_arcsec > 2.0 * pixel:
        half = data.line.shape[1] // 2
        middle = float(data.line[0, half]), float(data.line[1, half])
        axes.add_patch(
            Circle(
                middle,
                data.target_radius_arcsec,
                fill=False,
                edgecolor=palette.predicted,
                linewidth=0.8,
                zorder=3.2,
            )
        )
    if data.points.size:
        count = data.points.shape[1]
        axes.errorbar(
            *data.points,
            xerr=data.point_sigma,
            yerr=data.point_sigma,
            fmt="o",
            markersize=4.2 if count <= 40 else 3.0 if count <= 200 else 1.8,
            color=palette.measured,
            ecolor=palette.measured,
            elinewidth=0.7,
            markeredgewidth=0,
            linestyle="none",
            alpha=1.0 if count <= 200 else 0.6,
            zorder=4,
            label="measured",
        )


def _arcsec_a_point(axes: Any) -> float:
    box = axes.get_window_extent()
    low, high = axes.get_xlim()
    return (high - low) / box.width * axes.figure.dpi / 72


def _crowd(figure: Any, axes: Any, data: PathData) -> Crowd:
    box = axes.get_window_extent()
    line = axes.transData.transform(data.line.T[::3]).T
    points = axes.transData.transform(data.points.T).T if data.points.size else np.zeros((2, 0))
    return Crowd((box.x0 + 2, box.y0 + 2, box.x1 - 2, box.y1 - 2), np.concatenate([line, points], axis=1), [])


def _write(
    figure: Any,
    axes: Any,
    crowd: Crowd,
    at: tuple[float, float],
    text: str,
    toward: tuple[float, float],
    colour: str,
    size: float,
    gap: float = 7,
    optional: bool = False,
    leader: bool = False,
) -> None:
    """Write a label where it covers nothing; `gap` in points."""
    label = axes.text(0, 0, text, fontsize=size, color=colour, ha="center", va="center", zorder=6)
    box = label.get_window_extent(figure.canvas.get_renderer())
    dots = figure.dpi / 72
    spot = axes.transData.transform(at)
    place = crowd.place(
        tuple(spot), (box.width + 5 * dots, box.height + 3 * dots), toward, gap * dots, optional
    )
    if place is None:
        label.remove()
        return
    label.set_position(tuple(axes.transData.inverted().transform(place)))
    if leader and np.hypot(*(np.array(place) - spot)) > 26 * dots + box.width / 2:
        end = axes.transData.inverted().transform(place)
        axes.plot([at[0], end[0]], [at[1], end[1]], color=colour, linewidth=0.4, zorder=2.5)


def _tick_labels(figure: Any, axes: Any, data: PathData, palette: Palette, crowd: Crowd) -> None:
    middle = data.line.mean(axis=1)
    for tick in data.ticks:
        across = np.array([-tick.along[1], tick.along[0]])
        outward = np.array([tick.right_arcsec, tick.up_arcsec]) - (0 if data.on_disc else middle)
        if across @ outward < 0:
            across = -across
        _write(
            figure, axes, crowd, (tick.right_arcsec, tick.up_arcsec), tick.label, tuple(across),
            palette.ink, 8.5, gap=8, leader=True,
        )  # fmt: skip


def _compass(axes: Any, data: PathData, palette: Palette, crowd: Crowd) -> None:
    """North, east, and the zenith at mid-event where it is known."""
    box = axes.get_window_extent()
    dots = axes.figure.dpi / 72
    x, y = box.x0 + 58 * dots, box.y1 - 56 * dots
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
        name = axes.transData.inverted().transform(
            (x + step[0] * (1 + 10 * dots / np.hypot(*step)), y + step[1] * (1 + 10 * dots / np.hypot(*step)))
        )
        axes.text(*name, label, fontsize=7 if thin else 9, color=palette.quiet if thin else palette.ink,
                  ha="center", va="center", zorder=7)  # fmt: skip
    crowd.boxes.append((x - 56 * dots, y - 40 * dots, x + 46 * dots, y + 52 * dots))


def _scale_bar(axes: Any, view: tuple[float, float, float, float], palette: Palette, crowd: Crowd) -> None:
    length, label = round_length(0.2 * (view[1] - view[0]))
    box = axes.get_window_extent()
    dots = axes.figure.dpi / 72
    (x, y) = axes.transData.inverted().transform((box.x1 - 16 * dots, box.y0 + 14 * dots))
    axes.plot([x - length, x], [y, y], color=palette.ink, linewidth=1.4, zorder=7, solid_capstyle="butt")
    axes.annotate(label, (x - length / 2, y), xytext=(0, 3), textcoords="offset points", ha="center", va="bottom",
                  fontsize=8.5, color=palette.ink, zorder=7)  # fmt: skip
    start = axes.transData.transform((x - length, y))
    crowd.boxes.append((start[0] - 4, start[1] - 6 * dots, box.x1, start[1] + 16 * dots))


def _legend(axes: Any, data: PathData, palette: Palette, crowd: Crowd) -> None:
    legend = axes.legend(
        loc="lower left", frameon=False, fontsize=8.5, labelcolor=palette.ink, handlelength=1.8
    )
    box = axes.get_window_extent()
    dots = axes.figure.dpi / 72
    crowd.boxes.append((box.x0, box.y0, box.x0 + 100 * dots, box.y0 + 40 * dots))
    sigma = data.point_sigma[np.isfinite(data.point_sigma)]
    if sigma.size and np.median(sigma) < 2.0 * _arcsec_a_point(axes):
        legend.get_texts()[-1].set_text(f"measured (1σ {np.median(sigma):.2g}″, smaller than the points)")
        crowd.boxes[-1] = (box.x0, box.y0, box.x0 + 260 * dots, box.y0 + 40 * dots)


def _stars(
    figure: Any,
    axes: Any,
    data: PathData,
    palette: Palette,
    view: tuple[float, float, float, float],
    crowd: Crowd,
    most: int = 220,
    named: int = 9,
) -> None:
    from planner.sky.stars import NAMED, stars_in_field

    corners = np.hypot([view[0], view[0], view[1], view[1]], [view[2], view[3], view[2], view[3]])
    field = stars_in_field(*data.anchor_deg, float(corners.max()) / 3600.0, data.middle_tt_s)
    x, y = data.canvas.from_plane(*sky_to_plane(*data.anchor_deg, field.ra_deg, field.dec_deg))
    inside = np.flatnonzero((x > view[0]) & (x < view[1]) & (y > view[2]) & (y < view[3]))
    inside = inside[np.argsort(field.magnitude[inside], kind="stable")][:most]
    if not inside.size:
        return
    magnitude = field.magnitude[inside]
    faintest = float(magnitude.max())
    size = 1.5 + 2.6 * np.clip(faintest - magnitude, 0, 9) ** 1.35
    axes.scatter(x[inside], y[inside], s=size, color=palette.star, linewidths=0, zorder=2, alpha=0.85)
    names = {f"HIP {number}": name.title() for name, number in NAMED.items()}
    places = axes.transData.transform(np.column_stack([x[inside], y[inside]])).T
    crowd.points = np.concatenate([crowd.points, places[:, :60]], axis=1)
    known = field.name
    for index in inside[:named]:
        label = names.get(known[index], known[index])
        _write(
            figure,
            axes,
            crowd,
            (x[index], y[index]),
            label,
            (1.0, 0.0),
            palette.quiet,
            7.5,
            gap=5,
            optional=True,
        )
    axes.annotate(
        f"stars to magnitude {faintest:.1f}", (1, 1), xycoords="axes fraction", xytext=(-6, -6),
        textcoords="offset points", ha="right", va="top", fontsize=7.5, color=palette.quiet,
        bbox={"facecolor": palette.paper, "edgecolor": "none", "pad": 1.5},
    )  # fmt: skip


def _residual_panel(
    figure: Any, data: PathData, palette: Palette, place: tuple[float, float, float, float]
) -> None:
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
        axes.set_facecolor(palette.paper)
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
        axes.tick_params(colors=palette.quiet, labelcolor=palette.quiet, labelsize=8, length=3)
        for spine in axes.spines.values():
            spine.set_color(palette.quiet)
            spine.set_linewidth(0.7)
        if number == 0:
            axes.set_xticklabels([])
        else:
            _time_axis(axes, data)


def _time_axis(axes: Any, data: PathData) -> None:
    from matplotlib.dates import AutoDateLocator, ConciseDateFormatter

    locator = AutoDateLocator(minticks=4, maxticks=9, tz=data.zone)
    axes.xaxis.set_major_locator(locator)
    formatter = ConciseDateFormatter(locator, tz=data.zone, show_offset=not data.campaign)
    formatter.formats = ["%Y", "%b", "%d", "%H:%M", "%H:%M", "%S.%f"]
    formatter.zero_formats = ["", "%Y", "%b", "%d %b", "%H:%M", "%H:%M"]
    formatter.offset_formats = ["", "%Y", "%B %Y", "%d %B %Y", "%d %B %Y", "%d %B %Y"]
    axes.xaxis.set_major_formatter(formatter)
    axes.xaxis.get_offset_text().set_fontsize(8)
    axes.xaxis.get_offset_text().set_color(axes.xaxis.get_ticklabels()[0].get_color())
