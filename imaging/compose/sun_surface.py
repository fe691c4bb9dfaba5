"""The Sun turns while a transit lasts: where a point of its surface was at another instant.

In six hours a spot in the middle of the disc moves by 55 arcsec; undone frame by frame, spots stay sharp in a blend.
Rotation: Howard, Harvey & Forgach 1990, Solar Physics 130, 295 (magnetic features), from memory. The view is taken as
orthographic, which is 0.3 degrees off near the limb, 0.5 % of the shift.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from planner.sky.bodies import pole_radec_deg

# Sidereal rate in microradians a second: A + B sin^2 b + C sin^4 b, and the Earth's mean motion about the Sun
RATE_A, RATE_B, RATE_C = 2.894, -0.428, -0.370
EARTH_RATE = 2 * np.pi / (365.2564 * 86400.0) * 1e6
# Beyond this share of the radius the surface is seen too steeply, and the limb itself must not move
FADE_FROM, FADE_TO = 0.94, 0.985

Surface = Callable[[np.ndarray, np.ndarray], tuple[np.ndarray, np.ndarray]]


@dataclass(frozen=True)
class SunView:
    """How the Sun is seen: radius, position angle of its north pole, heliographic latitude of the disc's middle."""

    radius_arcsec: float
    pole_pa_deg: float
    middle_latitude_deg: float

    def turned(self, elapsed_s: float) -> Surface:
        """Return the map from a place on the disc now to where that piece of surface is `elapsed_s` later.

        Both are offsets (east, north) in arcseconds from the disc's centre; places off the disc stay.
        """

        def surface(east: np.ndarray, north: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
            return self._moved(np.asarray(east, float), np.asarray(north, float), elapsed_s)

        return surface

    def _moved(self, east: np.ndarray, north: np.ndarray, elapsed_s: float) -> tuple[np.ndarray, np.ndarray]:
        pa, tilt = np.radians(self.pole_pa_deg), np.radians(self.middle_latitude_deg)
        # x toward solar west, y toward solar north, z toward the observer, in solar radii
        x = (-east * np.cos(pa) + north * np.sin(pa)) / self.radius_arcsec
        y = (east * np.sin(pa) + north * np.cos(pa)) / self.radius_arcsec
        r = np.hypot(x, y)
        z = np.sqrt(np.clip(1 - r**2, 0, None))
        sin_b = np.clip(y * np.cos(tilt) + z * np.sin(tilt), -1, 1)
        toward = z * np.cos(tilt) - y * np.sin(tilt)
        longitude, cos_b = np.arctan2(x, toward), np.sqrt(1 - sin_b**2)
        rate = RATE_A + RATE_B * sin_b**2 + RATE_C * sin_b**4 - EARTH_RATE
        longitude = longitude + rate * 1e-6 * elapsed_s
        new_x, new_toward = cos_b * np.sin(longitude), cos_b * np.cos(longitude)
        new_y = sin_b * np.cos(tilt) - new_toward * np.sin(tilt)
        share = np.clip((FADE_TO - r) / (FADE_TO - FADE_FROM), 0, 1)
        dx, dy = (new_x - x) * share, (new_y - y) * share
        radius = self.radius_arcsec
        return (
            east + (-dx * np.cos(pa) + dy * np.sin(pa)) * radius,
            north + (dx * np.sin(pa) + dy * np.cos(pa)) * radius,
        )


def sun_view(radius_arcsec: float, pole_pa_deg: float, ra_deg: float, dec_deg: float, tt_s: float) -> SunView:
    """Return the view of the Sun in a direction (ICRS)."""
    pole_ra, pole_dec = (
        np.radians(float(np.squeeze(angle))) for angle in pole_radec_deg("sun", np.array([tt_s]))
    )
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    pole = np.array(
        [np.cos(pole_dec) * np.cos(pole_ra), np.cos(pole_dec) * np.sin(pole_ra), np.sin(pole_dec)]
    )
    toward_sun = np.array([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
    return SunView(radius_arcsec, pole_pa_deg, float(np.degrees(np.arcsin(-(pole @ toward_sun)))))
