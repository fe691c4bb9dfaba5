"""The observer on the ellipsoid: where they stand, and where their horizon lies."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.sky.bodies import EARTH_RADIUS_KM
from planner.sky.pole import celestial_to_terrestrial

# WGS 84: NIMA TR8350.2, third edition, table 3.1
EARTH_FLATTENING = 1 / 298.257223563
# Nominal mean angular velocity of the Earth: IERS Conventions (2010), table 1.2
EARTH_RATE_RAD_S = 7.292115e-5


@dataclass(frozen=True)
class Observer:
    """A place on the WGS 84 ellipsoid; longitudes are east positive, height is above the ellipsoid.

    `horizon` is a tuple of (azimuth_deg, altitude_deg), linearly interpolated and closed over north.
    Pressure 0 means that refraction is off.
    """

    name: str
    latitude_deg: float
    longitude_deg: float
    height_m: float
    position_sigma_m: float = 15.0
    height_sigma_m: float = 20.0
    pressure_hpa: float | None = None
    temperature_c: float = 10.0
    horizon: tuple[tuple[float, float], ...] = ()
    timezone: str = "UTC"

    @property
    def pressure_here_hpa(self) -> float:
        """Pressure as given, or the International Standard Atmosphere's at this height (ISO 2533:1975)."""
        if self.pressure_hpa is not None:
            return self.pressure_hpa
        return float(1013.25 * max(1.0 - 2.25577e-5 * self.height_m, 0.0) ** 5.25588)


def itrs_position_km(observer: Observer) -> np.ndarray:
    """Return the terrestrial position (3,) in km (WGS 84 taken as ITRS, which agree to centimetres)."""
    latitude, longitude = np.radians([observer.latitude_deg, observer.longitude_deg])
    height = observer.height_m * 1e-3
    e2 = EARTH_FLATTENING * (2.0 - EARTH_FLATTENING)
    normal = EARTH_RADIUS_KM / np.sqrt(1.0 - e2 * np.sin(latitude) ** 2)
    ring = (normal + height) * np.cos(latitude)
    return np.array(
        [
            ring * np.cos(longitude),
            ring * np.sin(longitude),
            (normal * (1.0 - e2) + height) * np.sin(latitude),
        ]
    )


def gcrs_position_km(observer: Observer | None, tt_s: np.ndarray) -> np.ndarray:
    """Return the geocentric position (3, n) in km on ICRS axes; zeros for the geocentre (`observer=None`).

    IAU 2006/2000A with polar motion: good to 1 cm times the error of UT1 (0.46 km a second at the equator).
    """
    tt_s = np.atleast_1d(np.asarray(tt_s, float))
    if observer is None:
        return np.zeros((3, len(tt_s)))
    return np.einsum("nij,i->jn", celestial_to_terrestrial(tt_s), itrs_position_km(observer))


def gcrs_velocity_km_s(observer: Observer | None, tt_s: np.ndarray) -> np.ndarray:
    """Return the velocity (3, n) in km/s that the Earth's rotation gives the observer, on ICRS axes."""
    tt_s = np.atleast_1d(np.asarray(tt_s, float))
    if observer is None:
        return np.zeros((3, len(tt_s)))
    x, y, _ = itrs_position_km(observer)
    turning = EARTH_RATE_RAD_S * np.array([-y, x, 0.0])
    return np.einsum("nij,i->jn", celestial_to_terrestrial(tt_s), turning)


def local_axes(observer: Observer, tt_s: np.ndarray) -> np.ndarray:
    """Return unit vectors east, north, zenith (geodetic) on ICRS axes as (n, 3, 3): rows are the vectors."""
    latitude, longitude = np.radians([observer.latitude_deg, observer.longitude_deg])
    east = np.array([-np.sin(longitude), np.cos(longitude), 0.0])
    zenith = np.array(
        [np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)]
    )
    axes = np.stack([east, np.cross(zenith, east), zenith])
    return axes @ celestial_to_terrestrial(tt_s)


def horizon_altitude_deg(observer: Observer, azimuth_deg: np.ndarray) -> np.ndarray:
    """Return the altitude of the site's horizon line at these azimuths; 0 where the site gives none."""
    azimuth_deg = np.asarray(azimuth_deg, float)
    if not observer.horizon:
        return np.zeros_like(azimuth_deg)
    azimuth, altitude = np.array(sorted(observer.horizon)).T
    return np.interp(azimuth_deg, azimuth, altitude, period=360.0)
