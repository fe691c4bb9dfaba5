"""The interactive page: the composite with the track on it; pointing at a place tells frame, time and residual."""

from __future__ import annotations

import base64
import io
from pathlib import Path
from typing import Any

import numpy as np

from imaging.compose.material import Material
from imaging.compose.pathdata import PathData
from imaging.compose.picture import Picture
from imaging.compose.plane import plane_to_sky
from planner.outputs import whole_file
from planner.sky.timescale import utc_iso

LARGEST_PX = 1800
ASK = "Point at a ring, or touch it, for its frame, time and residual."
TELL = """
const i = source.selected.indices[0], d = source.data;
if (i !== undefined)
  told.text = `${d.file[i]}, ${d.utc[i]}<br>along ${d.along[i]}, across ${d.across[i]}, ${d.verdict[i]}`;
"""
PAPER, INK, PALE, LINE, POINT = "#14110f", "#f2e6d8", "#8d8379", "#79b4e3", "#f2a65a"


def write_page(
    path: Path,
    material: Material,
    picture: Picture,
    tones: np.ndarray,
    data: PathData,
    caption: str,
    force: bool = False,
) -> None:
    """Write one self-contained HTML file (no network): `tones` are the picture's, first row at the top."""
    from bokeh.embed import file_html
    from bokeh.layouts import column
    from bokeh.models import ColumnDataSource, CustomJS, HoverTool, Range1d, TapTool
    from bokeh.models.widgets import Div
    from bokeh.plotting import figure
    from bokeh.resources import INLINE

    height, width = tones.shape[:2]
    plot = figure(
        x_range=Range1d(start=-0.5, end=width - 0.5),
        y_range=Range1d(start=-0.5, end=height - 0.5),
        tools="pan,wheel_zoom,box_zoom,reset,save",
        active_scroll="wheel_zoom",
        match_aspect=True,
        sizing_mode="scale_width",
        aspect_ratio=width / height,
        # whatever stands beside the frame would squeeze the picture: the Sun must stay round
        toolbar_inner=True,
        toolbar_location="below",
        min_border=0,
        styles={"max-width": f"calc((100vh - 10em) * {width / height:.4f})"},
        background_fill_color=PAPER,
        border_fill_color=PAPER,
        outline_line_color=PALE,
    )
    plot.axis.visible = plot.grid.visible = False
    plot.image_url(url=[_as_url(tones)], x=-0.5, y=height - 0.5, w=width, h=height)
    told = Div(text=ASK, styles={"color": INK, "font": "15px sans-serif", "min-height": "3em"})
    line_x, line_y = _on_canvas(picture, data, data.line)
    line = ColumnDataSource({"x": line_x, "y": line_y, "utc": utc_iso(data.line_tt_s, 0)})
    plot.line(
        "x", "y", source=line, line_color=LINE, line_width=1.5, line_alpha=0.8, legend_label="predicted"
    )
    if data.points.size:
        x, y = _on_canvas(picture, data, data.points)
        residuals = data.residuals
        frames = [frame for frame in material.frames if frame.measured]
        source = ColumnDataSource(
            {
                "x": x,
                "y": y,
                "file": [frame.path.name for frame in frames],
                "utc": utc_iso(residuals.tt_s, 1),
                "along": _signed(residuals.along_arcsec, residuals.sigma_along_arcsec),
                "across": _signed(residuals.across_arcsec, residuals.sigma_across_arcsec),
                "verdict": [frame.verdict for frame in frames],
            }
        )
        points = plot.scatter(
            "x", "y", source=source, size=9, fill_color=None, line_color=POINT, line_width=1.5,
            legend_label="measured", nonselection_line_alpha=1.0,
        )  # fmt: skip
        plot.add_tools(
            HoverTool(
                renderers=[points],
                tooltips=[
                    ("frame", "@file"), ("UTC", "@utc"), ("along", "@along"), ("across", "@across"),
                    ("verdict", "@verdict"),
                ],
            ),
            TapTool(renderers=[points]),
        )  # fmt: skip
        source.selected.js_on_change("indices", CustomJS(args={"source": source, "told": told}, code=TELL))
    plot.legend.location = _free_corner(width, height, line_x, line_y)
    plot.legend.click_policy = "hide"
    plot.legend.background_fill_color = PAPER
    plot.legend.background_fill_alpha = 0.6
    plot.legend.label_text_color = INK
    plot.legend.border_line_alpha = 0
    plot.toolbar.logo = None
    plot.toolbar.autohide = True
    from html import escape

    style: dict[str, str | None] = {
        "color": INK,
        "font-family": "sans-serif",
        "font-size": "15px",
        "max-width": "70em",
    }
    heading = Div(text=f"<h2 style='margin:0.3em 0'>{escape(material.plan.title)}</h2>", styles=style)
    words = Div(
        text=f"<p>{escape(caption)}</p><p style='color:{PALE}'>Click a name in the legend to hide it.</p>",
        styles=style,
    )
    page = column(heading, plot, told, words, sizing_mode="stretch_width", styles={"background": PAPER})
    html = file_html(page, INLINE, title=material.plan.title)
    html = html.replace(
        "<head>",
        f"<head><meta name='viewport' content='width=device-width'><style>body{{background:{PAPER}}}</style>",
        1,
    )
    with whole_file(path, force) as part:
        part.write_text(html, encoding="utf-8")


def _on_canvas(picture: Picture, data: PathData, plane: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return canvas pixels of places in the plane of the plot (right and up, arcseconds from its origin)."""
    east, north = data.canvas.to_plane(*plane)
    if data.on_disc is not None:
        return picture.canvas.from_plane(east, north)
    anchor = picture.anchor_ra_deg, picture.anchor_dec_deg
    return picture.canvas.from_sky(*anchor, *plane_to_sky(*data.anchor_deg, east, north))


def _free_corner(width: int, height: int, x_px: np.ndarray, y_px: np.ndarray) -> Any:
    """Return the corner of the picture that the line keeps furthest away from; the tools stand at the lower right."""
    corners = {"top_right": (width, height), "top_left": (0, height), "bottom_left": (0, 0)}
    away = {name: float(np.hypot(x_px - x, y_px - y).min()) for name, (x, y) in corners.items()}
    return max(away, key=lambda name: away[name])


def _signed(value: np.ndarray, sigma: np.ndarray) -> list[str]:
    known = sigma[np.isfinite(sigma) & (sigma > 0)]
    digits = int(np.clip(1 - np.floor(np.log10(np.median(known))), 2, 4)) if known.size else 2
    return [f"{v:+.{digits}f} ± {s:.{digits}f} ″" for v, s in zip(value, sigma, strict=True)]


def _as_url(tones: np.ndarray) -> str:
    """Return the picture as a JPEG within the page, reduced to what a screen shows."""
    from PIL import Image

    image = Image.fromarray(np.ascontiguousarray(np.round(tones * 255).astype(np.uint8)))
    image.thumbnail((LARGEST_PX, LARGEST_PX), Image.Resampling.LANCZOS)
    buffer = io.BytesIO()
    image.convert("RGB").save(buffer, "JPEG", quality=90)
    return "data:image/jpeg;base64," + base64.b64encode(buffer.getvalue()).decode("ascii")
