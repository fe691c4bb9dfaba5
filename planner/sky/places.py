"""Places of bodies: un-aberrated topocentric directions, apparent places, altitudes, angles on the sky.

Inside the project a place is a topocentric direction with light-time and nothing else, on ICRS axes
(`direction`). Apparent places (`apparent`) are for comparison with published tables.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.sky.bodies import C_KM_S, SUN_GM_KM3_S2, SUN_RADIUS_KM
from planner.sky.ephemeris import position_km, state_km_km_s
from planner.sky.observer import Observer, gcrs_position_km, gcrs_velocity_km_s, local_axes
from planner.sky.pole import true_equator_matrix, true_obliquity
from planner.sky.refraction import refraction_arcsec
from planner.sky.timescale import tdb_s

RAD_ARCSEC = 648000.0 / np.pi
# Obliquity of the J2000 ecliptic: IAU 2006, Capitaine et al. 2003, A&A 412, 567
_OBLIQUITY_J2000 = np.radians(84381.406 / 3600.0)


@dataclass(frozen=True)
class Direction:
    """Where a body is seen at n times: vector (3, n) in km on ICRS axes, the rest (n,)."""

    vector_km: np.ndarray
    ra_deg: np.ndarray
    dec_deg: np.ndarray
    distance_km: np.ndarray
    light_time_s: np.ndarray


def observer_position_km(observer: Observer | None, tt_s: np.ndarray) -> np.ndarray:
    """Return the barycentric position (3, n) of the observer in km."""
    return position_km("earth", tdb_s(tt_s)) + gcrs_position_km(observer, tt_s)


def direction(
    body: str, observer: Observer | None, tt_s: np.ndarray, observer_km: np.ndarray | None = None
) -> Direction:
    """Return the topocentric direction with light-time, without aberration and deflection, on ICRS axes.

    `observer_km` saves work when `observer_position_km` is at hand. Light-time is exact to 1 microsecond;
    positions are those of the ephemeris.
    """
    tt_s = np.atleast_1d(np.asarray(tt_s, float))
    moment = tdb_s(tt_s)
    here = observer_position_km(observer, tt_s) if observer_km is None else observer_km
    first_guess = np.sqrt(((position_km(body, moment) - here) ** 2).sum(axis=0)) / C_KM_S
    there, velocity = state_km_km_s(body, moment - first_guess)
    vector = there - here
    # the path is straight over the last milliseconds of the light-time
    for _ in range(2):
        late = np.sqrt((vector**2).sum(axis=0)) / C_KM_S - first_guess
        vector = there - velocity * late - here
    return _as_direction(vector)


def _as_direction(vector: np.ndarray) -> Direction:
    distance = np.sqrt((vector**2).sum(axis=0))
    ra, dec = radec_deg(vector)
    return Direction(vector, ra, dec, distance, distance / C_KM_S)


def apparent(body: str, observer: Observer | None, tt_s: np.ndarray) -> Direction:
    """Return the apparent topocentric place on ICRS axes: light-time, deflection by the Sun, aberration.

    Deflection uses the finite distance of the body (Klioner 2003, AJ 125, 1580, eq. 70); it is left out for the
    Sun itself and for a body behind the solar disc. Bending by the planets (17 mas at Jupiter's limb) is left out.
    """
    tt_s = np.atleast_1d(np.asarray(tt_s, float))
    here = observer_position_km(observer, tt_s)
    place = direction(body, observer, tt_s, here)
    vector = place.vector_km
    if body != "sun":
        vector = _deflected(vector, here, tt_s)
    velocity = observer_velocity_km_s(observer, tt_s)
    return _as_direction(aberrated(vector, velocity) * place.distance_km)


def observer_velocity_km_s(observer: Observer | None, tt_s: np.ndarray) -> np.ndarray:
    """Return the barycentric velocity (3, n) of the observer in km/s."""
    return state_km_km_s("earth", tdb_s(tt_s))[1] + gcrs_velocity_km_s(observer, tt_s)


def aberrated(vector: np.ndarray, velocity_km_s: np.ndarray) -> np.ndarray:
    """Return unit vectors (3, n) as seen from an observer with this velocity; relativistic (Klioner 2003, eq. 10)."""
    unit = vector / np.sqrt((vector**2).sum(axis=0))
    beta = velocity_km_s / C_KM_S
    inverse_gamma = np.sqrt(1.0 - (beta**2).sum(axis=0))
    along = (unit * beta).sum(axis=0)
    seen = inverse_gamma * unit + (1.0 + along / (1.0 + inverse_gamma)) * beta
    return seen / np.sqrt((seen**2).sum(axis=0))


def _deflected(vector: np.ndarray, here: np.ndarray, tt_s: np.ndarray) -> np.ndarray:
    # the Sun where it was when the light passed it: the retardation matters only close to the Sun, where it is
    # the light-time from the Sun
    sun = position_km("sun", tdb_s(tt_s) - _norm(here) / C_KM_S)
    p = vector / _norm(vector)
    from_sun = here - sun
    em = _norm(from_sun)
    e = from_sun / em
    q = vector + from_sun
    q /= _norm(q)
    along = (q * e).sum(axis=0)
    bend = 2.0 * SUN_GM_KM3_S2 / (C_KM_S**2 * em) / np.maximum(1.0 + along, 1e-12)
    shift = bend * ((p * q).sum(axis=0) * e - (e * p).sum(axis=0) * q)
    behind = (along < 0.0) & (_norm(np.cross(p, e, axis=0)) * em < SUN_RADIUS_KM)
    bent = p + np.where(behind, 0.0, shift)
    return bent / _norm(bent)


def _norm(vector: np.ndarray) -> np.ndarray:
    return np.sqrt((vector**2).sum(axis=0))


def radec_deg(vector: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return (ra_deg, dec_deg) of vectors (3, n), right ascension in [0, 360)."""
    x, y, z = vector
    return np.degrees(np.arctan2(y, x)) % 360.0, np.degrees(np.arctan2(z, np.hypot(x, y)))


def unit_vector(ra_deg: np.ndarray | float, dec_deg: np.ndarray | float) -> np.ndarray:
    """Return unit vectors (3, n) of directions in degrees."""
    ra, dec = np.broadcast_arrays(np.radians(ra_deg), np.radians(dec_deg))
    return np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])


