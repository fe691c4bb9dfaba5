"""Rehearsed frames as files: FITS with the standard's keywords for time and site, and the truth beside them."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import asdict, fields
from functools import partial
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np

from imaging.frames.render import Cut, Faults, Picture, Scene, Truth
from planner.outputs import refuse_existing, whole_file
from planner.provenance import versions
from planner.sequence.documents import observer_of
from planner.sequence.models import Plan, Site
from planner.sky.observer import itrs_position_km
from planner.sky.timescale import utc_iso


def truth_path(folder: Path) -> Path:
    """Return where the truth of a folder of frames goes: beside it, never inside."""
    return folder.parent / f"{folder.name}.truth.ecsv"


def rehearse(
    plan: Plan,
    folder: Path,
    chosen: np.ndarray,
    faults: Faults | None = None,
    cut: Cut | None = None,
    seed: int = 1,
    with_wcs: bool = False,
    force: bool = False,
    jobs: int = 1,
    tick: Callable[[int, int], None] | None = None,
) -> list[Path]:
    """Draw the frames `chosen` of a plan into `folder` and their truth beside it; return the frames' paths.

    Raises OutputExistsError before any work when a file is in the way and not `force`. Frames depend on the plan,
    the faults and the seed alone, not on `jobs` nor on which other frames are drawn.
    """
    faults, cut = faults or Faults(), cut or Cut()
    refuse_existing(truth_path(folder), force)
    last = int(np.max(chosen, initial=0))
    paths = [folder / _name(int(index), last, faults) for index in chosen]
    for path in paths:
        refuse_existing(path, force)
    folder.mkdir(parents=True, exist_ok=True)
    portions = [part for part in np.array_split(chosen, max(1, min(len(chosen), 4 * jobs))) if part.size]
    if jobs <= 1:
        portions = [chosen]
    draw = partial(_draw_portion, plan, folder, last, faults, cut, seed, with_wcs, force)
    truths: list[Truth] = []
    if jobs <= 1:
        truths = draw(chosen, tick=lambda done: tick(done, len(chosen)) if tick else None)
    else:
        with ProcessPoolExecutor(max_workers=jobs, mp_context=get_context("spawn")) as pool:
            for part in pool.map(draw, portions):
                truths += part
                if tick:
                    tick(len(truths), len(chosen))
    _write_truth(truth_path(folder), [path.name for path in paths], truths, plan, faults, seed, force)
    return paths


def _draw_portion(
    plan: Plan,
    folder: Path,
    last: int,
    faults: Faults,
    cut: Cut,
    seed: int,
    with_wcs: bool,
    force: bool,
    chosen: np.ndarray,
    tick: Callable[[int], None] | None = None,
) -> list[Truth]:
    scene = Scene.of(plan, chosen, faults, cut, seed)
    truths = []
    for position in range(len(scene)):
        picture = scene.draw(position)
        path = folder / _name(picture.index, last, faults)
        write_frame(
            path, picture, plan, cut, with_wcs, force, faults.site if faults.headers_tell_site else None
        )
        truths.append(picture.truth)
        if tick:
            tick(position + 1)
    return truths


def _name(index: int, last: int, faults: Faults) -> str:
    number = last - index if faults.names_backwards else index
    return f"frame_{number:0{max(4, len(str(last)))}d}.fits"


def write_frame(
    path: Path,
    picture: Picture,
    plan: Plan,
    cut: Cut,
    with_wcs: bool = False,
    force: bool = False,
    site: Site | None = None,
) -> None:
    """Write one frame as FITS (standard 4.0): times are the stamped ones, begin, middle and end, UTC.

    `site`: what the header says of where it was taken, in place of the plan's.
    """
    from astropy.io import fits

    hdu = fits.PrimaryHDU(picture.readout.adu)
    for key, (value, comment) in header_cards(picture, plan, cut, site).items():
        hdu.header[key] = (value, comment)
    if with_wcs:
        for key, value in wcs_cards(picture).items():
            hdu.header[key] = value
    hdu.header.add_history("Rendered by syzygraph rehearse: no light was recorded.")
    with whole_file(path, force) as part:
        hdu.writeto(part, overwrite=True)


def header_cards(
    picture: Picture, plan: Plan, cut: Cut, site: Site | None = None
) -> dict[str, tuple[Any, str]]:
    """Return the keywords of a frame with their comments."""
    shot, truth, rig = picture.shot, picture.truth, picture.rig
    half = shot.exposure_s / 2
    begin, middle, end = (utc_iso(truth.stamped_tt_s + shift, 6).rstrip("Z") for shift in (-half, 0.0, half))
    x, y, z = itrs_position_km(observer_of(site or plan.site)) * 1e3
    cards: dict[str, tuple[Any, str]] = {
        "DATE-OBS": (begin, "start of exposure"),
        "DATE-BEG": (begin, "start of exposure"),
        "DATE-AVG": (middle, "middle of exposure"),
        "DATE-END": (end, "end of exposure"),
        "TIMESYS": ("UTC", "time scale"),
        "EXPTIME": (shot.exposure_s, "[s] exposure"),
        "XPOSURE": (shot.exposure_s, "[s] exposure"),
        "OBSGEO-X": (round(float(x), 3), "[m] site, ITRS"),
        "OBSGEO-Y": (round(float(y), 3), "[m] site, ITRS"),
        "OBSGEO-Z": (round(float(z), 3), "[m] site, ITRS"),
        "INSTRUME": (_ascii(plan.rig.name), "rig"),
        "OBJECT": (_ascii(plan.title), "plan"),
        "FOCALLEN": (plan.rig.optics.focal_length_mm * plan.rig.optics.reducer, "[mm] focal length"),
        "APTDIA": (rig.optics.aperture_mm, "[mm] aperture"),
        "XPIXSZ": (rig.sensor.pixel_um, "[um] pixel, binning included"),
        "YPIXSZ": (rig.sensor.pixel_um, "[um] pixel, binning included"),
        "XBINNING": (cut.binning, "pixels summed in x"),
        "YBINNING": (cut.binning, "pixels summed in y"),
        "GAIN": (shot.gain, "gain setting"),
        "EGAIN": (picture.readout.gain_e_adu, "[e/ADU] gain"),
        "RDNOISE": (picture.readout.read_noise_e, "[e] read noise"),
        "SATURATE": (picture.readout.saturation_adu, "[ADU] linear below this"),
        "PASSAGE": (_ascii(picture.passage), "passage of the plan"),
        "ROWORDER": ("BOTTOM-UP", "row 0 is the bottom of the picture"),
    }
    if shot.filter:
        cards["FILTER"] = (_ascii(shot.filter), "filter")
    return cards


def wcs_cards(picture: Picture) -> dict[str, Any]:
    """Return a gnomonic WCS of the true sky at the frame's middle (FITS Paper II, Calabretta & Greisen 2002)."""
    truth, pointing = picture.truth, picture.pointing
    x0, y0 = pointing.middle_px
    step = truth.scale_arcsec_px / 3600
    up, right = np.radians(truth.rotation_deg), np.radians(truth.rotation_deg - 90)
    return {
        "CTYPE1": "RA---TAN",
        "CTYPE2": "DEC--TAN",
        "CUNIT1": "deg",
        "CUNIT2": "deg",
        "RADESYS": "ICRS",
        "CRVAL1": truth.center_ra_deg,
        "CRVAL2": truth.center_dec_deg,
        "CRPIX1": x0 + 1,
        "CRPIX2": y0 + 1,
        "CD1_1": step * truth.parity * float(np.sin(right)),
        "CD1_2": step * float(np.sin(up)),
        "CD2_1": step * truth.parity * float(np.cos(right)),
        "CD2_2": step * float(np.cos(up)),
    }


def _write_truth(
    path: Path,
    names: Sequence[str],
    truths: Sequence[Truth],
    plan: Plan,
    faults: Faults,
    seed: int,
    force: bool,
) -> None:
    from astropy.table import Table

    columns = [each.name for each in fields(Truth) if not each.name.endswith("_tt_s")]
    table = Table()
    table["file"] = list(names)
    table["true_utc_mid"] = [utc_iso(truth.true_tt_s, 6) for truth in truths]
    table["stamped_utc_mid"] = [utc_iso(truth.stamped_tt_s, 6) for truth in truths]
    for column in columns:
        table[column] = [getattr(truth, column) for truth in truths]
    told = {key: _plain(value) for key, value in asdict(faults).items()}
    table.meta = {"plan": plan.title, "seed": seed, "faults": told, "provenance": versions()}
    with whole_file(path, force) as part:
        table.write(part, format="ascii.ecsv", overwrite=True)


def _plain(value: Any) -> Any:
    """Return a fault as the header of a table can hold it: a site by where it is."""
    if isinstance(value, Site):
        return f"{value.latitude_deg}, {value.longitude_deg}, {value.height_m} m"
    return value


def _ascii(text: str) -> str:
    return text.encode("ascii", "replace").decode("ascii")
