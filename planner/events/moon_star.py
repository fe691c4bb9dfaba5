"""The Moon covers a star."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.events.budget import angle_term, ephemeris_term, moments, site_terms
from planner.events.catalogue import predicted
from planner.events.contacts import RAD_ARCSEC, Passing, Shape, star_track
from planner.events.family import Circumstances, Event, EventSpec, Geometry, Series
from planner.events.instants import InstantMaker, civil_day, nearest_of, zenith_pa_deg
from planner.events.limb import contact, crossings
from planner.events.moon import (
    LIMB_RELIEF_KM,
    SMOOTH_LIMB_TEXT,
    limb_disc,
    limb_track,
    limb_words,
    moon_cautions,
    moon_state,
)
from planner.events.moon_search import EVENT_REACH_S, as_table, happening, moon_candidates, zodiac_stars
from planner.events.visibility import sun_altitude_deg, view
from planner.sky import bodies, places, starlist, stars, timescale
from planner.sky.moonlimb import SMOOTH_LIMB_SIGMA_KM, LimbModel
from planner.sky.observer import Observer

DAY_S = timescale.DAY_S
DEFAULT_MAGNITUDE = 3.5
_CLOSEST_REACH_S = 0.25 * DAY_S
_CONTACT_REACH_S = 0.15 * DAY_S
# Within this of the limb (9 km of terrain) the limb may be crossed more than twice, over this much time.
_DEEP_ARCSEC = 6.0
_GRAZE_SPAN_S = 900.0
# A star this bright is seen at the Moon's lit limb in a telescope, a fainter one is not; common practice, no source.
_LIT_LIMB_MAGNITUDE = 3.5
# A Moon thinner than this has no glare to speak of at its lit limb.
_THIN_MOON = 0.05


@dataclass(frozen=True)
class MoonOccultsStar:
    """The Moon passes in front of a star; `search` looks at stars to `magnitude_limit` (V)."""

    magnitude_limit: float = DEFAULT_MAGNITUDE
    name = "moon-occults-star"
    targets = ("star",)
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
        """Return the occultations, seen from the geocentre or from the site above its horizon, in time order."""
        timescale.require_span(np.array([start_tt_s, end_tt_s]), "search span")
        rows = zodiac_stars(self.magnitude_limit)
        table = starlist.star_list()[rows]
        found = happening(start_tt_s, end_tt_s, observer, star_table=table, tick=tick)
        chosen = rows[np.array([index for _, index, _ in found], dtype=int)]
        names = stars.star_names(starlist.rows_in_force()[chosen])
        events = [self._event(name, middle) for name, (_, _, middle) in zip(names, found, strict=True)]
        return [event for event in events if predicted(event, observer).happens]

    def nearest(self, spec: EventSpec) -> Event:
        """Return the occultation of the spec's star nearest to its date that some place on Earth sees.

        Raises InputError when the star does not exist, or never comes within the Moon's reach.
        """
        star = self._star(spec)
        _, latitude = places.ecliptic_lonlat(
            places.unit_vector(star.ra_deg, star.dec_deg)[:, None], equinox="J2000"
        )
        if abs(latitude[0]) > 6.8:
            raise InputError(
                f"event.star: found {star.name} at ecliptic latitude {latitude[0]:.1f} degrees; allowed are stars "
                "within 6.8 degrees of the ecliptic, where the Moon can cover them"
            )
        return nearest_of(
            spec, lambda low, high: self._somewhere(spec, star, low, high), (0.1, 1.5, 10.0, 25.0)
        )

    def predict(self, event: Event, observer: Observer | None = None) -> Circumstances:
        """Return disappearance and reappearance, or the graze when the limb's relief decides whether they happen.

        To about 1 ms in the geometry; the 1-sigma is mostly the Moon's limb, taken as smooth.
        """
        star, radii = self._star(event.spec), bodies.convention(event.spec.radii).name
        passing = self._passing(star, observer, radii)
        closest = passing.closest(np.array([event.middle_tt_s]), 1200.0, _CLOSEST_REACH_S)
        if not np.isfinite(closest).all():
            closest = np.array([event.middle_tt_s])
        at_closest = passing.sight(closest)
        near, _ = passing.radii_rad(at_closest)
        least = float(at_closest.separation_rad[0]) * RAD_ARCSEC
        margin = float(near[0]) * RAD_ARCSEC - least
        relief = LIMB_RELIEF_KM / float(at_closest.near_distance_km[0]) * RAD_ARCSEC
        contacts = passing.contacts(closest, _CONTACT_REACH_S, inner=False)[0]
        smooth = contacts.copy()
        series: tuple[Series, ...] = ()
        model = event.spec.limb
        if model is None:
            graze = abs(margin) < relief
        else:
            contacts, series = self._real_limb(passing, model, contacts, float(closest[0]), margin)
            graze = False
        covered = bool(np.isfinite(contacts).all())
        if graze:
            times, names = closest, np.array(["graze"])
        else:
            times = np.array([contacts[0], closest[0], contacts[1]])
            names = np.array(["disappearance", "closest", "reappearance"])
        kept = np.isfinite(times)
        times, names = times[kept], names[kept]
        instants, maker, facts = self._instants(star, passing, times, names, model)
        happens, reason = covered or graze, None
        if graze:
            reason = (
                f"a graze: the limb's relief ({relief:.1f} arcsec) exceeds the margin ({margin:+.1f} arcsec) and "
                "decides whether and how often the star is hidden"
            )
        elif not covered:
            reason = f"the Moon's limb passes {star.name} at {-margin:.0f} arcsec"
        if happens and observer is not None:
            hidden = [i.limited_by for i in instants if i.name != "closest"]
            if all(limit in ("below horizon", "behind the horizon line") for limit in hidden):
                happens, reason = False, f"{star.name} is below the horizon"
        facts |= {"margin_arcsec": margin, "limb_relief_arcsec": relief}
        facts["duration_s"] = float(contacts[1] - contacts[0]) if covered else 0.0
        if model is not None and covered and np.isfinite(smooth).all():
            facts["limb_shift_of_disappearance_s"] = float(contacts[0] - smooth[0])
            facts["limb_shift_of_reappearance_s"] = float(contacts[1] - smooth[1])
        return Circumstances(
            event=event,
            observer=observer,
            happens=happens,
            reason=reason,
            instants=instants,
            least_separation_arcsec=least,
            conventions={
                "radii": f"{radii}: {bodies.convention(radii).text}",
                "position_angle": "of the star from the Moon's centre, from true celestial north of date",
                "limb": SMOOTH_LIMB_TEXT if model is None else model.text(event.middle_tt_s),
                "star": f"{star.name}, proper motion and parallax applied",
                "places": "light-time directions from the observer; refraction does not move a contact",
            },
            cautions=moon_cautions(float(facts["sun_elongation_deg"]), model is None) + maker.time_cautions(),
            facts=facts,
            series=series,
        )

    def geometry(self, event: Event, observer: Observer | None, tt_s: np.ndarray) -> Geometry:
        """Return the Moon as a disc and the star as a point at these times."""
        tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
        star, radii = self._star(event.spec), bodies.convention(event.spec.radii).name
        vector = star.vector(observer, tt_s)
        seen = view(vector, observer, tt_s)
        ra_deg, dec_deg = places.radec_deg(vector)
        return Geometry(
            tt_s=tt_s,
            discs={"moon": limb_disc(observer, tt_s, radii)},
            target=star.name,
            reference="moon",
            altitude_deg=seen.altitude_deg,
            azimuth_deg=seen.azimuth_deg,
            zenith_pa_deg=zenith_pa_deg(vector, observer, tt_s),
            sun_altitude_deg=sun_altitude_deg(observer, tt_s),
            stars=((star.name, ra_deg, dec_deg, star.magnitude),),
        )

    @staticmethod
    def _real_limb(
        passing: Passing, model: LimbModel, smooth: np.ndarray, closest: float, margin_arcsec: float
    ) -> tuple[np.ndarray, tuple[Series, ...]]:
        """Return the contacts with the limb as it is, and all crossings where a graze has several."""
        observer = passing.observer
        if abs(margin_arcsec) > _DEEP_ARCSEC:
            if not np.isfinite(smooth).all():
                return smooth, ()
            pairs = zip(smooth, (True, False), strict=True)
            return np.array([contact(passing, observer, model, t, 0.0, ingress) for t, ingress in pairs]), ()
        found = crossings(passing, observer, model, closest, 0.0, _GRAZE_SPAN_S)
        hidden, bare = found.tt_s[found.into], found.tt_s[~found.into]
        if not len(hidden) or not len(bare):
            return np.full(2, np.nan), ()
        rows = tuple(
            (timescale.utc_iso(float(t), 1), "disappears" if into else "reappears")
            for t, into in zip(found.tt_s, found.into, strict=True)
        )
        series = (Series("crossings of the limb", ("utc", "the_star"), rows),) if len(rows) > 2 else ()
        return np.array([hidden[0], bare[-1]]), series

    def _instants(  # type: ignore[no-untyped-def]
        self,
        star: stars.Star,
        passing: Passing,
        times: np.ndarray,
        names: np.ndarray,
        model: LimbModel | None,
    ):  # type: ignore[no-untyped-def]
        observer = passing.observer
        moment = moments(passing, times, (names == "closest") | (names == "graze"))
        sight = passing.sight(times)
        at_limb = np.where(names == "closest", 0.0, 1.0)
        limb_km = SMOOTH_LIMB_SIGMA_KM if model is None else model.sigma_km
        limb = at_limb * limb_km / moment.near_distance_km * RAD_ARCSEC
        terms = site_terms(moment, observer)
        terms += [
            ephemeris_term(moment, "moon", "star"),
            angle_term("star position", moment, star.sigma_mas(times) * 1e-3),
            angle_term("lunar limb", moment, limb),
        ]
        magnitude = star.magnitude if np.isfinite(star.magnitude) else 6.0
        maker = InstantMaker(observer, times, sight.far_km, sight.near_km, magnitude=magnitude)
        state = moon_state(observer, times, places.position_angle_deg(sight.near_km, sight.far_km))
        if magnitude > _LIT_LIMB_MAGNITUDE:
            glare = state.lit & (state.illuminated_fraction > _THIN_MOON) & (at_limb > 0)
            maker.limit(glare, "lit limb")
        separation = sight.separation_rad * RAD_ARCSEC
        extra: dict[str, Any] = {"separation_arcsec": separation, **limb_words(state)}
        middle = int(np.argmin(separation))
        facts = {
            "magnitude": star.magnitude,
            "moon_semidiameter_arcsec": float(state.semidiameter_arcsec[middle]),
            "moon_illuminated_fraction": float(state.illuminated_fraction[middle]),
            "moon_waxing": bool(state.waxing[middle]),
            "sun_elongation_deg": float(state.elongation_deg[middle]),
            "moon_eclipse": state.eclipse[middle],
        }
        return maker.instants(names, terms, extra), maker, facts

    def _star(self, spec: EventSpec) -> stars.Star:
        if isinstance(spec.star, stars.Star):
            return spec.star
        if not spec.star:
            raise InputError(
                "event.star: found none; allowed is a star such as 'HIP 21421', or RA,DEC in degrees"
            )
        options = dict(spec.options)
        if "," in spec.star:
            return stars.star(
                spec.star, epoch_year=options.get("epoch_year"), pm_mas_yr=options.get("pm_mas_yr")
            )
        return stars.star(spec.star)

    def _passing(self, star: stars.Star, observer: Observer | None, radii: str | None) -> Passing:
        moon = Shape(bodies.radii_km("moon", radii)[0])
        return Passing(limb_track, star_track(star), moon, Shape(0.0), observer)

    def _event(self, name: str, middle_tt_s: float, spec: EventSpec | None = None) -> Event:
        return Event(
            spec or EventSpec(self.name, "star", middle_tt_s, star=name),
            middle_tt_s - EVENT_REACH_S,
            middle_tt_s,
            middle_tt_s + EVENT_REACH_S,
            f"The Moon covers {title_of(name)}, {civil_day(middle_tt_s)}",
        )

    def _somewhere(self, spec: EventSpec, star: stars.Star, low_tt_s: float, high_tt_s: float) -> list[Event]:
        candidates = moon_candidates(low_tt_s, high_tt_s, star_table=as_table(star))
        return [self._event(star.name, float(t), spec) for t in candidates.passings.geocentric()[0]]


def title_of(name: str) -> str:
    """Return a star's name with its proper name where it has one: Aldebaran (HIP 21421)."""
    known = {f"HIP {number}": proper for number, proper in stars.PROPER_NAMES.items()}
    return f"{known[name]} ({name})" if name in known else name
