"""`syzygraph lightcurve`: when a star went out and came back, in frames, a cube or a video, with or without a plan."""

from __future__ import annotations

import json
from pathlib import Path

import click

from planner import errors


@click.command(name="lightcurve")
@click.argument("frames", metavar="FRAMES...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option(
    "--star", metavar="X,Y", required=True, help="Its place in the first frame, 0-based pixels of the array."
)
@click.option(
    "--comparison",
    metavar="X,Y",
    multiple=True,
    help="A star that stays, to follow and to divide by; more than once.",
)
@click.option(
    "--radius", metavar="PX", type=click.FloatRange(1.0), help="Of the aperture [1.2 widths of a star]."
)
@click.option(
    "--rolling-readout",
    metavar="S",
    type=click.FloatRange(0.0),
    default=0.0,
    help="From the first row's start to the last row's.",
)
@click.option("--zone", metavar="ZONE", help="Zone of stamps that name none: +02:00 or Europe/Madrid.")
@click.option(
    "--start",
    metavar="UTC",
    help="When the first frame began, with Z or an offset, in place of the files' own times.",
)
@click.option(
    "--cadence",
    metavar="S",
    type=click.FloatRange(0.0, min_open=True),
    help="With --start: from one frame's start to the next.",
)
@click.option("--diffraction", metavar="M_S,KM[,NM,NM,MAS]",
              help="Fit an edge's fringes: speed across it, its distance [, wavelength, bandwidth, star].")  # fmt: skip
@click.option("-o", "--output", metavar="FOLDER", type=click.Path(file_okay=False, path_type=Path),
              help="Write light_curve.ecsv and light_curve.png there.")  # fmt: skip
@click.option("--json", "as_json", is_flag=True, help="Print the result for a machine.")
@click.option("--force", is_flag=True, help="Replace outputs that exist.")
def command(  # type: ignore[no-untyped-def]
    frames,
    star,
    comparison,
    radius,
    rolling_readout,
    zone,
    start,
    cadence,
    diffraction,
    output,
    as_json,
    force,
) -> int:
    """Time a star that goes out or comes back in FRAMES: files of one frame each, cubes, SER or video.

    Instants come with 1-sigma and with the chance that noise alone shows as much; without an event that says so.
    `check` does the same for a plan's star, and compares with the prediction.

    \b
    Example:
      syzygraph lightcurve night.ser --star 212,148 --comparison 80,95 -o timed
      syzygraph lightcurve cube.fits --star 31,28 --start 2027-08-13T18:52:00Z --cadence 0.04
    """
    from imaging.discs.lightcurve import find_events
    from imaging.track.followed import follow_star
    from imaging.track.followed_report import as_object, sentence, write_curve
    from planner.cli.progress import bar
    from planner.outputs import refuse_existing

    files = [path for path in frames if _is_file(path)]
    if output is not None:
        for name in ("light_curve.ecsv", "light_curve.png"):
            refuse_existing(output / name, force)
    if diffraction is not None:
        _numbers(diffraction)
    place = _pair("--star", star)
    others = [_pair("--comparison", each) for each in comparison]
    with bar("following the star", quiet=as_json) as tick:
        followed = follow_star(
            files, place, others, radius, rolling_readout, zone, _stamps(start, cadence), tick
        )
    events, reason, fringes = [], None, []
    try:
        events = list(find_events(followed.curve))
        if diffraction is not None:
            fringes = [_fringes(followed.curve, event, _numbers(diffraction)) for event in events]
            events = [one.event for one in fringes]
    except errors.NoSolutionError as none:
        reason = str(none)
    if output is not None:
        write_curve(followed, events, reason, output, force, fringes)
    if as_json:
        click.echo(json.dumps(as_object(followed, events, reason, fringes), indent=2, allow_nan=False))
    else:
        click.echo(sentence(followed, events, reason, fringes))
        for aside in followed.set_aside:
            click.echo(f"  set aside {aside.file}: {aside.reason}")
        if output is not None:
            click.echo(f"wrote {output / 'light_curve.ecsv'}\nwrote {output / 'light_curve.png'}")
    return errors.EXIT_WITH_RESERVATIONS if followed.set_aside else errors.EXIT_DONE


def _is_file(path: Path) -> bool:
    if not path.is_file():
        raise errors.InputError(f"{path}: no such file of frames")
    return True


def _stamps(start, cadence):  # type: ignore[no-untyped-def]
    from imaging.track.followed import Stamps
    from planner.sky.timescale import tt_s_from_datetime

    if start is None and cadence is None:
        return None
    if start is None or cadence is None:
        raise errors.InputError(
            "--start, --cadence: found one of them; allowed are both together, or neither"
        )
    from datetime import datetime

    try:
        moment = datetime.fromisoformat(start)
    except ValueError:
        moment = None
    if moment is None or moment.tzinfo is None:
        raise errors.InputError(
            f"--start: found {start!r}; allowed is a time with Z or an offset: 2027-08-13T18:52:00Z"
        )
    return Stamps(float(tt_s_from_datetime([moment])[0]), cadence)


def _numbers(text: str) -> list[float]:
    try:
        numbers = [float(part) for part in text.split(",")]
    except ValueError:
        numbers = []
    if not 2 <= len(numbers) <= 5 or min(numbers) < 0 or min(numbers[:2]) <= 0:
        raise errors.InputError(
            f"--diffraction: found {text!r}; allowed is speed in m/s, distance in km [, wavelength, bandwidth in nm, "
            "diameter of the star in mas, fitted when not given]: 620,378000,550,90"
        )
    return numbers + [550.0, 100.0][len(numbers) - 2 :]


def _fringes(curve, event, numbers):  # type: ignore[no-untyped-def]
    """Return an event timed by the fringes about where the step was found."""
    from imaging.track.fringes import Edge, fit_fringes

    return fit_fringes(curve, event, Edge(*numbers[:4]), numbers[4] if len(numbers) > 4 else None)


def _pair(option: str, text: str) -> tuple[float, float]:
    try:
        x, y = (float(part) for part in text.split(","))
    except ValueError:
        raise errors.InputError(
            f"{option}: found {text!r}; allowed is X,Y in pixels, such as 212.5,148"
        ) from None
    return x, y
