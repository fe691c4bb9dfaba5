"""`syzygraph search`: what a site will see in a span of dates."""

from __future__ import annotations

import click

from planner.cli.asked import site_observer
from planner.errors import InputError
from planner.outputs import refuse_existing


@click.command()
@click.option("--from", "start", required=True, metavar="DATE", help="First date, such as 2027-01-01.")
@click.option("--to", "end", required=True, metavar="DATE", help="Last date.")
@click.option("--at", "at_text", metavar="LAT,LON,HEIGHT", help="Site in degrees (east positive) and metres.")
@click.option("--site", "site_file", type=click.Path(exists=True, dir_okay=False), help="Site file.")
@click.option("--geocentric", is_flag=True, help="As seen from the Earth's centre.")
@click.option("--timezone", metavar="ZONE", help="IANA name for civil times, with --at.")
@click.option("--family", "families", multiple=True, metavar="NAME", help="Only this family (repeatable).")
@click.option("--body", "bodies", multiple=True, metavar="NAME", help="Only this body (repeatable).")
@click.option(
    "--magnitude", type=float, metavar="V", help="Faintest target; for stars to cover the default is 3.5."
)
@click.option("--altitude", type=float, default=5.0, show_default=True, metavar="DEG", help="Least altitude.")
@click.option("--night", is_flag=True, help="Leave out what happens by day.")
@click.option(
    "--within", type=float, default=1.0, show_default=True, metavar="DEG", help="Of planets that meet."
)
@click.option(
    "--orbit",
    "orbit_files",
    multiple=True,
    metavar="FILE",
    help="Also stars covered by this body (repeatable).",
)
@click.option("--json", "as_json", is_flag=True, help="A JSON list instead of the table.")
@click.option(
    "--ecsv", type=click.Path(dir_okay=False), metavar="FILE", help="Write a table of all instants."
)
@click.option("--ical", type=click.Path(dir_okay=False), metavar="FILE", help="Write a calendar (RFC 5545).")
@click.option("--force", is_flag=True, help="Replace an output that exists.")
def command(  # type: ignore[no-untyped-def]
    start, end, at_text, site_file, geocentric, timezone, families, bodies, magnitude, altitude, night, within,
    orbit_files, as_json, ecsv, ical, force,
) -> None:  # fmt: skip
    """Events that a site will see in a span of dates.

    \b
    Example:
      syzygraph search --from 2027-01-01 --to 2032-01-01 --at 48.137,11.575,520 --family moon-occults-planet
      syzygraph search --from 2027-11-14T16:00Z --to 2027-11-15T05:00Z --site configs/sites/kestrel_ridge.yaml \\
        --family moon-occults-star --magnitude 7 --ical tonight.ics
    """
    from planner.cli.progress import bar
    from planner.events import listing, search

    observer = site_observer(at_text, site_file, timezone)
    if (observer is not None) == geocentric:
        raise InputError("site: give one of --at LAT,LON,HEIGHT, --site FILE, --geocentric")
    span = search.span_of(start, end)
    limits = search.Limits(altitude, night, magnitude, within)
    for path in (ecsv, ical):
        if path is not None:
            refuse_existing(path, force)
    orbits: tuple = ()
    if orbit_files:
        from planner.sequence.documents import load_orbit, orbit_of

        orbits = tuple(orbit_of(load_orbit(path)) for path in orbit_files)
    with bar("searching", quiet=as_json) as tick:
        found = search.search(span, observer, families, bodies, tick, limits, orbits)
    if ecsv is not None or ical is not None:
        from planner.events import exports

        if ecsv is not None:
            exports.write_ecsv(found, observer, ecsv, force)
        if ical is not None:
            exports.write_calendar(found, observer, ical, force)
    if as_json:
        import json

        objects = [listing.as_object(circumstances, brief=True) for circumstances in found]
        click.echo(json.dumps(objects, indent=2, ensure_ascii=False))
    else:
        click.echo(listing.as_list(found, observer))
