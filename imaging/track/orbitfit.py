"""The orbit of a planet from its path among the stars: where it moves, from where the Earth stood.

Six numbers, heliocentric position and velocity at the middle of the track, are fitted to the measured directions by
least squares. The body moves under the pull of the Sun and the other planets (`planner.events.orbit.Trajectory`, which
leaves out the body itself); the Earth's place and the observer's on it are taken as known; light-time is exact. The
first guess is the best of many circular orbits. Elements are osculating, heliocentric, ecliptic and equinox of J2000;
where the eccentricity is not determined (sigma not far below its value) the angles that start at perihelion are not
either, and their errors are not Gaussian.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from imaging.track.fit import widening
from imaging.track.path import PredictedPath, tangent_offsets
from imaging.track.sightings import Sightings
from imaging.track.table import Track
from planner.errors import InputError, NoSolutionError
from planner.sky.bodies import AU_KM, C_KM_S, SUN_GM_KM3_S2
from planner.sky.observer import Observer

if TYPE_CHECKING:
    from planner.sequence.models import Plan

DAY_S = 86400.0
GM_AU3_DAY2 = SUN_GM_KM3_S2 * DAY_S**2 / AU_KM**3
LEAST_FRAMES = 4
GUESSES_AU = np.geomspace(0.35, 45.0, 60)
ELEMENT_NAMES = (
    "semi_major_axis_au",
    "eccentricity",
    "inclination_deg",
    "ascending_node_deg",
    "perihelion_argument_deg",
    "mean_anomaly_deg",
)
MOST_ECCENTRIC = 0.995  # beyond it a planet's orbit is not what was fitted


@dataclass(frozen=True)
class OrbitFit:
    """A fitted orbit. `state`: heliocentric, ICRS axes, au and au/day, with `state_covariance` (6, 6).

    `elements`, `element_sigma`: in the order of ELEMENT_NAMES; `heliocentric_distance_au` and its sigma at the epoch;
    `longitude_of_perihelion_deg`: node plus argument, determined even where the node is not. Sigmas hold the scatter
    of the track. `residual_arcsec`: rms a coordinate. `forecast`: from a plan, not from frames.
    """

    body: str
    epoch_tt_s: float
    frames: int
    arc_days: float
    state: np.ndarray
    state_covariance: np.ndarray
    elements: np.ndarray
    element_sigma: np.ndarray
    heliocentric_distance_au: float
    heliocentric_distance_sigma_au: float
    longitude_of_perihelion_deg: float
    longitude_of_perihelion_sigma_deg: float
    residual_arcsec: float
    chi2_dof: float
    forecast: bool


def orbit_of_track(plan: Plan, track: Track) -> OrbitFit:
    """Return the orbit from a track; raises InputError for a track of another kind, NoSolutionError for too little."""
    from imaging.track.parallax import sightings_of_track
    from planner.sequence.documents import observer_of

    if track.meta.get("reference") != "stars":
        raise InputError(
            f"{track.path}: an orbit needs places among the stars, this track counts from a disc"
        )
    rows = np.flatnonzero(track["verdict"] == "on-track")
    if rows.size < LEAST_FRAMES:
        raise InputError(
            f"{track.path}: {rows.size} frames are on track, an orbit needs at least {LEAST_FRAMES}"
        )
    path = PredictedPath.of_plan(plan)
    sightings = sightings_of_track(track, rows, path)
    return fit_orbit(sightings, observer_of(plan.site), str(track.meta["target"]))


def orbit_of_plan(plan: Plan) -> OrbitFit:
    """Return the orbit as well as the planned frames would determine it, measured to the usual scatter."""
    from imaging.track.parallax import station_of_plan
    from planner.sequence.documents import observer_of

    station = station_of_plan(plan.site.name, plan)
    if station.sightings.on_disc:
        raise InputError(f"{plan.title}: an orbit needs places among the stars, this plan counts from a disc")
    return fit_orbit(station.sightings, observer_of(plan.site), station.body, forecast=True)


def fit_orbit(sightings: Sightings, observer: Observer | None, body: str, forecast: bool = False) -> OrbitFit:
    """Return the orbit that sightings among stars determine.

    Raises NoSolutionError when no orbit fits, or the arc is too short to tell a distance from the Sun.
    """
    problem = _Problem(sightings, observer, body)
    state = problem.refined(problem.first_guess(), perturbed=False)
    state, covariance, residual = problem.solved(state)
    own = np.einsum("nii->n", sightings.covariance_arcsec2) / 2.0
    chi2 = float(np.sum(np.sum(residual**2, axis=1) / own))
    freedom = max(2 * len(sightings) - 6, 1)
    chi2_dof = float("nan") if forecast else chi2 / freedom
    if not forecast:
        covariance = covariance * widening(chi2_dof, freedom)
    distance = float(np.linalg.norm(state[:3]))
    toward = np.concatenate([state[:3] / distance, np.zeros(3)])
    distance_sigma = float(np.sqrt(toward @ covariance @ toward))
    if not np.isfinite(distance_sigma) or distance_sigma > 0.5 * distance:
        raise NoSolutionError(
            f"the arc of {np.ptp(sightings.tt_s) / DAY_S:.0f} days does not tell the distance from the Sun "
            f"({distance:.2f} +- {distance_sigma:.2f} au): a longer track would help"
        )
    elements, sigma, perihelion, perihelion_sigma = _elements(state, covariance)
    return OrbitFit(
        body=body,
        epoch_tt_s=problem.epoch_tt_s,
        frames=len(sightings),
        arc_days=float(np.ptp(sightings.tt_s)) / DAY_S,
        state=state,
        state_covariance=covariance,
        elements=elements,
        element_sigma=sigma,
        heliocentric_distance_au=distance,
        heliocentric_distance_sigma_au=distance_sigma,
        longitude_of_perihelion_deg=perihelion,
        longitude_of_perihelion_sigma_deg=perihelion_sigma,
        residual_arcsec=float(np.sqrt(np.mean(residual**2))),
        chi2_dof=chi2_dof,
        forecast=forecast,
    )


class _Problem:
    """The observer's places and the measured directions, and how a state leads to directions."""

    def __init__(self, sightings: Sightings, observer: Observer | None, body: str):
        from planner.sky.ephemeris import state_km_km_s
        from planner.sky.places import observer_position_km
        from planner.sky.timescale import tdb_s

        assert sightings.anchor_ra_deg is not None  # the track was looked at: its places are among stars
        assert sightings.anchor_dec_deg is not None
        self.anchor_ra_deg, self.anchor_dec_deg = sightings.anchor_ra_deg, sightings.anchor_dec_deg
        self.s, self.body = sightings, body
        self.tdb_s = np.asarray(tdb_s(sightings.tt_s))
        self.epoch_tt_s = float((sightings.tt_s.min() + sightings.tt_s.max()) / 2.0)
        self.epoch_tdb_s = float(tdb_s(np.array([self.epoch_tt_s]))[0])
        self.days = (self.tdb_s - self.epoch_tdb_s) / DAY_S
        self.observer_au = observer_position_km(observer, sightings.tt_s).T / AU_KM
        self.sun_au = state_km_km_s("sun", self.tdb_s)[0].T / AU_KM
        position, velocity = state_km_km_s("sun", np.array([self.epoch_tdb_s]))
        self.sun_epoch = np.concatenate([position[:, 0] / AU_KM, velocity[:, 0] * DAY_S / AU_KM])
        self.weight_root = np.linalg.cholesky(np.linalg.inv(sightings.covariance_arcsec2)).transpose(0, 2, 1)

    def first_guess(self) -> np.ndarray:
        """Return the state of the circular orbit that fits best, over many distances and both senses of direction."""
        middle = int(np.argmin(np.abs(self.days)))
        ra, dec = np.radians(self.anchor_ra_deg[middle]), np.radians(self.anchor_dec_deg[middle])
        sight = np.array([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
        here = self.observer_au[middle] - self.sun_au[middle]
        best, best_cost = None, np.inf
        for radius in GUESSES_AU:
            root = (here @ sight) ** 2 - here @ here + radius**2
            if root < 0:
                continue
            for distance in (-(here @ sight) + np.sqrt(root), -(here @ sight) - np.sqrt(root)):
                if distance < 0.02:
                    continue
                position = here + distance * sight
                speed = np.sqrt(GM_AU3_DAY2 / radius)
                # in the plane nearest to the ecliptic that holds the position, prograde
                pole = np.array([0.0, -0.39777716, 0.91748206])
                forward = np.cross(pole, position)
                state = np.concatenate([position, speed * forward / np.linalg.norm(forward)])
                cost = float(np.sum(np.minimum(np.abs(self.residual(state, perturbed=False)), 1e6) ** 2))
                if cost < best_cost:
                    best, best_cost = state, cost
        if best is None:
            raise NoSolutionError("no orbit about the Sun meets the line of sight")
        return best

    def directions_au(self, states: np.ndarray, perturbed: bool) -> np.ndarray:
        """Return topocentric vectors (k, n, 3) in au of k heliocentric states, light-time applied."""
        if not perturbed:
            return np.stack([self._two_body(state) for state in states])
        from planner.events.orbit import Trajectory

        trajectory = Trajectory(self.epoch_tdb_s, states + self.sun_epoch, without=self._own_name())
        result = []
        for number in range(len(states)):
            delay = np.zeros_like(self.tdb_s)
            for _ in range(3):
                position = trajectory.state(self.tdb_s - delay, number)[0].T / AU_KM
                vector = position - self.observer_au
                delay = np.linalg.norm(vector, axis=1) * AU_KM / C_KM_S
            result.append(vector)
        return np.stack(result)

    def _own_name(self) -> str | None:
        from planner.events.orbit import PERTURBERS

        return self.body if self.body in PERTURBERS else None

    def _two_body(self, state: np.ndarray) -> np.ndarray:
        delay = np.zeros_like(self.days)
        for _ in range(3):
            vector = kepler_positions(state, self.days - delay) + self.sun_au - self.observer_au
            delay = np.linalg.norm(vector, axis=1) * AU_KM / C_KM_S / DAY_S
        return vector

    def residual(self, state: np.ndarray, perturbed: bool) -> np.ndarray:
        """Return measured minus computed places, (n, 2) in arcseconds."""
        return self._residuals(state[None], perturbed)[0]

    def _residuals(self, states: np.ndarray, perturbed: bool) -> np.ndarray:
        vectors = self.directions_au(states, perturbed)
        unit = vectors / np.linalg.norm(vectors, axis=2, keepdims=True)
        offsets = [tangent_offsets(self.anchor_ra_deg, self.anchor_dec_deg, each) for each in unit]
        return -np.nan_to_num(np.stack([np.column_stack(each) for each in offsets]), nan=1e6)

    def _linear(self, state: np.ndarray, perturbed: bool) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return residuals (n, 2), whitened residuals and whitened Jacobian of the *computed* places."""
        steps = 1e-6 * np.concatenate(
            [np.full(3, np.linalg.norm(state[:3])), np.full(3, np.linalg.norm(state[3:]))]
        )
        states = state + np.vstack([np.zeros(6), np.diag(steps)])
        residuals = self._residuals(states, perturbed)
        slope = -(residuals[1:] - residuals[0]) / steps[:, None, None]
        white = np.einsum("nij,nj->ni", self.weight_root, residuals[0]).ravel()
        design = np.einsum("nij,knj->nik", self.weight_root, slope).reshape(-1, 6)
        return residuals[0], white, design

    def refined(self, state: np.ndarray, perturbed: bool, turns: int = 60) -> np.ndarray:
        """Return the state after damped least squares (Levenberg 1944, Marquardt 1963)."""
        damping = 1e-2
        _, white, design = self._linear(state, perturbed)
        cost = float(white @ white)
        for _ in range(turns):
            normal = design.T @ design
            step = np.linalg.solve(normal + damping * np.diag(np.diag(normal)), design.T @ white)
            trial = state + step
            _, new_white, new_design = self._linear(trial, perturbed)
            new_cost = float(new_white @ new_white)
            if np.isfinite(new_cost) and new_cost < cost:
                done = cost - new_cost < 1e-7 * cost and damping < 1.0
                state, white, design, cost = trial, new_white, new_design, new_cost
                damping = max(damping / 5.0, 1e-9)
                if done:
                    break
            else:
                damping *= 8.0
                if damping > 1e9:
                    break
        return state

    def solved(self, state: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return state, covariance and residuals with the planets' pull; two turns suffice from the two-body fit."""
        for _ in range(3):
            _, white, design = self._linear(state, perturbed=True)
            scale = np.linalg.norm(design, axis=0)
            scaled = design / scale
            covariance = np.linalg.pinv(scaled.T @ scaled, rcond=1e-14) / np.outer(scale, scale)
            step = covariance @ (design.T @ white)
            state = state + step
            if np.sqrt(max(step @ (design.T @ design) @ step, 0.0)) < 1e-2:
                break
        return state, covariance, self.residual(state, perturbed=True)


def kepler_positions(state: np.ndarray, days: np.ndarray) -> np.ndarray:
    """Return heliocentric positions (n, 3) in au of a two-body orbit at times (n,) after its state, any eccentricity.

    Universal variables with Stumpff functions (Battin 1999, Introduction to the Mathematics and Methods of
    Astrodynamics, section 4.5).
    """
    r0, v0 = state[:3], state[3:]
    radius, root = float(np.linalg.norm(r0)), np.sqrt(GM_AU3_DAY2)
    radial = float(r0 @ v0) / root
    alpha = 2.0 / radius - float(v0 @ v0) / GM_AU3_DAY2
    x = root * days * (alpha if alpha > 0 else 1.0 / radius)
    for _ in range(60):
        c, s = _stumpff(alpha * x**2)
        at = radial * x**2 * c + (1 - alpha * radius) * x**3 * s + radius * x - root * days
        slope = radial * x * (1 - alpha * x**2 * s) + (1 - alpha * radius) * x**2 * c + radius
        step = at / np.where(np.abs(slope) > 1e-12, slope, 1e-12)
        x = x - step
        if np.max(np.abs(step)) < 1e-13:
            break
    c, s = _stumpff(alpha * x**2)
    f = 1 - x**2 / radius * c
    g = days - x**3 / root * s
    return f[:, None] * r0 + g[:, None] * v0


def _stumpff(z: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return Stumpff's C and S of z, by series near zero."""
    root = np.sqrt(np.abs(z))
    small = np.abs(z) < 1e-3
    safe = np.where(small, 1.0, root)
    cos = np.where(z > 0, np.cos(safe), np.cosh(np.minimum(safe, 50.0)))
    sin = np.where(z > 0, np.sin(safe), np.sinh(np.minimum(safe, 50.0)))
    sign = np.sign(z)
    c = np.where(small, 0.5 - z / 24 + z**2 / 720, sign * (1 - cos) / safe**2)
    s = np.where(small, 1.0 / 6 - z / 120 + z**2 / 5040, sign * (safe - sin) / safe**3)
    return c, s


def _elements(state: np.ndarray, covariance: np.ndarray) -> tuple[np.ndarray, np.ndarray, float, float]:
    """Return elements and sigmas, and the longitude of perihelion with its sigma, by differences from the state."""
    from planner.events.orbit import elements_of

    elements = elements_of(state)
    if not (0 <= elements[1] < MOST_ECCENTRIC) or elements[0] <= 0:
        raise NoSolutionError(
            "the best orbit is not an ellipse about the Sun: the arc is too short, or not a planet's"
        )
    root = np.linalg.cholesky(covariance + 1e-18 * np.diag(np.diag(covariance)))
    share = 1e-2 if np.sqrt(covariance[0, 0]) > 1e-4 else 1.0
    turned = []
    for column in root.T:
        ahead, behind = elements_of(state + share * column), elements_of(state - share * column)
        change = ahead - behind
        change[2:] = (change[2:] + 180.0) % 360.0 - 180.0
        turned.append(np.append(change, change[3] + change[4]) / (2 * share))
    sigma = np.sqrt(np.sum(np.array(turned) ** 2, axis=0))
    perihelion = float((elements[3] + elements[4]) % 360.0)
    return elements, sigma[:6], perihelion, float(sigma[6])
