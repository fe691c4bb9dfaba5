"""The discs of a planet over months, side by side in date order, at one scale and one orientation.

Each visit's frames are registered on the planet and stacked, its shortest exposures where it has several: what the
longer ones burn out. The series may be enlarged, which the statement of truth and the caption then say.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from imaging.compose.canvas import Canvas
from imaging.compose.choices import Choices
from imaging.compose.choose import evenly_spaced
from imaging.compose.exposures import by_exposure
from imaging.compose.light import Light, exposure_level
from imaging.compose.material import Material, Registered
from imaging.compose.orientation import up_pa_deg
from imaging.compose.pathdata import MONTHS
from imaging.compose.picture import Drawn, Picture
from imaging.compose.stack import new_stack
from planner.errors import FrameSetAside, InputError
from planner.sky.timescale import datetime_from_tt_s

MOST_COLUMNS = 8
LABEL_SHARE = 0.16  # of a cell's height, at its foot, for the date


def phase_series(material: Material, choices: Choices, light: Light) -> Picture:
    """Return the panel of discs; raises InputError when no visit has a frame with the target in it.

    The canvas is a sheet, not a piece of sky: every cell is a tangent plane about the target at its date.
    """
    visits = [(name, _showing(frames)) for name, frames in material.passages()]
    visits = [(name, frames) for name, frames in visits if frames]
    if not visits:
        raise InputError(f"{material.track_path}: the target was measured in no frame")
    middles = np.array([frames[len(frames) // 2].tt_s for _, frames in visits])
    if len(visits) > choices.instants:
        visits = [visits[index] for index in evenly_spaced(middles, choices.instants)]
    native = min(frame.scale_arcsec_px for _, frames in visits for frame in frames)
    scale = (choices.scale_arcsec_px or native) / choices.enlarge
    disc = material.geometry.discs.get(material.target)
    if disc is None:
        raise InputError(f"{material.target} is a point of light: a series of its discs is not possible")
    half_px = max(12, int(np.ceil(1.6 * float(disc.semidiameter_arcsec.max()) / scale + 3 * native / scale)))
    cell = 2 * half_px + 1
    rows = -(-len(visits) // MOST_COLUMNS)
    columns = -(-len(visits) // rows)
    planes = (3,) if light.colour else ()
    sheet = np.zeros((rows * cell, columns * cell, *planes), np.float32)
    drawn: list[Drawn] = []
    used: list[tuple[Registered, str]] = []
    left_out: list[tuple[str, str]] = []
    labels: list[tuple[float, float, str]] = []
    for number, (_, frames) in enumerate(visits):
        choices.tick(number, len(visits))
        stacked = _visit(
            material, frames, Canvas(cell, cell, scale, half_px, half_px), choices, light, left_out
        )
        if stacked is None:
            continue
        image, kept = stacked
        row, column = divmod(number, columns)
        low, left = (rows - 1 - row) * cell, column * cell  # the first date at the top left
        peak = np.nanpercentile(image, 99.7)
        sheet[low : low + cell, left : left + cell] = np.nan_to_num(image / peak if peak > 0 else image)
        x_px, y_px = left + half_px, low + half_px
        middle = kept[len(kept) // 2]
        sd = float(
            material.geometry_at(np.array([middle.tt_s])).discs[material.target].semidiameter_arcsec[0]
        )
        drawn.append(Drawn(middle, x_px, y_px, x_px, y_px, middle.displacement_arcsec, sd / scale))
        used += [(frame, "disc of its date") for frame in kept]
        labels.append((x_px, low + 0.5 * LABEL_SHARE * cell, _date(middle.tt_s)))
    choices.tick(len(visits), len(visits))
    if not drawn:
        raise InputError(f"no frame of the target is left; the first: {left_out[0]}")
    canvas = Canvas(sheet.shape[1], sheet.shape[0], scale, 0.0, 0.0)
    return Picture(
        kind="phase-series",
        registered_on=material.target,
        blend=choices.blend,
        image=sheet,
        count=np.ones(sheet.shape, np.int32),
        canvas=canvas,
        anchor_ra_deg=float("nan"),
        anchor_dec_deg=float("nan"),
        reference_tt_s=float(middles[len(middles) // 2]),
        drawn=tuple(drawn),
        used=tuple(used),
        tone="disc",
        enlargement=choices.enlarge,
        notes=(
            "discs in date order, first at the top left, all at one scale and orientation",
            "each disc is brought to the same peak: brightness is not to scale between dates",
            "the sheet has no sky coordinates: each disc stands in a cell of its own",
        ),
        left_out=tuple(left_out),
        labels=tuple(labels),
    )


def _showing(frames: list[Registered]) -> list[Registered]:
    """Return the frames of a visit that show the disc: of those that hold the target, the shortest exposures."""
    groups = by_exposure([frame for frame in frames if frame.measured or frame.solved_by == "planets"])
    return sorted(groups[-1], key=lambda frame: frame.tt_s) if groups else []


def _date(tt_s: float) -> str:
    moment = datetime_from_tt_s(tt_s)
    return "" if moment is None else f"{moment.day} {MONTHS[moment.month - 1]} {moment.year}"


def _visit(
    material: Material,
    frames: list[Registered],
    cell: Canvas,
    choices: Choices,
    light: Light,
    left_out: list[tuple[str, str]],
) -> tuple[np.ndarray, list[Registered]] | None:
    shape = (cell.height_px, cell.width_px, *((3,) if light.colour else ()))
    stack = new_stack(choices.blend, shape, len(frames), choices.scratch)
    kept = []
    for frame in frames:
        try:
            pixels = light.read(frame)
        except FrameSetAside as problem:
            left_out.append((frame.path.name, problem.reason))
            continue
        anchor = frame.target_ra_deg, frame.target_dec_deg
        up = up_pa_deg(material, choices.orientation, anchor, frame.tt_s, on_disc=False)
        image = light.on_canvas(
            pixels, frame, replace(cell, up_pa_deg=up), anchor, exposure_level(pixels, frame)
        )
        stack.add(image - _border_level(image))
        kept.append(frame)
    if not kept:
        return None
    return stack.result()[0], kept


def _border_level(image: np.ndarray) -> np.ndarray:
    """Return the sky of a cell: the median of its outermost pixels, colour by colour."""
    edge = max(2, image.shape[0] // 12)
    mask = np.ones(image.shape[:2], bool)
    mask[edge:-edge, edge:-edge] = False
    values = image[mask]
    return (
        np.nanmedian(values, axis=0) if np.isfinite(values).any() else np.zeros(image.shape[2:], np.float32)
    )
