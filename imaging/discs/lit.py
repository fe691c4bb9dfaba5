"""A planet's disc as the Sun lights it: what is known of it, its brightness, and its light in cells."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.discs.phase import law_of, light_offset_radii, minnaert
from planner.sky.bodies import SATURN_RINGS_KM, radii_km

# Saturn's rings B and A: inner edge, where they meet (the division counts to A), outer edge, in radii of the globe.
RING_EDGES = tuple(
    SATURN_RINGS_KM[edge] / radii_km("saturn")[0] for edge in ("b_inner", "b_outer", "a_outer")
)


@dataclass(frozen=True)
class Body:
    """What is known of a planet beforehand. Angles are polar, in the array, from +x toward +y.

    `radius_px`: equatorial. `lit_angle_deg`: toward the middle of the lit limb; None when not known, then no
    correction for phase is made. `pole_angle_deg`: of the projected pole, for a flattened disc. `ring_sine`: sine of
    the angle at which Saturn's ring plane is seen; 0 for a body without rings, or with rings edge-on.
    """

    name: str = "planet"
    radius_px: float = 0.0
    phase_angle_deg: float = 0.0
    lit_angle_deg: float | None = None
    flattening: float = 0.0
    pole_angle_deg: float = 90.0
    ring_sine: float = 0.0

    @property
    def reach_px(self) -> float:
        """Radius of all that shines, rings included."""
        return self.radius_px * (RING_EDGES[-1] if self.ring_sine > 0 else 1.0)

    def light_offset_px(self) -> tuple[float, float]:
        """Return the centre of light minus the centre of figure (x, y)."""
        if self.lit_angle_deg is None:
            return 0.0, 0.0
        size = self.radius_px * light_offset_radii(self.phase_angle_deg, law_of(self.name))
        angle = np.radians(self.lit_angle_deg)
        return float(size * np.cos(angle)), float(size * np.sin(angle))


@dataclass(frozen=True)
class LitCells:
    """A lit disc in cells: `x_px`, `y_px` from the centre of figure to the centre of light; `light` (y, x), in sum 1.

    `law_covariance_px2`: of the centre of light (x, y), as the law of scattering is not known.
    """

    x_px: np.ndarray
    y_px: np.ndarray
    light: np.ndarray
    centre_px: tuple[float, float]
    law_covariance_px2: np.ndarray


def lit_cells(body: Body, cell_px: float = 0.4) -> LitCells:
    """Return a planet's lit ellipsoid in cells by Lambert's law; its covariance is what other laws would move."""
    count = int(np.ceil(2 * body.radius_px / cell_px)) | 1
    finer = 5
    line = ((np.arange(count * finer) + 0.5) / (count * finer) * 2 - 1) * body.radius_px
    middle = line.reshape(count, finer).mean(axis=1)

    def lit(exponent: float) -> tuple[np.ndarray, np.ndarray]:
        bright = lit_ellipsoid(line[None, :], line[:, None], body, exponent)
        bright = bright.reshape(count, finer, count, finer).sum(axis=(1, 3)) / bright.sum()
        return bright, np.array([np.sum(bright * middle), np.sum(bright * middle[:, None])])

    light, centre = lit(1.0)
    moved = 0.5 * (lit(1.0)[1] - lit(0.7)[1])
    return LitCells(middle, middle, light, (float(centre[0]), float(centre[1])), np.outer(moved, moved))  # fmt: skip


def lit_ellipsoid(dx: np.ndarray, dy: np.ndarray, body: Body, exponent: float) -> np.ndarray:
    """Return the brightness of a body at offsets (px) from its centre by Minnaert's law; 0 off its outline."""
    toward, side, _ = from_the_light(dx, dy, body, body.radius_px)
    return minnaert(toward, side, body.phase_angle_deg if body.lit_angle_deg is not None else 0.0, exponent)


def from_the_light(
    dx: np.ndarray, dy: np.ndarray, body: Body, radius_px: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return offsets (px) in radii of the outline, a circle made of the ellipse: toward the lit limb, aside, in all."""
    pole = np.radians(body.pole_angle_deg)
    lit = np.radians(body.lit_angle_deg if body.lit_angle_deg is not None else body.pole_angle_deg)
    along = (dx * np.cos(pole) + dy * np.sin(pole)) / (radius_px * (1 - body.flattening))
    across = (dx * np.sin(pole) - dy * np.cos(pole)) / radius_px
    turn = lit - pole
    toward = along * np.cos(turn) - across * np.sin(turn)
    side = along * np.sin(turn) + across * np.cos(turn)
    return toward, side, np.hypot(along, across)


def ring_distance(
    dx: np.ndarray, dy: np.ndarray, body: Body, radius_px: float
) -> tuple[np.ndarray, np.ndarray]:
    """Return the distance in the ring plane, in radii of the globe, of offsets (px), and how fast it grows (1/px)."""
    pole = np.radians(body.pole_angle_deg)
    along = (dx * np.cos(pole) + dy * np.sin(pole)) / (radius_px * body.ring_sine)
    across = (dx * np.sin(pole) - dy * np.cos(pole)) / radius_px
    distance = np.hypot(along, across)
    slope = np.hypot(along / (radius_px * body.ring_sine), across / radius_px) / np.maximum(distance, 1e-6)
    return distance, slope
