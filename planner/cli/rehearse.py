"""`syzygraph rehearse`: draw the frames of a plan as the rig would record them."""

from __future__ import annotations

import os
from pathlib import Path

import click


@click.command(name="rehearse")
@click.argument("plan_path", metavar="PLAN", type=click.Path(dir_okay=False, path_type=Path))
@click.option(
    "-o", "--output", metavar="FOLDER", type=click.Path(file_okay=False, path_type=Path), required=True
)
@click.option("--thin", type=click.IntRange(1), help="Draw every N-th frame.")
@click.option("--frames", "count", type=click.IntRange(1), help="Draw N frames spread over the plan.")
@click.option("--passage", help="Draw only this passage of the plan.")
@click.option("--binning", type=click.IntRange(1, 16), default=1, show_default=True, help="Sum N x N pixels.")
@click.option("--crop", metavar="WxH", help="Keep the middle, so many pixels (after binning).")
@click.option("--clock-offset", metavar="S", type=float, default=0.0, help="Stamps minus true UTC, seconds.")
@click.option(
    "--clock-drift", metavar="S_DAY", type=float, default=0.0, help="Seconds a day on top of the offset."
)
@click.option(
    "--middle-stamp",
    type=click.Choice(["middle", "start", "end"]),
    default="middle",
    show_default=True,
    help="Which instant of each exposure its stamps take for the middle.",
)
@click.option("--pointing-error", metavar="ARCSEC", type=float, help="Rms an axis, a passage [the mount's].")
@click.option(
    "--jitter", metavar="ARCSEC", type=float, help="Rms an axis, a frame [the mount's tracking error]."
)
@click.option("--rotation", metavar="DEG", type=float, default=0.0, help="Added to the camera's roll.")
@click.option(
    "--drift", metavar="ARCSEC_H", type=float, default=0.0, help="Drift of the mount, arcsec an hour."
)
@click.option(
    "--drift-pa", metavar="DEG", type=float, default=90.0, help="Toward this position angle [90, east]."
)
@click.option("--mirror", is_flag=True, help="Flip the frames left to right.")
@click.option("--from-site", metavar="LAT,LON,HEIGHT", help="Where the rig really stands (degrees, metres).")
@click.option("--header-site", is_flag=True, help="With --from-site: let the headers tell it.")
@click.option(
    "--scale-error",
    metavar="PERCENT",
    type=click.FloatRange(-50, 100),
    default=0.0,
    help="Real scale minus the rig's.",
)
@click.option(
    "--stand-in", is_flag=True, help="Draw a spot or a star that stands still in the planet's stead."
)
@click.option("--names-backwards", is_flag=True, help="Number the files from the last frame to the first.")
@click.option(
    "--limb-motion", metavar="ARCSEC", default="0", help="Rms by seeing, or 'auto' from site and aperture."
)
@click.option("--bleed", is_flag=True, help="Let saturated pixels bleed along their columns.")
@click.option("--seed", type=int, default=1, show_default=True)
@click.option("--wcs", "with_wcs", is_flag=True, help="Write the true WCS into the frames.")
@click.option("--jobs", type=click.IntRange(1), default=min(2, os.cpu_count() or 1), show_default=True)
@click.option("--force", is_flag=True, help="Replace frames that exist.")
@click.option("--quiet", is_flag=True)
def command(  # type: ignore[no-untyped-def]
    plan_path, output, thin, count, passage, binning, crop, clock_offset, clock_drift, middle_stamp,
    pointing_error, jitter, rotation, drift, drift_pa, mirror, from_site, header_site,
    scale_error, stand_in, names_backwards, limb_motion, bleed, seed, with_wcs, jobs, force, quiet,
) -> int:  # fmt: skip
    """Draw the frames of PLAN as the rig would record them, with faults on purpose if you like.

    The frames go to FOLDER as FITS; what was injected goes to FOLDER.truth.ecsv beside it, which `check` never reads.

    \b
    Example:
      syzygraph rehearse transit.plan.yaml -o frames --frames 30 --binning 4 --clock-offset 7.3
    """
    import numpy as np

    from imaging.frames.render import Cut, Faults, choose
    from imaging.frames.render_files import rehearse, truth_path
    from planner.cli.progress import bar
    from planner.errors import InputError
    from planner.sequence.documents import load_plan
    from planner.sequence.frametimes import frame_starts

    plan = load_plan(plan_path)
    passages, *_ = frame_starts(plan)
    wanted = np.arange(len(passages))
    if passage is not None:
        names = [each.name for each in plan.passages]
        if passage not in names:
            raise InputError(f"--passage: found {passage!r}; the plan has {', '.join(dict.fromkeys(names))}")
        wanted = wanted[[names[one] == passage for one in passages]]
    if wanted.size == 0:
        raise InputError(f"{plan_path}: the plan has no frames to draw")
    chosen = wanted[choose(wanted.size, thin, count)]
    faults = Faults(
        clock_offset_s=clock_offset,
        clock_drift_s_day=clock_drift,
        pointing_error_arcsec=pointing_error,
        jitter_arcsec=jitter,
        drift_arcsec_h=drift,
        drift_pa_deg=drift_pa,
        rotation_deg=rotation,
        mirrored=mirror,
        site=_site(from_site, plan.site),
        limb_motion_arcsec=None if limb_motion == "auto" else _number("--limb-motion", limb_motion),
        bleed=bleed,
        middle_stamp=middle_stamp,
        scale_error=scale_error / 100,
        stand_in=stand_in,
        headers_tell_site=header_site,
        names_backwards=names_backwards,
    )
    with bar("rehearsing", quiet) as tick:
        paths = rehearse(
            plan, output, chosen, faults, Cut(binning, _size(crop)), seed, with_wcs, force,
            min(jobs, len(chosen)), tick,
        )  # fmt: skip
    if not quiet:
        click.echo(f"{len(paths)} of {len(passages)} frames in {output}")
        click.echo(f"what was injected: {truth_path(output)}")
    return 0


def _number(option: str, text: str) -> float:
    from planner.errors import InputError

    try:
        return float(text)
    except ValueError:
        raise InputError(f"{option}: found {text!r}; a number is needed, or 'auto'") from None


def _size(text: str | None) -> tuple[int, int] | None:
    from planner.errors import InputError

    if text is None:
        return None
    try:
        width, height = (int(part) for part in text.lower().split("x"))
    except ValueError:
        raise InputError(
            f"--crop: found {text!r}; WIDTHxHEIGHT in pixels is needed, such as 800x600"
        ) from None
    if min(width, height) < 16:
        raise InputError(f"--crop: found {text!r}; 16 pixels at least each way")
    return width, height


def _site(text, site):  # type: ignore[no-untyped-def]
    from planner.errors import InputError

    if text is None:
        return None
    try:
        latitude, longitude, height = (float(part) for part in text.split(","))
    except ValueError:
        raise InputError(
            f"--from-site: found {text!r}; LAT,LON,HEIGHT is needed, such as 48.1,11.6,520"
        ) from None
    return site.model_copy(update={"latitude_deg": latitude, "longitude_deg": longitude, "height_m": height})
