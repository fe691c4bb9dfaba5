"""Two bodies that pass each other on the sky, and the instants at which their limbs touch.

Contacts are solved on the chord: separation squared minus the squared sum (outer) or difference (inner) of the
angular radii is close to a parabola in time, so its minimum splits the two contacts however close together they
are. Directions are un-aberrated and topocentric: aberration would scale the larger disc by up to 1e-4, and
refraction cancels where two limbs touch.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from planner.events.roots import minima_near, roots_between
from planner.sky import places
from planner.sky.observer import Observer
from planner.sky.stars import Star

RAD_ARCSEC = places.RAD_ARCSEC


# A star is put so far away that a site has no parallax on it: 1e15 km, 30 parsec.
STAR_DISTANCE_KM = 1e15
_SPEED_STEP_S = 60.0


class Track(Protocol):
    """Where something is: vectors (3, n) in km from the observer, with light-time.

    `here_km`, the observer's barycentric position, saves work when it is at hand.
    """

    def __call__(
        self, observer: Observer | None, tt_s: np.ndarray, here_km: np.ndarray | None = None
    ) -> np.ndarray:
        """Return the vectors at these times."""
        ...


def body_track(body: str) -> Track:
    """Return the track of the Sun, the Moon or a planet."""

    def track(observer: Observer | None, tt_s: np.ndarray, here_km: np.ndarray | None = None) -> np.ndarray:
        return places.direction(body, observer, tt_s, here_km).vector_km

    return track


def star_track(star: Star) -> Track:
    """Return the track of a star, with proper motion and annual parallax, at the distance of a point."""

    def track(observer: Observer | None, tt_s: np.ndarray, here_km: np.ndarray | None = None) -> np.ndarray:
        return star.vector(observer, tt_s, here_km) * STAR_DISTANCE_KM

    return track


@dataclass(frozen=True)
class Shape:
    """Size of a body's outline: a spheroid about `pole` (unit vector, ICRS); a ring is one without thickness.

    `polar_over_equatorial` 1 makes it a sphere, and the pole is not looked at.
    """

    equatorial_km: float
    polar_over_equatorial: float = 1.0
    pole: tuple[float, float, float] | None = None

    def reach_km(self, toward: np.ndarray) -> np.ndarray | float:
        """Return how far the outline reaches along `toward` (3, n), unit vectors across the line of sight.

        Exact for the parallel projection of a spheroid: its support function.
        """
        if self.pole is None or self.polar_over_equatorial == 1.0:
            return self.equatorial_km
        along_pole = np.einsum("i,i...->...", np.asarray(self.pole), toward)
        return self.equatorial_km * np.sqrt(1.0 - (1.0 - self.polar_over_equatorial**2) * along_pole**2)


@dataclass(frozen=True)
class LitShape:
    """Outline of the sunlit part of a sphere: `bright` is the unit vector across the line of sight to the Sun's side.

    The convex outline: half the limb, and half the terminator's ellipse while it bulges, else the cusps.
    """

    radius_km: float
    bright: tuple[float, float, float]
    phase_angle_deg: float

    def reach_km(self, toward: np.ndarray) -> np.ndarray:
        """Return how far the lit part reaches along `toward` (3, n), unit vectors across the line of sight."""
        along = np.einsum("i,i...->...", np.asarray(self.bright), toward)
        flat = max(np.cos(np.radians(self.phase_angle_deg)), 0.0)
        dark_side = np.sqrt(1.0 - along**2 * (1.0 - flat**2))
        return self.radius_km * np.where(along >= 0.0, 1.0, dark_side)


@dataclass(frozen=True)
class Sight:
    """A near and a far body at n times, as (3, n) vectors in km from the observer, and what follows from them.

    `toward`: unit vectors across the line of sight to the far body, from its centre toward the near one's.
    """

    tt_s: np.ndarray
    near_km: np.ndarray
    far_km: np.ndarray

    @property
    def near_distance_km(self) -> np.ndarray:
        """Distance of the near body."""
        return np.sqrt(np.einsum("i...,i...->...", self.near_km, self.near_km))

    @property
    def far_distance_km(self) -> np.ndarray:
        """Distance of the far body."""
        return np.sqrt(np.einsum("i...,i...->...", self.far_km, self.far_km))

    @property
    def separation_rad(self) -> np.ndarray:
        """Angle between the centres, good to 1e-16 rad however small it is."""
        return places.separation_arcsec(self.near_km, self.far_km) / RAD_ARCSEC

    @property
    def toward(self) -> np.ndarray:
        """Direction of the near body from the far one on the sky."""
        axis = self.far_km / self.far_distance_km
        offset = self.near_km - axis * np.einsum("i...,i...->...", self.near_km, axis)
        length = np.sqrt(np.einsum("i...,i...->...", offset, offset))
        return offset / np.where(length > 0, length, 1.0)


@dataclass(frozen=True)
class Passing:
    """A near body that passes a far one, as an observer (None: the geocentre) sees it."""

    near: Track
    far: Track
    near_shape: Shape
    far_shape: Shape | LitShape
    observer: Observer | None

    def sight(self, tt_s: np.ndarray) -> Sight:
        """Return both bodies at these times."""
        tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
        here_km = places.observer_position_km(self.observer, tt_s)
        near_km = self.near(self.observer, tt_s, here_km)
        return Sight(tt_s, near_km, self.far(self.observer, tt_s, here_km))

    def radii_rad(self, sight: Sight, inner: bool = False) -> tuple[np.ndarray, np.ndarray]:
        """Return the angular radii of near and far body along the line between their centres.

        For outer contacts the far body's side toward the near one counts, for `inner` ones its other side.
        """
        toward = sight.toward
        near = np.arcsin(np.minimum(1.0, self.near_shape.reach_km(toward) / sight.near_distance_km))
        far_side = -toward if inner else toward
        far = np.arcsin(np.minimum(1.0, self.far_shape.reach_km(far_side) / sight.far_distance_km))
        return near, far

    def chord(self, inner: bool) -> Callable[[np.ndarray, np.ndarray], np.ndarray]:
        """Return the function of time (rad^2) that is zero when the limbs touch."""

        def squared(tt_s: np.ndarray, which: np.ndarray) -> np.ndarray:
            sight = self.sight(tt_s)
            near, far = self.radii_rad(sight, inner)
            limit = near - far if inner else near + far
            return sight.separation_rad**2 - limit**2

        return squared

    def closest(self, guess_tt_s: np.ndarray, step_s: float, reach_s: float) -> np.ndarray:
        """Return the instants of least separation nearest to the guesses, NaN where there is none in reach."""
        return minima_near(
            lambda tt_s, which: self.sight(tt_s).separation_rad ** 2, guess_tt_s, step_s, reach_s
        )

    def contacts(self, closest_tt_s: np.ndarray, reach_s: float, inner: bool) -> np.ndarray:
        """Return (n, 2) instants at which limbs touch before and after the closest approach; NaN where they do not.

        `reach_s` must be longer than half the passage. Straight motion tells where to look; where the contact is not
        found there, the whole reach is searched.
        """
        closest_tt_s = np.atleast_1d(np.asarray(closest_tt_s, dtype=float))
        count = len(closest_tt_s)
        times = np.concatenate([closest_tt_s, closest_tt_s + _SPEED_STEP_S])
        sight = self.sight(times)
        near, far = self.radii_rad(sight, inner)
        limit = np.abs(near - far if inner else near + far)[:count]
        apart = sight.separation_rad[:count]
        relative = sight.near_km / sight.near_distance_km - sight.far_km / sight.far_distance_km
        moved = relative[:, count:] - relative[:, :count]
        speed = np.sqrt((moved**2).sum(axis=0)) / _SPEED_STEP_S
        found = np.full((count, 2), np.nan)
        meet = np.flatnonzero(apart < limit)
        if not len(meet):
            return found
        half = np.sqrt(limit[meet] ** 2 - apart[meet] ** 2) / speed[meet]
        slack = np.minimum(0.05 * half + 20.0, half)
        middle = np.tile(closest_tt_s[meet], 2)
        guess = middle + np.concatenate([-half, half])
        squared = self.chord(inner)
        touch = roots_between(squared, guess - np.tile(slack, 2), guess + np.tile(slack, 2))
        lost = np.flatnonzero(np.isnan(touch))
        if len(lost):
            before = lost < len(meet)
            low = np.where(before, middle[lost] - reach_s, middle[lost])
            high = np.where(before, middle[lost], middle[lost] + reach_s)
            touch[lost] = roots_between(squared, low, high)
        found[meet] = touch.reshape(2, -1).T
        return found
