"""`syzygraph predict`: when and how an event happens at a site."""

from __future__ import annotations

import click

from planner.cli.asked import Asked, event_options


@click.command()
@event_options
@click.option("--json", "as_json", is_flag=True, help="One JSON object instead of the table.")
def command(asked: Asked, as_json: bool) -> None:
    """When and how an event happens at a site: a table to shoot from.

    \b
    Examples:
      syzygraph predict configs/mercury_transit_2032.yaml
      syzygraph predict --event solar-transit:venus:2012-06-06 --geocentric --json
      syzygraph predict --event moon-occults-planet:mars:2022-12-08 --at 48.137,11.575,520
    """
    from planner.events import listing
    from planner.events.catalogue import family

    chosen = family(asked.spec.family)
    circumstances = chosen.predict(chosen.nearest(asked.spec), asked.observer)
    if as_json:
        import json

        click.echo(json.dumps(listing.as_object(circumstances), indent=2, ensure_ascii=False))
    else:
        click.echo(listing.as_table(circumstances))
