"""The orbit of a small body: osculating elements carried to any date under the pull of the Sun, planets and Moon.

Elements are heliocentric, ecliptic of J2000 (obliquity 84381.448", as agencies publish them). The equations of motion
are integrated in barycentric ICRS coordinates with all perturbers where DE440 has them, and the Sun's first
post-Newtonian term. Left out: the pull of other asteroids (up to some km a year in the main belt) and of sunlight.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np

from planner.errors import InputError
from planner.sky.bodies import AU_KM, C_KM_S, SUN_GM_KM3_S2
from planner.sky.ephemeris import default_ephemeris, state_km_km_s
from planner.sky.timescale import DAY_S, SPAN, require_span

OBLIQUITY = np.radians(84381.448 / 3600.0)
J2000_JD = 2451545.0
# GM in km^3/s^2, systems from Mars on: DE440, Park et al. 2021, AJ 161, 105, table 2
PERTURBERS = {
    "sun": SUN_GM_KM3_S2,
    "mercury": 22031.868551,
    "venus": 324858.592,
    "earth": 398600.435507,
    "moon": 4902.800118,
    "mars": 42828.375816,
    "jupiter": 126712764.1,
    "saturn": 37940584.8418,
    "uranus": 5794556.4,
    "neptune": 6836527.10058,
    "pluto": 975.5,
}
_AU_DAY_S = AU_KM / DAY_S
_GM_AU = DAY_S**2 / AU_KM**3
_LIGHT_AU_DAY = C_KM_S / _AU_DAY_S
ELEMENTS = (
    "semi_major_axis_au",
    "eccentricity",
    "inclination_deg",
    "ascending_node_deg",
    "perihelion_argument_deg",
    "mean_anomaly_deg",
)


@dataclass(frozen=True)
class Orbit:
    """A small body: elements at an epoch (Julian day, TDB), or the SPK file that holds it, and what it looks like.

    `elements` in the order of `ELEMENTS`; `element_sigma` the same, 1-sigma, uncorrelated. `sigma_arcsec`: 1-sigma
    (along, across the apparent track) of the place at the event, which takes the place of `element_sigma`.
    """

    name: str
    epoch_jd_tdb: float | None = None
    elements: tuple[float, ...] | None = None
    element_sigma: tuple[float, ...] | None = None
    sigma_arcsec: tuple[float, float] | None = None
    absolute_magnitude: float | None = None
    slope: float = 0.15
    diameter_km: float | None = None
    diameter_sigma_km: float | None = None
    spk: str | None = None
    spk_target: int | None = None
    source: str = ""
    notes: tuple[str, ...] = ()


class Trajectory:
    """Where bodies on k orbits of one epoch are; integrated as far as asked, and kept.

    DOP853 (Hairer, Norsett & Wanner 1993) with its dense output, relative tolerance 1e-12.
    """

    def __init__(self, epoch_tdb_s: float, states: np.ndarray, without: str | None = None):
        """Start from barycentric states (k, 6) in au and au/day; `without` leaves one perturber out."""
        self._epoch_day = epoch_tdb_s / DAY_S
        self._states = states
        self._runs: dict[int, list] = {1: [], -1: []}
        self._ends = {1: self._epoch_day, -1: self._epoch_day}
        self._last = {1: states.ravel(), -1: states.ravel()}
        names = tuple(name for name in PERTURBERS if name != without)
        self._names = names
        self._gm = np.array([PERTURBERS[name] for name in names]) * _GM_AU

    def state(self, tdb_s: np.ndarray, which: int = 0) -> tuple[np.ndarray, np.ndarray]:
        """Return barycentric position (3, n) in km and velocity (3, n) in km/s of one of the orbits."""
        day = np.atleast_1d(np.asarray(tdb_s, float)) / DAY_S
        self._reach(float(day.max()), 1)
        self._reach(float(day.min()), -1)
        result = np.empty((6, len(day)))
        for sign in (1, -1):
            mine = day >= self._epoch_day if sign > 0 else day < self._epoch_day
            for low, high, solution in self._runs[sign]:
                inside = mine & (day >= min(low, high)) & (day <= max(low, high))
                if inside.any():
                    result[:, inside] = solution(day[inside]).reshape(-1, 6, inside.sum())[which]
        return result[:3] * AU_KM, result[3:] * _AU_DAY_S

    def _reach(self, day: float, sign: int) -> None:
        from scipy.integrate import solve_ivp

        if (day - self._ends[sign]) * sign <= 0 and self._runs[sign]:
            return
        target = day + sign * 30.0 if (day - self._ends[sign]) * sign > 0 else self._ends[sign] + sign * 1.0
        target = float(np.clip(target, SPAN[0] / DAY_S, SPAN[1] / DAY_S))
        run = solve_ivp(
            self._slope,
            (self._ends[sign], target),
            self._last[sign],
            method="DOP853",
            rtol=1e-12,
            atol=1e-14,
            dense_output=True,
        )
        if not run.success:
            raise InputError(
                f"orbit: found one that cannot be integrated ({run.message}); allowed is a regular orbit"
            )
        self._runs[sign].append((self._ends[sign], target, run.sol))
        self._ends[sign], self._last[sign] = target, run.y[:, -1]

    def _slope(self, day: float, flat: np.ndarray) -> np.ndarray:
        states = flat.reshape(-1, 6)
        moment = np.array([day * DAY_S])
        ephemeris = default_ephemeris()
        bodies = ephemeris.snapshot_km(self._names, day * DAY_S) / AU_KM
        away = bodies[None, :, :] - states[:, None, :3]
        distance = np.sqrt((away**2).sum(axis=2))
        pull = (away * (self._gm / distance**3)[:, :, None]).sum(axis=1)
        sun = self._names.index("sun")
        sun_velocity = ephemeris.state("sun", moment, True)[1][:, 0] / _AU_DAY_S  # type: ignore[index]
        r, v = -away[:, sun], states[:, 3:] - sun_velocity
        gm, length = self._gm[sun], distance[:, sun, None]
        # Schwarzschild term in isotropic coordinates, beta = gamma = 1: Moyer 2003, eq. 4-61 (its one-body part)
        pull += (
            gm
            / (_LIGHT_AU_DAY**2 * length**3)
            * (
                (4 * gm / length - (v**2).sum(axis=1, keepdims=True)) * r
                + 4 * (r * v).sum(axis=1, keepdims=True) * v
            )
        )
        return np.concatenate([states[:, 3:], pull], axis=1).ravel()


def heliocentric_state(elements: np.ndarray) -> np.ndarray:
    """Return heliocentric states (k, 6) in au and au/day, ICRS axes, of elements (k, 6) in the order of `ELEMENTS`.

    Textbook two-body relations (Murray & Dermott 1999, Solar System Dynamics, chapter 2).
    """
    a, e, *angles = np.atleast_2d(np.asarray(elements, float)).T
    inclination, node, argument, anomaly = np.radians(angles)
    anomaly = (anomaly + np.pi) % (2 * np.pi) - np.pi
    big = anomaly + e * np.sin(anomaly) / (1 - np.sin(anomaly + e) + np.sin(anomaly))
    big = np.where(np.isfinite(big), big, anomaly)
    for _ in range(60):
        step = (big - e * np.sin(big) - anomaly) / (1 - e * np.cos(big))
        big = big - np.clip(step, -1.0, 1.0)
    gm = SUN_GM_KM3_S2 * _GM_AU
    root = np.sqrt(1 - e * e)
    rate = np.sqrt(gm / a) / (1 - e * np.cos(big))
    plane = np.array([a * (np.cos(big) - e), a * root * np.sin(big), 0 * a])
    motion = np.array([-np.sin(big) * rate, root * np.cos(big) * rate, 0 * a])
    turned = []
    for vector in (plane, motion):
        for axis, angle in ((2, argument), (0, inclination), (2, node), (0, np.full_like(a, OBLIQUITY))):
            vector = _turn(vector, axis, angle)
        turned.append(vector)
    return np.concatenate(turned).T


def _turn(vector: np.ndarray, axis: int, angle: np.ndarray) -> np.ndarray:
    """Rotate vectors (3, k) about axis 0 or 2 by angles."""
    one, two = (axis + 1) % 3, (axis + 2) % 3
    result = vector.copy()
    result[one] = np.cos(angle) * vector[one] - np.sin(angle) * vector[two]
    result[two] = np.sin(angle) * vector[one] + np.cos(angle) * vector[two]
    return result


def elements_of(state: np.ndarray) -> np.ndarray:
    """Return the elements (6,) of a heliocentric state (6,) in au and au/day, ICRS axes: the inverse.

    The mean anomaly of an orbit that is not closed is NaN.
    """
    r, v = (_turn(part[:, None], 0, np.array([-OBLIQUITY]))[:, 0] for part in (state[:3], state[3:]))
    gm = SUN_GM_KM3_S2 * _GM_AU
    momentum = np.cross(r, v)
    length, speed2 = np.linalg.norm(r), v @ v
    eccentric = ((speed2 - gm / length) * r - (r @ v) * v) / gm
    e = float(np.linalg.norm(eccentric))
    a = 1.0 / (2.0 / length - speed2 / gm)
    inclination = np.arccos(momentum[2] / np.linalg.norm(momentum))
    node = np.arctan2(momentum[0], -momentum[1])
    along_node = np.array([np.cos(node), np.sin(node), 0.0])
    argument = np.arctan2(
        eccentric @ np.cross(momentum / np.linalg.norm(momentum), along_node), eccentric @ along_node
    )
    # an orbit that is not closed has no mean anomaly: NaN, and the last element with it
    big = np.arctan2(r @ v / np.sqrt(gm * a), 1 - length / a) if a > 0 else np.nan
    anomaly = big - e * np.sin(big)
    return np.array([a, e, *(np.degrees([inclination, node, argument, anomaly]) % 360.0)])


@lru_cache(maxsize=16)
def trajectory(orbit: Orbit) -> Trajectory:
    """Return the trajectory of an orbit's elements: index 0 is the orbit, 1 to 6 each element off by its 1-sigma."""
    assert orbit.elements is not None
    assert orbit.epoch_jd_tdb is not None
    epoch_tdb_s = (orbit.epoch_jd_tdb - J2000_JD) * DAY_S
    require_span(epoch_tdb_s, "orbit.epoch_jd_tdb")
    elements = np.array(orbit.elements)
    sets = [elements]
    if orbit.element_sigma is not None:
        sets += list(elements + np.diag(orbit.element_sigma))
    position, velocity = state_km_km_s("sun", np.array([epoch_tdb_s]))
    sun = np.concatenate([position[:, 0] / AU_KM, velocity[:, 0] / _AU_DAY_S])
    return Trajectory(epoch_tdb_s, heliocentric_state(np.array(sets)) + sun)


