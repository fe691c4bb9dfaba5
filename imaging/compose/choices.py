"""What the user may choose about a picture."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

ORIENTATIONS = ("north", "zenith", "ecliptic", "track")
GRIDS = ("auto", "radec", "altaz", "disc")
REGISTRATIONS = ("auto", "sun", "moon", "stars", "target")


@dataclass(frozen=True)
class Choices:
    """Choices with sensible defaults.

    `instants`: how many times the target is drawn. `scale_arcsec_px`: None for the finest scale of the frames.
    `blend`: of the ground (the disc, or the stars). `enlarge`: of bodies
    registered on themselves; it is declared in the picture. `grid`: of the path plot, which
    shows stars to magnitude `star_limit` (None: as many as stand apart). `tick(done, total)` reports progress.
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
    threads: int = 2
    tick: Callable[[int, int], None] = lambda done, total: None
