"""Figures of a track: residuals against time, and the path on the disc or among the stars.

Shapes, not hues, tell frames apart, and lines differ in brightness: a red lamp or a red screen keeps them legible.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np

from imaging.track.result import CheckResult, frames
from planner.outputs import whole_file

INK, PALE, PAPER = "#f2e6d8", "#8d8379", "#14110f"
MEASURED, OFF = "#ffc46b", "#ff8f6b"
FORMATS = ("png", "svg", "pdf")
STILL = 1e-5  # degrees or arcseconds: a target that does not move has a place, not a path


def _axes(rows: int, size: tuple[float, float], sharex: bool = True):  # type: ignore[no-untyped-def]
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=size, layout="constrained", facecolor=PAPER)
    FigureCanvasAgg(figure)
    axes = figure.subplots(rows, 1, sharex=sharex, squeeze=False)[:, 0]
    for axis in axes:
        axis.set_facecolor(PAPER)
        axis.tick_params(colors=INK, labelsize=9)
        for spine in axis.spines.values():
            spine.set_color(PALE)
        axis.xaxis.label.set_color(INK)
        axis.yaxis.label.set_color(INK)
        axis.title.set_color(INK)
    return figure, axes


def time_axes(rows: int, size: tuple[float, float]):  # type: ignore[no-untyped-def]
    """Return (figure, axes) in the report's own look, each with its own time."""
    return _axes(rows, size, sharex=False)


def _times(result: CheckResult) -> np.ndarray:
    return _moments(result.times_tt_s)


def _moments(tt_s: np.ndarray) -> np.ndarray:
    from planner.sky.timescale import datetime_from_tt_s

    moments = datetime_from_tt_s(np.atleast_1d(tt_s))
    return np.array(
        [moment.replace(tzinfo=None) for moment in np.atleast_1d(moments)], dtype="datetime64[us]"
    )


def _time_axis(axis) -> None:  # type: ignore[no-untyped-def]
    from matplotlib.dates import AutoDateLocator, ConciseDateFormatter

    locator = AutoDateLocator(minticks=3, maxticks=7)
    axis.xaxis.set_major_locator(locator)
    formatter = ConciseDateFormatter(locator)
    axis.xaxis.set_major_formatter(formatter)
    axis.xaxis.get_offset_text().set_color(INK)


def column(result: CheckResult, name: str) -> np.ndarray:
    """Return one column of the rows."""
    return np.array([getattr(row, name) for row in result.rows])


def disc_radius_arcsec(result: CheckResult) -> float:
    """Return the radius of the reference disc, the median of the frames; NaN when none has it."""
    radius = column(result, "reference_radius_px") * column(result, "scale_arcsec_px")
    return float(np.median(radius[np.isfinite(radius)])) if np.isfinite(radius).any() else float("nan")


def residual_figure(result: CheckResult):  # type: ignore[no-untyped-def]
    """Return the figure of observed minus computed, along and across the motion, against stamped time.

    The line along is what the fitted clock offset alone would make of each frame.
    """
    figure, axes = _axes(2, (8.0, 5.0))
    when, verdict = _times(result), column(result, "verdict")
    shift = clock_shift_arcsec(result)
    for axis, part, sign in ((axes[0], "along", 1.0), (axes[1], "across", 0.0)):
        value, sigma = column(result, f"{part}_arcsec"), column(result, f"sigma_{part}_arcsec")
        axis.axhline(0.0, color=PALE, lw=1.0)
        for kind, marker, colour in (("on-track", "o", MEASURED), ("off-track", "x", OFF)):
            chosen = (verdict == kind) & np.isfinite(value)
            if chosen.any():
                axis.errorbar(
                    when[chosen],
                    value[chosen],
                    sigma[chosen],
                    fmt=marker,
                    ms=5,
                    color=colour,
                    ecolor=PALE,
                    elinewidth=1,
                    label=f"{kind} ({chosen.sum()})",
                )
        if sign and np.isfinite(shift).any():
            order = np.argsort(when)
            order = order[np.isfinite(shift[order])]
            axis.plot(when[order], shift[order], color=INK, lw=1.2, label="what the clock offset makes")
        axis.set_ylabel(f"O − C {part} (arcsec)")
        axis.grid(color=PALE, alpha=0.25, lw=0.6)
        _scale_to(axis, value, sigma, verdict)
    if axes[0].get_legend_handles_labels()[0]:
        axes[0].legend(loc="best", fontsize=8, facecolor=PAPER, edgecolor=PALE, labelcolor=INK).set_zorder(5)
    _time_axis(axes[-1])
    axes[-1].set_xlabel("mid-exposure as stamped, UTC")
    return figure


def _scale_to(axis, value, sigma, verdict) -> None:  # type: ignore[no-untyped-def]
    """Keep a frame that is far off from hiding what the others do."""
    good = (verdict == "on-track") & np.isfinite(value)
    if good.sum() < 3:
        return
    low, high = np.min(value[good] - sigma[good]), np.max(value[good] + sigma[good])
    low, high = min(low, 0.0), max(high, 0.0)
    margin = 0.25 * (high - low)
    axis.set_ylim(low - margin, high + margin)
    beyond = int(np.sum((value < low - margin) | (value > high + margin)))
    if beyond:
        text = f"{frames(beyond)} off the track outside these limits"
        axis.text(0.01, 0.97, text, transform=axis.transAxes, va="top", color=OFF, fontsize=8)


def clock_shift_arcsec(result: CheckResult) -> np.ndarray:
    """Return the residual along the motion that the fitted clock alone makes, a row; NaN where unknown."""
    if result.diagnosis is None or not np.isfinite(result.clock_offset_s):
        return np.full(len(result.rows), np.nan)
    shift = np.full(len(result.rows), np.nan)
    measured = np.flatnonzero(column(result, "verdict") != "unmeasured")
    shift[measured] = column(result, "along_arcsec")[measured] - result.diagnosis.reading.fit.along_arcsec
    return shift


