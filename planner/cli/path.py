"""`syzygraph path`: where on Earth the shadow of a small body passes."""

from __future__ import annotations

import click

from planner.cli.asked import Asked, event_options
from planner.errors import InputError


@click.command()
@event_options
@click.option("-o", "--output", type=click.Path(dir_okay=False), help="GeoJSON file; default: print it.")
@click.option("--force", is_flag=True, help="Replace a file that exists.")
def command(asked: Asked, output: str | None, force: bool) -> None:
    """Path of the shadow over the Earth: centre line, the body's limits, 1-sigma limits (GeoJSON, RFC 7946).

    \b
    Examples:
      syzygraph path configs/asteroid_occults_star_2028.yaml -o halcyon.geojson
      syzygraph path --event asteroid-occults-star:asteroid:2028-10-14 --orbit configs/orbits/halcyon.yaml \\
        --star 'HIP 8588' --geocentric
    """
    import json

    from planner.events.asteroid import AsteroidOccultsStar
    from planner.outputs import refuse_existing, whole_file

    if asked.spec.family != AsteroidOccultsStar.name:
        raise InputError(
            f"event.family: found {asked.spec.family}; allowed is {AsteroidOccultsStar.name}, whose shadow has a path"
        )
    if output:
        refuse_existing(output, force)
    family = AsteroidOccultsStar()
    event = family.nearest(asked.spec)
    path = family.path(event)
    if path is None:
        raise InputError(
            f"event: found {event.title}, whose shadow passes the Earth by; allowed is one that meets it"
        )
    text = json.dumps(path.as_geojson(), indent=1, ensure_ascii=False, allow_nan=False)
    if not output:
        click.echo(text)
        return
    with whole_file(output, force) as part:
        part.write_text(text + "\n", encoding="utf-8")
    click.echo(
        f"{event.title}: path {path.width_km:.0f} km wide, 1 sigma {path.sigma_across_km:.0f} km across and "
        f"{path.sigma_along_s:.1f} s along; written to {output}"
    )
