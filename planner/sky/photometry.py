"""How bright bodies are, and what the air takes away.

Planets: Mallama & Hilton 2018, Astronomy and Computing 25, 10 (the formulae of the almanacs), V magnitudes.
"""

from __future__ import annotations

import numpy as np

SUN_MAGNITUDE_1_AU = -26.74  # V: Willmer 2018, ApJS 236, 47 (-26.76 in Vega V; -26.74 in common use)


def planet_magnitude(
    body: str,
    sun_distance_au: np.ndarray,
    distance_au: np.ndarray,
    phase_angle_deg: np.ndarray,
    *,
    sub_observer_latitude_deg: np.ndarray | float = 0.0,
    sub_solar_latitude_deg: np.ndarray | float = 0.0,
    year: np.ndarray | float = 2000.0,
    rings: bool = True,
) -> np.ndarray:
    """Return the apparent V magnitude of a planet out of the atmosphere.

    Latitudes (planetographic for Uranus, of the ring plane for Saturn) matter to Saturn and Uranus, the year to
    Neptune. Mars is the mean over its rotation and seasons: within 0.1 magnitude. Outside the phase angles that
    the source fits (unreachable from the Earth) the nearest formula is continued.
    """
    a = np.asarray(phase_angle_deg, float)
    if body == "mercury":
        v = -0.613 + a * (
            6.3280e-2
            + a * (-1.6336e-3 + a * (3.3644e-5 + a * (-3.4265e-7 + a * (1.6893e-9 - 3.0334e-12 * a))))
        )
    elif body == "venus":
        crescent = 236.05828 - 2.81914 * a + 8.39034e-3 * a**2
        v = -4.384 + a * (-1.044e-3 + a * (3.687e-4 + a * (-2.814e-6 + 8.938e-9 * a)))
        v = np.where(a > 163.7, crescent, v)
    elif body == "mars":
        v = np.where(
            a <= 50.0, -1.601 + 2.267e-2 * a - 1.302e-4 * a**2, -0.367 - 0.02573 * a + 3.445e-4 * a**2
        )
    elif body == "jupiter":
        v = np.where(a <= 12.0, -9.395 - 3.7e-4 * a + 6.16e-4 * a**2, _jupiter_wide(a))
    elif body == "saturn":
        v = _saturn(a, sub_observer_latitude_deg, sub_solar_latitude_deg, rings)
    elif body == "uranus":
        tilt = (np.abs(sub_observer_latitude_deg) + np.abs(sub_solar_latitude_deg)) / 2.0
        v = -7.110 - 8.4e-4 * tilt + np.where(a > 3.1, 6.587e-3 * a + 1.045e-4 * a**2, 0.0)
    elif body == "neptune":
        v = np.clip(-6.89 - 0.0054 * (np.asarray(year, float) - 1980.0), -7.00, -6.89)
        v = np.where((a > 1.9) & (np.asarray(year) > 2000.0), v + 7.944e-3 * a + 9.617e-5 * a**2, v)
    else:
        raise ValueError(f"no magnitude formula for {body!r}")
    return v + 5.0 * np.log10(np.asarray(sun_distance_au) * np.asarray(distance_au))


def _jupiter_wide(a: np.ndarray) -> np.ndarray:
    x = a / 180.0
    phase = 1.0 + x * (-1.507 + x * (-0.363 + x * (-0.062 + x * (2.809 - 1.876 * x))))
    return -9.428 - 2.5 * np.log10(np.maximum(phase, 1e-6))


def _saturn(
    a: np.ndarray, observer_deg: np.ndarray | float, sun_deg: np.ndarray | float, rings: bool
) -> np.ndarray:
    globe = np.where(
        a <= 6.5,
        -8.95 - 3.7e-4 * a + 6.16e-4 * a**2,
        -8.94 + a * (2.446e-4 + a * (2.672e-4 + a * (-1.506e-6 + 4.767e-9 * a))),
    )
    if not rings:
        return globe
    both = np.asarray(observer_deg, float) * np.asarray(sun_deg, float)
    sin_b = np.sin(np.radians(np.sqrt(np.maximum(both, 0.0))))
    with_rings = -8.914 - 1.825 * sin_b + 0.026 * a - 0.378 * sin_b * np.exp(-2.25 * a)
    return np.where(a <= 6.5, with_rings, globe)


def moon_magnitude(phase_angle_deg: np.ndarray, distance_km: np.ndarray) -> np.ndarray:
    """Return the V magnitude of the Moon: Allen 1976, Astrophysical Quantities, 3rd ed., section 66.

    Within 0.2 magnitude between quarters; the surge at full Moon and the darker waning side are left out.
    """
    a = np.abs(np.asarray(phase_angle_deg, float))
    return -12.73 + 0.026 * a + 4e-9 * a**4 + 5.0 * np.log10(np.asarray(distance_km) / 384400.0)


def sun_magnitude(distance_au: np.ndarray) -> np.ndarray:
    """Return the V magnitude of the Sun at this distance."""
    return SUN_MAGNITUDE_1_AU + 5.0 * np.log10(np.asarray(distance_au, float))


def asteroid_magnitude(
    h: float, g: float, sun_distance_au: np.ndarray, distance_au: np.ndarray, phase_angle_deg: np.ndarray
) -> np.ndarray:
    """Return the V magnitude of a minor planet in the H, G system (Bowell et al. 1989, Asteroids II, p. 524)."""
    half = np.tan(np.radians(np.asarray(phase_angle_deg, float)) / 2.0)
    phi1, phi2 = np.exp(-3.33 * half**0.63), np.exp(-1.87 * half**1.22)
    lit = np.maximum((1.0 - g) * phi1 + g * phi2, 1e-12)
    return h + 5.0 * np.log10(np.asarray(sun_distance_au) * np.asarray(distance_au)) - 2.5 * np.log10(lit)


def airmass(apparent_altitude_deg: np.ndarray | float) -> np.ndarray:
    """Return the airmass: Kasten & Young 1989, Applied Optics 28, 4735; infinite below the horizon."""
    altitude = np.asarray(apparent_altitude_deg, float)
    above = np.maximum(altitude, 0.0)
    mass = 1.0 / (np.sin(np.radians(above)) + 0.50572 * (above + 6.07995) ** -1.6364)
    return np.where(altitude < 0.0, np.inf, mass)


def extinction_mag(apparent_altitude_deg: np.ndarray | float, extinction_mag_airmass: float) -> np.ndarray:
    """Return how many magnitudes the air takes at this altitude."""
    return extinction_mag_airmass * airmass(apparent_altitude_deg)
