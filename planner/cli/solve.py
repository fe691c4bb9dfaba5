"""`syzygraph solve`: where frames point, from their stars."""

from __future__ import annotations

import json
from pathlib import Path

import click

from planner import errors


@click.command(name="solve")
@click.argument("frames", metavar="FRAMES...", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option("--near", metavar="RA,DEC", help="Rough centre in degrees (ICRS).")
@click.option(
    "--scale", metavar="ARCSEC_PX", type=click.FloatRange(0, min_open=True), help="Scale, within 12 %."
)
@click.option("--focal-mm", metavar="MM", type=click.FloatRange(0, min_open=True), help="Focal length.")
@click.option("--pixel-um", metavar="UM", type=click.FloatRange(0, min_open=True), help="Pixel pitch.")
@click.option("--rig", metavar="RIG", type=click.Path(dir_okay=False, path_type=Path),
              help="A rig file: its scale, its catalogue, and the lens learned beside it.")  # fmt: skip
@click.option(
    "--learn", is_flag=True, help="Learn the rig's lens from these frames, into a file beside the rig."
)
@click.option(
    "--zone", metavar="ZONE", help="Zone of stamps that name none: +02:00 or Europe/Madrid [the rig's clock]."
)
@click.option("--file-time", is_flag=True, help="Take a file's modification time where it tells no other.")
@click.option("--catalogue", metavar="FILE", type=click.Path(dir_okay=False, path_type=Path),
              help="A deeper star catalogue (FITS, VOTable, ECSV, CSV) besides the installed [the rig's].")  # fmt: skip
@click.option("--calibration", metavar="FOLDER", type=click.Path(file_okay=False, path_type=Path),
              help="Folder of bias, dark and flat folders, to calibrate the frames with.")  # fmt: skip
@click.option("--no-blind", is_flag=True, help="Do not search the whole sky when the hints fail.")
@click.option("-o", "--output", metavar="FOLDER", type=click.Path(file_okay=False, path_type=Path),
              help="Write the solution (NAME.wcs.fits) and a quick-look picture (NAME.solved.png) there.")  # fmt: skip
@click.option("--copy", is_flag=True, help="With -o: also a FITS copy of each frame with its solution.")
@click.option("--json", "as_json", is_flag=True, help="Print a list for a machine.")
@click.option("--force", is_flag=True, help="Replace outputs that exist.")
def command(  # type: ignore[no-untyped-def]
    frames,
    near,
    scale,
    focal_mm,
    pixel_um,
    rig,
    learn,
    zone,
    file_time,
    catalogue,
    calibration,
    no_blind,
    output,
    copy,
    as_json,
    force,
) -> int:
    """Find where FRAMES point, from their stars. Without a hint the whole sky is searched.

    Frames themselves are never written to.

    \b
    Example:
      syzygraph solve night/*.fits --rig configs/rigs/lens_135mm.yaml -o solved
      syzygraph solve picture.jpg --json
      syzygraph solve narrow/*.fits --near 83.8,-5.4 --scale 0.78 --catalogue field.fits --calibration tonight
    """
    from imaging.stars.solve import Hint
    from imaging.stars.solving import solve_files, write_copy, write_wcs
    from planner.cli.progress import bars
    from planner.outputs import refuse_existing
    from planner.sky.starlist import deeper_catalogue

    scale, learned, model = _scale_and_lens(scale, focal_mm, pixel_um, rig, learn)
    if model is not None:
        zone = zone or model.clock.zone
        catalogue = catalogue or (Path(model.catalogue) if model.catalogue else None)
    hint = Hint(near=_near(near), scale_arcsec_px=scale)
    if learned is not None:
        hint = Hint(hint.near, learned.scale_arcsec_px, 0.005, parity=learned.parity, lens=learned.lens)
    files = _files(frames)
    if output is not None:
        for path in files:
            for suffix in (".wcs.fits", ".solved.png", *([".solved.fits"] if copy else [])):
                refuse_existing(output / (path.stem + suffix), force)
    elif copy:
        raise errors.InputError("--copy: found without -o; allowed is with a folder to write to")
    results, solutions = [], []
    titles = "solving", "building the star index (once)", "making calibration masters"
    with deeper_catalogue(catalogue), bars(*titles, quiet=as_json) as (tick, index_tick, master_tick):
        night = None
        if calibration is not None:
            from imaging.frames.calibrating import calibration_of

            night = calibration_of(calibration, tick=master_tick)
        for solved in solve_files(files, hint, zone, not no_blind, tick, index_tick, night, file_time):
            results.append(solved.as_object())
            if solved.solution is None:
                continue
            if learn:
                solutions.append(solved.solution)
            if output is not None:
                from imaging.stars.quicklook import write_quicklook
                from imaging.stars.solve import DEFAULT_EPOCH_TT_S

                time = solved.frame.time if solved.frame is not None else None
                tt_s = time.middle_tt_s if time is not None else DEFAULT_EPOCH_TT_S
                write_wcs(solved.solution, output / f"{solved.path.stem}.wcs.fits", force)
                write_quicklook(solved, output / f"{solved.path.stem}.solved.png", tt_s, force)
                if copy:
                    write_copy(solved, output / f"{solved.path.stem}.solved.fits", force)
    if as_json:
        click.echo(json.dumps(results, indent=2, allow_nan=False))
    else:
        _print(results, output)
    if learn:
        from imaging.stars.lens import learn_lens, write_lens
        from planner.sequence.documents import lens_path

        kept = Path(model.lens) if model.lens else lens_path(rig)
        write_lens(learn_lens(solutions), model.name, kept, force)
        click.echo(f"lens learned from {len(solutions)} frames: {kept}", err=as_json)
    return errors.EXIT_DONE if all(one["solved"] for one in results) else errors.EXIT_WITH_RESERVATIONS


def _scale_and_lens(scale, focal_mm, pixel_um, rig, learn):  # type: ignore[no-untyped-def]
    if (focal_mm is None) != (pixel_um is None):
        raise errors.InputError(
            "--focal-mm, --pixel-um: found one of them; allowed are both together, or --scale"
        )
    lens, model = None, None
    if rig is not None:
        from imaging.stars.lens import read_lens
        from planner.sequence.documents import load_rig

        model = load_rig(rig)
        scale = scale or model.scale_arcsec_px
        if model.lens is not None and not learn:
            lens = read_lens(Path(model.lens))
    elif learn:
        raise errors.InputError(
            "--learn: found without --rig; allowed is with the rig that the frames are of"
        )
    if focal_mm is not None:
        scale = 206264.806 * pixel_um * 1e-3 / focal_mm
    return scale, lens, model


def _near(text: str | None) -> tuple[float, float] | None:
    if text is None:
        return None
    try:
        ra_deg, dec_deg = (float(part) for part in text.split(","))
    except ValueError:
        raise errors.InputError(
            f"--near: found {text!r}; allowed is RA,DEC in degrees, such as 83.8,-5.4"
        ) from None
    if not (0 <= ra_deg <= 360 and -90 <= dec_deg <= 90):
        raise errors.InputError(f"--near: found {text!r}; allowed are RA 0 to 360 and DEC -90 to 90 degrees")
    return ra_deg, dec_deg


def _files(frames: tuple[Path, ...]) -> list[Path]:
    found: list[Path] = []
    for path in frames:
        if path.is_dir():
            found += sorted(one for one in path.iterdir() if one.is_file() and not one.name.startswith("."))
        elif not path.exists():
            raise errors.InputError(f"FRAMES: found {path}, which does not exist")
        else:
            found.append(path)
    return found


def _print(results: list[dict], output: Path | None) -> None:
    from rich.console import Console
    from rich.table import Table

    table = Table(box=None, pad_edge=False)
    for title in (
        "file",
        "RA (deg)",
        "Dec (deg)",
        "arcsec/px",
        "up (deg)",
        "mirrored",
        "stars",
        "rms (px)",
        "how",
    ):
        table.add_column(
            title, justify="left" if title in ("file", "how") else "right", no_wrap=title != "file"
        )
    for one in results:
        if not one["solved"]:
            continue
        table.add_row(
            Path(one["file"]).name,
            f"{one['center_ra_deg']:.5f}",
            f"{one['center_dec_deg']:+.5f}",
            f"{one['scale_arcsec_px']:.4f}",
            f"{one['position_angle_deg']:.2f}",
            "yes" if one["mirrored"] else "no",
            str(one["stars_matched"]),
            f"{one['rms_px']:.2f}",
            one["how"],
        )
    if table.row_count:
        Console(
            highlight=False, width=max(100, 76 + max(len(Path(one["file"]).name) for one in results))
        ).print(table)
    for one in results:
        if not one["solved"]:
            click.echo(f"{one['file']}: not solved: {one['reason']}")
    if output is not None and table.row_count:
        click.echo(f"solutions and quick-look pictures: {output}")
