"""The outline of a round body seen through refracting air, and the way back from refracted to true offsets.

Directions in a frame are given by `zenith_angle_deg`: the polar angle (from +x toward +y) at which the zenith lies.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.sky.observer import Observer
from planner.sky.refraction import refraction_arcsec, true_altitude_deg


def pixel_angle_deg(position_angle_deg: float, rotation_deg: float, parity: int) -> float:
    """Return the polar angle in the array (from +x toward +y) of a position angle (ICRS north through east)."""
    turn = np.radians(position_angle_deg - rotation_deg)
    return float(np.degrees(np.arctan2(np.cos(turn), -parity * np.sin(turn))))


@dataclass(frozen=True)
class Outline:
    """How a disc of `semidiameter_arcsec` is distorted by refraction; the default is no air at all.

    `altitude_deg`: true altitude of the middle. Offsets along the vertical change by the difference of refraction,
    offsets along the horizon by the convergence of vertical circles.
    """

    altitude_deg: float = 90.0
    zenith_angle_deg: float = 90.0
    semidiameter_arcsec: float = 960.0
    observer: Observer | None = None

    @classmethod
    def seen(
        cls,
        apparent_altitude_deg: float,
        zenith_pa_deg: float,
        rotation_deg: float,
        parity: int,
        semidiameter_arcsec: float,
        observer: Observer | None,
    ) -> Outline:
        """Build from the altitude at which the middle is seen and the camera's orientation."""
        return cls(
            float(true_altitude_deg(apparent_altitude_deg, observer)),
            pixel_angle_deg(zenith_pa_deg, rotation_deg, parity),
            semidiameter_arcsec,
            observer,
        )

    def _refract(self, along: np.ndarray, across: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Map true offsets (arcsec, up and to the side) to refracted ones."""
        if self.observer is None:
            return along, across
        here = float(refraction_arcsec(self.altitude_deg, self.observer))
        there = refraction_arcsec(self.altitude_deg + along / 3600, self.observer)
        altitude = np.radians(self.altitude_deg + along / 3600)
        converge = np.cos(altitude + np.radians(there / 3600)) / np.maximum(np.cos(altitude), 1e-6)
        if self.altitude_deg > 89.0:
            converge = np.ones_like(converge)
        return along + there - here, across * converge

    def ratio(self, angle_rad: np.ndarray) -> np.ndarray:
        """Return the outline's distance from the image of the true centre, over the true radius, at polar angles."""
        if self.observer is None:
            return np.ones_like(angle_rad)
        true = np.linspace(-np.pi, np.pi, 721)
        along, across = self._refract(
            self.semidiameter_arcsec * np.cos(true), self.semidiameter_arcsec * np.sin(true)
        )
        angle = np.unwrap(np.arctan2(across, along))
        size = np.hypot(along, across) / self.semidiameter_arcsec
        turned = np.asarray(angle_rad) - np.radians(self.zenith_angle_deg)
        return np.interp(turned, angle, size, period=2 * np.pi)

    def true_offset_px(
        self, dx_px: np.ndarray, dy_px: np.ndarray, scale_arcsec_px: float
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return the offset that a point would have from the disc's middle without air; inverts to 1e-4 arcsec."""
        zenith = np.radians(self.zenith_angle_deg)
        up, side = np.array([np.cos(zenith), np.sin(zenith)]), np.array([-np.sin(zenith), np.cos(zenith)])
        seen_along = (dx_px * up[0] + dy_px * up[1]) * scale_arcsec_px
        seen_across = (dx_px * side[0] + dy_px * side[1]) * scale_arcsec_px
        along, across = np.asarray(seen_along, float), np.asarray(seen_across, float)
        for _ in range(6):
            now_along, now_across = self._refract(along, across)
            along, across = along + seen_along - now_along, across + seen_across - now_across
        return (
            (along * up[0] + across * side[0]) / scale_arcsec_px,
            (along * up[1] + across * side[1]) / scale_arcsec_px,
        )
