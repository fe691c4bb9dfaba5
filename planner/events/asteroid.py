"""A small body, or a planet's disc, covers a star."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.events import cautions
from planner.events.against_stars import geometry_among_stars
from planner.events.budget import angle_term, moments, site_terms
from planner.events.contacts import RAD_ARCSEC, Passing, Shape, star_track
from planner.events.family import Circumstances, Event, EventSpec, Geometry
from planner.events.instants import InstantMaker, civil_day, nearest_of
from planner.events.occulter import Occulter, disc_of, magnitude_drop, occulter_of, star_of
from planner.events.shadow import ShadowPath, shadow_path
from planner.sky import bodies, places, stars, timescale
from planner.sky.observer import Observer
from planner.sky.timescale import DAY_S

_STEP_S = 2.0 * 3600.0
_BLOCK_S = 400.0 * DAY_S
_CLOSEST_REACH_S = 0.3 * DAY_S
_EVENT_REACH_S = 0.02 * DAY_S
# Closest approaches are looked for this far beyond a span of places.
_MARGIN_S = _CLOSEST_REACH_S + 3600.0
# A star of the search is fainter than this only when the user names it.
DEFAULT_MAGNITUDE = 9.0
_LEAST_CHANCE = 0.05


@dataclass(frozen=True)
class AsteroidOccultsStar:
    """A small body on a given orbit, or a planet, passes in front of a star.

    `search` looks at planets, and at the small body of `orbit` where there is one; stars to `magnitude_limit` (V).
    """

    orbit: Any = None
    magnitude_limit: float = DEFAULT_MAGNITUDE
    name = "asteroid-occults-star"
    targets = ("asteroid", "mercury", "venus", "mars", "jupiter", "saturn", "uranus", "neptune")
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
        """Return the occultations between two instants whose path touches the Earth, or that the site may see.

        A site may see what has a chance of 5 % there with the star above the horizon. An asteroid is looked at only
        with `orbit`.
        """
        timescale.require_span(np.array([start_tt_s, end_tt_s]), "search span")
        wanted = [
            self._checked(body)
            for body in bodies or self.targets
            if body != "asteroid" or self.orbit is not None
        ]
        spans = list(_blocks(start_tt_s, end_tt_s))
        found: list[Event] = []
        for count, body in enumerate(wanted):
            spec = EventSpec(self.name, body, start_tt_s, orbit=self.orbit if body == "asteroid" else None)
            occulter = occulter_of(spec)
            for step, (low, high) in enumerate(spans):
                table = stars.all_stars((low + high) / 2.0, self.magnitude_limit)
                found += self._passings(spec, occulter, low, high, table)
                if tick:
                    tick(count * len(spans) + step + 1, len(wanted) * len(spans))
        if observer is not None:
            found = [event for event in found if self._may_see(event, observer)]
        return sorted(found, key=lambda event: event.middle_tt_s)

    def nearest(self, spec: EventSpec) -> Event:
        """Return the occultation nearest to the spec's date that some place on Earth sees, of its star where named.

        Raises InputError when there is none within two years (120 days for any star), or star or orbit are wrong.
        """
        self._checked(spec.body)
        occulter = occulter_of(spec)
        if spec.star:
            chosen = star_of(spec)
            reaches = (0.02, 0.3, 2.0)
            return nearest_of(
                spec, lambda low, high: self._passings(spec, occulter, low, high, chosen), reaches
            )

        def any_star(low: float, high: float) -> list[Event]:
            table = stars.all_stars((low + high) / 2.0, self.magnitude_limit)
            return self._passings(spec, occulter, low, high, table)

        return nearest_of(spec, any_star, (0.03, 0.33))

    def predict(self, event: Event, observer: Observer | None = None) -> Circumstances:
        """Return disappearance, closest approach and reappearance of the star, with the chance that it happens.

        The geometry is good to 1 ms; the 1-sigma is mostly the orbit's. The body is taken as round.
        """
        occulter, star = occulter_of(event.spec), star_of(event.spec)
        passing = self._passing(occulter, star, observer)
        closest = passing.closest(np.array([event.middle_tt_s]), 600.0, _CLOSEST_REACH_S)
        closest = np.where(np.isfinite(closest), closest, event.middle_tt_s)
        sight = passing.sight(closest)
        distance = float(sight.near_distance_km[0])
        least = float(sight.separation_rad[0])
        radius = float(passing.radii_rad(sight)[0][0])
        reach = max(600.0, 3.0 * radius / float(moments(passing, closest, np.array([True])).rate_rad_s[0]))
        contacts = passing.contacts(closest, reach, inner=False)[0]
        times = np.array([contacts[0], closest[0], contacts[1]])
        names = np.array(["disappearance", "closest", "reappearance"])
        kept = np.isfinite(times)
        times, names = times[kept], names[kept]
        moment = moments(passing, times, names == "closest", half_step_s=0.5)
        speed = float(moments(passing, closest, np.array([True])).rate_rad_s[0]) * distance
        along, across = occulter.place_sigma_arcsec(float(closest[0]))
        star_sigma = float(star.sigma_mas(float(closest[0]))) * 1e-3
        along_s = np.hypot(along, star_sigma) / RAD_ARCSEC * distance / speed
        across_km = np.hypot(across, star_sigma) / RAD_ARCSEC * distance
        chance = _chance(least * distance, radius * distance, across_km)
        terms = site_terms(moment, observer)
        # each independent error of the place, as far as it lies along what an instant is sensitive to
        shifts = occulter.place_shifts_rad(float(closest[0]))
        orbit_rad = np.sqrt(((shifts @ moment.across) ** 2).sum(axis=0))
        terms.append(("orbit", orbit_rad / np.abs(moment.rate_rad_s)))
        terms.append(angle_term("star position", moment, star_sigma))
        at_limb = np.where(names == "closest", 0.0, 1.0)
        size = occulter.sigma_radius_km / moment.near_distance_km * RAD_ARCSEC * at_limb
        terms.append(angle_term("size of the body", moment, size))
        sight = passing.sight(times)
        shown = self._magnitude(occulter, observer, closest)
        drop = magnitude_drop(star.magnitude, shown)
        magnitude = star.magnitude if np.isfinite(star.magnitude) else 10.0
        maker = InstantMaker(observer, times, sight.far_km, sight.near_km, magnitude=magnitude)
        extra = {
            "separation_arcsec": sight.separation_rad * RAD_ARCSEC,
            "offset_km": sight.separation_rad * sight.near_distance_km,
        }
        instants = maker.instants(names, terms, extra)
        covered = bool(np.isfinite(contacts).all())
        path = None if observer is not None else self.path(event)
        happens, reason = self._verdict(covered, chance, least * distance, radius * distance, path, instants)
        facts: dict[str, Any] = {
            "star": star.name,
            "magnitude": star.magnitude,
            "body_magnitude": shown,
            "magnitude_drop": drop,
            "diameter_km": 2.0 * occulter.radius_km,
            "shadow_speed_km_s": speed,
            "longest_s": 2.0 * occulter.radius_km / speed,
            "duration_s": float(contacts[1] - contacts[0]) if covered else 0.0,
            "distance_au": distance / bodies.AU_KM,
            "sigma_along_s": float(along_s),
            "sigma_across_km": float(across_km),
            "sun_elongation_deg": float(self._elongation_deg(observer, closest, passing)[0]),
        }
        if observer is not None:
            facts["chance"] = chance
            facts["offset_km"] = least * distance
        small = event.spec.body == "asteroid"
        size_text = "the orbit's diameter" if small else bodies.convention(event.spec.radii).name
        return Circumstances(
            event=event,
            observer=observer,
            happens=happens,
            reason=reason,
            instants=instants,
            least_separation_arcsec=least * RAD_ARCSEC,
            conventions={
                "position_angle": "of the star from the body's centre, from true celestial north of date",
                "size": f"{size_text}, taken as round" if small else size_text,
                "star": f"{star.name}, proper motion and parallax applied",
                "orbit": "; ".join((occulter.source, *occulter.notes)),
                "places": "light-time directions from the observer",
            },
            cautions=self._cautions(facts["sun_elongation_deg"], occulter) + maker.time_cautions(),
            facts=facts,
        )

    def path(self, event: Event) -> ShadowPath | None:
        """Return the path of the shadow over the Earth, None when even its 1-sigma edges pass the Earth by."""
        occulter, star = occulter_of(event.spec), star_of(event.spec)
        passing = self._passing(occulter, star, None)
        closest = float(passing.closest(np.array([event.middle_tt_s]), 600.0, _CLOSEST_REACH_S)[0])
        sight = passing.sight(np.array([closest]))
        distance = float(sight.near_distance_km[0])
        speed = float(moments(passing, np.array([closest]), np.array([True])).rate_rad_s[0]) * distance
        along, across = occulter.place_sigma_arcsec(closest)
        star_sigma = float(star.sigma_mas(closest)) * 1e-3
        shown = self._magnitude(occulter, None, np.array([closest]))
        return shadow_path(
            event.title,
            occulter.state,
            star,
            closest,
            float(np.max(occulter.shape.reach_km(sight.toward))),
            float(np.hypot(across, star_sigma) / RAD_ARCSEC * distance),
            float(np.hypot(along, star_sigma) / RAD_ARCSEC * distance / speed),
            {
                "star": star.name,
                "star_magnitude": star.magnitude,
                "magnitude_drop": magnitude_drop(star.magnitude, shown),
                "closest_geocentric_utc": timescale.utc_iso(closest, 1),
                "ellipsoid": "WGS 84, height 0",
            },
        )

    def geometry(self, event: Event, observer: Observer | None, tt_s: np.ndarray) -> Geometry:
        """Return the body as a disc and the star as a point at these times."""
        tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
        occulter, star = occulter_of(event.spec), star_of(event.spec)
        vector = star.vector(observer, tt_s)
        shown = {occulter.body: disc_of(occulter, observer, tt_s, event.spec.radii)}
        point = (star.name, *places.radec_deg(vector), star.magnitude)
        return geometry_among_stars(star.name, vector, shown, observer, tt_s, (point,))

    def _checked(self, body: str) -> str:
        if body not in self.targets:
            raise InputError(f"event.body: found {body!r}; allowed are {', '.join(self.targets)}")
        return body

    def _passing(self, occulter: Occulter, star: stars.Star, observer: Observer | None) -> Passing:
        return Passing(occulter.track, star_track(star), occulter.shape, Shape(0.0), observer)

    def _passings(
        self,
        spec: EventSpec,
        occulter: Occulter,
        low_tt_s: float,
        high_tt_s: float,
        candidates: stars.StarField | stars.Star,
    ) -> list[Event]:
        """Return the passings whose shadow touches the Earth, found on straight steps of two hours and refined."""
        from scipy.spatial import cKDTree

        known_from, known_to = occulter.span_tt_s
        low_tt_s, high_tt_s = max(low_tt_s, known_from + _MARGIN_S), min(high_tt_s, known_to - _MARGIN_S)
        if high_tt_s <= low_tt_s:
            return []
        count = max(2, int(np.ceil((high_tt_s - low_tt_s) / _STEP_S)))
        times = np.linspace(low_tt_s, high_tt_s, count + 1)
        track = occulter.track(None, times)
        distance = np.sqrt((track**2).sum(axis=0))
        unit = track / distance
        middle = unit[:, :-1] + unit[:, 1:]
        middle /= np.sqrt((middle**2).sum(axis=0))
        step = np.sqrt(((unit[:, 1:] - unit[:, :-1]) ** 2).sum(axis=0))
        near = np.minimum(distance[:-1], distance[1:])
        sigma_km = sum(occulter.place_sigma_arcsec(float(times[count // 2]))) / RAD_ARCSEC * near
        reach = (
            bodies.EARTH_RADIUS_KM + occulter.radius_km + np.minimum(sigma_km, bodies.EARTH_RADIUS_KM)
        ) / near
        if isinstance(candidates, stars.Star):
            star_vectors = candidates.vector(None, times[[0, -1]]).mean(axis=1)[:, None]
        else:
            star_vectors = places.unit_vector(candidates.ra_deg, candidates.dec_deg)
        if not star_vectors.shape[1]:
            return []
        # stars move by proper motion and parallax within the block: an arcsecond, 6 for Barnard's in 400 days
        slack = 15.0 / RAD_ARCSEC
        tree = cKDTree(star_vectors.T)
        hits = tree.query_ball_point(middle.T, step / 2.0 + reach + slack)
        pairs = [(i, j) for i, found in enumerate(hits) for j in found]
        if not pairs:
            return []
        index, which = np.array(pairs).T
        here, there = unit[:, index], unit[:, index + 1]
        motion = there - here
        share = ((star_vectors[:, which] - here) * motion).sum(axis=0) / (motion**2).sum(axis=0)
        apart = np.sqrt(((here + motion * share - star_vectors[:, which]) ** 2).sum(axis=0))
        kept = np.flatnonzero((share > -0.05) & (share <= 1.05) & (apart < reach[index] * 1.05 + slack))
        events: list[Event] = []
        names: dict[int, tuple[str, float]] = {}
        for k in kept:
            star = candidates if isinstance(candidates, stars.Star) else _nth(candidates, int(which[k]))
            guess = float(times[index[k]] + share[k] * (times[index[k] + 1] - times[index[k]]))
            passing = self._passing(occulter, star, None)
            t = float(passing.closest(np.array([guess]), 600.0, _CLOSEST_REACH_S)[0])
            if not np.isfinite(t) or not low_tt_s <= t <= high_tt_s:
                continue
            sight = passing.sight(np.array([t]))
            offset = float(sight.separation_rad[0] * sight.near_distance_km[0])
            if offset > bodies.EARTH_RADIUS_KM + occulter.radius_km:
                continue
            last = names.get(int(which[k]))
            if last is not None and abs(last[1] - t) < 600.0:
                continue
            names[int(which[k])] = (star.name, t)
            events.append(self._event(spec, occulter, star, t))
        return sorted(events, key=lambda event: event.middle_tt_s)

    def _event(self, spec: EventSpec, occulter: Occulter, star: stars.Star, t: float) -> Event:
        named = spec.star if spec.star else star.name
        return Event(
            replace(spec, star=named, date_tt_s=t),
            t - _EVENT_REACH_S,
            t,
            t + _EVENT_REACH_S,
            f"{occulter.name} covers {star.name}, {civil_day(t)}",
        )

    def _may_see(self, event: Event, observer: Observer) -> bool:
        circumstances = self.predict(event, observer)
        up = any(
            instant.limited_by not in ("below horizon", "behind the horizon line")
            for instant in circumstances.instants
        )
        return up and circumstances.facts["chance"] >= _LEAST_CHANCE

    @staticmethod
    def _verdict(covered, chance, offset_km, radius_km, path, instants):  # type: ignore[no-untyped-def]
        if path is not None:
            return True, None
        if instants and np.isnan(instants[0].altitude_deg):
            return False, f"the shadow passes the Earth's centre at {offset_km:.0f} km"
        if not covered:
            return False, (
                f"the site lies {offset_km - radius_km:.0f} km outside the nominal path; "
                f"the chance is {100 * chance:.0f} %"
            )
        if all(i.limited_by in ("below horizon", "behind the horizon line") for i in instants):
            return False, "the star is below the horizon"
        return True, None

    def _magnitude(self, occulter: Occulter, observer: Observer | None, tt_s: np.ndarray) -> float:
        if occulter.h is None and occulter.body == "asteroid":
            return float("nan")
        return float(disc_of(occulter, observer, tt_s, None).magnitude[0])

    @staticmethod
    def _elongation_deg(observer: Observer | None, tt_s: np.ndarray, passing: Passing) -> np.ndarray:
        sun = places.direction("sun", observer, tt_s).vector_km
        return places.separation_arcsec(sun, passing.sight(tt_s).far_km) / 3600.0

    @staticmethod
    def _cautions(elongation_deg: float, occulter: Occulter) -> tuple[str, ...]:
        near_sun = (
            tuple(text.format(elongation_deg) for text in cautions.SUN_NEAR) if elongation_deg < 30.0 else ()
        )
        return near_sun + occulter.notes + cautions.NIGHT


def _nth(field: stars.StarField, row: int) -> stars.Star:
    return field.select(np.array([row])).stars()[0]


def _chance(offset_km: float, radius_km: float, sigma_km: float) -> float:
    """Return the chance that a chord lies within the body, for a normal error across the path."""
    from scipy.special import ndtr

    if sigma_km <= 0:
        return float(offset_km < radius_km)
    return float(ndtr((radius_km - offset_km) / sigma_km) - ndtr((-radius_km - offset_km) / sigma_km))


def _blocks(low: float, high: float):  # type: ignore[no-untyped-def]
    count = max(1, int(np.ceil((high - low) / _BLOCK_S)))
    edges = np.linspace(low, high, count + 1)
    return pairwise(edges)
