"""`syzygraph limb`: the Moon's limb where something passes behind it, as a picture."""

from __future__ import annotations

import click

from planner.cli.asked import Asked, event_options


@click.command()
@event_options
@click.option(
    "-o", "--output", type=click.Path(dir_okay=False), required=True, help="Picture: .png, .svg or .pdf."
)
@click.option("--force", is_flag=True, help="Replace a file that exists.")
def command(asked: Asked, output: str, force: bool) -> None:
    """Picture of the Moon's limb at each contact: mountains and valleys, the target's path, whole seconds.

    Without --limb (or `limb` in the brief) the limb is smooth, with the band of what that leaves unknown.

    \b
    Example:
      syzygraph limb --event moon-occults-star:Regulus:1999-05-22 --at 47.762,-122.067,0 \\
        --limb LDEM_4.LBL --limb-orientation moon_pa_de421_1900-2050.bpc -o regulus.png
    """
    from pathlib import Path

    from planner.errors import InputError
    from planner.events.limbchart import chart_of
    from planner.outputs import refuse_existing, whole_file

    if Path(output).suffix.lower() not in (".png", ".svg", ".pdf"):
        raise InputError(f"--output: found {output!r}; allowed is a name that ends in .png, .svg or .pdf")
    refuse_existing(output, force)
    figure = chart_of(asked.spec, asked.observer)
    with whole_file(output, force) as part:
        figure.savefig(part, dpi=150)
    click.echo(f"written to {output}")
