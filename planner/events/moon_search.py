"""Which planets and stars the Moon passes closely enough for some place on Earth, over any span, in one table."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from planner.events import conjunctions
from planner.events.besselian import MoonPassings, Outline, moon_passings
from planner.events.contacts import RAD_ARCSEC
from planner.sky import bodies, ephemeris, places, starlist, timescale
from planner.sky.observer import Observer
from planner.sky.stars import Star

DAY_S = timescale.DAY_S
EARTH_RADIUS_KM = bodies.EARTH_RADIUS_KM
# Geocentric separation at conjunction in longitude within which some place on Earth sees an occultation: the largest
# lunar parallax and semidiameter (61.5' + 16.8') and a planet's (0.5'), over the cosine of the track's slope
# (5.2 degrees for stars, under 20 degrees even for Venus near its stations).
_NEAR_PLANET_RAD = np.radians(79.0 / 60.0) / np.cos(np.radians(20.0))
_NEAR_STAR_RAD = np.radians(79.0 / 60.0) / np.cos(np.radians(5.5))
# The Moon is never further than 5.3 degrees from the ecliptic: stars beyond that and the reach are never met.
_ZODIAC_RAD = np.radians(5.3) + _NEAR_STAR_RAD
# Linear interpolation of the Moon's longitude and latitude over half a day is good to 0.02 degrees.
_MOON_STEP_S = 0.5 * DAY_S
_INTERPOLATION_RAD = np.radians(0.03)
# An event is looked at this long before and after its geocentric middle.
EVENT_REACH_S = 0.2 * DAY_S
_GRAZE_ARCSEC = 5.0
_HORIZON_SLACK_DEG = 1.5
_EPOCH_TT_S = (starlist.EPOCH_YEAR - 2000.0) * timescale.YEAR_S
_MAS_RAD = 1e-3 / RAD_ARCSEC
_DEG = 180.0 / np.pi


@dataclass(frozen=True)
class MoonCandidates:
    """Passings that some place on Earth sees as occultations, in time order.

    `planet` (n,): index into `planets`, -1 for a star; `star` (n,): row of the table of stars, -1 for a planet.
    """

    passings: MoonPassings
    planets: tuple[str, ...]
    planet: np.ndarray
    star: np.ndarray

    def __len__(self) -> int:
        """Return the number of passings."""
        return len(self.planet)


def zodiac_stars(magnitude_limit: float) -> np.ndarray:
    """Return the rows of the star list, to a V magnitude, that the Moon can ever cover."""
    table = starlist.star_list()
    rows = np.flatnonzero(np.asarray(table["v"]) <= magnitude_limit)
    return rows[np.abs(_lonlat(_star_vectors(table[rows]))[1]) < _ZODIAC_RAD]


def as_table(star: Star) -> np.ndarray:
    """Return one star as a table of one row, its position carried to the epoch of the star list."""
    years = starlist.EPOCH_YEAR - star.epoch_year
    row = np.zeros(1, starlist.STAR)
    row["dec_deg"] = star.dec_deg + star.pm_dec_mas_yr * years * _MAS_RAD * _DEG
    east_deg = star.pm_ra_mas_yr * years * _MAS_RAD * _DEG
    row["ra_deg"] = star.ra_deg + east_deg / np.cos(np.radians(star.dec_deg))
    row["pm_ra"], row["pm_dec"], row["parallax"] = star.pm_ra_mas_yr, star.pm_dec_mas_yr, star.parallax_mas
    row["v"] = star.magnitude
    return row


def moon_candidates(
    low_tt_s: float,
    high_tt_s: float,
    planets: tuple[str, ...] = (),
    star_table: np.ndarray | None = None,
    radii: str | None = None,
    of_figure: bool = True,
) -> MoonCandidates:
    """Return all passings between two instants over these planets and stars, ready for any site.

    A span of a year with five planets and 250 stars takes 50 ms.
    """
    times, planet, row = [], [], []
    for index, body in enumerate(planets):
        t = conjunctions.moon_with(body, low_tt_s - DAY_S, high_tt_s + DAY_S)
        moon = places.direction("moon", None, t).vector_km
        apart = places.separation_arcsec(moon, places.direction(body, None, t).vector_km)
        t = t[apart < _NEAR_PLANET_RAD * RAD_ARCSEC]
        times.append(t)
        planet.append(np.full(len(t), index))
        row.append(np.full(len(t), -1))
    if star_table is not None and len(star_table):
        t, which = _star_conjunctions(low_tt_s - DAY_S, high_tt_s + DAY_S, star_table)
        times.append(t)
        planet.append(np.full(len(t), -1))
        row.append(which)
    middle = np.concatenate(times) if times else np.empty(0)
    order = np.argsort(middle, kind="stable")
    middle = middle[order]
    planet_of = np.concatenate(planet)[order] if times else np.empty(0, int)
    row_of = np.concatenate(row)[order] if times else np.empty(0, int)
    passings = moon_passings(
        middle,
        planets,
        planet_of,
        _geocentric_star_vectors(star_table, row_of, middle),
        bodies.radii_km("moon", radii)[0],
        outline_of(planets, planet_of, middle, radii),
        of_figure,
    )
    keep = _seen_somewhere(passings, low_tt_s, high_tt_s)
    return MoonCandidates(passings.select(keep), planets, planet_of[keep], row_of[keep])


def _seen_somewhere(passings: MoonPassings, low_tt_s: float, high_tt_s: float) -> np.ndarray:
    if not len(passings):
        return np.empty(0, int)
    closest, gap, parallax = passings.geocentric()
    inside = (closest >= low_tt_s) & (closest <= high_tt_s)
    return np.flatnonzero(inside & (gap < parallax))


def outline_of(planets: tuple[str, ...], planet: np.ndarray, tt_s: np.ndarray, radii: str | None) -> Outline:
    """Return the outlines of n targets: planets as spheroids about their poles, stars (-1) as points."""
    radius, squeezed = np.zeros(len(planet)), np.zeros(len(planet))
    poles = np.zeros((3, len(planet)))
    for index, body in enumerate(planets):
        of = planet == index
        equatorial_km, polar_km = bodies.radii_km(body, radii)
        radius[of], squeezed[of] = equatorial_km, 1.0 - (polar_km / equatorial_km) ** 2
        poles[:, of] = places.unit_vector(*bodies.pole_radec_deg(body, tt_s[of]))
    return Outline(radius, squeezed, poles)


def _star_conjunctions(low_tt_s: float, high_tt_s: float, table: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return conjunctions in longitude within reach, and the index of the star of each; in blocks of 20 years."""
    low, high = max(low_tt_s, timescale.SPAN[0]), min(high_tt_s, timescale.SPAN[1])
    blocks = max(1, int(np.ceil((high - low) / (20 * timescale.YEAR_S))))
    edges = np.linspace(low, high, blocks + 1)
    found_t, found_star = [], []
    for start, end in pairwise(edges):
        grid = np.linspace(start, end, int(np.ceil((end - start) / _MOON_STEP_S)) + 2)
        moon = ephemeris.default_ephemeris().relative_km("moon", "earth", timescale.tdb_s(grid))
        longitude, latitude = _lonlat(moon)
        longitude = np.unwrap(longitude)
        star_longitude, star_latitude = _lonlat(_star_vectors(table, 0.5 * (start + end)))
        turns = np.arange(np.floor(longitude[0] / (2 * np.pi)), np.ceil(longitude[-1] / (2 * np.pi)) + 1)
        target = (star_longitude[None, :] % (2 * np.pi)) + 2 * np.pi * turns[:, None]
        inside = (target >= longitude[0]) & (target < longitude[-1])
        t = np.interp(target, longitude, grid)
        apart = np.abs(np.interp(t, grid, latitude) - star_latitude[None, :])
        hit = np.nonzero(inside & (apart < _NEAR_STAR_RAD + _INTERPOLATION_RAD))
        found_t.append(t[hit])
        found_star.append(hit[1])
    return np.concatenate(found_t), np.concatenate(found_star)


