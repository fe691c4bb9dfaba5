"""Bodies as discs on the sky: size, shape, phase, orientation, brightness."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.sky.bodies import AU_KM, pole_radec_deg, radii_km
from planner.sky.ephemeris import position_km
from planner.sky.observer import Observer
from planner.sky.photometry import moon_magnitude, planet_magnitude, sun_magnitude
from planner.sky.places import (
    RAD_ARCSEC,
    direction,
    observer_position_km,
    position_angle_deg,
    unit_vector,
)
from planner.sky.timescale import YEAR_S, tdb_s


@dataclass(frozen=True)
class SkyDisc:
    """A body drawn as a disc at n times; every array has shape (n,).

    `ra_deg`, `dec_deg`: un-aberrated topocentric direction, ICRS axes. `semidiameter_arcsec`: equatorial.
    `flattening`: apparent, (a - b) / a of the ellipse on the sky. `pole_pa_deg`: of the projected north pole.
    `phase_angle_deg`: Sun-body-observer. `bright_limb_pa_deg`: of the middle of the lit limb.
    `magnitude`: apparent V, out of the atmosphere; `globe_magnitude`: without Saturn's rings, None like `magnitude`.
    `distance_km`: from the observer.
    """

    name: str
    ra_deg: np.ndarray
    dec_deg: np.ndarray
    distance_km: np.ndarray
    semidiameter_arcsec: np.ndarray
    flattening: np.ndarray
    pole_pa_deg: np.ndarray
    phase_angle_deg: np.ndarray
    bright_limb_pa_deg: np.ndarray
    magnitude: np.ndarray
    globe_magnitude: np.ndarray | None = None


def sky_disc(body: str, observer: Observer | None, tt_s: np.ndarray, radii: str | None = None) -> SkyDisc:
    """Return the Sun, the Moon or a planet as a disc, topocentric (or geocentric), under a convention of radii.

    Saturn's disc is its globe; its magnitude includes the rings. Position angles count from ICRS north.
    """
    tt_s = np.atleast_1d(np.asarray(tt_s, float))
    here = observer_position_km(observer, tt_s)
    place = direction(body, observer, tt_s, here)
    equatorial_km, polar_km = radii_km(body, radii)
    pole = unit_vector(*pole_radec_deg(body, tt_s))
    sight = place.vector_km / place.distance_km
    zero = np.zeros_like(tt_s)
    if body == "sun":
        to_sun_km, phase, limb_pa = zero, zero, zero
        sun_from_body = None
    else:
        moment = tdb_s(tt_s) - place.light_time_s
        # light that is reflected left the Sun earlier still; the Sun moves 13 m/s, so it does not matter
        sun_from_body = position_km("sun", moment) - here - place.vector_km
        to_sun_km = np.sqrt((sun_from_body**2).sum(axis=0))
        phase = np.degrees(_angle(sun_from_body, -place.vector_km))
        limb_pa = position_angle_deg(place.vector_km, place.vector_km + sun_from_body)
    sin_latitude = -(pole * sight).sum(axis=0)
    eccentricity2 = 1.0 - (polar_km / equatorial_km) ** 2
    flattening = 1.0 - np.sqrt(1.0 - eccentricity2 * (1.0 - sin_latitude**2))
    magnitude, globe = _magnitudes(
        body, place.distance_km, to_sun_km, phase, sin_latitude, sun_from_body, pole, tt_s
    )
    return SkyDisc(
        name=body,
        ra_deg=place.ra_deg,
        dec_deg=place.dec_deg,
        distance_km=place.distance_km,
        semidiameter_arcsec=RAD_ARCSEC * np.arcsin(equatorial_km / place.distance_km),
        flattening=flattening,
        pole_pa_deg=position_angle_deg(sight, pole),
        phase_angle_deg=phase,
        bright_limb_pa_deg=limb_pa,
        magnitude=magnitude,
        globe_magnitude=globe,
    )


def ring_share(disc: SkyDisc) -> np.ndarray:
    """Return the part of a body's light that its rings send, (n,): 0 for all but Saturn, 0.6 at its widest."""
    if disc.globe_magnitude is None:
        return np.zeros_like(disc.magnitude)
    return np.clip(1.0 - 10.0 ** (-0.4 * (disc.globe_magnitude - disc.magnitude)), 0.0, 1.0)


def ring_sine(disc: SkyDisc) -> np.ndarray:
    """Return the sine of the angle at which Saturn's ring plane is seen, from the flattening of its outline."""
    equatorial_km, polar_km = radii_km("saturn")
    eccentricity2 = 1.0 - (polar_km / equatorial_km) ** 2
    return np.sqrt(np.clip(1.0 - (1.0 - (1.0 - disc.flattening) ** 2) / eccentricity2, 0.0, 1.0))


def _angle(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    cross = np.cross(a, b, axis=0)
    return np.arctan2(np.sqrt((cross**2).sum(axis=0)), (a * b).sum(axis=0))


def _magnitudes(
    body: str,
    distance_km: np.ndarray,
    to_sun_km: np.ndarray,
    phase_deg: np.ndarray,
    sin_latitude: np.ndarray,
    sun_from_body: np.ndarray | None,
    pole: np.ndarray,
    tt_s: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Return the magnitude, and that of the globe alone, without rings."""
    if body == "sun" or sun_from_body is None:
        return _alone(sun_magnitude(distance_km / AU_KM))
    if body == "moon":
        return _alone(moon_magnitude(phase_deg, distance_km))
    if body in ("pluto",):
        return _alone(np.full_like(distance_km, np.nan))
    sin_sun = (pole * sun_from_body).sum(axis=0) / to_sun_km
    latitude, sun_latitude = np.degrees(np.arcsin(sin_latitude)), np.degrees(np.arcsin(sin_sun))

    def seen(rings: bool) -> np.ndarray:
        return planet_magnitude(
            body,
            to_sun_km / AU_KM,
            distance_km / AU_KM,
            phase_deg,
            sub_observer_latitude_deg=latitude,
            sub_solar_latitude_deg=sun_latitude,
            year=2000.0 + tt_s / YEAR_S,
            rings=rings,
        )

    return (seen(True), seen(False)) if body == "saturn" else _alone(seen(True))


def _alone(magnitude: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    return magnitude, magnitude
