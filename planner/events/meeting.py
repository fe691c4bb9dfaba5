"""Two planets close together on the sky: appulses, and the rare ones in which one covers the other."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import combinations, pairwise

import numpy as np

from planner.errors import InputError
from planner.events import cautions
from planner.events.against_stars import geometry_among_stars
from planner.events.budget import EPHEMERIS_SIGMA_KM, angle_term, moments, site_terms
from planner.events.contacts import RAD_ARCSEC, Passing, body_track
from planner.events.family import Circumstances, Event, EventSpec, Geometry
from planner.events.instants import InstantMaker, civil_day, nearest_of
from planner.events.moon_planet import planet_shape
from planner.events.roots import changes_of_sign, minima_near, samples
from planner.events.visibility import darkness_needed_deg, sun_altitude_deg, view
from planner.sky import bodies, discs, places, timescale
from planner.sky.observer import Observer

DAY_S = timescale.DAY_S
# Closest approaches of one pair are weeks apart, even about a station; Mercury moves 2.2 degrees a day at most.
_GRID_S = 2.0 * DAY_S
DEFAULT_WITHIN_DEG = 1.0
# An event asked for by its date may be wider than what a search lists.
_NEAREST_WITHIN_DEG = 10.0
# The best view is not before the sky has begun to darken, however bright the planets.
_TWILIGHT_DEG = -4.0
_BLOCK_S = 50 * timescale.YEAR_S


@dataclass(frozen=True)
class PlanetsMeet:
    """Two planets pass each other; `search` lists approaches within `within_deg`."""

    within_deg: float = DEFAULT_WITHIN_DEG
    name = "planets-meet"
    targets = bodies.PLANETS
    reference = "stars"
    campaign = False

    def search(
        self,
        start_tt_s: float,
        end_tt_s: float,
        observer: Observer | None = None,
        bodies: tuple[str, ...] | None = None,
        tick: Callable[[int, int], None] | None = None,
    ) -> list[Event]:
        """Return the approaches of pairs of planets, geocentric, in time order; with `bodies` those that have one."""
        timescale.require_span(np.array([start_tt_s, end_tt_s]), "search span")
        pairs = [
            pair
            for pair in combinations(self.targets, 2)
            if bodies is None or any(self._checked(body) in pair for body in bodies)
        ]
        found: list[Event] = []
        for count, (low, high) in enumerate(blocks := _blocks(start_tt_s, end_tt_s)):
            found += self._approaches(pairs, low, high, self.within_deg)
            if tick:
                tick(count + 1, len(blocks))
        return sorted(found, key=lambda event: event.middle_tt_s)

    def nearest(self, spec: EventSpec) -> Event:
        """Return the closest approach (within 10 degrees) of the spec's two planets nearest to its date."""
        self._checked(spec.body)
        if spec.other_body is None:
            raise InputError(f"event.other_body: found none; allowed are {', '.join(self.targets)}")
        self._checked(spec.other_body, "event.other_body")
        if spec.other_body == spec.body:
            raise InputError(f"event.other_body: found {spec.other_body!r} twice; allowed is another planet")
        pair = (spec.body, spec.other_body)
        return nearest_of(
            spec,
            lambda low, high: self._approaches([pair], low, high, _NEAREST_WITHIN_DEG),
            (0.5, 2.0, 20.0, 200.0),
        )

    def predict(self, event: Event, observer: Observer | None = None) -> Circumstances:
        """Return the closest approach, conjunctions in right ascension and longitude, and contacts when discs meet.

        A site also gets its best view: the highest the pair stands in a dark enough sky within 16 hours.
        """
        near, far, passing = self._passing(event, observer)
        closest = passing.closest(np.array([event.middle_tt_s]), 0.1 * DAY_S, 5 * DAY_S)
        closest = np.where(np.isfinite(closest), closest, event.middle_tt_s)
        at_closest = passing.sight(closest)
        apart = float(at_closest.separation_rad[0])
        radii = [float(r[0]) for r in passing.radii_rad(at_closest)]
        names, times = ["greatest"], [float(closest[0])]
        meets = apart < sum(radii)
        parallax = [
            float(np.arcsin(bodies.EARTH_RADIUS_KM / distance[0]))
            for distance in (at_closest.near_distance_km, at_closest.far_distance_km)
        ]
        meets_somewhere = apart < sum(radii) + parallax[0] - parallax[1]
        if meets:
            speed = float(moments(passing, closest, np.array([True])).rate_rad_s[0])
            reach = 2.0 * (sum(radii) + 1e-9) / speed
            outer = passing.contacts(closest, reach, inner=False)[0]
            inner = (
                passing.contacts(closest, reach, inner=True)[0] if apart < abs(radii[0] - radii[1]) else []
            )
            for name, t in zip(("contact_1", "contact_4"), outer, strict=True):
                names, times = [*names, name], [*times, float(t)]
            for name, t in zip(("contact_2", "contact_3"), inner, strict=False):
                names, times = [*names, name], [*times, float(t)]
        for name, t in self._conjunctions(event):
            names, times = [*names, name], [*times, t]
        best = self._best_view(near, far, observer, float(closest[0]))
        if best is not None:
            names, times = [*names, "best_view"], [*times, best]
        at, names_array = np.array(times), np.array(names)
        sight = passing.sight(at)
        shown = [discs.sky_disc(body, observer, at) for body in (near, far)]
        magnitude = np.maximum(shown[0].magnitude, shown[1].magnitude)
        elongation = self._elongation_deg(near, observer, at)
        maker = InstantMaker(observer, at, sight.near_km, sight.far_km, magnitude=magnitude)
        extra = {
            "separation_arcsec": sight.separation_rad * RAD_ARCSEC,
            "sun_elongation_deg": elongation,
        }
        instants = maker.instants(names, self._terms(near, far, passing, at, names_array), extra)
        first_elongation = float(elongation[0])
        return Circumstances(
            event=event,
            observer=observer,
            happens=True,
            reason=None,
            instants=instants,
            least_separation_arcsec=apart * RAD_ARCSEC,
            conventions={
                "position_angle": f"of {near} from {far}, from true celestial north of date",
                "conjunctions": "geocentric apparent places, true equator and equinox of date",
                "radii": f"{bodies.convention(event.spec.radii).name}, planets as spheroids",
            },
            cautions=self._cautions(first_elongation) + maker.time_cautions(),
            facts={
                "in_front": near,
                "behind": far,
                "discs_meet": meets,
                "discs_meet_somewhere_on_earth": meets_somewhere,
                "magnitude": float(magnitude[0]),
                f"{near}_magnitude": float(shown[0].magnitude[0]),
                f"{far}_magnitude": float(shown[1].magnitude[0]),
                f"{near}_diameter_arcsec": 2 * float(shown[0].semidiameter_arcsec[0]),
                f"{far}_diameter_arcsec": 2 * float(shown[1].semidiameter_arcsec[0]),
                "sun_elongation_deg": first_elongation,
            },
        )

    def geometry(self, event: Event, observer: Observer | None, tt_s: np.ndarray) -> Geometry:
        """Return both planets as discs at these times; the target is the nearer one."""
        tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
        near, far, passing = self._passing(event, observer)
        shown = {body: discs.sky_disc(body, observer, tt_s, event.spec.radii) for body in (near, far)}
        return geometry_among_stars(near, passing.near(observer, tt_s), shown, observer, tt_s)

    def _checked(self, body: str, key: str = "event.body") -> str:
        if body not in self.targets:
            raise InputError(f"{key}: found {body!r}; allowed for {self.name} are {', '.join(self.targets)}")
        return body

    def _passing(self, event: Event, observer: Observer | None) -> tuple[str, str, Passing]:
        """Return which planet is in front, which behind, and their passing."""
        one, two = event.spec.body, str(event.spec.other_body)
        middle = np.array([event.middle_tt_s])
        distances = [places.direction(body, None, middle).distance_km[0] for body in (one, two)]
        near, far = (one, two) if distances[0] < distances[1] else (two, one)
        shapes = [planet_shape(body, event.spec.radii, event.middle_tt_s) for body in (near, far)]
        return near, far, Passing(body_track(near), body_track(far), shapes[0], shapes[1], observer)

    def _approaches(
        self, pairs: list[tuple[str, str]], low_tt_s: float, high_tt_s: float, within_deg: float
    ) -> list[Event]:
        first, last = timescale.SPAN
        grid = samples(max(first, low_tt_s - _GRID_S), min(last, high_tt_s + _GRID_S), _GRID_S)
        wanted = {body for pair in pairs for body in pair}
        unit = {}
        for body in wanted:
            vector = places.direction(body, None, grid).vector_km
            unit[body] = vector / np.sqrt((vector**2).sum(axis=0))
        found = []
        for one, two in pairs:
            squared = ((unit[one] - unit[two]) ** 2).sum(axis=0)
            low = (squared[1:-1] <= squared[:-2]) & (squared[1:-1] < squared[2:])
            # a minimum between samples is nearer than they are, by at most the way made in a step
            close = np.sqrt(squared[1:-1]) < np.radians(within_deg + 3.0)
            guess = grid[1:-1][low & close]
            tracks = body_track(one), body_track(two)

            def apart(tt_s: np.ndarray, which: np.ndarray, tracks=tracks) -> np.ndarray:  # type: ignore[no-untyped-def]
                return places.separation_arcsec(tracks[0](None, tt_s), tracks[1](None, tt_s)) ** 2

            t = minima_near(apart, guess, 0.3 * DAY_S, 4 * DAY_S)
            t = t[np.isfinite(t)]
            t = t[(t >= low_tt_s) & (t < high_tt_s)]
            t = t[np.sqrt(apart(t, t)) < within_deg * 3600.0] if len(t) else t
            found += [self._event(one, two, float(moment)) for moment in np.unique(t)]
        return found

    def _event(self, one: str, two: str, t: float) -> Event:
        title = f"{one.capitalize()} meets {two.capitalize()}, {civil_day(t)}"
        return Event(EventSpec(self.name, one, t, other_body=two), t - 0.5 * DAY_S, t, t + 0.5 * DAY_S, title)

    def _conjunctions(self, event: Event) -> list[tuple[str, float]]:
        """Return conjunctions in right ascension and in longitude within 20 days of the closest approach."""
        one, two = event.spec.body, str(event.spec.other_body)
        first, last = timescale.SPAN
        middle = event.middle_tt_s
        grid = samples(max(first, middle - 20 * DAY_S), min(last, middle + 20 * DAY_S), DAY_S)
        axes, guess = [], []
        for axis, apart in enumerate(_apart_rad(one, two, grid)):
            low, high = changes_of_sign(grid, apart)
            # half a turn apart is a change of sign too, but no conjunction
            roots = low - np.interp(low, grid, apart) * (high - low) / (
                np.interp(high, grid, apart) - np.interp(low, grid, apart)
            )
            roots = roots[np.abs(np.interp(low, grid, apart)) < 1.0]
            if len(roots):
                axes.append(axis)
                guess.append(roots[np.argmin(np.abs(roots - middle))])
        t, which = np.array(guess), np.array(axes, dtype=int)
        for _ in range(4 if len(t) else 0):
            ends = np.clip(np.concatenate([t - 600.0, t + 600.0]), first, last)
            apart = np.array(_apart_rad(one, two, ends)).reshape(2, 2, -1)[which, :, np.arange(len(t))]
            t = np.clip(t - apart.mean(axis=1) / (apart[:, 1] - apart[:, 0]) * 1200.0, first, last)
        names = ("conjunction_ra", "conjunction_longitude")
        return [(names[axis], float(moment)) for axis, moment in zip(axes, t, strict=True)]

    @staticmethod
    def _best_view(near: str, far: str, observer: Observer | None, closest: float) -> float | None:
        if observer is None:
            return None
        first, last = timescale.SPAN
        times = np.clip(closest + np.arange(-16, 16.01, 1 / 6) * 3600.0, first, last)
        magnitude = max(
            float(discs.sky_disc(b, observer, np.array([closest])).magnitude[0]) for b in (near, far)
        )
        altitude = np.minimum(
            *(
                view(places.direction(b, observer, times).vector_km, observer, times).altitude_deg
                for b in (near, far)
            )
        )
        needed = min(darkness_needed_deg(np.array([magnitude]))[0], _TWILIGHT_DEG)
        dark = sun_altitude_deg(observer, times) < needed
        usable = dark & (altitude > 0)
        return float(times[np.argmax(np.where(usable, altitude, -99.0))]) if usable.any() else None

    @staticmethod
    def _elongation_deg(body: str, observer: Observer | None, tt_s: np.ndarray) -> np.ndarray:
        planet = places.direction(body, observer, tt_s).vector_km
        return places.separation_arcsec(planet, places.direction("sun", observer, tt_s).vector_km) / 3600.0

    @staticmethod
    def _terms(
        near: str, far: str, passing: Passing, at: np.ndarray, names: np.ndarray
    ) -> list[tuple[str, np.ndarray]]:
        contact = np.char.startswith(names, "contact")
        moment = moments(passing, at, ~contact)
        sigma_rad = np.hypot(
            EPHEMERIS_SIGMA_KM[near] / moment.near_distance_km,
            EPHEMERIS_SIGMA_KM[far] / moment.far_distance_km,
        )
        chosen = np.where(names == "best_view", 0.0, 1.0)
        terms = [(name, sigma_s * chosen) for name, sigma_s in site_terms(moment, passing.observer)]
        return [*terms, angle_term("ephemeris", moment, sigma_rad * RAD_ARCSEC * chosen)]

    @staticmethod
    def _cautions(elongation_deg: float) -> tuple[str, ...]:
        near_sun = (
            tuple(text.format(elongation_deg) for text in cautions.SUN_NEAR) if elongation_deg < 30 else ()
        )
        return near_sun + cautions.NIGHT


def _apart_rad(one: str, two: str, tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return how far one planet is ahead of another in apparent right ascension and longitude of date, -pi to pi."""
    seen = [places.apparent(body, None, tt_s).vector_km for body in (one, two)]
    ra = [np.radians(places.of_date(vector, tt_s)[0]) for vector in seen]
    longitude = [np.radians(places.ecliptic_lonlat(vector, tt_s)[0]) for vector in seen]
    return tuple((a - b + np.pi) % (2 * np.pi) - np.pi for a, b in (ra, longitude))  # type: ignore[return-value]


def _blocks(start_tt_s: float, end_tt_s: float) -> list[tuple[float, float]]:
    count = max(1, int(np.ceil((end_tt_s - start_tt_s) / _BLOCK_S)))
    edges = np.linspace(start_tt_s, end_tt_s, count + 1)
    return [(float(a), float(b)) for a, b in pairwise(edges)]
