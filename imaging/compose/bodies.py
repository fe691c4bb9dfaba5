"""A body of a visit stacked on itself, so that it does not smear, one layer an exposure length, then merged."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np

from imaging.compose.canvas import Canvas
from imaging.compose.exposures import merged
from imaging.compose.light import Level, Light
from imaging.compose.material import Registered
from imaging.compose.plane import plane_to_sky, sky_to_plane
from imaging.compose.stack import Stack, new_stack
from imaging.frames.frame import Frame

PATCH_MOST_PX = 90.0
Place = Callable[[Registered], tuple[float, float]]


@dataclass(frozen=True)
class BodyPatch:
    """A body of a visit: its light on a small canvas anchored on it, and its mean direction (ICRS degrees)."""

    image: np.ndarray
    canvas: Canvas
    place_deg: tuple[float, float]

    def brightened(self, factor: float) -> BodyPatch:
        """Return the patch with its light multiplied."""
        return replace(self, image=factor * self.image)


@dataclass
class BodyStack:
    """Takes in the frames of a visit, group by group of exposure lengths, the longest first.

    `place`: where the body stands in a frame (ICRS degrees).
    """

    canvas: Canvas
    place_deg: tuple[float, float]
    place: Place
    colour: bool
    layers: list[np.ndarray] = field(default_factory=list)
    whole: np.ndarray | None = None

    @classmethod
    def on(
        cls,
        picture: Canvas,
        anchor_deg: tuple[float, float],
        frames: list[Registered],
        place: Place,
        colour: bool,
    ) -> BodyStack:
        """Return a stack whose small canvas has the pixel grid of the picture at the body's mean place."""
        offsets = np.array([sky_to_plane(*anchor_deg, *place(frame)) for frame in frames], float).mean(axis=0)
        x_px, y_px = (float(value) for value in picture.from_plane(*offsets))
        half = int(PATCH_MOST_PX) + 4
        small = replace(
            picture,
            width_px=2 * half + 1,
            height_px=2 * half + 1,
            anchor_x_px=half + x_px - round(x_px),
            anchor_y_px=half + y_px - round(y_px),
        )
        ra, dec = plane_to_sky(*anchor_deg, *offsets)
        return cls(small, (float(ra), float(dec)), place, colour)

    def begin(self, frames: int, shortest_of_several: bool) -> None:
        """Begin with a group of exposures; of the shortest of several, burnt out pixels are kept too."""
        shape = (self.canvas.height_px, self.canvas.width_px, *((3,) if self.colour else ()))
        self._stack: Stack = new_stack("clipped", shape, frames)
        self._bright: Stack | None = new_stack("clipped", shape, frames) if shortest_of_several else None

    def add(
        self, pixels: Frame, frame: Registered, level: Level, good: np.ndarray | None, light: Light
    ) -> None:
        """Take in a frame of the group; `good`: its pixels that are not burnt out."""
        place = self.place(frame)
        self._stack.add(light.on_canvas(pixels, frame, self.canvas, place, level, good))
        if self._bright is not None:
            self._bright.add(light.on_canvas(pixels, frame, self.canvas, place, level))

    def end(self) -> None:
        """End the group."""
        self.layers.append(self._stack.result()[0])
        self.whole = self._bright.result()[0] if self._bright is not None else None

    def patch(self) -> BodyPatch:
        """Return the body, what long exposures burn out taken from shorter ones."""
        return BodyPatch(merged(self.layers, self.whole), self.canvas, self.place_deg)
