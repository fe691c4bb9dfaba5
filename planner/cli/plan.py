"""`syzygraph plan`: from a brief to a timed sequence."""

from __future__ import annotations

import json
from pathlib import Path

import click

from planner import errors


@click.command("plan")
@click.argument("brief", type=click.Path(path_type=Path))
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path),
    help="Plan to write; default: BRIEF's name.plan.yaml, here.",
)
@click.option(
    "--site", "site_path", type=click.Path(path_type=Path), help="Take this site instead of the brief's."
)
@click.option(
    "--rig", "rig_path", type=click.Path(path_type=Path), help="Take this rig instead of the brief's."
)
@click.option("--strict", is_flag=True, help="Exit with 1 when the plan carries cautions of its rules.")
@click.option("--force", is_flag=True, help="Replace an output that exists.")
@click.option("--json", "as_json", is_flag=True, help="Print a summary for machines.")
def command(
    brief: Path,
    output: Path | None,
    site_path: Path | None,
    rig_path: Path | None,
    strict: bool,
    force: bool,
    as_json: bool,
) -> int:
    """Turn a brief into a timed sequence.

    \b
    Example:
      syzygraph plan configs/mercury_transit_2032.yaml -o transit.plan.yaml
    """
    from planner.cli.progress import bar
    from planner.outputs import refuse_existing, whole_file
    from planner.sequence.builder import build_plan
    from planner.sequence.documents import dump_plan, load_brief, load_rig, load_site

    output = output or Path(f"{brief.stem}.plan.yaml")
    refuse_existing(output, force)
    site = load_site(site_path) if site_path else None
    rig = load_rig(rig_path) if rig_path else None
    wanted = load_brief(brief, site=site, rig=rig)
    with bar("planning", quiet=as_json) as tick:
        plan = build_plan(wanted, tick)
    with whole_file(output, force) as part:
        part.write_text(dump_plan(plan), encoding="utf-8")
    raised = [finding for finding in plan.findings if finding.level != "note"]
    if as_json:
        summary = {
            "plan": str(output),
            "title": plan.title,
            "frames": plan.frames_total,
            "storage_gb": plan.storage_gb,
            "passages": [
                {
                    "name": passage.name,
                    "start_utc": min(shot.start_utc for shot in passage.shots).isoformat(),
                    "frames": sum(shot.count for shot in passage.shots),
                }
                for passage in plan.passages
            ],
            "findings": [finding.model_dump() for finding in plan.findings],
            "cautions": plan.cautions,
        }
        click.echo(json.dumps(summary, indent=1))
    else:
        _print_plan(plan, output)
    return errors.EXIT_WITH_RESERVATIONS if strict and raised else errors.EXIT_DONE


def _print_plan(plan, output: Path) -> None:  # type: ignore[no-untyped-def]
    from zoneinfo import ZoneInfo

    from rich.console import Console
    from rich.table import Table

    console = Console(highlight=False, soft_wrap=True)
    zone = ZoneInfo(plan.site.timezone)
    table = Table(title=plan.title, title_justify="left", box=None, pad_edge=False)
    for name in ("passage", "from (UTC)", plan.site.timezone, "frames", "every", "exposure"):
        table.add_column(name, justify="left" if name == "passage" else "right")
    for passage in plan.passages:
        first = min(passage.shots, key=lambda shot: shot.start_utc)
        exposures = [shot.exposure_s for shot in passage.shots]
        spread = f"{exposure_text(min(exposures))}" + (
            f" to {exposure_text(max(exposures))}" if max(exposures) > min(exposures) else ""
        )
        table.add_row(
            passage.name,
            f"{first.start_utc:%Y-%m-%d %H:%M:%S}",
            f"{first.start_utc.astimezone(zone):%H:%M:%S}",
            str(sum(shot.count for shot in passage.shots)),
            f"{first.cadence_s:g} s",
            spread,
        )
    console.print(table)
    console.print(f"\n{plan.frames_total} frames, {plan.storage_gb:.1f} GB with {plan.rig.name}")
    for finding in plan.findings:
        console.print(f"{finding.level}: {finding.where}: {finding.sentence} {finding.cure}")
    for caution in plan.cautions:
        console.print(f"caution: {caution}")
    console.print(f"written to {output}")


def exposure_text(exposure_s: float) -> str:
    """Return an exposure as photographers write it: 1/160 s, 2.5 s."""
    return f"{exposure_s:g} s" if exposure_s >= 0.3 else f"1/{1 / exposure_s:.0f} s"
