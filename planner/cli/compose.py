"""`syzygraph compose`: the composite picture, the path plot, and the statement of how true they are."""

from __future__ import annotations

from pathlib import Path

import click

from planner import errors

PICTURE_FORMATS = ("fits", "tiff", "png", "jpg")
PLOT_FORMATS = ("png", "svg", "pdf")


class _Several(click.ParamType):
    """A comma-separated choice of names."""

    name = "names"

    def __init__(self, allowed: tuple[str, ...]):
        self.allowed = allowed

    def convert(self, value, param, ctx):  # type: ignore[no-untyped-def]
        if isinstance(value, tuple):
            return value
        names = tuple(name.strip() for name in value.split(",") if name.strip() and name.strip() != "none")
        for name in names:
            if name not in self.allowed:
                self.fail(f"found {name!r}; allowed are {', '.join(self.allowed)}, none", param, ctx)
        return names


@click.command()
@click.argument("plan", type=click.Path(path_type=Path))
@click.argument("track", type=click.Path(path_type=Path))
@click.option("--frames", type=click.Path(path_type=Path), help="Where the frames are; default: near TRACK.")
@click.option("-o", "--output", type=click.Path(path_type=Path), required=True, metavar="FOLDER")
@click.option(
    "--register",
    "registration",
    type=click.Choice(("auto", "sun", "moon", "stars", "target")),
    default="auto",
    help="What stays still; target: a sheet of the planet's own discs in date order.",
)
@click.option(
    "--up", "orientation", type=click.Choice(("north", "zenith", "ecliptic", "track")), default="north",
    show_default=True, help="What is up: celestial north, the zenith, the ecliptic's north, or the track level.",
)  # fmt: skip
@click.option(
    "--blend",
    type=click.Choice(("mean", "median", "clipped", "min", "max")),
    default="clipped",
    show_default=True,
    help="Of the ground: the clean disc, or the stars. The target is always laid in at its own place, from its own "
    "frames, with a soft edge.",
)
@click.option("--instants", type=click.IntRange(1, 500), default=9, show_default=True,
              help="How many times the target is drawn on a disc.")  # fmt: skip
@click.option(
    "--scale",
    type=click.FloatRange(min=0, min_open=True),
    metavar="ARCSEC_PX",
    help="Default: the finest of the frames.",
)
@click.option("--colour", is_flag=True, help="Keep the colours of a colour camera.")
@click.option("--enlarge", type=click.FloatRange(1, 50), default=1.0, show_default=True,
              help="Draw a sheet of discs, or the target over a landscape, larger than true; the caption "
              "says so.")  # fmt: skip
@click.option(
    "--keep-off-track", is_flag=True, help="Draw the target also where the check found it off its track."
)
@click.option("--filter", "through", metavar="NAME",
              help="Frames through this filter, or all; default: the filter of most frames.")  # fmt: skip
@click.option("--also", type=click.Path(path_type=Path), nargs=3, multiple=True, metavar="PLAN TRACK FRAMES",
              help="Frames of another rig on the same event, combined; may be repeated.")  # fmt: skip
@click.option("--second-site", type=click.Path(path_type=Path), nargs=3, metavar="PLAN TRACK FRAMES",
              help="The same transit from another place, drawn on the same disc.")  # fmt: skip
@click.option(
    "--landscape", type=click.Path(path_type=Path), help="A photograph to draw a campaign's target over."
)
@click.option("--view", metavar="AZ,WIDTH,ROW",
              help="The landscape's middle azimuth and width in degrees, and the row of the true horizon.")  # fmt: skip
@click.option("--calibration", metavar="FOLDER", type=click.Path(path_type=Path),
              help="Folder of bias, dark and flat folders, to calibrate the frames of PLAN with.")  # fmt: skip
@click.option("--linear", is_flag=True, help="No stretch: tones proportional to light.")
@click.option("--formats", type=_Several(PICTURE_FORMATS), default="fits,png", show_default=True)
@click.option("--plots", type=_Several(PLOT_FORMATS), default="png,svg", show_default=True)
@click.option("--grid", type=click.Choice(("auto", "radec", "altaz", "disc")), default="auto", show_default=True,
              help="Of the path plot: sky coordinates, the horizon's, or position angles about the disc.")  # fmt: skip
