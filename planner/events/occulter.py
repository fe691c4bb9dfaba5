"""What covers a star: a small body on its orbit, or a planet; how it moves, and how well its place is known."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.events.budget import EPHEMERIS_SIGMA_KM
from planner.events.contacts import RAD_ARCSEC, Shape
from planner.events.family import EventSpec
from planner.events.orbit import Orbit, trajectory
from planner.events.shadow import StateOf, seen_from
from planner.sky import bodies, discs, photometry, places, stars, timescale
from planner.sky.ephemeris import position_km, state_km_km_s
from planner.sky.observer import Observer

# What is taken for an orbit without a stated uncertainty, arcsec (common practice, no source)
_ASSUMED_SIGMA_ARCSEC = 0.1


@dataclass(frozen=True)
class Occulter:
    """What covers the star: how it moves, how large it is, and how well its place is known.

    `span_tt_s`: when its places are known. `variants`: places of the same body with one element off by its 1-sigma
    each. `sigma_arcsec`: stated (along, across), NaN where it follows from the variants. `h`, `slope`: of its
    brightness, None for planets.
    """

    body: str
    name: str
    state: StateOf
    shape: Shape
    sigma_radius_km: float
    variants: tuple[StateOf, ...] = ()
    sigma_arcsec: tuple[float, float] = (np.nan, np.nan)
    h: float | None = None
    slope: float = 0.15
    source: str = "DE440"
    span_tt_s: tuple[float, float] = timescale.SPAN
    notes: tuple[str, ...] = ()

    @property
    def radius_km(self) -> float:
        """Equatorial radius."""
        return self.shape.equatorial_km

    def track(
        self, observer: Observer | None, tt_s: np.ndarray, here_km: np.ndarray | None = None
    ) -> np.ndarray:
        """Return vectors (3, n) from the observer, with light-time."""
        here = places.observer_position_km(observer, tt_s) if here_km is None else here_km
        return seen_from(self.state, here, tt_s)[0]

    def place_shifts_rad(self, tt_s: float) -> np.ndarray:
        """Return independent 1-sigma shifts of its geocentric place as vectors (k, 3) on the sky, in radians."""
        times = np.array([tt_s - 60.0, tt_s, tt_s + 60.0])
        here = places.observer_position_km(None, times)
        vector = seen_from(self.state, here, times)[0]
        unit = vector / np.sqrt((vector**2).sum(axis=0))
        if not np.isnan(self.sigma_arcsec[0]):
            motion = unit[:, 2] - unit[:, 0]
            along = motion / np.sqrt(motion @ motion)
            axes = np.stack([along, np.cross(unit[:, 1], along)])
            return axes * np.array(self.sigma_arcsec)[:, None] / RAD_ARCSEC
        moved = [seen_from(variant, here[:, 1:2], times[1:2])[0][:, 0] for variant in self.variants]
        return np.array([v / np.sqrt(v @ v) - unit[:, 1] for v in moved])

    def place_sigma_arcsec(self, tt_s: float) -> tuple[float, float]:
        """Return the 1-sigma of its apparent place along and across its motion, geocentric."""
        if not np.isnan(self.sigma_arcsec[0]):
            return self.sigma_arcsec
        times = np.array([tt_s - 60.0, tt_s + 60.0])
        vector = self.track(None, times)
        before, after = (vector / np.sqrt((vector**2).sum(axis=0))).T
        along = (after - before) / np.sqrt((after - before) @ (after - before))
        shifts = self.place_shifts_rad(tt_s)
        sigma = [
            float(np.sqrt(((shifts @ axis) ** 2).sum())) * RAD_ARCSEC
            for axis in (along, np.cross(before, along))
        ]
        return sigma[0], sigma[1]


def magnitude_drop(star_magnitude: float, body_magnitude: float) -> float:
    """Return by how many magnitudes the joint light of star and body falls when the star goes; NaN where unknown."""
    return float(2.5 * np.log10(1.0 + 10 ** (0.4 * (body_magnitude - star_magnitude))))


def occulter_of(spec: EventSpec) -> Occulter:
    """Return what covers the star; raises InputError when the orbit is missing or wrong."""
    if spec.body != "asteroid":
        if spec.body not in bodies.PLANETS:
            raise InputError(
                f"event.body: found {spec.body!r}; allowed are asteroid, {', '.join(bodies.PLANETS)}"
            )
        equatorial, polar = bodies.radii_km(spec.body, spec.radii)
        pole = places.unit_vector(*bodies.pole_radec_deg(spec.body, np.array([spec.date_tt_s])))[:, 0]
        sigma_km = EPHEMERIS_SIGMA_KM[spec.body]
        # at the distance of the date, which is all an angle of some milliarcseconds needs
        distance = float(places.direction(spec.body, None, np.array([spec.date_tt_s])).distance_km[0])
        sigma = sigma_km / distance * RAD_ARCSEC
        return Occulter(
            spec.body,
            spec.body.capitalize(),
            lambda tdb_s: state_km_km_s(spec.body, tdb_s),
            Shape(equatorial, polar / equatorial, tuple(float(x) for x in pole)),  # type: ignore[arg-type]
            1.0,
            sigma_arcsec=(sigma, sigma),
        )
    orbit = orbit_of(spec.orbit)
    notes = list(orbit.notes)
    sigma_arcsec: tuple[float, float] = (np.nan, np.nan)
    if orbit.sigma_arcsec is not None:
        sigma_arcsec = orbit.sigma_arcsec
    elif orbit.element_sigma is None:
        sigma_arcsec = (_ASSUMED_SIGMA_ARCSEC, _ASSUMED_SIGMA_ARCSEC)
        notes.append(f"no uncertainty of the orbit is stated: {_ASSUMED_SIGMA_ARCSEC} arcsec assumed")
    state, variants, span = _states(orbit)
    assert orbit.diameter_km is not None
    radius = orbit.diameter_km / 2.0
    sigma_radius = (orbit.diameter_sigma_km or 0.1 * orbit.diameter_km) / 2.0
    return Occulter(
        "asteroid",
        orbit.name,
        state,
        Shape(radius),
        sigma_radius,
        variants,
        sigma_arcsec,
        orbit.absolute_magnitude,
        orbit.slope,
        orbit.source or "elements as given",
        span,
        tuple(notes),
    )


def _states(orbit: Orbit) -> tuple[StateOf, tuple[StateOf, ...], tuple[float, float]]:
    if orbit.spk is not None:
        from planner.sky.smallbody import small_body

        body = small_body(orbit.spk, orbit.spk_target)
        first, last = body.span_tdb_s
        # an hour inside the file's ends: light-time reaches back
        return body.state, (), (max(first + 3600.0, timescale.SPAN[0]), min(last - 3600.0, timescale.SPAN[1]))
    course = trajectory(orbit)
    count = 0 if orbit.element_sigma is None else len(orbit.element_sigma)
    variants = tuple(
        lambda tdb_s, which=k + 1: course.state(tdb_s, which)  # type: ignore[misc]
        for k in range(count)
    )
    return course.state, variants, timescale.SPAN


def orbit_of(given: Any) -> Orbit:
    """Return the orbit of a spec; raises InputError when there is none."""
    if isinstance(given, Orbit):
        return given
    raise InputError(
        f"event.orbit: found {given or 'none'}; allowed is a file of elements (.yaml, .json) or one-line orbits (.txt)"
    )


def star_of(spec: EventSpec) -> stars.Star:
    """Return the star of a spec; raises InputError when there is none or it does not exist."""
    if not spec.star:
        raise InputError(
            "event.star: found none; allowed is a star such as 'HIP 21421', or RA,DEC in degrees"
        )
    options = dict(spec.options)
    if "," in spec.star:
        return stars.star(spec.star, epoch_year=options.get("epoch_year"), pm_mas_yr=options.get("pm_mas_yr"))
    return stars.star(spec.star)


def disc_of(
    occulter: Occulter, observer: Observer | None, tt_s: np.ndarray, radii: str | None
) -> discs.SkyDisc:
    """Return the body as a disc; a small one is round, its magnitude NaN without an absolute one."""
    if occulter.body != "asteroid":
        return discs.sky_disc(occulter.body, observer, tt_s, radii)
    here = places.observer_position_km(observer, tt_s)
    vector = seen_from(occulter.state, here, tt_s)[0]
    distance = np.sqrt((vector**2).sum(axis=0))
    to_sun = position_km("sun", timescale.tdb_s(tt_s) - distance / bodies.C_KM_S) - here - vector
    sun_distance = np.sqrt((to_sun**2).sum(axis=0))
    phase = places.separation_arcsec(to_sun, -vector) / 3600.0
    magnitude = np.full_like(distance, np.nan)
    if occulter.h is not None:
        magnitude = photometry.asteroid_magnitude(
            occulter.h, occulter.slope, sun_distance / bodies.AU_KM, distance / bodies.AU_KM, phase
        )
    ra_deg, dec_deg = places.radec_deg(vector)
    zero = np.zeros_like(distance)
    return discs.SkyDisc(
        name="asteroid",
        ra_deg=ra_deg,
        dec_deg=dec_deg,
        distance_km=distance,
        semidiameter_arcsec=RAD_ARCSEC * np.arcsin(occulter.radius_km / distance),
        flattening=zero,
        pole_pa_deg=zero,
        phase_angle_deg=phase,
        bright_limb_pa_deg=places.position_angle_deg(vector, vector + to_sun),
        magnitude=magnitude,
    )
