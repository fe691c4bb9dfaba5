"""`syzygraph predict`: when and how an event happens at a site."""

from __future__ import annotations

import click

from planner.cli.asked import Asked, event_options, other_site


@click.command()
@event_options
@click.option("--against", metavar="SITE", help="Compare with another site: a site file or LAT,LON,HEIGHT.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object instead of the table.")
def command(asked: Asked, against: str | None, as_json: bool) -> None:
    """When and how an event happens at a site: a table to shoot from.

    \b
    Examples:
      syzygraph predict configs/mercury_transit_2032.yaml
      syzygraph predict --event solar-transit:venus:2012-06-06 --geocentric --json
      syzygraph predict --event moon-occults-planet:mars:2022-12-08 --at 48.137,11.575,520
      syzygraph predict configs/mercury_transit_2032.yaml --against 48.137,11.575,520
    """
    from planner.events import listing
    from planner.events.catalogue import family

    chosen = family(asked.spec.family)
    other = other_site(against) if against is not None else None
    event = chosen.nearest(asked.spec)
    comparison = None
    if against is not None:
        from planner.events.against import compare

        comparison = compare(event, asked.observer, other)
    circumstances = comparison.one if comparison else chosen.predict(event, asked.observer)
    if as_json:
        import json

        found = listing.as_object(circumstances)
        if comparison:
            found["against"] = listing.comparison_object(comparison)
        click.echo(json.dumps(found, indent=2, ensure_ascii=False))
        return
    click.echo(listing.as_table(circumstances))
    if comparison:
        click.echo(listing.comparison_table(comparison))
