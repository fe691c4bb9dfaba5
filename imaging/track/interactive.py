"""The plots of the report that answer to a hand: hover shows numbers, a click shows the piece of the frame."""

from __future__ import annotations

from typing import Any

import numpy as np

from imaging.track.figures import (
    INK,
    MEASURED,
    OFF,
    PALE,
    PAPER,
    STILL,
    clock_shift_arcsec,
    column,
    disc_radius_arcsec,
)
from imaging.track.result import CheckResult, frames

_TT_TO_UNIX_MS = 1000.0


def plots(result: CheckResult) -> tuple[str, str, str]:
    """Return (head, body, script) of residual plots and path for a page without network."""
    from bokeh.embed import components
    from bokeh.layouts import column as stacked
    from bokeh.models import ColumnDataSource, CustomJS

    source = ColumnDataSource(_data(result))
    figures = _residuals(result, source)
    figures.append(_path(result, source))
    source.selected.js_on_change("indices", CustomJS(args={"source": source}, code=_ON_SELECT))
    script, div = components(stacked(*figures, sizing_mode="stretch_width"))
    return head(), div, script


def head() -> str:
    """Return what a page without network needs to show plots."""
    from bokeh.resources import Resources

    return str(Resources(mode="inline", components=["bokeh"]).render())


def light_plot(result: CheckResult) -> tuple[str, str]:
    """Return (body, script) of the target star's light curve; needs `head`."""
    from bokeh.embed import components
    from bokeh.models import ColumnDataSource
    from bokeh.models.annotations import Span
    from bokeh.models.tools import HoverTool

    from planner.sky.timescale import datetime_from_tt_s, utc_iso

    star = result.star
    assert star is not None

    def unix_ms(tt_s: np.ndarray) -> np.ndarray:
        moments = np.atleast_1d(datetime_from_tt_s(np.atleast_1d(tt_s)))
        return np.array([moment.timestamp() * _TT_TO_UNIX_MS for moment in moments])

    good = np.isfinite(star.flux)
    middle = (star.start_tt_s + star.exposure_s / 2)[good]
    data = {
        "when": unix_ms(middle).tolist(),
        "begin": unix_ms(star.start_tt_s[good]).tolist(),
        "end": unix_ms((star.start_tt_s + star.exposure_s)[good]).tolist(),
        "utc": [str(each) for each in np.atleast_1d(utc_iso(middle, 3))],
        "flux": star.flux[good].tolist(),
        "model": star.model[good].tolist(),
    }
    source = ColumnDataSource(data)
    plot = _styled(height=300, x_axis_type="datetime", min_border_left=64)
    plot.add_layout(Span(location=0, dimension="width", line_color=PALE))
    for timing in star.timings:
        for tt_s, colour, dash in (
            (timing.stamped_tt_s, INK, "solid"),
            (timing.predicted_tt_s, OFF, "dashed"),
        ):
            if np.isfinite(tt_s):
                place = float(unix_ms(np.array([tt_s]))[0])
                plot.add_layout(Span(location=place, dimension="height", line_color=colour, line_dash=dash))
    plot.segment("begin", "flux", "end", "flux", source=source, line_color=PALE)
    plot.line("when", "model", source=source, line_color=INK)
    points = plot.scatter("when", "flux", source=source, size=6, color=MEASURED)
    tips = [("mid-exposure", "@utc"), ("light", "@flux{0.000}"), ("fit", "@model{0.000}")]
    plot.add_tools(HoverTool(renderers=[points], tooltips=tips))
    plot.yaxis.axis_label = "star's light"
    plot.xaxis.axis_label = "mid-exposure as stamped, UTC"
    script, div = components(plot)
    return div, script


