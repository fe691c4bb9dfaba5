"""A followed star's light curve for people and machines: a sentence, an object, a table and a picture."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from imaging.discs.lightcurve import EventFit
from imaging.track.figures import INK, MEASURED, PALE, PAPER, time_axes
from imaging.track.followed import FollowedStar
from imaging.track.fringes import Fringes
from planner.outputs import whole_file


def sentence(
    followed: FollowedStar, events: Sequence[EventFit], reason: str | None, fringes: Sequence[Fringes] = ()
) -> str:
    """Return what the curve tells, in one sentence."""
    from planner.sky.timescale import utc_iso

    if not events:
        return f"The star neither went out nor came back in {followed.curve.flux.size} frames: {reason}."
    parts = []
    for number, event in enumerate(events):
        verb = "went out" if event.kind == "disappearance" else "came back"
        digits = int(np.clip(1 - np.floor(np.log10(event.sigma_s)), 1, 5))
        stamp = utc_iso(followed.origin_tt_s + event.time_s, digits)
        text = f"{verb} at {stamp} ± {event.sigma_s:.{digits}f} s"
        note = fringes[number].told if fringes else "between two exposures" if event.in_dead_time else ""
        parts.append(f"{text} ({note})" if note else text)
    worst = max(event.false_alarm_log10 for event in events)
    text = f"The star {' and '.join(parts)}; noise alone shows as much in one curve of 10^{-worst:.0f}."
    return f"{text} No fringes fitted: {reason}." if reason else text


def as_object(
    followed: FollowedStar, events: Sequence[EventFit], reason: str | None, fringes: Sequence[Fringes] = ()
) -> dict[str, Any]:
    """Return the same for a machine."""
    from planner.sky.timescale import utc_iso

    return {
        "frames": int(followed.curve.flux.size),
        "compared": followed.compared,
        "aperture_px": followed.radius_px,
        "moved_px": followed.moved_px,
        "events": [
            {
                "name": event.kind,
                "utc": str(utc_iso(followed.origin_tt_s + event.time_s, 4)),
                "sigma_s": event.sigma_s,
                "signal_to_noise": event.signal_to_noise,
                "depth": event.depth,
                "false_alarm_log10": event.false_alarm_log10,
                "between_exposures": event.in_dead_time,
                **(_size(fringes[number]) if fringes else {}),
            }
            for number, event in enumerate(events)
        ],
        "reason": reason,
        "set_aside": [{"file": aside.file, "reason": aside.reason} for aside in followed.set_aside],
    }


def _size(fringes: Fringes) -> dict[str, float]:
    return {
        "star_diameter_mas": fringes.diameter_mas,
        "star_diameter_sigma_mas": fringes.diameter_sigma_mas,
        "star_diameter_limit_mas": fringes.diameter_limit_mas,
    }


def write_curve(
    followed: FollowedStar,
    events: Sequence[EventFit],
    reason: str | None,
    folder: Path,
    force: bool = False,
    fringes: Sequence[Fringes] = (),
) -> None:
    """Write light_curve.ecsv and light_curve.png; raises OutputExistsError when one exists and not `force`."""
    from astropy.table import Table

    from planner.sky.timescale import utc_iso

    folder.mkdir(parents=True, exist_ok=True)
    curve = followed.curve
    table = Table(
        {
            "utc_begin": np.atleast_1d(utc_iso(followed.origin_tt_s + curve.start_s, 5)),
            "begin_s": curve.start_s,
            "exposure_s": curve.exposure_s,
            "flux": curve.flux,
        },
        units={"begin_s": "s", "exposure_s": "s"},
    )
    table.meta = as_object(followed, events, reason, fringes)
    with whole_file(folder / "light_curve.ecsv", force) as part:
        table.write(part, format="ascii.ecsv", overwrite=True)
    figure = _figure(followed, events)
    with whole_file(folder / "light_curve.png", force) as part:
        figure.savefig(part, format="png", dpi=160, facecolor=figure.get_facecolor())


def _figure(followed: FollowedStar, events: Sequence[EventFit]):  # type: ignore[no-untyped-def]
    curve = followed.curve
    figure, axes = time_axes(1 + len(events), (8.0, 3.2 + 2.4 * len(events)))
    middle = curve.start_s + curve.exposure_s / 2
    axes[0].plot(middle, curve.flux, ".", ms=3, color=MEASURED)
    axes[0].set_xlabel("seconds from the first exposure")
    for axis, event in zip(axes[1:], events, strict=True):
        late = middle - event.time_s
        reach = float(np.sort(np.abs(late))[min(60, late.size) - 1])
        near = np.abs(late) <= reach
        axis.errorbar(
            late[near],
            curve.flux[near],
            xerr=curve.exposure_s[near] / 2,
            fmt=".",
            color=MEASURED,
            ecolor=PALE,
        )
        axis.axvspan(
            -event.sigma_s, event.sigma_s, color=INK, alpha=0.25, lw=0, label=f"{event.kind}, 1 sigma"
        )
        for level in (event.level_with, event.level_without):
            axis.axhline(level, color=INK, lw=0.8, ls=":")
        axis.set_xlim(-reach, reach)
        axis.set_xlabel(f"seconds from the {event.kind}")
        axis.legend(loc="best", fontsize=8, facecolor=PAPER, edgecolor=PALE, labelcolor=INK)
    for axis in axes:
        axis.set_ylabel("light (ADU)")
        axis.grid(color=PALE, alpha=0.25, lw=0.6)
    return figure
