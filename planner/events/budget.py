"""How well an instant is known: each source of error in seconds, from how fast the limbs approach.

An observer displaced by a small vector d sees a body at distance D move by -d/D across the line of sight, so two
bodies move against each other by d (1/D_near - 1/D_far). Divided by the rate of their separation that is the shift
of a contact; the shift of a closest approach is the same along the relative motion, divided by the speed.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.events.contacts import RAD_ARCSEC, Passing
from planner.events.family import BudgetTerm
from planner.sky import observer as places_on_earth
from planner.sky import timescale
from planner.sky.observer import Observer

# 1-sigma of DE440 places, each coordinate, km, near the present. Park et al. 2021 (AJ 161, 105), section 6, gives the
# sizes of the residuals: Moon to a metre (laser ranging), inner planets to a few hundred metres (ranging, frame
# tie 0.2 mas), Jupiter and Saturn to some ten km and to a km, Uranus and Neptune to about 0.1-0.2 arcsec.
# Mars and beyond are system barycentres in the kernel: the planet's own offset is added (Jupiter up to 0.07",
# Saturn up to 0.05"; Mars, Uranus and Neptune less). Rounded values, from memory.
EPHEMERIS_SIGMA_KM = {
    "sun": 1.0,
    "moon": 0.01,
    "mercury": 1.0,
    "venus": 0.5,
    "mars": 0.5,
    "jupiter": 150.0,
    "saturn": 250.0,
    "uranus": 1500.0,
    "neptune": 2500.0,
}


@dataclass(frozen=True)
class Moment:
    """Instants of one passing with the rates that turn angles into seconds; arrays (n,) and (3, n).

    `across`: unit vectors on the sky along which a displacement changes the instant; `rate_rad_s`: how fast the
    quantity that defines the instant changes.
    """

    tt_s: np.ndarray
    across: np.ndarray
    rate_rad_s: np.ndarray
    near_distance_km: np.ndarray
    far_distance_km: np.ndarray


def moments(passing: Passing, tt_s: np.ndarray, at_closest: np.ndarray, half_step_s: float = 10.0) -> Moment:
    """Return the moments of a passing; `at_closest` marks closest approaches among contacts."""
    tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
    sight = passing.sight(tt_s)
    ends = passing.sight(np.concatenate([tt_s - half_step_s, tt_s + half_step_s]))
    relative = ends.near_km / ends.near_distance_km - ends.far_km / ends.far_distance_km
    motion = np.diff(relative.reshape(3, 2, -1), axis=1)[:, 0] / (2.0 * half_step_s)
    speed = np.sqrt((motion**2).sum(axis=0))
    gap = (ends.separation_rad - sum(passing.radii_rad(ends))).reshape(2, -1)
    closing = (gap[1] - gap[0]) / (2.0 * half_step_s)
    return Moment(
        tt_s,
        np.where(at_closest, motion / speed, sight.toward),
        np.where(at_closest, speed, closing),
        sight.near_distance_km,
        sight.far_distance_km,
    )


def site_terms(moment: Moment, observer: Observer | None) -> list[tuple[str, np.ndarray]]:
    """Return the terms of a site's place, its height and the Earth's rotation, as names with (n,) seconds.

    Where the printed time is UT1 (before 1972, after 2050) the unknown Delta T also moves the label of the instant.
    """
    sigma_ut1_s = timescale.ut1_sigma_s(moment.tt_s)
    label = np.array([timescale.utc_kind(t).startswith("UT1") for t in moment.tt_s], dtype=float)
    if observer is None:
        return [("earth rotation", sigma_ut1_s * label)]
    up = places_on_earth.local_axes(observer, moment.tt_s)[:, 2, :].T
    lever = (1.0 / moment.near_distance_km - 1.0 / moment.far_distance_km) / moment.rate_rad_s
    vertical = np.abs(np.einsum("in,in->n", up, moment.across))
    level = np.sqrt(np.maximum(0.0, 1.0 - vertical**2))
    drift = places_on_earth.gcrs_velocity_km_s(observer, moment.tt_s)
    turned = np.einsum("in,in->n", drift, moment.across) * lever
    return [
        ("site position", observer.position_sigma_m * 1e-3 * level * np.abs(lever)),
        ("site height", observer.height_sigma_m * 1e-3 * vertical * np.abs(lever)),
        ("earth rotation", sigma_ut1_s * np.abs(label + turned)),
    ]


def angle_term(name: str, moment: Moment, sigma_arcsec: float | np.ndarray) -> tuple[str, np.ndarray]:
    """Return a term given as an angle on the sky."""
    return name, np.abs(sigma_arcsec / RAD_ARCSEC / moment.rate_rad_s) * np.ones_like(moment.tt_s)


def ephemeris_term(moment: Moment, near: str, far: str) -> tuple[str, np.ndarray]:
    """Return the term of the ephemeris of both bodies."""
    near_rad = EPHEMERIS_SIGMA_KM[near] / moment.near_distance_km
    far_rad = EPHEMERIS_SIGMA_KM.get(far, 0.0) / moment.far_distance_km
    return angle_term("ephemeris", moment, np.hypot(near_rad, far_rad) * RAD_ARCSEC)


def terms_of(terms: list[tuple[str, np.ndarray]], index: int) -> tuple[BudgetTerm, ...]:
    """Return the budget of one instant."""
    return tuple(BudgetTerm(name, float(sigma_s[index])) for name, sigma_s in terms)
