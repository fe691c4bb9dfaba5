"""One visit of a campaign: its frames stacked on the stars, and stacked on the target so that it does not smear."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from imaging.compose.bodies import BodyPatch, BodyStack, Place
from imaging.compose.canvas import Canvas
from imaging.compose.choices import Choices
from imaging.compose.exposures import by_exposure, not_burnt_out
from imaging.compose.ground import falloff, measured_falloff, sky_surface
from imaging.compose.light import Light, bias_of, exposure_level
from imaging.compose.matching import edge_weight
from imaging.compose.material import Camera, Registered
from imaging.compose.patch import patch_box
from imaging.compose.stack import new_stack
from imaging.frames.frame import Frame
from planner.errors import FrameSetAside

GLOW_PX = 56.0  # as far as the glow about a burnt-out planet is taken to reach
TRAIL_PX = 3.0


@dataclass(frozen=True)
class Visit:
    """What a visit gives: stars in a `box` (rows, columns) of the picture, the target on a small canvas of its own.

    `companions`: the other planets of the event, likewise. `merged`: number of exposure lengths that these are made of.
    """

    frames: tuple[Registered, ...]
    stars: np.ndarray
    box: tuple[slice, slice]
    target: BodyPatch
    companions: dict[str, BodyPatch]
    merged: int

    @property
    def holds_target(self) -> bool:
        """False for a visit, or a panel of one, whose frames show only stars beside the target."""
        middle = self.target.image.shape[0] // 2
        return bool(np.isfinite(self.target.image[middle - 1 : middle + 2, middle - 1 : middle + 2]).all())


@dataclass(frozen=True)
class Flat:
    """The vignetting of star frames: 1 - a r^2 - b r^4, and where it was learnt."""

    a: float
    b: float
    source: str

    def applied(self, frame: Frame, dark: float) -> Frame:
        """Return the frame with its light above `dark` divided by the falloff."""
        share = falloff(frame.data.shape[:2], self.a, self.b)
        colour = frame.colour
        if colour is not None:
            step = frame.data.shape[0] // colour.shape[0]
            planes = falloff((colour.shape[0] * step, colour.shape[1] * step), self.a, self.b)
            planes = planes[step // 2 :: step, step // 2 :: step]
            colour = (colour - dark) / planes[..., None] + dark
        return replace(frame, data=(frame.data - dark) / share + dark, colour=colour)


def learnt_flats(frames: tuple[Registered, ...], light: Light) -> dict[Camera, Flat]:
    """Return the vignetting of each camera."""
    cameras = dict.fromkeys(frame.camera for frame in frames)
    return {
        camera: _learnt_flat(camera, [frame for frame in frames if frame.camera == camera], light)
        for camera in cameras
    }


def _learnt_flat(camera: Camera, frames: list[Registered], light: Light, most: int = 8) -> Flat:
    """Return the vignetting that the sky of a few frames shows, else the one that the rig states."""
    night = light.calibration_of(camera)
    if night is not None and night.flats:
        return Flat(0.0, 0.0, "by the master flat")
    chosen = np.unique(np.linspace(0, len(frames) - 1, most).astype(int))
    skies = []
    for index in chosen.tolist():
        try:
            frame = light.read(frames[index])
            skies.append(frame.data - bias_of(frame, camera))
        except FrameSetAside:
            continue
    measured = measured_falloff(skies) if skies else None
    if measured is None:
        return Flat(camera.vignetting, 0.0, "as the rig states it, the sky being too faint to tell")
    return Flat(*measured, f"measured on the sky of {len(skies)} frames")


def stacked(
    frames: list[Registered],
    canvas: Canvas,
    anchor_deg: tuple[float, float],
    choices: Choices,
    light: Light,
    flats: dict[Camera, Flat],
    left_out: list[tuple[str, str]],
    tick: Callable[[], None],
    others: dict[str, Place],
) -> Visit | None:
    """Return a visit's stacks, outliers rejected; None when none of its frames can be read.

    Stars come from the longest exposures. Where a visit has shorter ones too, what the long ones burn out in the
    target, and in the `others` that it meets, is taken from them.
    """
    planes = (3,) if light.colour else ()
    shown = [frame for frame in frames if frame.measured] or frames
    target = BodyStack.on(canvas, anchor_deg, shown, _target_place, light.colour)
    met = {
        name: BodyStack.on(canvas, anchor_deg, frames, place, light.colour) for name, place in others.items()
    }
    bodies = [target, *met.values()]
    groups = by_exposure(frames)
    kept: list[Registered] = []
    stars = None
    box = _covered(canvas, anchor_deg, groups[0], light)
    window = canvas.window(*box)
    trails = _moved_px(groups[0], window, anchor_deg) > TRAIL_PX
    for number, group in enumerate(groups):
        for body in bodies:
            body.begin(len(group), number == len(groups) - 1 and len(groups) > 1)
        stack = None
        if number == 0:
            star_shape = (window.height_px, window.width_px, *planes)
            stack = new_stack("clipped", star_shape, len(group), choices.scratch, again=True)
        seen: set[int] = set()
        for turn in [range(len(group))] if stack is None else stack.turns():
            for index in turn:
                frame, new = group[index], index not in seen
                seen.add(index)
                if new:
                    tick()
                try:
                    pixels = light.read(frame)
                except FrameSetAside as problem:
                    if new:
                        left_out.append((frame.path.name, problem.reason))
                    continue
                level = exposure_level(pixels, frame)
                good = not_burnt_out(pixels, frame.camera.saturation_adu) if len(groups) > 1 else None
                pixels = without_sky(flats[frame.camera].applied(pixels, level.dark), level.dark)
                if stack is not None:
                    image = light.on_canvas(pixels, frame, window, anchor_deg, level)
                    if trails:
                        _without_target(image, frame, window, anchor_deg)
                    stack.add(image, edge_weight(image))
                if not new:
                    continue
                for body in bodies:
                    body.add(pixels, frame, level, good, light)
                kept.append(frame)
        if stack is not None:
            stars = stack.result()[0]
        for body in bodies:
            body.end()
    if not kept or stars is None:
        return None
    kept.sort(key=lambda frame: frame.tt_s)
    companions = {name: body.patch() for name, body in met.items()}
    return Visit(tuple(kept), stars, box, target.patch(), companions, len(groups))


def _target_place(frame: Registered) -> tuple[float, float]:
    return frame.target_ra_deg, frame.target_dec_deg


def _moved_px(frames: list[Registered], canvas: Canvas, anchor_deg: tuple[float, float]) -> float:
    """Return how far the target moves over the picture while the frames last."""
    places = [canvas.from_sky(*anchor_deg, frame.target_ra_deg, frame.target_dec_deg) for frame in frames]
    return float(np.hypot(*np.ptp(np.array(places, float), axis=0)))


def _without_target(
    image: np.ndarray, frame: Registered, canvas: Canvas, anchor_deg: tuple[float, float]
) -> None:
    """Leave the target and its glow out of a frame of the stars, in place: other frames show what is behind."""
    x_px, y_px = canvas.from_sky(*anchor_deg, frame.target_ra_deg, frame.target_dec_deg)
    box = patch_box(image.shape, float(x_px), float(y_px), GLOW_PX)
    if box is not None:
        y, x = np.ogrid[box[0], box[1]]
        image[box][np.hypot(x - x_px, y - y_px) < GLOW_PX] = np.nan


def _covered(
    canvas: Canvas, anchor_deg: tuple[float, float], frames: list[Registered], light: Light
) -> tuple[slice, slice]:
    """Return the (rows, columns) of the picture that the frames reach; all of it when they differ in scale."""
    whole = slice(0, canvas.height_px), slice(0, canvas.width_px)
    first = frames[0]
    if any(abs(frame.scale_arcsec_px / first.scale_arcsec_px - 1) > 0.01 for frame in frames):
        return whole
    try:
        rows, columns = light.read(first).data.shape
    except FrameSetAside:
        return whole
    edge = np.linspace(0, 1, 9)
    rim_x = np.concatenate([edge, edge, 0 * edge, 0 * edge + 1]) * columns
    rim_y = np.concatenate([0 * edge, 0 * edge + 1, edge, edge]) * rows
    places = [canvas.from_sky(*anchor_deg, *frame.pointing.pixel_to_sky(rim_x, rim_y)) for frame in frames]
    x_px, y_px = np.concatenate(places, axis=1)
    if not np.isfinite([x_px, y_px]).all():
        return whole
    low, high = int(y_px.min()) - 8, int(y_px.max()) + 9
    left, right = int(x_px.min()) - 8, int(x_px.max()) + 9
    if low >= canvas.height_px or left >= canvas.width_px or high <= 0 or right <= 0:
        return slice(0, 1), slice(0, 1)
    return slice(max(0, low), min(high, canvas.height_px)), slice(max(0, left), min(right, canvas.width_px))


def without_sky(frame: Frame, dark: float) -> Frame:
    """Return the frame with its smooth background taken off down to `dark`, each colour by itself."""
    data = frame.data - sky_surface(frame.data - dark)
    colour = frame.colour
    if colour is not None:
        colour = np.stack([plane - sky_surface(plane - dark) for plane in np.moveaxis(colour, 2, 0)], axis=2)
    return replace(frame, data=data, colour=colour)