def path_figure(result: CheckResult):  # type: ignore[no-untyped-def]
    """Return the figure of the path: predicted line, measured points; north up, east to the left."""
    figure, axes = _axes(1, (6.4, 6.0))
    axis = axes[0]
    verdict = column(result, "verdict")
    on_disc = result.reference in ("sun", "moon")
    names = ("east_arcsec", "north_arcsec") if on_disc else ("ra_deg", "dec_deg")
    py = column(result, f"predicted_{names[1]}")
    mx, my = (column(result, f"measured_{name}") for name in names)
    still = len(result.line) > 0 and bool(np.ptp(result.line, axis=0).max() < STILL)
    place = result.line[:1] if still else result.line
    axis.plot(*place.T, "+" if still else "-", color=INK, lw=1.0, ms=12, label="predicted")
    for kind, marker, colour in (("on-track", "o", MEASURED), ("off-track", "x", OFF)):
        chosen = (verdict == kind) & np.isfinite(mx)
        if chosen.any():
            axis.plot(
                mx[chosen], my[chosen], marker, ms=5, color=colour, mfc="none", label=f"measured, {kind}"
            )
    if on_disc:
        from matplotlib.patches import Circle

        radius = disc_radius_arcsec(result)
        if np.isfinite(radius):
            axis.add_patch(Circle((0, 0), radius, fill=False, color=PALE, lw=1.5))
            far = np.max(np.abs([*mx[np.isfinite(mx)], *my[np.isfinite(my)], radius]))
            reach = 1.08 * min(far, 4.0 * radius)
            axis.set_xlim(-reach, reach)
            axis.set_ylim(-reach, reach)
        axis.set_aspect("equal")
        axis.set_xlabel(f"east of the {result.reference.capitalize()}'s centre (arcsec)")
        axis.set_ylabel(f"north of the {result.reference.capitalize()}'s centre (arcsec)")
    else:
        middle = np.nanmedian(py) if np.isfinite(py).any() else 0.0
        axis.set_aspect(1.0 / max(np.cos(np.radians(middle)), 0.05), adjustable="datalim")
        axis.set_xlabel("right ascension (degrees, ICRS)")
        axis.set_ylabel("declination (degrees, ICRS)")
        axis.ticklabel_format(useOffset=False)
    axis.invert_xaxis()
    axis.grid(color=PALE, alpha=0.25, lw=0.6)
    axis.set_title("north up, east to the left", fontsize=9, color=INK)
    axis.legend(loc="best", fontsize=8, facecolor=PAPER, edgecolor=PALE, labelcolor=INK)
    return figure


def light_figure(result: CheckResult):  # type: ignore[no-untyped-def]
    """Return the figure of the target star's light: the whole curve, and each instant close up, prediction marked.

    Bars across are exposures; the line is the fit, each frame as the camera averages it.
    """
    star = result.star
    assert star is not None
    figure, axes = _axes(1 + len(star.timings), (8.0, 3.2 + 2.6 * len(star.timings)), sharex=False)
    when = _moments(star.start_tt_s + star.exposure_s / 2)
    axes[0].plot(when, star.flux, ".", ms=4, color=MEASURED)
    axes[0].plot(when, star.model, color=INK, lw=0.8)
    for axis, timing in zip(axes[1:], star.timings, strict=True):
        late = star.start_tt_s - timing.stamped_tt_s
        order = np.argsort(np.abs(late))[:60]
        reach = max(float(np.abs(late[order]).max()), 1e-3)
        near = np.abs(late) <= reach
        middle, half = late[near] + star.exposure_s[near] / 2, star.exposure_s[near] / 2
        axis.errorbar(
            middle, star.flux[near], xerr=half, fmt=".", ms=5, color=MEASURED, ecolor=PALE, label="frames"
        )
        axis.plot(middle, star.model[near], color=INK, lw=1.0, drawstyle="steps-mid", label="fit")
        axis.axvspan(
            -timing.sigma_s, timing.sigma_s, color=INK, alpha=0.25, lw=0, label=f"{timing.name}, 1 sigma"
        )
        early = timing.predicted_tt_s - timing.stamped_tt_s
        if np.isfinite(early) and abs(early) < reach:
            axis.axvline(early, color=OFF, lw=1.2, ls="--", label="predicted")
        axis.set_xlim(-reach, reach)
        axis.set_xlabel(f"seconds from the {timing.name} as timed")
    for axis in axes:
        axis.axhline(0.0, color=PALE, lw=0.8)
        axis.set_ylabel("star's light")
        axis.grid(color=PALE, alpha=0.25, lw=0.6)
        if axis.get_legend_handles_labels()[0]:
            axis.legend(loc="best", fontsize=8, facecolor=PAPER, edgecolor=PALE, labelcolor=INK)
    _time_axis(axes[0])
    axes[0].set_xlabel("mid-exposure as stamped, UTC")
    return figure


def save_figures(result: CheckResult, folder: Path, force: bool = False) -> list[Path]:
    """Write each figure as PNG, SVG and PDF and return their paths."""
    written: list[Path] = []
    if not result.rows:
        return written
    made = {"residuals": residual_figure, "path": path_figure} if result.measured else {}
    if result.star is not None:
        made["light_curve"] = light_figure
    for name, make in made.items():
        figure = make(result)
        for kind in FORMATS:
            path = folder / f"{name}.{kind}"
            with whole_file(path, force) as part:
                figure.savefig(part, format=kind, dpi=160, facecolor=figure.get_facecolor())
            written.append(path)
    return written