_ON_SELECT = """
const i = source.selected.indices[0];
if (i === undefined) return;
const d = source.data, number = x => x.toFixed(2) + "″";
const lines = [d.file[i], d.utc[i] + " UTC",
  `along ${number(d.along[i])}, across ${number(d.across[i])} (σ ${number(d.sigma_along[i])})`,
  d.verdict[i] + (d.reason[i] ? ": " + d.reason[i] : "")];
showCutout(d.row[i], lines.join("\\n"));
"""


def _data(result: CheckResult) -> dict[str, np.ndarray]:
    from planner.sky.timescale import datetime_from_tt_s

    chosen = np.flatnonzero(np.isfinite(column(result, "along_arcsec")))
    moments = datetime_from_tt_s(result.times_tt_s[chosen])
    when = np.array([moment.timestamp() * _TT_TO_UNIX_MS for moment in np.atleast_1d(moments)])
    along, across = (column(result, f"{part}_arcsec")[chosen] for part in ("along", "across"))
    sigma_along, sigma_across = (
        column(result, f"sigma_{part}_arcsec")[chosen] for part in ("along", "across")
    )
    on_disc = result.reference in ("sun", "moon")
    names = ("east_arcsec", "north_arcsec") if on_disc else ("ra_deg", "dec_deg")
    verdict = column(result, "verdict")[chosen]
    data = {
        "row": chosen,
        "when": when,
        "file": column(result, "file")[chosen],
        "utc": column(result, "utc_mid")[chosen],
        "verdict": verdict,
        "reason": column(result, "reason")[chosen],
        "along": along,
        "across": across,
        "sigma_along": sigma_along,
        "sigma_across": sigma_across,
        "along_low": along - sigma_along,
        "along_high": along + sigma_along,
        "across_low": across - sigma_across,
        "across_high": across + sigma_across,
        "clock": np.nan_to_num(clock_shift_arcsec(result)[chosen]),
        "marker": np.where(verdict == "on-track", "circle", "x"),
        "colour": np.where(verdict == "on-track", MEASURED, OFF),
        "measured_x": column(result, f"measured_{names[0]}")[chosen],
        "measured_y": column(result, f"measured_{names[1]}")[chosen],
    }
    return {name: np.asarray(value).tolist() for name, value in data.items()}


def _styled(**options):  # type: ignore[no-untyped-def]
    from bokeh.models import DatetimeTicker
    from bokeh.plotting import figure

    tools = "pan,wheel_zoom,box_zoom,tap,reset"
    plot = figure(tools=tools, sizing_mode="stretch_width", background_fill_color=PAPER, **options)
    plot.border_fill_color = PAPER
    plot.outline_line_color = PALE
    for axis in plot.axis:
        axis.axis_label_text_color = axis.major_label_text_color = INK
        axis.axis_line_color = axis.major_tick_line_color = axis.minor_tick_line_color = PALE
        axis.axis_label_text_font_style = "normal"
    if options.get("x_axis_type") == "datetime":
        plot.xaxis.ticker = DatetimeTicker(desired_num_ticks=4)  # as many as fit on a phone
        plot.xaxis.formatter = _dates()
    plot.grid.grid_line_color = PALE
    plot.grid.grid_line_alpha = 0.25
    plot.toolbar.logo = None
    plot.toolbar.autohide = True
    return plot


_TIPS = [
    ("file", "@file"),
    ("mid-exposure", "@utc"),
    ("along", "@along{0.00}″ ± @sigma_along{0.00}"),
    ("across", "@across{0.00}″ ± @sigma_across{0.00}"),
    ("verdict", "@verdict @reason"),
]


