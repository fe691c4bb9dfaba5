"""The observer on the ellipsoid: where they stand, and where their horizon lies."""

from __future__ import annotations

from dataclasses import dataclass


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
