"""The arc that Mercury or Venus draws in the evening or the morning sky, from one conjunction to the next."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from planner.errors import InputError
from planner.events import cautions, conjunctions
from planner.events.against_stars import planet_among_stars
from planner.events.apparent import apparent_syzygies, motion
from planner.events.budget import EPHEMERIS_SIGMA_KM
from planner.events.family import Circumstances, Event, EventSpec, Geometry, Series
from planner.events.instants import InstantMaker, civil_day
from planner.events.roots import minima_near
from planner.events.visibility import sun_altitude_deg
from planner.sky import discs, places, timescale
from planner.sky import observer as places_on_earth
from planner.sky.observer import Observer

DAY_S = timescale.DAY_S
DEPRESSION_DEG = 6.0
_SYNODIC_DAY = {"mercury": 115.88, "venus": 583.92}


@dataclass(frozen=True)
class Evenings:
    """The planet at a fixed depression of the Sun, evening by evening (or morning by morning); arrays (n,)."""

    tt_s: np.ndarray
    altitude_deg: np.ndarray
    azimuth_deg: np.ndarray
    elongation_deg: np.ndarray
    magnitude: np.ndarray
    diameter_arcsec: np.ndarray
    illuminated: np.ndarray
    above_horizon: np.ndarray


class ApparitionArc:
    """Mercury or Venus as an evening or a morning object."""

    name = "apparition-arc"
    targets = ("mercury", "venus")
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
        """Return the apparitions whose greatest elongation lies between two instants; the same for every observer."""
        timescale.require_span(np.array([start_tt_s, end_tt_s]), "search span")
        wanted = tuple(self._checked(body) for body in bodies or self.targets)
        found: list[Event] = []
        for count, body in enumerate(wanted):
            arcs = self._arcs(body, start_tt_s, end_tt_s)
            found += [arc for arc in arcs if start_tt_s <= arc.middle_tt_s < end_tt_s]
            if tick:
                tick(count + 1, len(wanted))
        return sorted(found, key=lambda event: event.middle_tt_s)

    def nearest(self, spec: EventSpec) -> Event:
        """Return the apparition that the spec's date lies in; raises InputError at the ends of the ephemeris."""
        self._checked(spec.body)
        date = spec.date_tt_s
        timescale.require_span(date, "event.date")
        for arc in self._arcs(spec.body, date, date):
            if arc.start_tt_s <= date < arc.end_tt_s:
                return replace(arc, spec=replace(spec, date_tt_s=arc.middle_tt_s))
        raise InputError(
            f"event.date: found {timescale.utc_iso(date, 0)}, too near an end of the ephemeris for a whole apparition; "
            "allowed is a date two years inside"
        )

    def predict(self, event: Event, observer: Observer | None = None) -> Circumstances:
        """Return conjunctions, greatest elongation and greatest brilliancy, and for a site the evenings of the arc.

        Instants are geocentric and apparent. Elongations are flat at their greatest: 1 s of arc is some minutes.
        """
        body, evening = event.spec.body, self._is_evening(event)
        brightest = self._brightest(body, event)
        sides = ("superior_conjunction", "inferior_conjunction")
        first, last = sides if evening else sides[::-1]
        greatest = "greatest_elongation_east" if evening else "greatest_elongation_west"
        pairs = [(first, event.start_tt_s), (greatest, event.middle_tt_s), (last, event.end_tt_s)]
        if brightest is not None:
            pairs.append(("greatest_brilliancy", brightest))
        pairs.sort(key=lambda pair: pair[1])
        names, times = [name for name, _ in pairs], np.array([t for _, t in pairs])
        place = places.direction(body, observer, times)
        disc = discs.sky_disc(body, observer, times)
        maker = InstantMaker(observer, times, place.vector_km, magnitude=disc.magnitude)
        elongation = elongation_deg(body, times)
        extra = {
            "elongation_deg": elongation,
            "magnitude": disc.magnitude,
            "diameter_arcsec": 2.0 * disc.semidiameter_arcsec,
            "illuminated_fraction": (1.0 + np.cos(np.radians(disc.phase_angle_deg))) / 2.0,
        }
        depression = float(dict(event.spec.options).get("depression_deg", DEPRESSION_DEG))
        seen = evenings(event, observer, depression) if observer is not None else None
        facts = {
            "shown": "in the evening" if evening else "in the morning",
            "greatest_elongation_deg": float(elongation[names.index(greatest)]),
            "sun_depression_deg": depression,
        }
        series: tuple[Series, ...] = ()
        if seen is not None and len(seen.tt_s):
            top = int(np.argmax(seen.altitude_deg))
            facts |= {
                "days_above_horizon": int(seen.above_horizon.sum()),
                "highest_altitude_deg": float(seen.altitude_deg[top]),
                "highest_on": timescale.utc_iso(float(seen.tt_s[top]), 0),
            }
            series = (self._series(seen, evening, depression),)
        return Circumstances(
            event=event,
            observer=observer,
            happens=True,
            reason=None,
            instants=maker.instants(names, self._terms(body, names, times), extra),
            least_separation_arcsec=float("nan"),
            conventions={
                "elongation": "geocentric apparent, from the Sun's centre",
                "conjunctions": "apparent geocentric ecliptic longitudes, true equinox of date",
                "brilliancy": "least V magnitude of Mallama & Hilton 2018",
            },
            cautions=tuple(text.format(0) for text in cautions.SUN_NEAR)
            + maker.time_cautions()
            + cautions.NIGHT,
            facts=facts,
            series=series,
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

    def _arcs(self, body: str, low_tt_s: float, high_tt_s: float) -> list[Event]:
        """Return all apparitions that touch a span."""
        first, last = timescale.SPAN
        reach = 1.2 * _SYNODIC_DAY[body] * DAY_S
        low, high = max(first + 10 * DAY_S, low_tt_s - reach), min(last - 10 * DAY_S, high_tt_s + reach)
        inferior = apparent_syzygies(body, conjunctions.with_earth(body, low, high), 0.0)
        superior = apparent_syzygies(body, conjunctions.with_earth(body, low, high, opposite=True), 0.0)
        ends = np.concatenate([inferior, superior])
        is_superior = np.concatenate([np.zeros(len(inferior), bool), np.ones(len(superior), bool)])
        order = np.argsort(ends)
        ends, is_superior = ends[order], is_superior[order]
        start, end, evening = ends[:-1], ends[1:], is_superior[:-1]
        whole = (is_superior[:-1] != is_superior[1:]) & (end > low_tt_s) & (start <= high_tt_s)
        start, end, evening = start[whole], end[whole], evening[whole]
        middle = _greatest_elongations(body, start, end)
        return [
            Event(
                EventSpec(self.name, body, float(m)),
                float(a),
                float(m),
                float(b),
                f"{body.capitalize()} in the {'evening' if e else 'morning'} sky, greatest elongation {civil_day(m)}",
            )
            for a, m, b, e in zip(start, middle, end, evening, strict=True)
        ]

    @staticmethod
    def _is_evening(event: Event) -> bool:
        """Return whether the planet stands east of the Sun at greatest elongation."""
        at = np.array([event.middle_tt_s])
        planet, sun = (places.apparent(b, None, at).vector_km for b in (event.spec.body, "sun"))
        apart = places.ecliptic_lonlat(planet, at)[0] - places.ecliptic_lonlat(sun, at)[0]
        return bool((apart[0] + 180.0) % 360.0 - 180.0 > 0.0)

    @staticmethod
    def _brightest(body: str, event: Event) -> float | None:
        """Return when the planet is brightest inside the apparition; None where it only fades, as Mercury may."""
        times = np.linspace(event.start_tt_s, event.end_tt_s, 200)[2:-2]
        magnitude = discs.sky_disc(body, None, times).magnitude
        inside = (magnitude[1:-1] < magnitude[:-2]) & (magnitude[1:-1] < magnitude[2:])
        if not inside.any():
            return None
        index = 1 + np.flatnonzero(inside)[np.argmin(magnitude[1:-1][inside])]
        found = minima_near(
            lambda tt_s, which: discs.sky_disc(body, None, tt_s).magnitude,
            times[index : index + 1],
            DAY_S,
            20 * DAY_S,
            tolerance_s=30.0,
            finest_s=0.2 * DAY_S,
        )[0]
        return float(found) if np.isfinite(found) else None

    @staticmethod
    def _terms(body: str, names: list[str], times: np.ndarray) -> list[tuple[str, np.ndarray]]:
        """Return the budget: an angle error of the ephemeris, where elongation is flat only its change in a season."""
        distance = places.direction(body, None, times).distance_km
        sigma_rad = EPHEMERIS_SIGMA_KM[body] / distance
        step = 0.5 * DAY_S
        three = [np.radians(elongation_deg(body, times + k * step)) for k in (-1, 0, 1)]
        bend = np.abs(three[0] - 2 * three[1] + three[2]) / step**2
        conjunction = np.array(["conjunction" in name for name in names])
        bright = np.array([name == "greatest_brilliancy" for name in names])
        seconds = np.where(conjunction, sigma_rad / _conjunction_rate(body, times), sigma_rad * 2e-7 / bend)
        label = np.array([timescale.utc_kind(t).startswith("UT1") for t in times], dtype=float)
        # formulae of magnitude: 0.01 mag of error in their slope over ten days moves the flat maximum by about a day
        return [
            ("ephemeris", np.where(bright, 0.0, seconds)),
            ("magnitude formula", np.where(bright, DAY_S, 0.0)),
            ("earth rotation", timescale.ut1_sigma_s(times) * label),
        ]

    @staticmethod
    def _series(seen: Evenings, evening: bool, depression_deg: float) -> Series:
        every = max(1, len(seen.tt_s) // 40)
        rows = tuple(
            (
                timescale.utc_iso(float(seen.tt_s[i]), 0),
                float(seen.altitude_deg[i]),
                float(seen.azimuth_deg[i]),
                float(seen.elongation_deg[i]),
                float(seen.magnitude[i]),
                float(seen.diameter_arcsec[i]),
                float(seen.illuminated[i]),
            )
            for i in np.flatnonzero(seen.above_horizon)[::every]
        )
        return Series(
            f"{'evenings' if evening else 'mornings'}, Sun {depression_deg:g} degrees below the horizon"
            + (f", every {every} days" if every > 1 else ""),
            ("utc", "altitude_deg", "azimuth_deg", "elongation_deg", "magnitude", "diameter_arcsec", "lit"),
            rows,
        )


def elongation_deg(body: str, tt_s: np.ndarray) -> np.ndarray:
    """Return the geocentric apparent elongation from the Sun's centre."""
    planet, sun = (places.apparent(b, None, tt_s).vector_km for b in (body, "sun"))
    return places.separation_arcsec(planet, sun) / 3600.0


def evenings(event: Event, observer: Observer, depression_deg: float = DEPRESSION_DEG) -> Evenings:
    """Return where the planet stands each evening (morning) of an apparition when the Sun is so far below.

    Near the poles days without such a twilight are left out.
    """
    found = twilights(
        observer, event.start_tt_s, event.end_tt_s, depression_deg, ApparitionArc._is_evening(event)
    )
    body = event.spec.body
    place = places.direction(body, observer, found)
    altitude, azimuth = places.altaz(place.vector_km, observer, found)
    disc = discs.sky_disc(body, observer, found)
    line = np.maximum(0.0, places_on_earth.horizon_altitude_deg(observer, azimuth))
    return Evenings(
        found,
        altitude,
        azimuth,
        elongation_deg(body, found),
        disc.magnitude,
        2.0 * disc.semidiameter_arcsec,
        (1.0 + np.cos(np.radians(disc.phase_angle_deg))) / 2.0,
        altitude > line,
    )


def twilights(
    observer: Observer, start_tt_s: float, end_tt_s: float, depression_deg: float, evening: bool
) -> np.ndarray:
    """Return when the Sun's centre sinks (rises) through a depression, day by day, in TT seconds.

    From the hour angle at the mean noon of each day, polished by Newton steps to 0.1 s; days on which the Sun does
    not reach the depression are left out.
    """
    days = np.arange(np.floor(start_tt_s / DAY_S) - 1, np.ceil(end_tt_s / DAY_S) + 1)
    noon = np.clip(days * DAY_S - observer.longitude_deg / 360.0 * DAY_S, *timescale.SPAN)
    latitude = np.radians(observer.latitude_deg)
    altitude, azimuth = places.altaz(places.direction("sun", observer, noon).vector_km, observer, noon, False)
    h, a = np.radians(altitude), np.radians(azimuth)
    up, north, east = np.sin(h), np.cos(h) * np.cos(a), np.cos(h) * np.sin(a)
    sin_dec = up * np.sin(latitude) + north * np.cos(latitude)
    hour_angle = np.arctan2(-east, up * np.cos(latitude) - north * np.sin(latitude))
    wanted = (np.sin(np.radians(-depression_deg)) - sin_dec * np.sin(latitude)) / (
        np.sqrt(1.0 - sin_dec**2) * max(np.cos(latitude), 1e-9)
    )
    reached = np.abs(wanted) < 1.0
    turn = np.arccos(np.clip(wanted, -1.0, 1.0)) * (1.0 if evening else -1.0)
    t = (noon + (turn - hour_angle) / (2 * np.pi) * DAY_S)[reached]
    for _ in range(3):
        ends = np.clip(np.concatenate([t - 60.0, t + 60.0]), *timescale.SPAN)
        before, after = (sun_altitude_deg(observer, ends) + depression_deg).reshape(2, -1)
        with np.errstate(divide="ignore", invalid="ignore"):
            move = -0.5 * (before + after) / (after - before) * 120.0
        t = t + np.clip(np.nan_to_num(move), -1800.0, 1800.0)
    settled = np.abs(move) < 0.5
    return t[settled & (t >= start_tt_s) & (t <= end_tt_s)]


def _greatest_elongations(body: str, start: np.ndarray, end: np.ndarray) -> np.ndarray:
    if not len(start):
        return start
    share = np.linspace(0.05, 0.95, 37)
    grid = start + (end - start) * share[:, None]
    values = elongation_deg(body, grid.ravel()).reshape(grid.shape)
    guess = grid[np.argmax(values, axis=0), np.arange(len(start))]
    return minima_near(
        lambda tt_s, which: -elongation_deg(body, tt_s),
        guess,
        2 * DAY_S,
        60 * DAY_S,
        1.0,
        finest_s=0.1 * DAY_S,
    )


def _conjunction_rate(body: str, tt_s: np.ndarray) -> np.ndarray:
    return np.abs(motion(body, tt_s, "longitude") - motion("sun", tt_s, "longitude"))
