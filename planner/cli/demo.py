"""`syzygraph demo`: the example briefs from prediction to picture, through the same commands that a user types."""

from __future__ import annotations

from pathlib import Path

import click

# What is injected into the rehearsals, so that the check has something to find.
CLOCK_OFFSET_S = 7.3
# brief, frames drawn of the plan, binning: cut down so that the demo takes a minute and a half on two cores
JOURNEYS = (
    ("mercury_transit_2032", 40, 4),
    ("moon_occults_planet_2030", 32, 3),
    ("mars_retrograde_2027", 24, 4),
)


@click.command()
@click.option(
    "-o",
    "--output",
    type=click.Path(file_okay=False, path_type=Path),
    help="Folder; default: demo_output, here.",
)
@click.option(
    "--configs", type=click.Path(file_okay=False, path_type=Path), help="Folder of the example briefs."
)
@click.option("--only", type=click.Choice([name for name, *_ in JOURNEYS]), help="One brief of the three.")
def command(output: Path | None, configs: Path | None, only: str | None) -> int:
    """Predict, plan, rehearse, check and compose the three example briefs on cut-down frames.

    The rehearsed camera's clock is 7.3 s fast on purpose: see whether the check finds it. What exists is kept; a
    second demo goes into a new folder.

    \b
    Example:
      syzygraph demo
      syzygraph demo --only mercury_transit_2032 -o my_demo
    """
    import time

    from planner.errors import EXIT_DONE, EXIT_WITH_RESERVATIONS

    briefs = _briefs(configs)
    root = output or _free_folder(Path("demo_output"))
    journeys = [journey for journey in JOURNEYS if only in (None, journey[0])]
    begun = time.perf_counter()
    for count, (name, frames, binning) in enumerate(journeys, 1):
        click.secho(f"\n[{count} of {len(journeys)}] {name}", bold=True)
        code = _journey(briefs / f"{name}.yaml", root / name, frames, binning)
        if code not in (EXIT_DONE, EXIT_WITH_RESERVATIONS):
            click.echo(f"the demo stopped here: exit code {code}", err=True)
            return code
    click.secho(f"\nDone in {time.perf_counter() - begun:.0f} s. Look at:", bold=True)
    for name, *_ in journeys:
        for picture in sorted((root / name).rglob("*")):
            if picture.suffix in (".png", ".html") and "frames" not in picture.parts:
                click.echo(f"  {picture}")
    click.echo("The sites and rigs of these briefs are invented; the sky is not.")
    return EXIT_DONE


def _journey(brief: Path, folder: Path, frames: int, binning: int) -> int:
    plan, drawn, checked = folder / "plan.yaml", folder / "frames", folder / "checked"
    steps = (
        ["predict", brief],
        ["plan", brief, "-o", plan],
        [
            "rehearse",
            plan,
            "-o",
            drawn,
            "--frames",
            frames,
            "--binning",
            binning,
            "--clock-offset",
            CLOCK_OFFSET_S,
        ],
        ["check", plan, drawn, "-o", checked, "--jobs", 2],
        ["compose", plan, checked / "track.ecsv", "--frames", drawn, "-o", folder / "pictures"],
    )
    from planner.cli.main import run_with
    from planner.errors import EXIT_DONE, EXIT_WITH_RESERVATIONS

    for step in steps:
        words = [str(word) for word in step]
        click.secho(f"$ syzygraph {' '.join(words)}", fg="cyan")
        code = run_with(words)
        if code > EXIT_WITH_RESERVATIONS:
            return code
    return EXIT_DONE


def _briefs(configs: Path | None) -> Path:
    from planner.errors import InputError

    folder = configs or Path(__file__).resolve().parents[2] / "configs"
    if not (folder / f"{JOURNEYS[0][0]}.yaml").is_file():
        raise InputError(
            f"--configs: found no example briefs in {folder}; they come with the source tree, folder configs/"
        )
    return folder


def _free_folder(wanted: Path) -> Path:
    folder, count = wanted, 1
    while folder.exists():
        count += 1
        folder = wanted.with_name(f"{wanted.name}-{count}")
    return folder
