"""The arc of an apparition over a landscape: the planet at each visit's altitude and azimuth, over a photograph.

The landscape is one picture given by the user, with the azimuth of its middle, its width on the sky, and the row of the
true horizon. It is taken as a straight (gnomonic) view with the horizon level; its pixels are not moved.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from imaging.compose.bodies import PATCH_MOST_PX
from imaging.compose.canvas import Canvas
from imaging.compose.choices import Choices
from imaging.compose.choose import evenly_spaced
from imaging.compose.light import Light, exposure_level
from imaging.compose.material import Material, Registered
from imaging.compose.patch import lay_patch, patch_box
from imaging.compose.picture import Drawn, Picture
from imaging.compose.plane import ARCSEC_PER_RADIAN, sky_to_plane
from imaging.compose.sky_path import glow_radius_px
from imaging.compose.visit import without_sky
from planner.errors import FrameSetAside, InputError


@dataclass(frozen=True)
class Landscape:
    """A photograph of the horizon. `horizon_row`: row (from the top, 0-based) of altitude 0 in the middle column."""

    path: Path
    azimuth_deg: float
    width_deg: float
    horizon_row: float

    def pixels(self) -> np.ndarray:
        """Return linear light in 0..1, row 0 at the bottom, (rows, columns[, 3]); raises InputError."""
        from PIL import Image, UnidentifiedImageError

        try:
            with Image.open(self.path) as image:
                shown = (
                    np.asarray(image.convert("L" if image.mode in ("1", "L", "I;16") else "RGB"), np.float32)
                    / 255
                )
        except FileNotFoundError:
            raise InputError(f"--landscape: {self.path} does not exist") from None
        except (UnidentifiedImageError, OSError) as error:
            raise InputError(f"--landscape: {self.path} is no picture ({error})") from None
        light = np.where(shown <= 0.04045, shown / 12.92, ((shown + 0.055) / 1.055) ** 2.4)
        return np.flip(light, axis=0).astype(np.float32)

    def canvas(self, shape: tuple[int, ...]) -> tuple[Canvas, float]:
        """Return the picture's grid, anchored on its middle, and the altitude of its middle."""
        if not 0 < self.width_deg < 150:
            raise InputError(f"--view: found a width of {self.width_deg:g} degrees; allowed are 0 to 150")
        rows, columns = shape[:2]
        scale = 2 * np.tan(np.radians(self.width_deg / 2)) / columns * ARCSEC_PER_RADIAN
        middle = (rows - 1) / 2
        altitude = np.degrees(np.arctan((self.horizon_row - middle) * scale / ARCSEC_PER_RADIAN))
        return Canvas(columns, rows, float(scale), (columns - 1) / 2, middle), float(altitude)


