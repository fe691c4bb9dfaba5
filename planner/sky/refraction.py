"""Bending of light in the air: true and apparent altitude, and what it does to a disc.

Uses the closed form of Saemundsson 1986, Sky & Telescope 72, 70 (Meeus, Astronomical Algorithms, eq. 16.4), scaled
with pressure and temperature; it agrees with Bennett 1982, J. Navigation 35, 255 to 0.07' down to the horizon. Real
air differs by 1 % at 10 degrees of altitude and by many minutes of arc at the horizon. Refraction fades to zero
between 1 and 3 degrees below the horizon, so that bodies well below it are left alone.
"""

from __future__ import annotations

import numpy as np

from planner.sky.observer import Observer


def refraction_arcsec(true_altitude_deg: np.ndarray, observer: Observer | None) -> np.ndarray:
    """Return how much higher than its true altitude a point is seen; 0 without an observer or at pressure 0."""
    altitude = np.asarray(true_altitude_deg, float)
    if observer is None or observer.pressure_here_hpa == 0.0:
        return np.zeros_like(altitude)
    bounded = np.maximum(altitude, -3.0)
    air = observer.pressure_here_hpa / 1010.0 * 283.0 / (273.0 + observer.temperature_c)
    bent = 61.2 * air / np.tan(np.radians(bounded + 10.3 / (bounded + 5.11)))
    # 1.02 cot(90 + 0.108) is -0.1"; a point in the zenith is not bent
    bent = np.maximum(bent, 0.0)
    return bent * np.clip((altitude + 3.0) / 2.0, 0.0, 1.0)


def apparent_altitude_deg(true_altitude_deg: np.ndarray, observer: Observer | None) -> np.ndarray:
    """Return the altitude at which a point is seen."""
    return np.asarray(true_altitude_deg) + refraction_arcsec(true_altitude_deg, observer) / 3600.0


def true_altitude_deg(apparent_altitude_deg: np.ndarray, observer: Observer | None) -> np.ndarray:
    """Return the airless altitude of a point seen at this altitude: the exact inverse above the horizon."""
    seen = np.asarray(apparent_altitude_deg, float)
    true = seen.copy()
    for _ in range(12):
        true = seen - refraction_arcsec(true, observer) / 3600.0
    return true


def vertical_scale(true_altitude_deg: np.ndarray, observer: Observer | None) -> np.ndarray:
    """Return by what factor refraction shrinks small vertical lengths: 1 - dR/dh, below 1 near the horizon."""
    step = 1.0 / 60.0
    altitude = np.asarray(true_altitude_deg, float)
    upper = refraction_arcsec(altitude + step, observer)
    lower = refraction_arcsec(altitude - step, observer)
    return 1.0 + (upper - lower) / (2.0 * step * 3600.0)


def disc_flattening(
    true_altitude_deg: np.ndarray, semidiameter_arcsec: np.ndarray, observer: Observer | None
) -> np.ndarray:
    """Return (horizontal - vertical) / horizontal diameter of a disc of this size seen through the air."""
    reach = np.asarray(semidiameter_arcsec, float) / 3600.0
    altitude = np.asarray(true_altitude_deg, float)
    top = refraction_arcsec(altitude + reach, observer)
    bottom = refraction_arcsec(altitude - reach, observer)
    return (bottom - top) / (2.0 * reach * 3600.0)
