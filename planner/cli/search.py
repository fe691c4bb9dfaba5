"""`syzygraph search`: what a site will see in a span of dates."""

from __future__ import annotations

import click

from planner.cli.asked import site_observer
from planner.errors import InputError


@click.command()
@click.option("--from", "start", required=True, metavar="DATE", help="First date, such as 2027-01-01.")
@click.option("--to", "end", required=True, metavar="DATE", help="Last date.")
@click.option("--at", "at_text", metavar="LAT,LON,HEIGHT", help="Site in degrees (east positive) and metres.")
@click.option("--site", "site_file", type=click.Path(exists=True, dir_okay=False), help="Site file.")
@click.option("--geocentric", is_flag=True, help="As seen from the Earth's centre.")
@click.option("--timezone", metavar="ZONE", help="IANA name for civil times, with --at.")
@click.option("--family", "families", multiple=True, metavar="NAME", help="Only this family (repeatable).")
@click.option("--body", "bodies", multiple=True, metavar="NAME", help="Only this body (repeatable).")
@click.option("--json", "as_json", is_flag=True, help="A JSON list instead of the table.")
def command(  # type: ignore[no-untyped-def]
    start, end, at_text, site_file, geocentric, timezone, families, bodies, as_json
) -> None:
    """Events that a site will see in a span of dates.

    \b
    Example:
      syzygraph search --from 2027-01-01 --to 2032-01-01 --at 48.137,11.575,520 --family moon-occults-planet
    """
    from planner.cli.progress import bar
    from planner.events import listing, search

    observer = site_observer(at_text, site_file, timezone)
    if (observer is not None) == geocentric:
        raise InputError("site: give one of --at LAT,LON,HEIGHT, --site FILE, --geocentric")
    span = search.span_of(start, end)
    with bar("searching", quiet=as_json) as tick:
        found = search.search(span, observer, families, bodies, tick)
    if as_json:
        import json

        objects = [listing.as_object(circumstances, brief=True) for circumstances in found]
        click.echo(json.dumps(objects, indent=2, ensure_ascii=False))
    else:
        click.echo(listing.as_list(found, observer))
