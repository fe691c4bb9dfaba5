"""The retrograde track of a planet: stations, opposition or inferior conjunction, and the path between them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from planner.errors import InputError
from planner.events import cautions, conjunctions
from planner.events.against_stars import planet_among_stars
from planner.events.apparent import apparent_syzygies, mean_motion, motion, true_motion
from planner.events.budget import EPHEMERIS_SIGMA_KM
from planner.events.family import Circumstances, Event, EventSpec, Geometry
from planner.events.instants import InstantMaker, civil_day, nearest_of
from planner.events.roots import roots_between
from planner.sky import bodies, discs, places, timescale
from planner.sky.observer import Observer

DAY_S = timescale.DAY_S
_INNER = ("mercury", "venus")
# Days before and after the middle at which the planet surely moves direct again, in right ascension and in longitude:
# over half the longest retrograde arc (Mercury 12, Venus 22, Mars 41, Jupiter 61, Saturn 70, Uranus 77, Neptune 80) and
# well inside the synodic period.
_DIRECT_AGAIN_DAY = {
    "mercury": 27.0,
    "venus": 60.0,
    "mars": 95.0,
    "jupiter": 110.0,
    "saturn": 110.0,
    "uranus": 120.0,
    "neptune": 120.0,
}
# A secant step this short leaves an error a thousand times smaller.
_SETTLED_S = 20.0
_REACHES_YEAR = (0.7, 1.7, 2.5)
# The path is shown from half a retrograde arc before the first station to half of one after the second; whether it
# closes to a loop is decided on one and a half, where the planet has passed its first station again.
_MARGIN_OF_ARC = 0.5
_MARGIN_OF_SHAPE = 1.5


class RetrogradeTrack:
    """A planet's path about the time when it moves westward among the stars."""

    name = "retrograde-track"
    targets = bodies.PLANETS
    reference = "stars"
    campaign = True

    def search(
        self,
        start_tt_s: float,
        end_tt_s: float,
        observer: Observer | None = None,
        bodies: tuple[str, ...] | None = None,
        tick: Callable[[int, int], None] | None = None,
    ) -> list[Event]:
        """Return the retrograde tracks whose middle lies between two instants; the same for every observer."""
        timescale.require_span(np.array([start_tt_s, end_tt_s]), "search span")
        wanted = tuple(self._checked(body) for body in bodies or self.targets)
        found: list[Event] = []
        for count, body in enumerate(wanted):
            found += self._events(body, start_tt_s, end_tt_s)
            if tick:
                tick(count + 1, len(wanted))
        return sorted(found, key=lambda event: event.middle_tt_s)

    def nearest(self, spec: EventSpec) -> Event:
        """Return the retrograde track of the spec's planet whose middle is nearest to its date."""
        self._checked(spec.body)
        return nearest_of(spec, lambda low, high: self._events(spec.body, low, high), _REACHES_YEAR)

    def predict(self, event: Event, observer: Observer | None = None) -> Circumstances:
        """Return stations in right ascension and longitude and the middle of the track.

        Instants are geocentric, apparent, referred to the true equator and equinox of date: 1 s for Mars, some seconds
        for Neptune, whose motion changes a hundred times more slowly. An observer adds altitude and azimuth.
        """
        body = event.spec.body
        middle = np.array([event.middle_tt_s])
        by_ra, by_longitude = stations(body, middle, "ra")[0], stations(body, middle, "longitude")[0]
        centre = "conjunction" if body in _INNER else "opposition"
        names = ["station_ra_1", "station_ra_2", "station_longitude_1", "station_longitude_2", centre]
        times = np.array([*by_ra, *by_longitude, event.middle_tt_s])
        keep = np.isfinite(times)
        names, times = [n for n, k in zip(names, keep, strict=True) if k], times[keep]
        place = places.direction(body, observer, times)
        disc = discs.sky_disc(body, observer, times)
        seen = places.apparent(body, None, times).vector_km
        ra, dec = places.of_date(seen, times)
        longitude, latitude = places.ecliptic_lonlat(seen, times)
        maker = InstantMaker(observer, times, place.vector_km, magnitude=disc.magnitude)
        extra = {
            "ra_of_date_deg": ra,
            "dec_of_date_deg": dec,
            "ecliptic_longitude_deg": longitude,
            "ecliptic_latitude_deg": latitude,
            "magnitude": disc.magnitude,
            "diameter_arcsec": 2.0 * disc.semidiameter_arcsec,
        }
        instants = maker.instants(names, self._terms(body, names, times), extra)
        sun = places.direction("sun", None, times).vector_km
        elongation = (
            places.separation_arcsec(places.direction(body, None, times).vector_km, sun).max() / 3600.0
        )
        near_sun = tuple(text.format(elongation) for text in cautions.SUN_NEAR) if body in _INNER else ()
        return Circumstances(
            event=event,
            observer=observer,
            happens=True,
            reason=None,
            instants=instants,
            least_separation_arcsec=float("nan"),
            conventions={
                "stations": "geocentric apparent places, true equator and equinox of date",
                centre: "apparent geocentric ecliptic longitudes of planet and Sun",
                "position_angle": "does not apply",
            },
            cautions=near_sun + maker.time_cautions() + cautions.NIGHT,
            facts=path_facts(body, by_ra, by_longitude),
        )

    def geometry(self, event: Event, observer: Observer | None, tt_s: np.ndarray) -> Geometry:
        """Return the planet as a disc among the stars at these times."""
        return planet_among_stars(event.spec.body, observer, tt_s)

    def _checked(self, body: str) -> str:
        if body not in self.targets:
            raise InputError(
                f"event.body: found {body!r}; allowed for {self.name} are {', '.join(self.targets)}"
            )
        return body

    def _events(self, body: str, low_tt_s: float, high_tt_s: float) -> list[Event]:
        middle = middles(body, low_tt_s, high_tt_s)
        reach = _DIRECT_AGAIN_DAY[body] * DAY_S
        first, last = timescale.SPAN
        middle = middle[(middle > first + 2 * reach) & (middle < last - 2 * reach)]
        if not len(middle):
            return []
        ends = stations(body, middle, "longitude")
        spec = EventSpec(self.name, body, 0.0)
        return [
            Event(
                replace(spec, date_tt_s=float(t)),
                float(one - _MARGIN_OF_ARC * (two - one)),
                float(t),
                float(two + _MARGIN_OF_ARC * (two - one)),
                f"The retrograde track of {body.capitalize()} about {civil_day(t)}",
            )
            for t, (one, two) in zip(middle, ends, strict=True)
        ]

    @staticmethod
    def _terms(body: str, names: list[str], times: np.ndarray) -> list[tuple[str, np.ndarray]]:
        """Return the budget: a slow error of place of the ephemeris moves stations by its yearly change only."""
        distance = places.direction(body, None, times).distance_km
        sigma_rad = EPHEMERIS_SIGMA_KM[body] / distance
        slow = sigma_rad * 2 * np.pi / timescale.YEAR_S
        step = 0.5 * DAY_S
        ends = np.concatenate([times - step, times + step])
        bend = {
            axis: np.abs(np.diff(motion(body, ends, axis).reshape(2, -1), axis=0)[0]) / (2 * step)
            for axis in ("ra", "longitude")
        }
        rate = np.abs(motion(body, times, "longitude") - motion("sun", times, "longitude"))
        pace = np.array(
            [
                slow[i] / bend["ra" if "ra" in name else "longitude"][i]
                if name.startswith("station")
                else sigma_rad[i] / rate[i]
                for i, name in enumerate(names)
            ]
        )
        label = np.array([timescale.utc_kind(t).startswith("UT1") for t in times], dtype=float)
        return [("ephemeris", pace), ("earth rotation", timescale.ut1_sigma_s(times) * label)]