def orbit_from_elements(name: str, epoch_jd_tdb: float, elements: tuple[float, ...], **rest) -> Orbit:  # type: ignore[no-untyped-def]
    """Return an orbit after looking whether its elements can be one; raises InputError naming the key."""
    a, e, inclination, *_ = elements
    if not np.all(np.isfinite(elements)):
        raise InputError(f"orbit: found elements {elements}; allowed are finite numbers")
    if not 0.0 <= e < 1.0:
        raise InputError(f"orbit.eccentricity: found {e:g}; allowed is 0 to below 1")
    if not 0.1 <= a <= 2000.0:
        raise InputError(f"orbit.semi_major_axis_au: found {a:g}; allowed is 0.1 to 2000")
    if not 0.0 <= inclination <= 180.0:
        raise InputError(f"orbit.inclination_deg: found {inclination:g}; allowed is 0 to 180")
    require_span((epoch_jd_tdb - J2000_JD) * DAY_S, "orbit.epoch_jd_tdb")
    return with_size(Orbit(name, epoch_jd_tdb, tuple(float(x) for x in elements), **rest))


def with_size(orbit: Orbit) -> Orbit:
    """Return the orbit with a diameter: the one given, or that of the absolute magnitude at albedo 0.14.

    D = 1329 km / sqrt(p) 10^(-H/5) (Fowler & Chillemi 1992); albedos of 0.04 to 0.35 make it a factor of 1.9 wrong.
    Raises InputError when neither is given.
    """
    if orbit.diameter_km is not None:
        if not 0.0 < orbit.diameter_km < 6000.0:
            raise InputError(f"orbit.diameter_km: found {orbit.diameter_km:g}; allowed is 0 to 6000")
        return orbit
    if orbit.absolute_magnitude is None:
        raise InputError(
            "orbit.diameter_km: found none, and no absolute_magnitude to estimate it from; allowed is either"
        )
    diameter = 1329.0 / np.sqrt(0.14) * 10 ** (-orbit.absolute_magnitude / 5.0)
    return replace(
        orbit,
        diameter_km=float(diameter),
        diameter_sigma_km=float(0.4 * diameter),
        notes=(*orbit.notes, f"diameter {diameter:.0f} km estimated from H at albedo 0.14"),
    )