def _residuals(result: CheckResult, source):  # type: ignore[no-untyped-def]
    from bokeh.models.annotations import Span, Whisker
    from bokeh.models.tools import HoverTool

    made: list[Any] = []
    for part in ("along", "across"):
        shared = {"x_range": made[0].x_range} if made else {}
        low, high = _range(source.data, part)
        plot = _styled(height=230, x_axis_type="datetime", y_range=(low, high), min_border_left=64, **shared)
        plot.add_layout(Span(location=0, dimension="width", line_color=PALE))
        plot.add_layout(
            Whisker(
                source=source,
                base="when",
                upper=f"{part}_high",
                lower=f"{part}_low",
                line_color=PALE,
                upper_head=None,
                lower_head=None,
            )
        )
        if part == "along":
            order = np.argsort(source.data["when"])
            plot.line(
                np.array(source.data["when"])[order], np.array(source.data["clock"])[order], line_color=INK
            )
        points = plot.scatter(
            "when", part, source=source, size=9, marker="marker", color="colour", nonselection_alpha=0.7
        )
        plot.add_tools(HoverTool(renderers=[points], tooltips=_TIPS))
        plot.yaxis.axis_label = f"O − C {part} (arcsec)"
        beyond = sum(not low <= value <= high for value in source.data[part])
        if beyond:
            plot.title.text = (
                f"{frames(beyond)} off the track lie{'s' if beyond == 1 else ''} outside these limits"
            )
            plot.title.text_color, plot.title.text_font_style = OFF, "normal"
        made.append(plot)
    made[-1].xaxis.axis_label = "mid-exposure as stamped, UTC"
    return made


def _dates():  # type: ignore[no-untyped-def]
    """Return how times are written along an axis: short enough for a phone, the year beneath."""
    from bokeh.models import DatetimeTickFormatter

    day, year = "%d %b %Y", "%Y"
    beneath = DatetimeTickFormatter(
        seconds=day, minsec=day, minutes=day, hourmin=day, hours=day, days=year, months=year
    )
    return DatetimeTickFormatter(
        seconds="%H:%M:%S",
        minsec="%H:%M:%S",
        minutes="%H:%M",
        hourmin="%H:%M",
        hours="%H:%M",
        days="%d %b",
        months="%b",
        context=beneath,
        context_which="start",
    )


def _range(data, part: str) -> tuple[float, float]:  # type: ignore[no-untyped-def]
    """Return limits that show the frames on track; others are reached by panning."""
    good = np.array(data["verdict"]) == "on-track"
    if good.sum() < 3:
        good[:] = True
    low = min(0.0, float(np.min(np.array(data[f"{part}_low"])[good])))
    high = max(0.0, float(np.max(np.array(data[f"{part}_high"])[good])))
    margin = 0.15 * (high - low) or 1.0
    return low - margin, high + margin


def _path(result: CheckResult, source):  # type: ignore[no-untyped-def]
    from bokeh.models import BasicTicker, HoverTool

    on_disc = result.reference in ("sun", "moon")
    options = {"match_aspect": True} if on_disc else {}
    plot = _styled(height=460, min_border_left=64, **options)
    if on_disc:
        plot.circle(
            [0], [0], radius=disc_radius_arcsec(result), fill_color=None, line_color=PALE, line_width=2
        )
        body = result.reference.capitalize()
        plot.xaxis.axis_label = f"east of the {body}'s centre (arcsec); north up, east left"
        plot.yaxis.axis_label = f"north of the {body}'s centre (arcsec)"
    else:
        plot.xaxis.axis_label = "right ascension (degrees, ICRS); north up, east left"
        plot.yaxis.axis_label = "declination (degrees, ICRS)"
    plot.xaxis.ticker = BasicTicker(desired_num_ticks=4)  # as many as fit on a phone
    plot.line(*result.line.T, line_color=INK)
    if len(result.line) and np.ptp(result.line, axis=0).max() < STILL:
        plot.scatter(*result.line[:1].T, marker="cross", size=16, color=INK, line_width=2)
    points = plot.scatter(
        "measured_x",
        "measured_y",
        source=source,
        size=8,
        marker="marker",
        line_color="colour",
        fill_color=None,
        nonselection_alpha=0.7,
    )
    plot.add_tools(HoverTool(renderers=[points], tooltips=_TIPS))
    plot.x_range.flipped = True
    return plot