@click.option(
    "--star-limit", type=click.FloatRange(-2, 11), metavar="MAG", help="Faintest star of the path plot."
)
@click.option("--local-time", is_flag=True, help="Label plots in the site's time zone instead of UTC.")
@click.option("--no-caption", is_flag=True, help="No caption band below PNG and JPEG.")
@click.option("--no-page", is_flag=True, help="No interactive page.")
@click.option("--scratch", type=click.Path(path_type=Path), help="Folder for large temporary files.")
@click.option("--dpi", type=click.IntRange(50, 1200), default=300, show_default=True)
@click.option("--force", is_flag=True, help="Replace outputs that exist.")
@click.option("--quiet", is_flag=True)
@click.option("--json", "as_json", is_flag=True, help="Print the statement of truth.")
@click.pass_context
def command(ctx: click.Context, plan: Path, track: Path, frames: Path | None, output: Path, **chosen) -> int:  # type: ignore[no-untyped-def]
    """Make the composite picture and the path plot of PLAN from the frames that TRACK has measured.

    FOLDER receives composite.png, composite.fits (linear light), path_light and path_dark plots, composite.html
    (point at a place for its frame), and composite.truth.json: how far each element is from where the sky put it.

    \b
    Example:
      syzygraph compose transit.plan.yaml checked/track.ecsv --frames frames -o picture --up zenith
    """
    import json
    from datetime import UTC, tzinfo
    from zoneinfo import ZoneInfo

    from imaging.compose.bright import with_short_exposures
    from imaging.compose.choices import Choices
    from imaging.compose.composing import Outputs, compose_picture, write_picture, write_plots
    from imaging.compose.light import Light
    from imaging.compose.material import Material, gather
    from imaging.compose.pathdata import path_data
    from imaging.compose.selection import joined, through_filter
    from planner.cli.progress import bars
    from planner.sequence.documents import load_plan
    from planner.sequence.models import Plan

    quiet = chosen["quiet"] or chosen["as_json"]
    outputs = Outputs(
        folder=output,
        picture_formats=chosen["formats"],
        plot_formats=chosen["plots"],
        linear=chosen["linear"],
        caption=not chosen["no_caption"],
        page=not chosen["no_page"],
        dpi=chosen["dpi"],
        force=chosen["force"],
    )
    outputs.refuse_existing()
    document = load_plan(plan)
    landscape = _landscape(chosen["landscape"], chosen["view"])
    zone: tzinfo = UTC
    zone_label = "UTC"
    if chosen["local_time"]:
        zone, zone_label = ZoneInfo(document.site.timezone), document.site.timezone
    titles = "composing", "making calibration masters", "registering short exposures"
    with bars(*titles, quiet=quiet) as (tick, master_tick, short_tick):

        def gathered(plan: Plan, track: Path, frames: Path | None) -> Material:
            material = gather(plan, track, frames, keep_off_track=chosen["keep_off_track"])
            if landscape is None:
                material = with_short_exposures(material, Light(), short_tick)
            return through_filter(material, chosen["through"])

        material = joined(
            gathered(document, track, frames),
            [gathered(load_plan(a), Path(b), Path(c)) for a, b, c in chosen["also"]],
        )
        other = None
        if chosen["second_site"]:
            second_plan, second_track, second_frames = chosen["second_site"]
            other = gathered(load_plan(second_plan), second_track, second_frames)
        night = None
        if chosen["calibration"] is not None:
            from imaging.frames.calibrating import calibration_of

            night = calibration_of(chosen["calibration"], tick=master_tick)
        choices = Choices(
            registration=chosen["registration"],
            orientation=chosen["orientation"],
            blend=chosen["blend"],
            instants=chosen["instants"],
            scale_arcsec_px=chosen["scale"],
            colour=chosen["colour"],
            grid=chosen["grid"],
            star_limit=chosen["star_limit"],
            enlarge=chosen["enlarge"],
            scratch=chosen["scratch"],
            calibration=night,
            output=output,
            tick=tick,
        )
        picture = compose_picture(material, choices, other, landscape)
        data = path_data(material, choices, zone, zone_label, other)
    paths, statement = write_picture(material, picture, outputs, data)
    paths += write_plots(data, outputs)
    aside = statement["set_aside"]
    if chosen["as_json"]:
        click.echo(
            json.dumps({"files": [str(path) for path in paths], **statement}, indent=1, ensure_ascii=False)
        )
    elif not chosen["quiet"]:
        click.echo(statement["caption"])
        for path in paths:
            click.echo(f"  {path}")
    for item in aside[:10]:
        click.echo(f"set aside: {item['file']} {item['reason']}", err=True)
    if len(aside) > 10:
        click.echo(f"... and {len(aside) - 10} more, listed in {outputs.statement}", err=True)
    return errors.EXIT_WITH_RESERVATIONS if aside else errors.EXIT_DONE


def _landscape(path: Path | None, view: str | None):  # type: ignore[no-untyped-def]
    """Return the landscape asked for, or None."""
    if path is None and view is None:
        return None
    from imaging.compose.arc import Landscape

    try:
        azimuth, width, row = (float(part) for part in (view or "").split(","))
    except ValueError:
        raise errors.InputError(
            f"--view: found {view!r}; a landscape needs AZ,WIDTH,ROW, such as 265,40,1980"
        ) from None
    if path is None:
        raise errors.InputError("--view: belongs to --landscape, which is missing")
    return Landscape(path, azimuth, width, row)
