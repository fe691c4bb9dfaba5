"""The Moon's limb as it is: mountains and valleys at the libration of the moment.

The limb at a position angle is the highest angular distance from the Moon's centre of mass that terrain reaches in
the plane of observer, centre and that angle. Lines of sight lie in that plane, so that the search along it is exact.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from planner.sky.elevation import ElevationGrid, elevation_grid
from planner.sky.moonorientation import MoonOrientation, moon_orientation
from planner.sky.observer import Observer
from planner.sky.places import direction

REFERENCE_RADIUS_KM = 1737.4
# How far from the geometric limb terrain can rise over it: 14 km of relief hide behind acos(1 - 14/1737) = 7.3 degrees.
_REACH_DEG = 7.5
_CHUNK = 400_000

# The smooth limb's centre from the centre of mass, mean-Earth axes, km, and what the real limb leaves about that circle
# (1-sigma at one place): fitted to the limbs of the 4 pixels a degree LOLA grid at 300 librations. About the centre
# of mass itself it is 1.66 km. Almanacs shift the Moon by +0.50" in longitude and -0.25" in latitude for the same
# reason (0.93 and -0.47 km; from memory).
LIMB_CENTRE_KM = np.array([-0.12, -0.97, -0.73])
SMOOTH_LIMB_SIGMA_KM = 1.45

# Relief finer than a grid of 4 pixels a degree raises the limb by 0.32 km in the mean and leaves 0.28 km (1-sigma) at
# one place. Averaging the grid over 2, 4 and 8 pixels lowers limbs by 0.24, 0.29 and 0.28 km more at each step, and
# changes them by 0.21, 0.28 and 0.35 km (rms); continued downwards that series gives these figures, the mean to half
# of itself. With it the mean limb is 1738.0 km; almanacs use 1738.09 km.
_RISE_AT_4_KM, _RISE_POWER = 0.32, 0.8
_SIGMA_AT_4_KM, _SIGMA_POWER = 0.28, 0.5


@dataclass(frozen=True, eq=False)
class LimbModel:
    """An elevation grid with the orientation that turns it to the sky."""

    grid: ElevationGrid
    orientation: MoonOrientation

    @property
    def rise_km(self) -> float:
        """How much relief finer than the grid raises the limb in the mean; part of every height given."""
        return _RISE_AT_4_KM * (4.0 / self.grid.pixels_per_degree) ** _RISE_POWER

    @property
    def sigma_km(self) -> float:
        """What remains unknown of the limb at one place, 1-sigma: 0.28, 0.14, 0.07 km at 4, 16, 64 pixels a degree."""
        return _SIGMA_AT_4_KM * (4.0 / self.grid.pixels_per_degree) ** _SIGMA_POWER

    def text(self, tt_s: float) -> str:
        """Return what the limb is made of, in one line for people."""
        return (
            f"{self.grid.path.name}, {self.grid.pixels_per_degree:g} pixels a degree, raised {self.rise_km:.2f} km for "
            f"finer relief, 1-sigma {self.sigma_km:.2f} km; {self.orientation.source(tt_s)}"
        )


def limb_model(
    elevation: str | Path,
    orientation: str | Path | None = None,
    frame: str | Path | None = None,
) -> LimbModel:
    """Return the limb model of files the user names; without an orientation kernel the libration is analytic.

    Raises InputError when a file named cannot be read as what it should be.
    """
    return LimbModel(elevation_grid(elevation), moon_orientation(orientation, frame))


def limb_profile(
    observer: Observer | None,
    tt_s: float,
    model: LimbModel,
    position_angle_deg: np.ndarray | None = None,
) -> tuple[np.ndarray, np.ndarray]:
    """Return (position_angle_deg, height_km) of the whole limb at one instant, or at the angles given.

    Position angles count from ICRS north through east about the centre of mass. Heights are above 1737.4 km; see
    `limb_height_km`.
    """
    if position_angle_deg is None:
        step = min(0.25, 1.0 / model.grid.pixels_per_degree)
        position_angle_deg = np.arange(0.0, 360.0, step)
    angles = np.asarray(position_angle_deg, float)
    return angles, limb_height_km(observer, np.full(len(angles), float(tt_s)), angles, model)


def limb_height_km(
    observer: Observer | None, tt_s: np.ndarray, position_angle_deg: np.ndarray, model: LimbModel
) -> np.ndarray:
    """Return the height of the limb at pairs of instant and position angle (ICRS north through east), (n,).

    The limb is seen at the angle asin((1737.4 + height) / distance) from the centre of mass, with the topocentric
    distance of `places.direction`. Accuracy: `LimbModel.sigma_km`.
    """
    tt_s = np.atleast_1d(np.asarray(tt_s, float))
    angle = np.radians(np.broadcast_to(position_angle_deg, tt_s.shape))
    times, inverse = np.unique(tt_s, return_inverse=True)
    moon = direction("moon", observer, times)
    axes = model.orientation.mean_earth_axes(times - moon.light_time_s)
    ra, dec = np.radians(moon.ra_deg), np.radians(moon.dec_deg)
    sight = moon.vector_km / moon.distance_km
    north = np.stack([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)])
    east = np.stack([-np.sin(ra), np.cos(ra), np.zeros_like(ra)])
    facing, north, east = (np.einsum("nij,jn->in", axes, v) for v in (-sight, north, east))

    grid, distance = model.grid, moon.distance_km
    count = int(np.ceil(2.0 * _REACH_DEG * grid.pixels_per_degree * 2.0)) + 1
    offset = np.radians(np.linspace(-_REACH_DEG, _REACH_DEG, count))
    height = np.empty(len(tt_s))
    step = max(1, _CHUNK // count)
    for low in range(0, len(tt_s), step):
        part = slice(low, low + step)
        k = inverse[part]
        outward = north[:, k] * np.cos(angle[part]) + east[:, k] * np.sin(angle[part])
        # angle at the Moon's centre from the point below the observer
        psi = np.arccos(REFERENCE_RADIUS_KM / distance[k])[:, None] + offset
        cos, sin = np.cos(psi), np.sin(psi)
        point = facing[:, k, None] * cos + outward[:, :, None] * sin
        latitude = np.degrees(np.arcsin(np.clip(point[2], -1.0, 1.0)))
        longitude = np.degrees(np.arctan2(point[1], point[0]))
        radius = grid.radius_km + grid.height_km(latitude, longitude)
        tangent = (radius * sin / (distance[k][:, None] - radius * cos)).max(axis=1)
        height[part] = distance[k] * tangent / np.sqrt(1.0 + tangent**2) - REFERENCE_RADIUS_KM
    return height + model.rise_km


def limb_centre_km(tt_s: np.ndarray, orientation: MoonOrientation | None = None) -> np.ndarray:
    """Return the centre of the smooth limb from the centre of mass, ICRS axes, (3, n) in km.

    Added to the vector of the Moon it moves the smooth limb to where the real one lies in the mean: without it contacts
    are off by 0.7 s in the median. What remains is `SMOOTH_LIMB_SIGMA_KM`.
    """
    axes = (orientation or moon_orientation()).mean_earth_axes(tt_s)
    return np.einsum("nji,j->in", axes, LIMB_CENTRE_KM)
