"""`syzygraph schema`: JSON Schema of the documents, for editors."""

from __future__ import annotations

import json

import click


@click.command("schema")
@click.argument("document", type=click.Choice(["site", "rig", "brief", "plan", "orbit"]))
def command(document: str) -> None:
    """Print the JSON Schema of a site, a rig, a brief, a plan or an orbit.

    \b
    Example:
      syzygraph schema brief > brief.schema.json
    """
    from pydantic import BaseModel

    from planner.sequence import models

    known: dict[str, type[BaseModel]] = {
        "site": models.Site,
        "rig": models.Rig,
        "brief": models.Brief,
        "plan": models.Plan,
        "orbit": models.OrbitElements,
    }
    schema = {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        **known[document].model_json_schema(),
    }
    click.echo(json.dumps(schema, indent=2))
