"""`syzygraph plan`: from a brief to a timed sequence; or a comparison; or the rest of one partly taken."""

from __future__ import annotations

import json
from pathlib import Path

import click

from planner import errors


@click.command("plan")
@click.argument("brief", type=click.Path(path_type=Path))
@click.option(
    "-o", "--output", type=click.Path(path_type=Path), help="Default: BRIEF's name.plan.yaml, here."
)
@click.option("--site", "site_path", type=click.Path(path_type=Path), help="This site, not the brief's.")
@click.option("--rig", "rig_path", type=click.Path(path_type=Path), help="This rig, not the brief's.")
@click.option(
    "--compare",
    type=click.Path(path_type=Path),
    multiple=True,
    metavar="RIG_OR_SITE",
    help="Show the plan beside that of another rig or site, and write nothing. May be repeated.",
)
@click.option(
    "--exposure", "exposures_s", type=float, multiple=True, help="With --compare: seconds. Repeatable."
)
@click.option(
    "--after",
    type=click.Path(path_type=Path),
    metavar="TRACK_OR_LOGBOOK",
    help="Keep what a track or a logbook shows as taken, plan the rest.",
)
@click.option(
    "--of",
    "old_plan",
    type=click.Path(path_type=Path),
    metavar="PLAN",
    help="With --after: the plan it was taken with.",
)
@click.option(
    "--catalogue",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="A deeper star catalogue, for what will be there to solve with [the rig's].",
)
@click.option("--from", "from_date", metavar="DATE", help="With --after: plan the rest from this date on.")
@click.option("--strict", is_flag=True, help="Exit with 1 when the plan carries cautions of its rules.")
@click.option("--force", is_flag=True, help="Replace an output that exists.")
@click.option("--json", "as_json", is_flag=True, help="Print a summary for machines.")
def command(
    brief: Path,
    output: Path | None,
    site_path: Path | None,
    rig_path: Path | None,
    compare: tuple[Path, ...],
    exposures_s: tuple[float, ...],
    after: Path | None,
    old_plan: Path | None,
    catalogue: Path | None,
    from_date: str | None,
    strict: bool,
    force: bool,
    as_json: bool,
) -> int:
    """Turn a brief into a timed sequence.

    A brief with several rigs gives a plan for each. What would make a plan useless stops it; the rest is said in it.

    \b
    Example:
      syzygraph plan configs/mercury_transit_2032.yaml -o transit.plan.yaml
      syzygraph plan configs/mercury_transit_2032.yaml --compare configs/rigs/lens_135mm.yaml
      syzygraph plan mars.yaml --after track.ecsv --of mars.plan.yaml -o mars2.plan.yaml
    """
    from planner.cli.progress import bar
    from planner.outputs import refuse_existing, whole_file
    from planner.sequence.builder import build_plans
    from planner.sequence.documents import dump_plan, load_brief, load_plan, load_rig, load_site
    from planner.sequence.feasibility import stop_at_errors
    from planner.sky.starlist import deeper_catalogue

    site = load_site(site_path) if site_path else None
    rig = load_rig(rig_path) if rig_path else None
    wanted = load_brief(brief, site=site, rig=rig)
    if compare or exposures_s:
        return _compare(wanted, compare, exposures_s, as_json)
    output = output or Path(f"{brief.stem}.plan.yaml")
    outputs = [output, *(_beside(output, other.name) for other in wanted.other_rigs)]  # type: ignore[union-attr]
    for path in outputs:
        refuse_existing(path, force)
    taken = None
    if after is not None or from_date is not None:
        from planner.sequence.replan import taken_from

        if old_plan is None:
            raise errors.InputError("--after and --from need --of PLAN: the plan that was being followed")
        taken = taken_from(load_plan(old_plan), after, from_date)
    named = wanted.rig.catalogue  # type: ignore[union-attr]
    with (
        deeper_catalogue(catalogue or (Path(named) if named else None)),
        bar("planning", quiet=as_json) as tick,
    ):
        plans = build_plans(wanted, tick, taken)
    for plan in plans:
        stop_at_errors(plan)
    for plan, path in zip(plans, outputs, strict=True):
        with whole_file(path, force) as part:
            part.write_text(dump_plan(plan), encoding="utf-8")
    if as_json:
        summaries = [_summary(plan, path) for plan, path in zip(plans, outputs, strict=True)]
        click.echo(json.dumps(summaries[0] if len(summaries) == 1 else summaries, indent=1))
    else:
        for plan, path in zip(plans, outputs, strict=True):
            _print_plan(plan, path)
    raised = [finding for plan in plans for finding in plan.findings if finding.level == "caution"]
    return errors.EXIT_WITH_RESERVATIONS if strict and raised else errors.EXIT_DONE


