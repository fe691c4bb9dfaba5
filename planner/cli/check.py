"""`syzygraph check`: measure frames and compare them with the prediction."""

from __future__ import annotations

import json
from pathlib import Path

import click


@click.command(name="check")
@click.argument("plan_path", metavar="PLAN", type=click.Path(dir_okay=False, path_type=Path))
@click.argument("folder", metavar="FRAMES_FOLDER", type=click.Path(file_okay=False, path_type=Path))
@click.option("-o", "--output", metavar="FOLDER", type=click.Path(file_okay=False, path_type=Path),
              help="Where track.ecsv and report.html go [beside the frames].")  # fmt: skip
@click.option(
    "--zone", metavar="ZONE", help="Zone of stamps that name none: +02:00 or Europe/Madrid [the rig's clock]."
)
@click.option("--file-time", is_flag=True, help="Take a file's modification time where it tells no other.")
@click.option("--calibration", metavar="FOLDER", type=click.Path(file_okay=False, path_type=Path),
              help="Folder of bias, dark and flat folders, to calibrate the frames with.")  # fmt: skip
@click.option("--catalogue", metavar="FILE", type=click.Path(dir_okay=False, path_type=Path),
              help="A deeper star catalogue (FITS, VOTable, ECSV, CSV) besides the installed [the rig's].")  # fmt: skip
@click.option("--rig", metavar="RIG", type=click.Path(dir_okay=False, path_type=Path),
              help="The rig's file: its catalogue and learned lens, if younger than the plan.")  # fmt: skip
@click.option("--apply", "apply_what", type=click.Choice(["clock"]),
              help="Also write track_clock.ecsv, with the fitted clock offset taken off the times.")  # fmt: skip
@click.option("--follow", is_flag=True, help="Measure each new frame as it arrives, until Ctrl-C.")
@click.option("--idle", metavar="S", type=float, help="With --follow: stop after so long without a frame.")
@click.option("--jobs", type=click.IntRange(1), default=1, show_default=True, help="Worker processes.")
@click.option("--no-pictures", is_flag=True, help="Leave pieces of frames out of the report.")
@click.option("--json", "as_json", is_flag=True, help="Print the result for a machine.")
@click.option("--strict", is_flag=True, help="Exit code 1 when anything was found, too.")
@click.option("--force", is_flag=True, help="Replace outputs that exist.")
def command(  # type: ignore[no-untyped-def]
    plan_path,
    folder,
    output,
    zone,
    file_time,
    calibration,
    catalogue,
    rig,
    apply_what,
    follow,
    idle,
    jobs,
    no_pictures,
    as_json,
    strict,
    force,
) -> int:
    """Measure every frame of FRAMES_FOLDER and compare it with the prediction of PLAN.

    Writes track.ecsv, report.html and figures. Nothing that is found is applied to the frames or the plan.

    \b
    Example:
      syzygraph check transit.plan.yaml frames -o checked
      syzygraph check transit.plan.yaml incoming --follow
      syzygraph check mars.plan.yaml frames --calibration tonight --catalogue field.fits
    """
    from imaging.frames.calibrating import calibration_of
    from imaging.stars.lens import read_lens
    from imaging.track.checking import CheckOptions, check_frames, frame_files
    from imaging.track.output import json_of, refuse_outputs, write_outputs
    from planner import errors
    from planner.cli.progress import bar, bars
    from planner.sequence.documents import load_plan, load_rig
    from planner.sky.starlist import deeper_catalogue

    plan = load_plan(plan_path)
    output = output or folder.with_name(folder.name + "_checked")
    named = load_rig(rig) if rig is not None else plan.rig
    catalogue = catalogue or _named(plan_path, "catalogue", named.catalogue, "--catalogue")
    lens_path = _named(plan_path, "lens", named.lens, "--rig")
    lens = read_lens(lens_path) if lens_path is not None else None
    with deeper_catalogue(catalogue):  # a wrong file is said before any work
        pass
    night = None
    if calibration is not None:
        with bars("making calibration masters", quiet=as_json) as (tick,):
            night = calibration_of(calibration, tick=tick)
    options = CheckOptions(
        zone or plan.rig.clock.zone, not no_pictures, jobs, night, catalogue, file_time, lens
    )
    if follow:
        from imaging.track.follow import follow_folder

        with bar("measuring", quiet=as_json) as tick:
            result, measurements = follow_folder(
                plan,
                plan_path.name,
                folder,
                output,
                options,
                idle_s=idle,
                say=_say(as_json),
                force=force,
                tick=tick,
            )
        written = {}
    else:
        files = frame_files(folder)
        refuse_outputs(output, apply_what, force)
        with bar("measuring", quiet=as_json) as tick:
            result, measurements = check_frames(plan, plan_path.name, files, options, tick)
        written = write_outputs(result, measurements, output, apply_what, force)
    if as_json:
        click.echo(json.dumps(json_of(result), indent=2, allow_nan=False))
    else:
        _print(result, written)
    reserved = bool(result.set_aside) or result.failed > 0 or not (result.measured or result.contacts)
    if strict and result.findings:
        reserved = True
    return errors.EXIT_WITH_RESERVATIONS if reserved else errors.EXIT_DONE


def _named(plan_path: Path, key: str, path: str | None, option: str) -> Path | None:
    """Return the file that a rig names; one that is gone since the plan was made is an error with its cure."""
    from planner.errors import DocumentError
    from planner.sequence import strictyaml

    if path is not None and not Path(path).is_file():
        allowed = f"no such file; say where it is now with {option}, or take the key out"
        line = strictyaml.read(plan_path).line(("rig", key))
        raise DocumentError(plan_path, line, f"rig.{key}", repr(path), allowed)
    return Path(path) if path is not None else None


def _say(as_json: bool):  # type: ignore[no-untyped-def]
    return (lambda text: None) if as_json else click.echo


def _print(result, written) -> None:  # type: ignore[no-untyped-def]
    click.echo(result.verdict)
    for finding in result.findings:
        click.echo(f"  {finding.name}: {finding.sentence}")
    for aside in result.set_aside:
        click.echo(f"  set aside {aside.file}: {aside.reason}")
    unmeasured = [row for row in result.rows if row.verdict == "unmeasured"]
    for row in unmeasured[:8]:
        click.echo(f"  unmeasured {row.file}: {row.reason}")
    if len(unmeasured) > 8:
        click.echo(f"  ... and {len(unmeasured) - 8} more unmeasured, in the report")
    for path in written.values():
        click.echo(f"wrote {path}")
