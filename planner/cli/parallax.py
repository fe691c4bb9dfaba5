"""`syzygraph parallax`: the distance of a body from the tracks of two sites, or how well two plans would tell it."""

from __future__ import annotations

import json
from dataclasses import asdict
from pathlib import Path

import click


@click.command(name="parallax")
@click.argument(
    "files", metavar="PLAN_A [TRACK_A] PLAN_B [TRACK_B] ...", nargs=-1, required=True,
    type=click.Path(dir_okay=False, path_type=Path),
)  # fmt: skip
@click.option("--json", "as_json", is_flag=True, help="Print the result for a machine.")
def command(files: tuple[Path, ...], as_json: bool) -> None:
    """Measure the distance of a planet or the Moon from tracks of one event at two sites or more.

    Each site is its plan, followed by the track.ecsv that `check` made with it. Plans alone give a forecast.
    Nothing but the difference of the sites' views decides: the path as such is left free.

    \b
    Example:
      syzygraph parallax north.plan.yaml south.plan.yaml
      syzygraph parallax north.plan.yaml north/track.ecsv south.plan.yaml south/track.ecsv
    """
    from imaging.track.parallax import fit_parallax, station_of_plan, station_of_track
    from imaging.track.result import with_sigma
    from imaging.track.table import read_track
    from planner.errors import InputError
    from planner.sequence.documents import load_plan

    tracks = [path for path in files if path.suffix == ".ecsv"]
    plans = [path for path in files if path.suffix != ".ecsv"]
    if tracks:
        if len(files) % 2 or list(files[1::2]) != tracks:
            raise InputError("give PLAN TRACK for every site, or plans alone for a forecast")
        stations = [
            station_of_track(plan.site.name, plan, read_track(track_path))
            for plan, track_path in (
                (load_plan(one), other) for one, other in zip(plans, tracks, strict=True)
            )
        ]
    else:
        stations = [station_of_plan(plan.site.name, plan) for plan in map(load_plan, plans)]
    found = fit_parallax(stations, forecast=not tracks)
    if as_json:
        shown = {name: None if value != value else value for name, value in asdict(found).items()}
        click.echo(json.dumps(shown, indent=2, default=float))
        return
    what = "Forecast" if found.forecast else "Measured"
    click.echo(
        f"{what} from {found.frames} frames at {', '.join(found.stations)} "
        f"({found.baseline_km:,.0f} km apart across the line of sight):"
    )
    name = found.body.capitalize()
    parallax = found.horizontal_parallax_arcsec, found.horizontal_parallax_sigma_arcsec
    unit = found.astronomical_unit_km / 1e6, found.astronomical_unit_sigma_km / 1e6
    lines = [
        (f"distance of {name}, million km", found.distance_km / 1e6, found.distance_sigma_km / 1e6),
        (f"horizontal parallax of {name}, arcsec", *parallax),
    ]
    if found.body != "moon":
        lines += [
            ("solar parallax, arcsec", found.solar_parallax_arcsec, found.solar_parallax_sigma_arcsec),
            ("astronomical unit, million km", *unit),
        ]
    for label, value, sigma in lines:
        click.echo(f"  {label:38} {with_sigma(float(value), float(sigma))}")
    if found.forecast:
        click.echo("  (the value is the ephemeris; what the plans forecast is its uncertainty)")