def _beside(output: Path, rig_name: str) -> Path:
    """Return the name of another rig's plan: `x.plan.yaml` becomes `x.lens-135-mm.plan.yaml`."""
    slug = "-".join("".join(c if c.isalnum() else " " for c in rig_name.lower()).split())
    suffixes = ".plan.yaml" if output.name.endswith(".plan.yaml") else output.suffix
    return output.with_name(f"{output.name.removesuffix(suffixes)}.{slug}{suffixes}")


def _compare(wanted, paths: tuple[Path, ...], exposures_s: tuple[float, ...], as_json: bool) -> int:  # type: ignore[no-untyped-def]
    from planner.sequence.comparison import compare, variants

    table = compare(variants(wanted, paths, exposures_s))
    if as_json:
        click.echo(json.dumps(table.as_dict(), indent=1))
        return errors.EXIT_DONE
    from rich.console import Console
    from rich.table import Table

    shown = Table(title=wanted.title, title_justify="left", box=None, pad_edge=False)
    shown.add_column("")
    for name in table.names:
        shown.add_column(name, justify="right", overflow="fold")
    for row in table.rows:
        shown.add_row(row.label, *row.values)
    console = Console(highlight=False)
    console.print(shown)
    for reason in table.reasons:
        console.print(f"cannot be planned: {reason}", soft_wrap=True)
    return errors.EXIT_DONE


def _summary(plan, path: Path) -> dict:  # type: ignore[no-untyped-def, type-arg]
    return {
        "plan": str(path),
        "title": plan.title,
        "rig": plan.rig.name,
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


def _print_plan(plan, output: Path) -> None:  # type: ignore[no-untyped-def]
    from zoneinfo import ZoneInfo

    from rich.console import Console
    from rich.table import Table

    from planner.sequence.wording import exposure_range_text

    console = Console(highlight=False, soft_wrap=True)
    zone = ZoneInfo(plan.site.timezone)
    table = Table(title=plan.title, title_justify="left", box=None, pad_edge=False)
    for name in ("passage", "from (UTC)", plan.site.timezone, "frames", "every", "exposure"):
        table.add_column(name, justify="left" if name == "passage" else "right", no_wrap=True)
    for passage in plan.passages:
        first = min(passage.shots, key=lambda shot: shot.start_utc)
        local = first.start_utc.astimezone(zone)
        table.add_row(
            passage.name + (" (taken)" if passage.done else ""),
            f"{first.start_utc:%Y-%m-%d %H:%M:%S}",
            f"{local:%H:%M:%S}" if local.date() == first.start_utc.date() else f"{local:%d %b %H:%M:%S}",
            str(sum(shot.count for shot in passage.shots)),
            f"{first.cadence_s:g} s",
            exposure_range_text([shot.exposure_s for shot in passage.shots]),
        )
    # a table wider than the terminal is better broken by the terminal than cut
    Console(highlight=False, width=max(console.width, 110)).print(table)
    console.print(f"\n{plan.frames_total} frames, {plan.storage_gb:.1f} GB with {plan.rig.name}")
    for finding in plan.findings:
        console.print(f"{finding.level} ({finding.rule}): {finding.where}: {finding.sentence} {finding.cure}")
    for caution in plan.cautions:
        console.print(f"caution: {caution}")
    console.print(f"written to {output}\n")