def middles(body: str, start_tt_s: float, end_tt_s: float) -> np.ndarray:
    """Return oppositions (outer planets) or inferior conjunctions in apparent geocentric longitude, TT seconds."""
    guess = conjunctions.with_earth(body, start_tt_s, end_tt_s)
    guess = guess[(guess > start_tt_s - 5 * DAY_S) & (guess < end_tt_s + 5 * DAY_S)]
    t = apparent_syzygies(body, guess, 0.0 if body in _INNER else np.pi)
    return t[(t >= start_tt_s) & (t <= end_tt_s)]


def stations(body: str, middle_tt_s: np.ndarray, axis: str) -> np.ndarray:
    """Return the two stations (n, 2) about each middle, in `ra` or `longitude`, in TT seconds.

    Found without nutation, which is smooth and cheap, then moved by minutes (Mercury) to hours (Neptune) to where
    the true coordinate stands still. A middle need only be good to some days.
    """
    middle_tt_s = np.atleast_1d(np.asarray(middle_tt_s, dtype=float))
    reach = _DIRECT_AGAIN_DAY[body] * DAY_S
    low = np.concatenate([middle_tt_s - reach, middle_tt_s])
    high = np.concatenate([middle_tt_s, middle_tt_s + reach])
    t = roots_between(lambda tt_s, which: mean_motion(body, tt_s, axis), low, high, tolerance_s=60.0)
    live = np.flatnonzero(np.isfinite(t))
    half = 0.25 * DAY_S
    ends = mean_motion(body, np.concatenate([t[live] - half, t[live] + half]), axis).reshape(2, -1)
    slope = (ends[1] - ends[0]) / (2.0 * half)
    rate = true_motion(body, t[live], axis)
    for _ in range(4):
        move = np.clip(-rate / slope, -DAY_S, DAY_S)
        t[live] += move
        go = np.abs(move) > _SETTLED_S
        if not go.any():
            break
        live, move, before = live[go], move[go], rate[go]
        rate = true_motion(body, t[live], axis)
        slope = (rate - before) / move
    return t.reshape(2, -1).T


