"""What the user may choose about a picture."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from imaging.compose.stack import require_room
from imaging.frames.calibrating import Calibration

ORIENTATIONS = ("north", "zenith", "ecliptic", "track")
BYTES_A_PIXEL = 8  # FITS 4, TIFF 2, PNG 1, JPEG and the page less
PLOTS_BYTES = 12_000_000
GRIDS = ("auto", "radec", "altaz", "disc")
REGISTRATIONS = ("auto", "sun", "moon", "stars", "target")


@dataclass(frozen=True)
class Choices:
    """Choices with sensible defaults.

    `instants`: how many times the target is drawn. `scale_arcsec_px`: None for the finest scale of the frames.
    `calibration`: of the frames of the plan's rig. `blend`: of the ground (the disc, or the stars). `enlarge`: of
    bodies registered on themselves; it is declared in the picture. `grid`: of the path plot, which shows stars to
    magnitude `star_limit` (None: as many as stand apart). `tick(done, total)` reports progress.
    """

    registration: str = "auto"
    orientation: str = "north"
    blend: str = "clipped"
    instants: int = 9
    scale_arcsec_px: float | None = None
    largest_px: int = 20000
    colour: bool = False
    grid: str = "auto"
    star_limit: float | None = None
    enlarge: float = 1.0
    scratch: Path | None = None
    output: Path | None = None
    threads: int = 2
    calibration: Calibration | None = None
    tick: Callable[[int, int], None] = lambda done, total: None

    def require_room(self, width_px: int, height_px: int) -> None:
        """Raise InputError when the folder of the `output` has no room for the pictures, before any is made."""
        if self.output is not None:
            planes = 3 if self.colour else 1
            needed = BYTES_A_PIXEL * planes * width_px * height_px + PLOTS_BYTES
            require_room(self.output, needed, "writing the pictures")
