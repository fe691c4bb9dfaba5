"""`syzygraph timelapse`: the frames as a film, steady on the Sun, the Moon, the stars or the horizon."""

from __future__ import annotations

from pathlib import Path

import click

from planner import errors


@click.command()
@click.argument("plan", type=click.Path(path_type=Path))
@click.argument("track", type=click.Path(path_type=Path))
@click.option("--frames", type=click.Path(path_type=Path), help="Where the frames are; default: near TRACK.")
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path),
    required=True,
    help="FILM.mp4, or .gif or .png (animated).",
)
@click.option(
    "--steady-on",
    type=click.Choice(("auto", "sun", "moon", "stars", "horizon")),
    default="auto",
    show_default=True,
)
@click.option(
    "--up", "orientation", type=click.Choice(("north", "zenith", "ecliptic", "track")), default="north",
    show_default=True,
)  # fmt: skip
@click.option("--pace", type=click.FloatRange(min=0, min_open=True), metavar="FACTOR",
              help="How many times faster than true; default: every exposure once.")  # fmt: skip
@click.option("--fps", type=click.IntRange(1, 120), default=25, show_default=True)
@click.option("--size", default="1920x1080", show_default=True, metavar="WxH", help="At most.")
@click.option("--filter", "through", metavar="NAME",
              help="Frames through this filter, or all; default: the filter of most frames.")  # fmt: skip
@click.option("--no-stamp", is_flag=True, help="No time in the picture.")
@click.option("--force", is_flag=True, help="Replace a film that exists.")
@click.option("--quiet", is_flag=True)
@click.option("--json", "as_json", is_flag=True)
def command(plan: Path, track: Path, frames: Path | None, output: Path, **chosen) -> int:  # type: ignore[no-untyped-def]
    """Make a time-lapse of the frames that TRACK has measured; gaps in the exposures are shown, not hidden.

    \b
    Example:
      syzygraph timelapse transit.plan.yaml checked/track.ecsv --frames frames -o transit.mp4 --pace 600
    """
    import json
    import re
    from dataclasses import asdict

    from imaging.compose.material import gather
    from imaging.compose.selection import through_filter
    from imaging.compose.timelapse import Film, make_film
    from planner.cli.progress import bar
    from planner.outputs import refuse_existing
    from planner.sequence.documents import load_plan

    size = re.fullmatch(r"(\d{2,5})x(\d{2,5})", chosen["size"])
    if size is None:
        raise errors.InputError(f"--size: found {chosen['size']!r}; allowed is WxH, such as 1920x1080")
    refuse_existing(output, chosen["force"])
    material = through_filter(gather(load_plan(plan), track, frames), chosen["through"])
    with bar("filming", chosen["quiet"] or chosen["as_json"]) as tick:
        film = Film(
            steady_on=chosen["steady_on"],
            orientation=chosen["orientation"],
            pace=chosen["pace"],
            fps=chosen["fps"],
            stamp=not chosen["no_stamp"],
            size_px=(int(size[1]), int(size[2])),
            tick=tick,
        )
        report = make_film(output, material, film, chosen["force"])
    aside = [(Path(item.path).name, item.reason) for item in material.set_aside] + list(report.left_out)
    if chosen["as_json"]:
        click.echo(json.dumps({**asdict(report), "set_aside": aside, "file": str(output)}, indent=1))
    elif not chosen["quiet"]:
        click.echo(
            f"{output}: {report.pictures} pictures, {report.seconds:.1f} s, {report.exposures} exposures, {report.pace}"
        )
        for start, end in report.gaps[:6]:
            click.echo(f"  no frame from {start} to {end}: shown in the film")
        if len(report.gaps) > 6:
            click.echo(f"  ... and {len(report.gaps) - 6} gaps more, shown in the film")
    for name, reason in aside[:10]:
        click.echo(f"set aside: {name} {reason}", err=True)
    return errors.EXIT_WITH_RESERVATIONS if aside else errors.EXIT_DONE
