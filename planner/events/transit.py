"""Transits of Mercury or Venus over the Sun."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from planner.errors import InputError
from planner.events import cautions, conjunctions
from planner.events.budget import angle_term, ephemeris_term, moments, site_terms
from planner.events.catalogue import predicted
from planner.events.contacts import RAD_ARCSEC, Passing, Shape, body_track
from planner.events.family import Circumstances, Event, EventSpec, Geometry
from planner.events.instants import InstantMaker, civil_day, nearest_of, zenith_pa_deg
from planner.events.visibility import sun_altitude_deg, view
from planner.sky import bodies, discs, places, timescale
from planner.sky.observer import Observer

DAY_S = timescale.DAY_S
# Half the longest transit is 4.0 h (Venus over the Sun's centre).
_REACH_S = 0.4 * DAY_S
# Geocentric separation at heliocentric conjunction beyond which no transit can follow: the Sun's largest and
# Venus's largest semidiameter and parallax (975 + 34 + 34 arcsec), over the cosine of the track's slope (9 degrees),
# the motion during the light-time between the geometric and the seen conjunction (500 s at 0.1"/s), and what a
# conjunction found to a quarter of an hour is off by (90").
_NEAR_ARCSEC = 1400.0
_PARALLAX_ARCSEC = 36.0

# 1-sigma of what a radius means at the limb. Sun: spread of measured radii about 959.63", such as 960.12" +- 0.09"
# (Emilio et al. 2012, ApJ 750, 135) and 959.86" +- 0.18" (Meftah et al. 2014); Venus: cloud top and atmosphere,
# 6051.8 km to 6100 km in published tables; both from memory.
_SUN_RADIUS_SIGMA_ARCSEC = 0.3
_PLANET_RADIUS_SIGMA_KM = {"mercury": 1.0, "venus": 25.0}


class SolarTransit:
    """Mercury or Venus crosses the disc of the Sun."""

    name = "solar-transit"
    targets = ("mercury", "venus")
    reference = "sun"
    campaign = False

    def search(
        self,
        start_tt_s: float,
        end_tt_s: float,
        observer: Observer | None = None,
        bodies: tuple[str, ...] | None = None,
        tick: Callable[[int, int], None] | None = None,
    ) -> list[Event]:
        """Return the transits between two instants: all geocentric ones, or those the observer sees any of."""
        timescale.require_span(np.array([start_tt_s, end_tt_s]), "search span")
        wanted = tuple(self._checked(body) for body in bodies or self.targets)
        found: list[Event] = []
        for count, body in enumerate(wanted):
            found += self._transits(
                body, start_tt_s, end_tt_s, None if observer is None else _PARALLAX_ARCSEC
            )
            if tick:
                tick(count + 1, len(wanted))
        if observer is not None:
            found = [event for event in found if predicted(event, observer).happens]
        return sorted(found, key=lambda event: event.middle_tt_s)

    def nearest(self, spec: EventSpec) -> Event:
        """Return the transit of the spec's body nearest to its date, one seen from anywhere on Earth."""
        self._checked(spec.body)
        self._radii(spec)
        return nearest_of(
            spec,
            lambda low, high: self._transits(spec.body, low, high, _PARALLAX_ARCSEC),
            (1.0, 30.0, 250.0),
        )

    def contact_times(
        self,
        body: str,
        start_tt_s: float,
        end_tt_s: float,
        margin_arcsec: float = 0.0,
        radii: str | None = None,
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return (n,) greatest and (n, 4) geocentric contacts I to IV of all transits in a span, in TT seconds.

        NaN where a limb does not cross. `margin_arcsec` also admits those that pass the Sun by as much.
        """
        passing = self._passing(body, None, radii)
        guess = conjunctions.with_earth(body, start_tt_s, end_tt_s, steps=2)
        guess = guess[(guess >= start_tt_s - 2 * DAY_S) & (guess <= end_tt_s + 2 * DAY_S)]
        guess = guess[conjunctions.elongation_rad(body, guess) * RAD_ARCSEC < _NEAR_ARCSEC]
        greatest = passing.closest(guess, 0.1 * DAY_S, 2 * DAY_S)
        greatest = greatest[np.isfinite(greatest)]
        greatest = greatest[(greatest >= start_tt_s) & (greatest <= end_tt_s)]
        sight = passing.sight(greatest)
        gap = (sight.separation_rad - sum(passing.radii_rad(sight))) * RAD_ARCSEC
        greatest = greatest[gap < margin_arcsec]
        outer = passing.contacts(greatest, _REACH_S, inner=False)
        inner = passing.contacts(greatest, _REACH_S, inner=True)
        return greatest, np.stack([outer[:, 0], inner[:, 0], inner[:, 1], outer[:, 1]], axis=1)

    def predict(self, event: Event, observer: Observer | None = None) -> Circumstances:
        """Return contacts I to IV and greatest transit, to about 1 ms in the geometry.

        The 1-sigma is mostly the Sun's radius: what is seen as the limb differs between instruments.
        """
        body, radii = event.spec.body, self._radii(event.spec)
        passing = self._passing(body, observer, radii)
        greatest = passing.closest(np.array([event.middle_tt_s]), 3600.0, DAY_S)
        outer = passing.contacts(greatest, _REACH_S, inner=False)[0]
        inner = passing.contacts(greatest, _REACH_S, inner=True)[0]
        times = np.array([outer[0], inner[0], greatest[0], inner[1], outer[1]])
        names = np.array(["contact_1", "contact_2", "greatest", "contact_3", "contact_4"])
        kept = np.isfinite(times)
        times, names = times[kept], names[kept]
        moment = moments(passing, times, names == "greatest")
        sight = passing.sight(times)
        terms = site_terms(moment, observer) + [ephemeris_term(moment, body, "sun")]
        at_limb = np.where(names == "greatest", 0.0, 1.0)
        planet_sigma = _PLANET_RADIUS_SIGMA_KM[body] / moment.near_distance_km * RAD_ARCSEC
        terms.append(angle_term("solar radius", moment, at_limb * _SUN_RADIUS_SIGMA_ARCSEC))
        terms.append(angle_term("planet radius", moment, at_limb * planet_sigma))
        maker = InstantMaker(observer, times, sight.near_km, reference_km=sight.far_km)
        separation = sight.separation_rad * RAD_ARCSEC
        instants = maker.instants(names, terms, {"separation_arcsec": separation})
        near, far = passing.radii_rad(sight)
        middle = int(np.flatnonzero(names == "greatest")[0])
        least = float(separation[middle])
        crosses = bool(np.isfinite(outer).all())
        happens, reason = crosses, None
        if not crosses:
            missed = least - (near[middle] + far[middle]) * RAD_ARCSEC
            reason = f"{body.capitalize()} passes the Sun's limb at {missed:.1f} arcsec"
        seen = self._seen(observer, outer) if crosses and observer is not None else {}
        if seen.get("seen") == "nothing":
            happens, reason = False, "the Sun is below the horizon from first to last contact"
        sun_sd, planet_sd = float(far[middle]) * RAD_ARCSEC, float(near[middle]) * RAD_ARCSEC
        facts = {
            "sun_semidiameter_arcsec": sun_sd,
            "planet_semidiameter_arcsec": planet_sd,
            "chord_arcsec": 2.0 * float(np.sqrt(max(0.0, sun_sd**2 - least**2))),
            "rate_arcsec_s": float(moments(passing, greatest, np.array([True])).rate_rad_s[0]) * RAD_ARCSEC,
            "duration_s": float(outer[1] - outer[0]) if crosses else 0.0,
            "crossing": "none" if not crosses else "whole" if np.isfinite(inner).all() else "partial (graze)",
            **seen,
        }
        return Circumstances(
            event=event,
            observer=observer,
            happens=happens,
            reason=reason,
            instants=instants,
            least_separation_arcsec=least,
            conventions=self._conventions(radii),
            cautions=cautions.SUN + maker.time_cautions(),
            facts=facts,
        )

    def geometry(self, event: Event, observer: Observer | None, tt_s: np.ndarray) -> Geometry:
        """Return Sun and planet as discs at these times."""
        tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
        body, radii = event.spec.body, self._radii(event.spec)
        shown = {name: discs.sky_disc(name, observer, tt_s, radii=radii) for name in ("sun", body)}
        target = places.direction(body, observer, tt_s)
        seen = view(target.vector_km, observer, tt_s)
        return Geometry(
            tt_s=tt_s,
            discs=shown,
            target=body,
            reference="sun",
            altitude_deg=seen.altitude_deg,
            azimuth_deg=seen.azimuth_deg,
            zenith_pa_deg=zenith_pa_deg(target.vector_km, observer, tt_s),
            sun_altitude_deg=sun_altitude_deg(observer, tt_s),
        )

    def _checked(self, body: str) -> str:
        if body not in self.targets:
            raise InputError(
                f"event.body: found {body!r}; allowed for {self.name} are {', '.join(self.targets)}"
            )
        return body

    def _radii(self, spec: EventSpec) -> str:
        return bodies.convention(spec.radii).name

    def _conventions(self, radii: str) -> dict[str, str]:
        return {
            "radii": f"{radii}: {bodies.convention(radii).text}",
            "position_angle": "of the planet's centre on the Sun's disc, from true celestial north of date",
            "places": "light-time directions from the observer; refraction does not move a contact",
        }

    def _passing(self, body: str, observer: Observer | None, radii: str | None) -> Passing:
        shapes = [Shape(bodies.radii_km(name, radii)[0]) for name in (body, "sun")]
        return Passing(body_track(body), body_track("sun"), shapes[0], shapes[1], observer)

    def _transits(
        self, body: str, low_tt_s: float, high_tt_s: float, margin_arcsec: float | None
    ) -> list[Event]:
        greatest, contacts = self.contact_times(body, low_tt_s, high_tt_s, margin_arcsec or 0.0)
        half = np.nan_to_num((contacts[:, 3] - contacts[:, 0]) / 2.0, nan=0.0) + 3600.0
        spec = EventSpec(self.name, body, 0.0)
        return [
            Event(
                replace(spec, date_tt_s=float(t)),
                float(t - h),
                float(t),
                float(t + h),
                f"{body.capitalize()} crosses the Sun, {civil_day(t)}",
            )
            for t, h in zip(greatest, half, strict=True)
        ]

    @staticmethod
    def _seen(observer: Observer, outer: np.ndarray) -> dict[str, object]:
        """Return when the Sun stands above the site's horizon between first and last contact, to the minute."""
        times = np.arange(outer[0], outer[1] + 60.0, 60.0)
        up = view(places.direction("sun", observer, times).vector_km, observer, times).visible
        if not up.any():
            return {"seen": "nothing"}
        first, last = times[np.flatnonzero(up)[[0, -1]]]
        return {
            "seen": "all of it" if up.all() else "part of it",
            "seen_from": timescale.utc_iso(float(first), 0)[:16] + "Z",
            "seen_to": timescale.utc_iso(float(min(last, outer[1])), 0)[:16] + "Z",
        }