def arc_over_landscape(material: Material, landscape: Landscape, choices: Choices, light: Light) -> Picture:
    """Return the landscape with the target of evenly spaced visits in it; raises InputError when none is in view."""
    image = landscape.pixels()
    if light.colour and image.ndim == 2:
        image = np.repeat(image[..., None], 3, axis=2)
    canvas, altitude_deg = landscape.canvas(image.shape)
    visits = [frames[len(frames) // 2] for _, frames in material.passages() if frames]
    tt_s = np.array([frame.tt_s for frame in visits])
    geometry = material.geometry_at(tt_s)
    east, north = sky_to_plane(
        landscape.azimuth_deg, altitude_deg, geometry.azimuth_deg, geometry.altitude_deg
    )
    x_px = canvas.anchor_x_px + east / canvas.scale_arcsec_px  # azimuth grows to the right
    y_px = canvas.anchor_y_px + north / canvas.scale_arcsec_px
    inside = (
        (geometry.altitude_deg > 0)
        & (x_px > 0)
        & (x_px < canvas.width_px)
        & (y_px > 0)
        & (y_px < canvas.height_px)
    )
    chosen = evenly_spaced(tt_s, choices.instants, None, inside)
    if not chosen.size:
        raise InputError(
            f"--view: the target is in view at no visit; it stands at azimuth {np.nanmin(geometry.azimuth_deg):.0f} to "
            f"{np.nanmax(geometry.azimuth_deg):.0f}, altitude {np.nanmin(geometry.altitude_deg):.0f} to "
            f"{np.nanmax(geometry.altitude_deg):.0f} degrees"
        )
    pieces: list[tuple[int, Registered, np.ndarray, float]] = []
    left_out: list[tuple[str, str]] = []
    for done, index in enumerate(chosen.tolist()):
        choices.tick(done, len(chosen))
        frame = visits[index]
        try:
            drawn_at = canvas.at_scale(canvas.scale_arcsec_px / choices.enlarge)
            piece = _piece(
                frame, drawn_at, float(geometry.zenith_pa_deg[index]), (x_px[index], y_px[index]), light
            )
        except FrameSetAside as problem:
            left_out.append((frame.path.name, problem.reason))
            continue
        pieces.append((index, frame, piece, float(np.nanmax(piece))))
    choices.tick(len(chosen), len(chosen))
    if not pieces:
        raise InputError(f"no frame of the target is left; the first: {left_out[0]}")
    brightest = max(peak for *_, peak in pieces)
    drawn = []
    for index, frame, piece, _ in pieces:
        x, y = float(x_px[index]), float(y_px[index])
        radius = _lay(image, piece / brightest, x, y)
        drawn.append(Drawn(frame, x, y, x, y, frame.displacement_arcsec, radius))
    return Picture(
        kind="arc",
        registered_on="horizon",
        blend="lighter, own place",
        image=image,
        count=np.ones(image.shape, np.int32),
        canvas=canvas,
        anchor_ra_deg=float("nan"),
        anchor_dec_deg=float("nan"),
        reference_tt_s=float(tt_s[len(tt_s) // 2]),
        drawn=tuple(drawn),
        used=tuple((frame, "target of its visit") for _, frame, *_ in pieces),
        tone="photograph",
        enlargement=choices.enlarge,
        notes=(
            f"the landscape {landscape.path.name} is the user's: azimuth {landscape.azimuth_deg:g} in the middle, "
            f"{landscape.width_deg:g} degrees wide, taken as a straight view with a level horizon",
            "the target stands at each visit's altitude and azimuth, refraction included",
            *(
                [
                    f"its image is drawn {choices.enlarge:g} times larger than the landscape's scale, about its place"
                ]
                if choices.enlarge > 1
                else []
            ),
            "its brightness is true between visits, and scaled so that the brightest is white over the landscape",
        ),
        left_out=tuple(left_out),
    )


def _piece(
    frame: Registered, canvas: Canvas, zenith_pa_deg: float, at: tuple[float, float], light: Light
) -> np.ndarray:
    """Return the target of one frame on the picture's pixel grid, zenith up, anchored at its place."""
    half = int(PATCH_MOST_PX) + 4
    small = replace(
        canvas,
        width_px=2 * half + 1,
        height_px=2 * half + 1,
        anchor_x_px=half + float(at[0]) - round(float(at[0])),
        anchor_y_px=half + float(at[1]) - round(float(at[1])),
        up_pa_deg=zenith_pa_deg,
    )
    pixels = light.read(frame)
    level = exposure_level(pixels, frame)
    anchor = frame.target_ra_deg, frame.target_dec_deg
    return light.on_canvas(without_sky(pixels, level.dark), frame, small, anchor, level)


def _lay(image: np.ndarray, piece: np.ndarray, x_px: float, y_px: float) -> float:
    half = piece.shape[0] // 2
    row, column = round(y_px), round(x_px)
    radius = glow_radius_px(piece, half + x_px - column, half + y_px - row)
    box = patch_box(image.shape, column, row, half)
    if box is None:
        return radius
    cut = (
        slice(box[0].start - row + half, box[0].stop - row + half),
        slice(box[1].start - column + half, box[1].stop - column + half),
    )
    over = piece[cut]
    if image.ndim == 3 and over.ndim == 2:
        over = np.repeat(over[..., None], 3, axis=2)
    place = x_px - box[1].start, y_px - box[0].start
    lay_patch(image[box], over, *place, 0.55 * radius, 0.45 * radius, "lighter")
    return radius
