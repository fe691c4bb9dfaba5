"""Bending of light in the air: true and apparent altitude, and what it does to a disc.

The refraction integral of Auer & Standish 2000, AJ 119, 2472, through a dry standard atmosphere that starts from the
observer's pressure and temperature (temperature falling 6.5 K a kilometre to 11 km, then constant: Hohenkerk &
Sinclair 1985, NAO Technical Note 63), at 550 nm. It agrees with ERFA's constants to 0.1" above 20 degrees. Real air
differs by 1 % at 10 degrees of altitude and by minutes of arc at the horizon. Below the horizon refraction fades to
zero at 3 degrees of depression, so that bodies well below it are left alone.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from planner.sky.bodies import EARTH_RADIUS_KM
from planner.sky.observer import Observer

_WAVELENGTH_UM = 0.55
_LAPSE_K_KM = 6.5
_TROPOPAUSE_KM = 11.0
_TOP_KM = 80.0
_GRAVITY_KM_S2 = 9.784e-3  # mean of the air column: Hohenkerk & Sinclair 1985
_GAS_CONSTANT = 8.314462618 / 28.9644e-3 * 1e-6  # dry air: R / M in km^2 s^-2 K^-1
_DEEPEST_DEG = -3.0


def refraction_arcsec(true_altitude_deg: np.ndarray | float, observer: Observer | None) -> np.ndarray:
    """Return how much higher than its true altitude a point is seen; 0 without an observer or at pressure 0."""
    altitude = np.asarray(true_altitude_deg, float)
    table = _table_of(observer)
    if table is None:
        return np.zeros_like(altitude)
    true_deg, _, bent_arcsec = table
    return np.interp(altitude, true_deg, bent_arcsec)


def apparent_altitude_deg(true_altitude_deg: np.ndarray | float, observer: Observer | None) -> np.ndarray:
    """Return the altitude at which a point is seen."""
    return np.asarray(true_altitude_deg) + refraction_arcsec(true_altitude_deg, observer) / 3600.0


def true_altitude_deg(apparent_altitude_deg: np.ndarray | float, observer: Observer | None) -> np.ndarray:
    """Return the airless altitude of a point seen at this altitude: the inverse of `apparent_altitude_deg`."""
    seen = np.asarray(apparent_altitude_deg, float)
    table = _table_of(observer)
    if table is None:
        return seen.copy()
    true_deg, seen_deg, _ = table
    # both are nodes of one line, so that the two directions undo each other
    return np.where((seen >= seen_deg[0]) & (seen <= seen_deg[-1]), np.interp(seen, seen_deg, true_deg), seen)


def disc_flattening(
    true_altitude_deg: np.ndarray, semidiameter_arcsec: np.ndarray, observer: Observer | None
) -> np.ndarray:
    """Return (horizontal - vertical) / horizontal diameter of a disc of this size seen through the air."""
    reach = np.asarray(semidiameter_arcsec, float) / 3600.0
    altitude = np.asarray(true_altitude_deg, float)
    top = refraction_arcsec(altitude + reach, observer)
    bottom = refraction_arcsec(altitude - reach, observer)
    return (bottom - top) / (2.0 * reach * 3600.0)


def _table_of(observer: Observer | None) -> tuple[np.ndarray, np.ndarray, np.ndarray] | None:
    if observer is None or observer.pressure_here_hpa == 0.0:
        return None
    return _table(observer.pressure_here_hpa, observer.temperature_c, observer.height_m)


@lru_cache(maxsize=64)
def _table(
    pressure_hpa: float, temperature_c: float, height_m: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return nodes (true altitude, apparent altitude, refraction in arcseconds), true altitude ascending."""
    # closer together towards the horizon
    seen = 90.0 * np.linspace(0.0, 1.0, 1201) ** 2
    bent = _integral_arcsec(np.radians(90.0 - seen), pressure_hpa, temperature_c + 273.15, height_m * 1e-3)
    true = seen - bent / 3600.0
    # below the horizon: a straight fade, and nothing beneath it
    seen = np.concatenate([[-90.0, _DEEPEST_DEG], seen])
    bent = np.concatenate([[0.0, 0.0], bent])
    return np.concatenate([[-90.0, _DEEPEST_DEG], true]), seen, bent


def _integral_arcsec(
    zenith_angle: np.ndarray, pressure_hpa: float, temperature_k: float, height_km: float
) -> np.ndarray:
    """Return the refraction in arcseconds for apparent zenith angles up to 90 degrees.

    The integral over the local zenith angle psi of -r n'/(n + r n'), Auer & Standish 2000, eq. 3, in two layers.
    """
    # refractivity of dry air at 0 C and 1013.25 hPa in parts per million: Hohenkerk & Sinclair 1985, eq. 5 (ERFA refco)
    w2 = _WAVELENGTH_UM**2
    n0 = 1e-6 * (287.6155 + 1.62887 / w2 + 0.0136 / w2**2) * pressure_hpa / 1013.25 * 273.15 / temperature_k
    start = EARTH_RADIUS_KM + height_km
    knee = max(EARTH_RADIUS_KM + _TROPOPAUSE_KM, start + 1.0)
    exponent = _GRAVITY_KM_S2 / (_GAS_CONSTANT * _LAPSE_K_KM) - 1.0

    def lower(r: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        ratio = 1.0 - _LAPSE_K_KM * (r - start) / temperature_k
        n = n0 * ratio**exponent
        return 1.0 + n, -n * exponent * _LAPSE_K_KM / (temperature_k * ratio)

    cold = temperature_k - _LAPSE_K_KM * (knee - start)
    at_knee = float(lower(np.array(knee))[0]) - 1.0
    decay = _GRAVITY_KM_S2 / (_GAS_CONSTANT * cold)

    def upper(r: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        n = at_knee * np.exp(-decay * (r - knee))
        return 1.0 + n, -decay * n

    snell = (1.0 + n0) * start * np.sin(zenith_angle)
    nodes, weights = np.polynomial.legendre.leggauss(32)
    total = np.zeros_like(zenith_angle)
    for layer, bottom, top in ((lower, start, knee), (upper, knee, EARTH_RADIUS_KM + _TOP_KM)):
        angles = [np.arcsin(np.minimum(snell / (layer(np.array(r))[0] * r), 1.0)) for r in (bottom, top)]
        half = (angles[0] - angles[1]) / 2.0
        psi = (angles[0] + angles[1])[:, None] / 2.0 + half[:, None] * nodes
        r = snell[:, None] / np.maximum(np.sin(psi), 1e-9)
        r = np.clip(r, bottom, top)
        for _ in range(6):
            n, slope = layer(r)
            r = np.clip(
                r - (n * r - snell[:, None] / np.maximum(np.sin(psi), 1e-9)) / (n + r * slope), bottom, top
            )
        n, slope = layer(r)
        total += half * ((-r * slope / (n + r * slope)) @ weights)
    return np.degrees(total) * 3600.0