def of_date(vector: np.ndarray, tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return (ra_deg, dec_deg) on the true equator and equinox of date of vectors (3, n) on ICRS axes."""
    return radec_deg(np.einsum("nij,jn->in", true_equator_matrix(np.atleast_1d(tt_s)), vector))


def ecliptic_lonlat(
    vector: np.ndarray, tt_s: np.ndarray | None = None, equinox: str = "date"
) -> tuple[np.ndarray, np.ndarray]:
    """Return ecliptic (longitude_deg, latitude_deg) of vectors (3, n) on ICRS axes.

    `equinox`: `date` (true equinox and ecliptic of date, needs `tt_s`) or `J2000` (mean, without the 0.02" frame bias).
    """
    if equinox == "date":
        assert tt_s is not None
        x, y, z = np.einsum("nij,jn->in", true_equator_matrix(np.atleast_1d(tt_s)), vector)
        tilt = true_obliquity(np.atleast_1d(tt_s))
    elif equinox == "J2000":
        x, y, z = vector
        tilt = np.full_like(x, _OBLIQUITY_J2000)
    else:
        raise ValueError(f"equinox {equinox!r} is not 'date' or 'J2000'")
    cos, sin = np.cos(tilt), np.sin(tilt)
    return radec_deg(np.stack([x, cos * y + sin * z, cos * z - sin * y]))


def altaz(
    place: np.ndarray | tuple[np.ndarray, np.ndarray],
    observer: Observer,
    tt_s: np.ndarray,
    refracted: bool = True,
) -> tuple[np.ndarray, np.ndarray]:
    """Return (altitude_deg, azimuth_deg from north through east) of un-aberrated directions as they are seen.

    `place`: vectors (3, n) or (ra_deg, dec_deg), ICRS axes, topocentric. Aberration, annual and diurnal, is applied
    here; the deflection of light (at most 1.8") is not. With `refracted` the altitude is the one seen through the air.
    """
    tt_s = np.atleast_1d(np.asarray(tt_s, float))
    vector = unit_vector(*place) if isinstance(place, tuple) else place
    if vector.ndim == 1:
        vector = vector[:, None]
    seen = aberrated(vector, observer_velocity_km_s(observer, tt_s))
    east, north, up = np.einsum("nij,jn->in", local_axes(observer, tt_s), seen)
    altitude = np.degrees(np.arctan2(up, np.hypot(east, north)))
    if refracted:
        altitude = altitude + refraction_arcsec(altitude, observer) / 3600.0
    return altitude, np.degrees(np.arctan2(east, north)) % 360.0


def zenith_pa_deg(
    ra_deg: np.ndarray, dec_deg: np.ndarray, observer: Observer, tt_s: np.ndarray
) -> np.ndarray:
    """Return the position angle of the zenith at a direction, from ICRS north through east, in degrees."""
    zenith = local_axes(observer, np.atleast_1d(tt_s))[:, 2, :].T
    return _pa_towards(ra_deg, dec_deg, zenith)


def north_of_date_pa_deg(ra_deg: np.ndarray, dec_deg: np.ndarray, tt_s: np.ndarray) -> np.ndarray:
    """Return the position angle of the true pole of date at a direction, from ICRS north through east, (-180, 180].

    Subtract it from a position angle counted from ICRS north to count from north of date.
    """
    pole = true_equator_matrix(np.atleast_1d(tt_s))[:, 2, :].T
    angle = _pa_towards(ra_deg, dec_deg, pole)
    return (angle + 180.0) % 360.0 - 180.0


def _pa_towards(ra_deg: np.ndarray, dec_deg: np.ndarray, target: np.ndarray) -> np.ndarray:
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    east = -np.sin(ra) * target[0] + np.cos(ra) * target[1]
    north = (
        -np.sin(dec) * np.cos(ra) * target[0] - np.sin(dec) * np.sin(ra) * target[1] + np.cos(dec) * target[2]
    )
    return np.degrees(np.arctan2(east, north)) % 360.0


def separation_arcsec(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """Return the angle between vectors (3, n) in arcseconds, exact for small and large angles alike."""
    return RAD_ARCSEC * np.arctan2(_norm(np.cross(a, b, axis=0)), (a * b).sum(axis=0))


def position_angle_deg(origin: np.ndarray, target: np.ndarray) -> np.ndarray:
    """Return the position angle of `target` seen at `origin` (vectors (3, n)), from ICRS north through east."""
    return _pa_towards(*radec_deg(origin), target)


def offsets_arcsec(
    reference_ra_deg: np.ndarray | float,
    reference_dec_deg: np.ndarray | float,
    ra_deg: np.ndarray,
    dec_deg: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Return gnomonic offsets (east, north) in arcseconds from a reference direction; NaN beyond 90 degrees."""
    x, y, z = unit_vector(ra_deg, dec_deg)
    ra, dec = np.radians(reference_ra_deg), np.radians(reference_dec_deg)
    depth = np.cos(dec) * np.cos(ra) * x + np.cos(dec) * np.sin(ra) * y + np.sin(dec) * z
    depth = np.where(depth > 0.0, depth, np.nan)
    east = -np.sin(ra) * x + np.cos(ra) * y
    north = -np.sin(dec) * np.cos(ra) * x - np.sin(dec) * np.sin(ra) * y + np.cos(dec) * z
    return RAD_ARCSEC * east / depth, RAD_ARCSEC * north / depth


def radec_from_offsets(
    reference_ra_deg: np.ndarray | float,
    reference_dec_deg: np.ndarray | float,
    east_arcsec: np.ndarray,
    north_arcsec: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Return (ra_deg, dec_deg) of gnomonic offsets from a reference direction: the inverse of `offsets_arcsec`."""
    ra, dec = np.radians(reference_ra_deg), np.radians(reference_dec_deg)
    east, north = np.asarray(east_arcsec) / RAD_ARCSEC, np.asarray(north_arcsec) / RAD_ARCSEC
    radial = np.cos(dec) - north * np.sin(dec)
    return radec_deg(
        np.stack(
            [
                np.cos(ra) * radial - np.sin(ra) * east,
                np.sin(ra) * radial + np.cos(ra) * east,
                np.sin(dec) + north * np.cos(dec),
            ]
        )
    )
