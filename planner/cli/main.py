"""The command `syzygraph`: imports a command's file only when it is called, and turns errors into exit codes."""

from __future__ import annotations

import os
import sys
from importlib import import_module
from pathlib import Path

import click

from planner import errors

COMMANDS = {
    "predict": ("planner.cli.predict", "When and how an event happens at a site."),
    "search": ("planner.cli.search", "Events that a site will see in a span of dates."),
    "path": ("planner.cli.path", "Path of an asteroid's shadow over the Earth, as GeoJSON."),
    "limb": ("planner.cli.limb", "Picture of the Moon's limb where something passes behind it."),
    "plan": ("planner.cli.plan", "Turn a brief into a timed sequence."),
    "handout": ("planner.cli.handout", "Run sheet, calendar, frame table, pictures and script of a plan."),
    "rehearse": ("planner.cli.rehearse", "Render the frames of a plan as the rig would record them."),
    "solve": ("planner.cli.solve", "Where frames point, from their stars."),
    "check": ("planner.cli.check", "Measure frames and compare them with the prediction."),
    "lightcurve": ("planner.cli.lightcurve", "When a star went out and came back, in frames or a video."),
    "compose": ("planner.cli.compose", "Make the composite picture and the path plot."),
    "timelapse": ("planner.cli.timelapse", "Make a film of the frames, registered and at a stated pace."),
    "parallax": ("planner.cli.parallax", "The distance of a body from the tracks of two sites."),
    "orbit": ("planner.cli.orbit", "The orbit of a planet from its track among the stars."),
    "schema": ("planner.cli.schema", "JSON Schema of site, rig, brief or plan."),
    "demo": ("planner.cli.demo", "Run the example briefs from prediction to picture."),
}


class _Commands(click.Group):
    """Commands that are imported when they are called, so that `--help` answers at once."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        return import_module(COMMANDS[cmd_name][0]).command

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands, in the order of the work"):
            formatter.write_dl([(name, text) for name, (_, text) in COMMANDS.items()])

    def resolve_command(self, ctx, args):  # type: ignore[no-untyped-def]
        try:
            return super().resolve_command(ctx, args)
        except click.UsageError as error:
            from difflib import get_close_matches

            close = get_close_matches(args[0], COMMANDS, n=1)
            raise click.UsageError(
                error.message + (f" Did you mean {close[0]!r}?" if close else ""), ctx=ctx
            ) from None


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="syzygraph")
def syzygraph() -> None:
    """Predict, plan, rehearse, check and compose photographs of the moving sky.

    \b
    Example:
      syzygraph predict configs/mercury_transit_2032.yaml
      syzygraph plan configs/mercury_transit_2032.yaml -o transit.plan.yaml

    Exit codes: 0 done; 1 done, with frames set aside or cautions raised by --strict;
    2 the input is wrong; 3 a defect of ours (a log is written and named); 130 interrupted.
    """


def run() -> None:
    """Run the command line and leave with a documented exit code; never a traceback for a user's mistake."""
    sys.exit(run_with(sys.argv[1:]))


def run_with(arguments: list[str]) -> int:
    """Run the command line on these arguments and return its exit code."""
    try:
        result = syzygraph.main(arguments, prog_name="syzygraph", standalone_mode=False)
        return result if isinstance(result, int) else errors.EXIT_DONE
    except click.exceptions.Exit as leave:
        return leave.exit_code
    except click.ClickException as wrong:
        wrong.show()
        return errors.EXIT_INPUT_WRONG
    except (KeyboardInterrupt, click.Abort):
        click.echo("interrupted", err=True)
        return errors.EXIT_INTERRUPTED
    except BrokenPipeError:
        sys.stdout = open(os.devnull, "w")
        return errors.EXIT_DONE
    except errors.SyzygraphError as wrong:
        click.echo(f"syzygraph: {wrong}", err=True)
        return errors.EXIT_INPUT_WRONG
    except Exception as defect:
        log = _write_defect_log(arguments)
        click.echo(
            f"syzygraph: a defect of ours ({type(defect).__name__}: {' '.join(str(defect).split())[:200]}); "
            f"details in {log}",
            err=True,
        )
        return errors.EXIT_DEFECT


def _write_defect_log(arguments: list[str]) -> Path:
    import tempfile
    import traceback
    from datetime import UTC, datetime

    from planner.provenance import versions

    stamp = datetime.now(UTC).strftime("%Y%m%dT%H%M%S")
    text = f"arguments: {arguments}\nversions: {versions()}\n\n{traceback.format_exc()}"
    for folder in (Path.cwd(), Path(tempfile.gettempdir())):
        log = folder / f"syzygraph-defect-{stamp}-{os.getpid()}.log"
        try:
            log.write_text(text, encoding="utf-8")
        except OSError:
            continue
        return log
    return Path("(no log could be written)")
