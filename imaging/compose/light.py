"""Frames in linear light on the canvas: read, freed of bias, brought to one level, every colour plane by itself."""

from __future__ import annotations

import os
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from imaging.compose.canvas import Canvas
from imaging.compose.material import Camera, Registered
from imaging.compose.plane import plane_to_sky
from imaging.compose.sun_surface import Surface
from imaging.compose.warp import PixelMap, warp
from imaging.frames.calibrating import Calibration
from imaging.frames.frame import Frame
from planner.errors import FrameSetAside


@dataclass(frozen=True)
class Level:
    """What is taken off a frame's values, and what they are divided by, so that frames match.

    `of_surface`: the unit is light in a pixel of the frame, and a value is brightness of a surface, whatever the scale
    of the frame; else a value is light in a pixel of the picture.
    """

    dark: float
    unit: float
    of_surface: bool = False


@dataclass(frozen=True)
class Light:
    """How frames are turned into light: whether colour is kept, stars without dark rings, threads.

    `filters` collects what the frames read were taken through. `calibration` is taken off the frames of the rig
    `calibrated`, whose masters it holds.
    """

    colour: bool = False
    ringless: bool = False
    threads: int = max(1, min(4, os.cpu_count() or 1))
    filters: set[str] = field(default_factory=set)
    calibration: Calibration | None = None
    calibrated: str = ""

    def calibration_of(self, camera: Camera) -> Calibration | None:
        """Return what is taken off the frames of a camera."""
        return self.calibration if camera.name == self.calibrated else None

    def read(self, registered: Registered) -> Frame:
        """Return a frame's pixels; raises FrameSetAside when the file is missing, moved or unreadable."""
        return self.read_file(registered.path, registered.frame_index, registered.camera)

    def read_file(self, path: Path, frame_index: int, camera: Camera) -> Frame:
        """Return the pixels of a frame that need not be registered; raises FrameSetAside."""
        from imaging.frames.reading import read_frame

        frame = read_frame(
            path, zone="UTC", index=frame_index, colour=self.colour, calibration=self.calibration_of(camera)
        )
        if frame.filter:
            self.filters.add(frame.filter)
        return frame

    def on_canvas(
        self,
        frame: Frame,
        registered: Registered,
        canvas: Canvas,
        anchor_deg: tuple[float, float],
        level: Level,
        good: np.ndarray | None = None,
        surface: Surface | None = None,
    ) -> np.ndarray:
        """Return the frame's light on a canvas anchored at (ra_deg, dec_deg): float32, NaN where it does not reach.

        Each colour of a mosaic is warped from its own pixels, at the place where these lie, so that no colour is
        shifted. `surface` moves places on the canvas to where they were at the frame's time. Values are in units of
        the level, for the area of a canvas pixel unless they are of a surface.
        """
        unit = level.unit
        if level.of_surface:
            unit *= (canvas.scale_arcsec_px / registered.scale_arcsec_px) ** 2

        def to_frame(x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
            east, north = canvas.to_plane(x_px, y_px)
            if surface is not None:
                east, north = surface(east, north)
            return registered.pointing.sky_to_pixel(*plane_to_sky(*anchor_deg, east, north))

        if frame.colour is None:
            grey = self._warp(frame.data - level.dark, canvas, to_frame, good) / unit
            return np.repeat(grey[..., None], 3, axis=2) if self.colour else grey
        planes = []
        for plane, (left, low), step in colour_planes(frame):
            mask = None if good is None else _thinned(good, step, plane.shape)
            image = self._warp(plane - level.dark, canvas, _stepped(to_frame, left, low, step), mask)
            # a plane pixel stands for `step` x `step` frame pixels: its light is that of one of them
            planes.append(image * (step**2 / unit))
        return np.stack(planes, axis=-1)

    def _warp(
        self, data: np.ndarray, canvas: Canvas, to_frame: PixelMap, good: np.ndarray | None
    ) -> np.ndarray:
        return warp(data, canvas, to_frame, good, threads=self.threads, ringless=self.ringless)


def _stepped(to_frame: PixelMap, left: float, low: float, step: int) -> PixelMap:
    def to_plane(x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        x, y = to_frame(x_px, y_px)
        return (x - left) / step, (y - low) / step

    return to_plane


def _thinned(good: np.ndarray, step: int, shape: tuple[int, ...]) -> np.ndarray:
    rows, columns = shape
    return np.asarray(
        good[: rows * step, : columns * step].reshape(rows, step, columns, step).all(axis=(1, 3))
    )


def colour_planes(frame: Frame) -> list[tuple[np.ndarray, tuple[float, float], int]]:
    """Return (plane, (x, y) of its first pixel's light in frame pixels, step) for red, green, blue.

    For a mosaic the planes hold one pixel a cell: red and blue lie at their corner of the cell, the mean of the two
    greens in its middle.
    """
    assert frame.colour is not None
    if frame.colour.shape[:2] == frame.data.shape or frame.mosaic is None:
        return [(frame.colour[..., index], (0.0, 0.0), 1) for index in range(3)]
    places = []
    for name in "RGB":
        at = [divmod(index, 2) for index in range(4) if frame.mosaic[index] == name]
        places.append((float(np.mean([x for _, x in at])), float(np.mean([y for y, _ in at]))))
    return [(frame.colour[..., index], places[index], 2) for index in range(3)]


def disc_level(frame: Frame, limb_px: tuple[float, float, float], body: str) -> Level:
    """Return the level of a frame of the Sun or Moon: dark is what lies off the disc, the unit is the disc's light.

    The unit is the median within 0.6 radii for the Sun, the 90th percentile of the disc for the Moon (whose lit part
    may be small). Raises FrameSetAside when the disc is burnt out or not to be seen.
    """
    x_px, y_px, radius_px = limb_px
    step = max(1, int(radius_px / 200))
    y, x = np.mgrid[: frame.data.shape[0] : step, : frame.data.shape[1] : step]
    away = np.hypot(x - x_px, y - y_px) / radius_px
    values = frame.data[::step, ::step]
    inside = values[away < (0.6 if body == "sun" else 0.98)]
    outside = values[(away > 1.15) & (away < 1.6)]
    if outside.size < 50:
        outside = values[away > 1.03]
    dark = float(np.median(outside)) if outside.size >= 50 else float(np.percentile(values, 1))
    if inside.size < 50:
        raise FrameSetAside(frame.path, f"shows too little of the {body.capitalize()}")
    bright = float(np.median(inside) if body == "sun" else np.percentile(inside, 90))
    if frame.saturation_adu is not None and bright >= 0.98 * frame.saturation_adu:
        raise FrameSetAside(frame.path, f"has the {body.capitalize()} burnt out")
    if not bright - dark > 0:
        raise FrameSetAside(frame.path, f"shows no light of the {body.capitalize()} (clouds?)")
    return Level(dark, bright - dark, of_surface=True)


def bias_of(frame: Frame, camera: Camera) -> float:
    """Return a frame's value of no light: its own where it is calibrated, else the rig's."""
    return camera.bias_adu if frame.bias_adu is None else frame.bias_adu


def exposure_level(frame: Frame, registered: Registered) -> Level:
    """Return the level that turns values into counts a second."""
    exposure_s = registered.exposure_s if np.isfinite(registered.exposure_s) else frame.exposure_s
    return Level(
        bias_of(frame, registered.camera), float(exposure_s) if exposure_s and exposure_s > 0 else 1.0
    )


def limb_steepness(frame: Frame, limb_px: tuple[float, float, float], level: Level) -> float:
    """Return how steep the limb is, in shares of the disc's light a radius: larger is sharper.

    The median over 720 directions of the radial profile is taken before the slope, so that noise does not
    count as detail. NaN when most of the limb is outside the frame.
    """
    import cv2

    x_px, y_px, radius_px = limb_px
    angle = np.radians(np.arange(0, 360, 0.5))
    reach = 1.0 + np.linspace(-1, 1, 65) * min(8.0 / radius_px, 0.08)
    map_x = (x_px + radius_px * reach[:, None] * np.cos(angle)).astype(np.float32)
    map_y = (y_px + radius_px * reach[:, None] * np.sin(angle)).astype(np.float32)
    ring = cv2.remap(
        frame.data, map_x, map_y, cv2.INTER_LINEAR, borderMode=cv2.BORDER_CONSTANT, borderValue=float("nan")
    )
    complete = np.isfinite(ring).all(axis=0)
    if complete.mean() < 0.4:
        return float("nan")
    profile = np.median((ring[:, complete] - level.dark) / level.unit, axis=1)
    return float(-np.gradient(profile, reach).min())