def path_facts(body: str, by_ra: np.ndarray, by_longitude: np.ndarray) -> dict:
    """Return the size and shape of the path: retrograde arc, duration, `loop` or `zigzag`, extent on the sky.

    It is a loop where the path among the stars crosses itself, otherwise a zigzag (an S or a Z).
    """
    one, two = by_longitude
    arc = two - one
    times = np.clip(
        np.linspace(one - _MARGIN_OF_SHAPE * arc, two + _MARGIN_OF_SHAPE * arc, 321), *timescale.SPAN
    )
    # without aberration, whose yearly ellipse is no part of the path among the stars
    seen = places.direction(body, None, times).vector_km
    longitude, latitude = places.ecliptic_lonlat(seen, times, equinox="J2000")
    longitude = np.unwrap(np.radians(longitude)) * np.degrees(1.0)
    shown = (times >= one - _MARGIN_OF_ARC * arc) & (times <= two + _MARGIN_OF_ARC * arc)
    ends = places.ecliptic_lonlat(places.apparent(body, None, by_longitude).vector_km, by_longitude)[0]
    ra_ends = places.of_date(places.apparent(body, None, by_ra).vector_km, by_ra)[0]
    crossing = _crosses_itself(longitude * np.cos(np.radians(latitude.mean())), latitude)
    return {
        "shape": "loop" if crossing else "zigzag",
        "retrograde_arc_longitude_deg": float(abs((ends[1] - ends[0] + 180.0) % 360.0 - 180.0)),
        "retrograde_arc_ra_deg": float(abs((ra_ends[1] - ra_ends[0] + 180.0) % 360.0 - 180.0)),
        "retrograde_days": float(arc / DAY_S),
        "extent_longitude_deg": float(np.ptp(longitude[shown])),
        "extent_latitude_deg": float(np.ptp(latitude[shown])),
    }


def _crosses_itself(x: np.ndarray, y: np.ndarray) -> bool:
    """Return whether a polyline crosses itself (neighbouring pieces left out)."""
    x0, y0, dx, dy = x[:-1], y[:-1], np.diff(x), np.diff(y)
    cross = dx[:, None] * dy - dy[:, None] * dx
    ox, oy = x0 - x0[:, None], y0 - y0[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        s = (ox * dy - oy * dx) / cross
        t = (ox * dy[:, None] - oy * dx[:, None]) / cross
    meets = (s >= 0) & (s <= 1) & (t >= 0) & (t <= 1)
    index = np.arange(len(dx))
    return bool((meets & (index[None, :] - index[:, None] > 2)).any())
