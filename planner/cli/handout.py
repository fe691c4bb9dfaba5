"""`syzygraph handout`: what the person at the rig takes along."""

from __future__ import annotations

from pathlib import Path

import click

from planner import errors


@click.command("handout")
@click.argument("plan", type=click.Path(path_type=Path))
@click.option(
    "-o",
    "--output",
    type=click.Path(file_okay=False, path_type=Path),
    help="Folder; default: PLAN's name + .handout, here.",
)
@click.option(
    "--capture", metavar="TEMPLATE", help="Your camera's command; also writes a script of timed steps."
)
@click.option("--force", is_flag=True, help="Replace outputs that exist.")
def command(plan: Path, output: Path | None, capture: str | None, force: bool) -> int:
    """Make the run sheet, calendar, frame table, pictures and script of a plan.

    The capture command is run once a frame with its placeholders filled in: {exposure_s}, {exposure_ms}, {gain},
    {filter}, {tracking}, {passage}, {panel}, {ra_deg}, {dec_deg} (of fixed fields), {shot}, {start_utc}, {name}; or
    once a shot if it holds {count} (and {cadence_s}).

    \b
    Example:
      syzygraph handout transit.plan.yaml -o handout
      syzygraph handout transit.plan.yaml --capture 'mycamera --seconds {exposure_s} --file {name}'
    """
    from planner.cli.progress import bar
    from planner.outputs import refuse_existing, whole_file
    from planner.sequence.agenda import calendar_text
    from planner.sequence.documents import load_plan
    from planner.sequence.finder import finder_figure
    from planner.sequence.frametable import frames_csv
    from planner.sequence.outlook import Outlook
    from planner.sequence.script import script_text
    from planner.sequence.sheet_html import sheet_html
    from planner.sequence.sheet_pdf import write_sheet_pdf
    from planner.sequence.strip import strip_figure
    from planner.sequence.timeline import timeline_figure

    outlook = Outlook(load_plan(plan))
    if not outlook.plan.passages:
        raise errors.InputError(f"{plan}: passages: found none; a plan with passages is needed")
    folder = output or Path(plan.name.removesuffix(".yaml").removesuffix(".plan") + ".handout")

    def save(figure, part: Path) -> None:  # type: ignore[no-untyped-def]
        figure.savefig(part, dpi=150, bbox_inches="tight")

    def text(content: str | bytes, part: Path) -> None:
        part.write_bytes(content if isinstance(content, bytes) else content.encode("utf-8"))

    jobs = {
        "run_sheet.html": lambda part: text(sheet_html(outlook), part),
        "run_sheet.pdf": lambda part: write_sheet_pdf(outlook, part),
        "timeline.png": lambda part: save(timeline_figure(outlook), part),
        "finder.png": lambda part: save(finder_figure(outlook), part),
        "exposures.png": lambda part: save(strip_figure(outlook), part),
        "plan.ics": lambda part: text(calendar_text(outlook), part),
        "frames.csv": lambda part: text(frames_csv(outlook), part),
    }
    if capture is not None:
        script = script_text(outlook.plan, capture)
        jobs["plan.sh"] = lambda part: text(script, part)
    for name in jobs:
        refuse_existing(folder / name, force)
    with bar("handout") as tick:
        for done, (name, write) in enumerate(jobs.items(), 1):
            with whole_file(folder / name, force) as part:
                write(part)
            tick(done, len(jobs))
    for name in jobs:
        click.echo(folder / name)
    return errors.EXIT_DONE