def _star_vectors(table: np.ndarray, tt_s: float | np.ndarray = _EPOCH_TT_S) -> np.ndarray:
    """Return barycentric directions (3, n) with proper motion to a date."""
    ra, dec = np.radians(table["ra_deg"]), np.radians(table["dec_deg"])
    years = (np.asarray(tt_s) - _EPOCH_TT_S) / timescale.YEAR_S
    east, north = table["pm_ra"] * years * _MAS_RAD, table["pm_dec"] * years * _MAS_RAD
    vector = np.stack(
        [
            np.cos(dec) * np.cos(ra) - np.sin(ra) * east - np.sin(dec) * np.cos(ra) * north,
            np.cos(dec) * np.sin(ra) + np.cos(ra) * east - np.sin(dec) * np.sin(ra) * north,
            np.sin(dec) + np.cos(dec) * north,
        ]
    )
    return vector / np.sqrt((vector**2).sum(axis=0))


def _geocentric_star_vectors(table: np.ndarray | None, rows: np.ndarray, tt_s: np.ndarray) -> np.ndarray:
    """Return geocentric directions (3, n) with motion and parallax; zeros where the row is -1."""
    vectors = np.zeros((3, len(rows)))
    of = np.flatnonzero(rows >= 0)
    if table is not None and len(of):
        parallax = table["parallax"][rows[of]].astype(float) * _MAS_RAD
        earth_au = ephemeris.position_km("earth", timescale.tdb_s(tt_s[of])) / bodies.AU_KM
        moved = _star_vectors(table[rows[of]], tt_s[of]) - parallax * earth_au
        vectors[:, of] = moved / np.sqrt((moved**2).sum(axis=0))
    return vectors


def _lonlat(vector: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    longitude, latitude = places.ecliptic_lonlat(vector, equinox="J2000")
    return np.radians(longitude), np.radians(latitude)


def happening(
    low_tt_s: float,
    high_tt_s: float,
    observer: Observer | None,
    planets: tuple[str, ...] = (),
    star_table: np.ndarray | None = None,
    tick: Callable[[int, int], None] | None = None,
) -> list[tuple[int, int, float]]:
    """Return (index of planet, index of star, geocentric middle) of what an observer sees as an occultation or a graze.

    Passings with the target well below the horizon are left out; near grazes are kept for a closer look.
    """
    found: list[tuple[int, int, float]] = []
    blocks = max(1, int(np.ceil((high_tt_s - low_tt_s) / (5 * timescale.YEAR_S))))
    for count, (start, end) in enumerate(pairwise(np.linspace(low_tt_s, high_tt_s, blocks + 1))):
        candidates = moon_candidates(start, end, planets, star_table)
        if len(candidates):
            passings = candidates.passings
            middle = passings.geocentric()[0]
            seen = passings.contacts(observer, inner=False)
            keep = seen.gap_arcsec < _GRAZE_ARCSEC
            if observer is not None:
                at = np.where(np.isfinite(seen.outer), seen.outer, seen.closest[:, None]).T
                at = np.where(keep, at, middle)
                altitude = [passings.target_altitude_deg(observer, t) for t in at]
                keep &= np.max(altitude, axis=0) > -_HORIZON_SLACK_DEG
            rows = np.flatnonzero(keep)
            found += [(int(candidates.planet[i]), int(candidates.star[i]), float(middle[i])) for i in rows]
        if tick:
            tick(count + 1, blocks)
    return found
