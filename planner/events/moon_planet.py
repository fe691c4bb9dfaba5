"""The Moon covers a planet."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.events.budget import angle_term, ephemeris_term, moments, site_terms
from planner.events.catalogue import predicted
from planner.events.contacts import RAD_ARCSEC, LitShape, Passing, Shape, body_track
from planner.events.family import Circumstances, Event, EventSpec, Geometry
from planner.events.instants import InstantMaker, civil_day, nearest_of, zenith_pa_deg
from planner.events.limb import contact
from planner.events.moon import SMOOTH_LIMB_TEXT, limb_disc, limb_track, limb_words, moon_cautions, moon_state
from planner.events.moon_search import EVENT_REACH_S, happening, moon_candidates
from planner.events.visibility import sun_altitude_deg, view
from planner.sky import bodies, discs, places, timescale
from planner.sky.moonlimb import SMOOTH_LIMB_SIGMA_KM, LimbModel
from planner.sky.observer import Observer

DAY_S = timescale.DAY_S
# A topocentric occultation lasts under 2 h, and its middle is within 2 h of the geocentric one.
_CLOSEST_REACH_S = 0.25 * DAY_S
_CONTACT_REACH_S = 0.15 * DAY_S
# The phase of a planet moves contacts of what is seen of it by more than its limb's error from here on: 1 % of 25".
_PHASE_THAT_MATTERS_DEG = 10.0


class MoonOccultsPlanet:
    """The Moon passes in front of a planet."""

    name = "moon-occults-planet"
    targets = ("mercury", "venus", "mars", "jupiter", "saturn", "uranus", "neptune")
    reference = "moon"
    campaign = False

    def search(
        self,
        start_tt_s: float,
        end_tt_s: float,
        observer: Observer | None = None,
        bodies: tuple[str, ...] | None = None,
        tick: Callable[[int, int], None] | None = None,
    ) -> list[Event]:
        """Return the occultations between two instants: seen from the geocentre, or from the site above its horizon."""
        timescale.require_span(np.array([start_tt_s, end_tt_s]), "search span")
        wanted = tuple(self._checked(body) for body in bodies or self.targets)
        found = [
            self._event(wanted[planet], middle_tt_s)
            for planet, _, middle_tt_s in happening(start_tt_s, end_tt_s, observer, wanted, tick=tick)
        ]
        return [event for event in found if predicted(event, observer).happens]

    def nearest(self, spec: EventSpec) -> Event:
        """Return the occultation of the spec's planet nearest to its date that some place on Earth sees."""
        self._checked(spec.body)
        bodies.convention(spec.radii)
        return nearest_of(
            spec, lambda low, high: self._somewhere(spec.body, low, high), (0.1, 1.0, 10.0, 60.0)
        )

    def predict(self, event: Event, observer: Observer | None = None) -> Circumstances:
        """Return the disc contacts and the closest approach, to about 1 ms in the geometry.

        The 1-sigma is mostly the Moon's limb, taken as smooth.
        """
        body, radii = event.spec.body, bodies.convention(event.spec.radii).name
        passing = self._passing(body, observer, radii, event.middle_tt_s)
        closest = passing.closest(np.array([event.middle_tt_s]), 1800.0, _CLOSEST_REACH_S)
        if not np.isfinite(closest).all():
            closest = np.array([event.middle_tt_s])
        outer = passing.contacts(closest, _CONTACT_REACH_S, inner=False)[0]
        inner = passing.contacts(closest, _CONTACT_REACH_S, inner=True)[0]
        model = event.spec.limb
        if model is not None:
            outer, inner = self._real_limb(passing, model, outer, inner)
        times = np.array([outer[0], inner[0], closest[0], inner[1], outer[1]])
        names = np.array(
            ["disappearance_start", "disappearance_end", "closest", "reappearance_start", "reappearance_end"]
        )
        kept = np.isfinite(times)
        times, names = times[kept], names[kept]
        moment = moments(passing, times, names == "closest")
        sight = passing.sight(times)
        at_limb = np.where(names == "closest", 0.0, 1.0)
        limb_km = SMOOTH_LIMB_SIGMA_KM if model is None else model.sigma_km
        limb_arcsec = at_limb * limb_km / moment.near_distance_km * RAD_ARCSEC
        terms = site_terms(moment, observer)
        terms += [ephemeris_term(moment, "moon", body), angle_term("lunar limb", moment, limb_arcsec)]
        planet = discs.sky_disc(body, observer, times, radii=radii)
        maker = InstantMaker(observer, times, sight.far_km, sight.near_km, magnitude=planet.magnitude)
        state = moon_state(observer, times, places.position_angle_deg(sight.near_km, sight.far_km))
        separation = sight.separation_rad * RAD_ARCSEC
        extra: dict[str, Any] = {"separation_arcsec": separation, **limb_words(state)}
        if body == "saturn":
            rings = self._ring_contacts(passing, closest, radii, event.middle_tt_s)
            extra["rings_later_s"] = _later(names, times, rings)
        middle = int(np.flatnonzero(names == "closest")[0])
        if planet.phase_angle_deg[middle] > _PHASE_THAT_MATTERS_DEG and model is None:
            lit = self._lit_contacts(passing, closest, planet, middle)
            extra["lit_part_later_s"] = _later(names, times, lit)
        instants = maker.instants(names, terms, extra)
        covered = bool(np.isfinite(outer).all())
        least = float(separation[middle])
        near, far = passing.radii_rad(sight)
        happens, reason = covered, None
        if not covered:
            missed = least - float(near[middle] + far[middle]) * RAD_ARCSEC
            reason = f"the Moon's limb passes {body.capitalize()} at {missed:.0f} arcsec"
        elif observer is not None:
            hidden = [i.limited_by for i in instants if i.name != "closest"]
            if all(limit in ("below horizon", "behind the horizon line") for limit in hidden):
                happens, reason = False, f"{body.capitalize()} is below the horizon at every contact"
        inner_seen = bool(np.isfinite(inner).all())
        facts = {
            "moon_semidiameter_arcsec": float(near[middle]) * RAD_ARCSEC,
            "planet_semidiameter_arcsec": float(planet.semidiameter_arcsec[middle]),
            "planet_magnitude": float(planet.magnitude[middle]),
            "planet_phase_angle_deg": float(planet.phase_angle_deg[middle]),
            "moon_illuminated_fraction": float(state.illuminated_fraction[middle]),
            "moon_waxing": bool(state.waxing[middle]),
            "sun_elongation_deg": float(state.elongation_deg[middle]),
            "moon_eclipse": state.eclipse[middle],
            "coverage": "none" if not covered else "complete" if inner_seen else "partial (graze)",
            "duration_s": float(outer[1] - outer[0]) if covered else 0.0,
        }
        return Circumstances(
            event=event,
            observer=observer,
            happens=happens,
            reason=reason,
            instants=instants,
            least_separation_arcsec=least,
            conventions={
                "radii": f"{radii}: {bodies.convention(radii).text}",
                "position_angle": "of the planet from the Moon's centre, from true celestial north of date",
                "limb": SMOOTH_LIMB_TEXT if model is None else model.text(event.middle_tt_s),
                "places": "light-time directions from the observer; refraction does not move a contact",
            },
            cautions=moon_cautions(state.elongation_deg[middle], model is None) + maker.time_cautions(),
            facts=facts,
        )

    def geometry(self, event: Event, observer: Observer | None, tt_s: np.ndarray) -> Geometry:
        """Return Moon and planet as discs at these times."""
        tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
        body, radii = event.spec.body, bodies.convention(event.spec.radii).name
        shown = {
            "moon": limb_disc(observer, tt_s, radii),
            body: discs.sky_disc(body, observer, tt_s, radii=radii),
        }
        vector_km = places.direction(body, observer, tt_s).vector_km
        seen = view(vector_km, observer, tt_s)
        return Geometry(
            tt_s=tt_s,
            discs=shown,
            target=body,
            reference="moon",
            altitude_deg=seen.altitude_deg,
            azimuth_deg=seen.azimuth_deg,
            zenith_pa_deg=zenith_pa_deg(vector_km, observer, tt_s),
            sun_altitude_deg=sun_altitude_deg(observer, tt_s),
        )

    @staticmethod
    def _ring_contacts(passing: Passing, closest: np.ndarray, radii: str, tt_s: float) -> dict[str, float]:
        """Return the contacts of the outer edge of Saturn's A ring."""
        globe = planet_shape("saturn", radii, tt_s)
        ring = Shape(bodies.SATURN_RINGS_KM["a_outer"], 0.0, globe.pole)
        return _four(replace(passing, far_shape=ring), closest)

    @staticmethod
    def _lit_contacts(
        passing: Passing, closest: np.ndarray, planet: discs.SkyDisc, middle: int
    ) -> dict[str, float]:
        """Return the contacts of the sunlit part of the disc."""
        ra, dec = np.radians(planet.ra_deg[middle]), np.radians(planet.dec_deg[middle])
        pa = np.radians(planet.bright_limb_pa_deg[middle])
        east = np.array([-np.sin(ra), np.cos(ra), 0.0])
        north = np.array([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)])
        bright = east * np.sin(pa) + north * np.cos(pa)
        radius_km = float(passing.far_shape.equatorial_km)  # type: ignore[union-attr]
        shape = LitShape(radius_km, tuple(bright), float(planet.phase_angle_deg[middle]))
        return _four(replace(passing, far_shape=shape), closest)

    @staticmethod
    def _real_limb(
        passing: Passing, model: LimbModel, outer: np.ndarray, inner: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return the disc contacts with the limb as it is, near the smooth ones."""
        return tuple(  # type: ignore[return-value]
            np.array(
                [
                    contact(passing, passing.observer, model, t, edge, ingress) if np.isfinite(t) else np.nan
                    for t, ingress in zip(smooth, (True, False), strict=True)
                ]
            )
            for smooth, edge in ((outer, 1.0), (inner, -1.0))
        )

    def _checked(self, body: str) -> str:
        if body not in self.targets:
            raise InputError(
                f"event.body: found {body!r}; allowed for {self.name} are {', '.join(self.targets)}"
            )
        return body

    def _passing(self, body: str, observer: Observer | None, radii: str | None, tt_s: float) -> Passing:
        moon = Shape(bodies.radii_km("moon", radii)[0])
        return Passing(limb_track, body_track(body), moon, planet_shape(body, radii, tt_s), observer)

    def _event(self, body: str, middle_tt_s: float) -> Event:
        return Event(
            EventSpec(self.name, body, middle_tt_s),
            middle_tt_s - EVENT_REACH_S,
            middle_tt_s,
            middle_tt_s + EVENT_REACH_S,
            f"The Moon covers {body.capitalize()}, {civil_day(middle_tt_s)}",
        )

    def _somewhere(self, body: str, low_tt_s: float, high_tt_s: float) -> list[Event]:
        """Return the occultations that some place on Earth sees, with their geocentric middles."""
        candidates = moon_candidates(low_tt_s, high_tt_s, (body,))
        return [self._event(body, float(t)) for t in candidates.passings.geocentric()[0]]


def planet_shape(body: str, radii: str | None, tt_s: float) -> Shape:
    """Return the outline of a planet's disc at a date: a spheroid about its pole."""
    equatorial_km, polar_km = bodies.radii_km(body, radii)
    pole = places.unit_vector(*bodies.pole_radec_deg(body, np.array([tt_s])))[:, 0]
    return Shape(equatorial_km, polar_km / equatorial_km, tuple(pole))


def _four(passing: Passing, closest: np.ndarray) -> dict[str, float]:
    """Return the four contacts by name, NaN where limbs do not meet."""
    outer = passing.contacts(closest, _CONTACT_REACH_S, inner=False)[0]
    inner = passing.contacts(closest, _CONTACT_REACH_S, inner=True)[0]
    return {
        "disappearance_start": outer[0],
        "disappearance_end": inner[0],
        "reappearance_start": inner[1],
        "reappearance_end": outer[1],
    }


def _later(names: np.ndarray, times: np.ndarray, contacts: dict[str, float]) -> list[float]:
    """Return how much later these contacts come than the instants of the disc (NaN for the closest approach)."""
    return [float(contacts.get(str(name), np.nan) - t) for name, t in zip(names, times, strict=True)]
