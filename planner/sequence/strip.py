"""The expected-exposure strip: how long, how bright, and how far from saturation each shot of a plan will be."""

from __future__ import annotations

from typing import Any

import numpy as np

from planner.sequence import radiometry
from planner.sequence.outlook import Outlook
from planner.sequence.wording import exposure_text

_MOST_PATCHES = 24


def draw_strip(axes: Any, outlook: Outlook) -> None:
    """Draw a patch a shot, as grey as its brightest pixel will be, with its exposure and the part of range it fills."""
    from matplotlib.patches import Rectangle

    plan = outlook.plan
    shots = [
        (passage, shot) for passage in plan.passages for shot in passage.shots if shot.peak_e is not None
    ]
    if len(shots) > _MOST_PATCHES:
        shots = [shots[i] for i in np.linspace(0, len(shots) - 1, _MOST_PATCHES).astype(int)]
    for column, (passage, shot) in enumerate(shots):
        limit = radiometry.saturation_e(plan.rig, shot.gain)
        part = min((shot.peak_e or 0.0) / limit, 1.0)
        # what a screen shows of a linear signal: the sRGB exponent, near enough
        grey = part ** (1 / 2.2)
        axes.add_patch(Rectangle((column, 0), 1, 1, facecolor=str(grey), edgecolor="black", lw=0.6))
        clipped = part >= 0.999
        axes.text(
            column + 0.5, 0.5, "clipped" if clipped else f"{100 * part:.2g} %", ha="center", va="center",
            fontsize=7.5, rotation=90, color="black" if grey > 0.5 else "white",
        )  # fmt: skip
        axes.text(
            column + 0.5,
            1.06,
            exposure_text(shot.exposure_s),
            rotation=90,
            fontsize=7,
            ha="center",
            va="bottom",
        )
        axes.text(
            column + 0.5,
            -0.06,
            _short(passage.name, shot.name),
            rotation=90,
            fontsize=7,
            ha="center",
            va="top",
        )
    axes.set_xlim(0, max(len(shots), 1))
    axes.set_ylim(0, 1)
    axes.axis("off")


def _short(passage: str, shot: str) -> str:
    """Return the passage's name with what the shot's adds to it."""
    # a passage that a pause has cut in two has a number, which its shots do not repeat
    base = passage if shot.startswith(passage) else passage.rsplit(" ", 1)[0]
    name = f"{passage}{shot.removeprefix(base)}" if shot.startswith(base) else f"{passage}, {shot}"
    return name if len(name) < 34 else name[:33] + "…"


def strip_figure(outlook: Outlook) -> Any:
    """Return the strip as a matplotlib figure."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9.0, 2.5))
    axes = figure.add_axes((0.02, 0.42, 0.96, 0.26))
    draw_strip(axes, outlook)
    figure.text(0.02, 0.92, "Brightest pixel over saturation, and exposure, of each shot", fontsize=10)
    return figure
