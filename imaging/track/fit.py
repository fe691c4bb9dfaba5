"""The global fit: one clock, one camera, all frames.

The model of a measured place u (nominal orientation and scale) is

    u = Rot(-rotation) p(t - clock - drift (t - t_mean)) / scale + constant [+ shift along given directions]

with p the predicted path. Scatter that the frames' own sigmas do not explain (seeing that moves the limb, mostly) is
one isotropic variance, estimated so that chi-square equals the degrees of freedom (Paule & Mandel 1982, J. Res. NBS
87, 377); when it was estimated from the data, stated sigmas are those of the resulting Student distribution, wider than
the Gaussian by sqrt(nu / (nu - 2)). Frames beyond 5 sigma of a robust first fit (Cauchy weights) take no part.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from imaging.track.path import PredictedPath
from imaging.track.sightings import Sightings
from planner.errors import NoSolutionError

PARAMETERS = ("clock_s", "drift", "rotation_deg", "log_scale", "east_arcsec", "north_arcsec")
REJECT_SIGMA = 5.0
MOST_ASKED = 200  # frames that are asked for a first rotation


@dataclass(frozen=True)
class Priors:
    """1-sigma of each parameter before the frames speak; 0 holds it at zero.

    `drift` is in seconds a second. `jitter_arcsec`: expected size of unexplained scatter, for comparing hypotheses.
    """

    clock_s: float = 300.0
    drift: float = 0.0
    rotation_deg: float = 60.0
    log_scale: float = 0.1
    center_arcsec: float = 0.0
    jitter_arcsec: float = 1.0

    def sigmas(self, on_disc: bool) -> np.ndarray:
        """Return the sigmas in the order of PARAMETERS; among stars the plate solution already fixed the camera."""
        camera = (self.rotation_deg, self.log_scale) if on_disc else (0.0, 0.0)
        return np.array([self.clock_s, self.drift, *camera, self.center_arcsec, self.center_arcsec])


@dataclass(frozen=True)
class TrackFit:
    """Result of a global fit.

    `value`, `sigma`: by parameter name, in PARAMETERS' order; a parameter that was held has sigma 0.
    `covariance`: of the same, (6, 6). `jitter_arcsec`: unexplained scatter a coordinate. `used`: (n,) mask.
    `along_arcsec`, `across_arcsec`: (n,) residuals after the fit, along and across the predicted motion;
    `sigma_along_arcsec`, `sigma_across_arcsec` include the jitter. `log_evidence`: natural, Laplace's approximation.
    """

    value: dict[str, float]
    sigma: dict[str, float]
    covariance: np.ndarray
    jitter_arcsec: float
    used: np.ndarray
    along_arcsec: np.ndarray
    across_arcsec: np.ndarray
    sigma_along_arcsec: np.ndarray
    sigma_across_arcsec: np.ndarray
    chi2: float
    degrees_of_freedom: float
    log_evidence: float
    extra_value: np.ndarray = field(default_factory=lambda: np.empty(0))
    extra_covariance: np.ndarray = field(default_factory=lambda: np.empty((0, 0)))

    @property
    def rms_arcsec(self) -> tuple[float, float]:
        """Root mean square of the residuals along and across, over the frames used."""
        along, across = (
            float(np.sqrt(np.mean(r[self.used] ** 2))) for r in (self.along_arcsec, self.across_arcsec)
        )
        return along, across


def turn(places: np.ndarray, angle_rad: float | np.ndarray) -> np.ndarray:
    """Return (east, north) places, (..., n, 2), with their position angles increased by an angle or angles (...,)."""
    cos, sin = np.cos(angle_rad), np.sin(angle_rad)
    return places @ np.moveaxis(np.array([[cos, -sin], [sin, cos]]), (0, 1), (-2, -1))


def motion(sightings: Sightings, path: PredictedPath, tt_s: np.ndarray) -> np.ndarray:
    """Return the predicted velocity in arcseconds a second, shape (n, 2)."""
    return sightings.expected_and_motion(path, tt_s)[1]


def start_rotation_deg(sightings: Sightings, predicted: np.ndarray) -> np.ndarray:
    """Return the rotations about the disc's centre that lay most measured places near the predicted ones, (...,).

    `predicted`: (..., n, 2), one set of places for each rotation wanted. Of the rotations that single frames ask for,
    the one that most frames ask for (a mode, not a mean), so that almost half of the frames may be wrong.
    """
    measured = sightings.east_arcsec + 1j * sightings.north_arcsec
    wanted = predicted[..., 0] + 1j * predicted[..., 1]
    if len(sightings) > MOST_ASKED:
        chosen = np.unique(np.linspace(0, len(sightings) - 1, MOST_ASKED).astype(int))
        measured, wanted = measured[chosen], wanted[..., chosen]
    good = np.isfinite(wanted) & (np.abs(wanted) > 0) & (np.abs(measured) > 0)
    # position angles run from north through east: clockwise in the plane of (east, north)
    asked = np.where(good, np.angle(measured * np.conj(np.where(good, wanted, 1.0))), 0.0)
    apart = (asked[..., :, None] - asked[..., None, :] + np.pi) % (2 * np.pi) - np.pi
    both = good[..., :, None] & good[..., None, :]
    pairs = np.where(both, np.abs(apart), np.inf).reshape(*asked.shape[:-1], -1)
    count = np.maximum(both.sum(axis=(-2, -1)), 1)
    ranked = np.sort(pairs, axis=-1)
    lower, upper = (
        np.take_along_axis(ranked, at[..., None], axis=-1)[..., 0] for at in ((count - 1) // 2, count // 2)
    )
    width = np.maximum(np.nan_to_num((lower + upper) / 2, posinf=0.0), np.radians(0.05))
    near = np.where(both, np.exp(-0.5 * (apart / (0.5 * width[..., None, None])) ** 2), 0.0)
    best = np.argmax(near.sum(axis=-1), axis=-1)[..., None]
    weight = np.take_along_axis(near, best[..., None], axis=-2)[..., 0, :]
    away = np.take_along_axis(apart, best[..., None], axis=-2)[..., 0, :]
    mean = np.sum(away * weight, axis=-1) / np.maximum(weight.sum(axis=-1), 1e-30)
    return np.degrees(np.take_along_axis(asked, best, axis=-1)[..., 0] - mean)


def fit_track(
    sightings: Sightings,
    path: PredictedPath,
    priors: Priors = Priors(),
    start_clock_s: np.ndarray | float = 0.0,
    shifts: np.ndarray | None = None,
    shift_sigmas: np.ndarray | None = None,
    fixed_jitter_arcsec: float | None = None,
) -> TrackFit:
    """Fit clock, camera and constants to all frames at once.

    `start_clock_s`: seconds, scalar or one a frame, that the clock is assumed ahead before the fitted offset is added
    (a hypothesis of a whole hour, say). `shifts`: (k, n, 2), arcseconds of place per unit of k further parameters (a
    displaced site), with prior `shift_sigmas` (k,). Raises NoSolutionError when no frame has a finite prediction.
    """
    return _Solver(sightings, path, priors, start_clock_s, shifts, shift_sigmas, fixed_jitter_arcsec).solve()


class _Solver:
    def __init__(self, sightings, path, priors, start_clock_s, shifts, shift_sigmas, fixed_jitter):
        self.s, self.path, self.priors = sightings, path, priors
        self.t0 = sightings.tt_s - start_clock_s
        self.lever_s = self.t0 - np.mean(self.t0)
        self.shifts = np.zeros((0, len(sightings), 2)) if shifts is None else shifts
        extra = np.zeros(0) if shift_sigmas is None else np.asarray(shift_sigmas, float)
        prior = priors.sigmas(sightings.on_disc)
        prior[2] = np.radians(prior[2])
        self.prior = np.concatenate([prior, extra])
        self.free = np.flatnonzero(self.prior > 0)
        self.fixed_jitter = fixed_jitter
        self.scale_at = np.flatnonzero(self.free == PARAMETERS.index("log_scale"))
        self.log_scale = sightings.log_scale_by(path, self.t0) if self.scale_at.size else sightings.log_scale

    def solve(self) -> TrackFit:
        start = self.s.expected(self.path, self.t0)
        if not np.isfinite(start).any():
            raise NoSolutionError("the target is nowhere near its reference at the times of the frames")
        x = np.zeros(len(self.prior))
        if self.s.on_disc:
            x[2] = float(np.radians(start_rotation_deg(self.s, start)))
        finite = np.isfinite(start).all(axis=1)
        x, used = self._robust_start(x, finite)
        jitter = 0.0
        for _ in range(3):
            x, jitter, covariance, nu, chi2 = self._estimate(x, used, jitter)
            distance = self._distance(x, jitter)
            again = finite & (distance < REJECT_SIGMA * np.sqrt(2.0))
            if again.sum() < max(2, 0.5 * finite.sum()) or (again == used).all():
                break
            used = again
        return self._result(x, used, jitter, covariance, nu, chi2)

    def _model(self, x, jacobian=True):
        clock, drift, rotation, log_scale = x[:4]
        t = self.t0 - clock - drift * self.lever_s
        if jacobian:
            place, speed = self.s.expected_and_motion(self.path, t)
        else:
            place = self.s.expected(self.path, t)
        seen = turn(place, -rotation) * np.exp(-log_scale)
        value = seen + x[4:6] + np.einsum("k,kni->ni", x[6:], self.shifts)
        if not jacobian:
            return value
        velocity = turn(speed, -rotation) * np.exp(-log_scale)
        n = len(self.s)
        j = np.zeros((n, 2, len(x)))
        j[:, :, 0] = -velocity
        j[:, :, 1] = -velocity * self.lever_s[:, None]
        j[:, 0, 2], j[:, 1, 2] = -seen[:, 1], seen[:, 0]
        j[:, :, 3] = -seen
        j[:, 0, 4] = j[:, 1, 5] = 1.0
        j[:, :, 6:] = np.moveaxis(self.shifts, 0, 2)
        return value, j

    def _weights(self, jitter):
        """Inverse covariances of the places, (n, 2, 2)."""
        return np.linalg.inv(self.s.covariance_arcsec2 + jitter**2 * np.eye(2))

    def _scale_rows(self, x, used):
        """One datum: the scale that the radii tell, with what they may be off by in common."""
        if not self.scale_at.size:
            return None
        good = used & np.isfinite(self.log_scale) & (self.s.log_scale_sigma > 0)
        if not good.any():
            return None
        weight = self.s.log_scale_sigma[good] ** -2.0
        values = self.log_scale[good]
        mean = np.average(values, weights=weight)
        formal = weight.sum() ** -0.5
        scatter = np.sqrt(np.average((values - mean) ** 2, weights=weight) / max(good.sum() - 1, 1))
        size = np.median(np.hypot(self.s.east_arcsec, self.s.north_arcsec)[good])
        common = self.s.limb_sigma_arcsec / max(size, 1.0)
        return mean - x[3], 1.0 / (max(formal, scatter) ** 2 + common**2)

    def _normal(self, x, weights, used):
        model, j = self._model(x)
        residual = np.where(used[:, None], self.s.places - model, 0.0)
        residual = np.nan_to_num(residual, nan=0.0, posinf=0.0, neginf=0.0)
        j = np.nan_to_num(j[:, :, self.free]) * used[:, None, None]
        matrix = np.einsum("nip,nij,njq->pq", j, weights, j)
        gradient = np.einsum("nip,nij,nj->p", j, weights, residual)
        data = matrix.copy()
        scale = self._scale_rows(x, used)
        if scale is not None:
            at = int(self.scale_at[0])
            matrix[at, at] += scale[1]
            gradient[at] += scale[0] * scale[1]
        prior = self.prior[self.free] ** -2.0
        center = np.zeros(len(self.free))
        if (
            self.s.on_disc
        ):  # the rotation's prior is centred where Procrustes put it: any camera angle is as likely
            center[self.free == 2] = x[2]
        matrix[np.diag_indices_from(matrix)] += prior
        gradient += prior * (center - x[self.free])
        return residual, matrix, gradient, data

    def _step(self, x, weights, used):
        _, matrix, gradient, _ = self._normal(x, weights, used)
        scale = np.sqrt(np.diag(matrix))
        step = np.linalg.solve(matrix / np.outer(scale, scale), gradient / scale) / scale
        if not np.isfinite(step).all():
            raise np.linalg.LinAlgError("the fit left the range of numbers")
        moved = x.copy()
        moved[self.free] += step
        return moved, float(np.max(np.abs(step) * scale))

    def _converge(self, x, weights, used, limit=12):
        for _ in range(limit):
            x, size = self._step(x, weights, used)
            if size < 1e-3:
                break
        return x

    def _distance(self, x, jitter):
        """Mahalanobis distance of each frame from the model; infinite where there is none."""
        residual = self.s.places - self._model(x, jacobian=False)
        distance2 = np.einsum("ni,nij,nj->n", residual, self._weights(jitter), residual)
        return np.sqrt(np.where(np.isfinite(distance2), distance2, np.inf))

    def _robust_start(self, x, finite):
        """Cauchy weights whose width follows the median distance, so that a far start silences nothing."""
        even = np.tile(np.eye(2), (len(self.s), 1, 1))
        before = np.inf
        for _ in range(15):
            residual = np.nan_to_num(self.s.places - self._model(x, jacobian=False), nan=1e9)
            size2 = np.sum(residual**2, axis=1)
            width2 = max(
                np.median(size2[finite]) / 1.386, 1e-12
            )  # median of chi-square with 2 degrees of freedom
            if abs(width2 - before) < 1e-4 * before:
                break
            before = width2
            weight = 1.0 / (1.0 + size2 / (2.0 * width2)) / width2
            x = self._converge(x, even * weight[:, None, None], finite, limit=1)
        residual = np.nan_to_num(self.s.places - self._model(x, jacobian=False), nan=1e9)
        size2 = np.sum(residual**2, axis=1)
        width2 = np.median(size2[finite]) / 1.386
        own = np.einsum("nii->n", self.s.covariance_arcsec2) / 2.0
        return x, finite & (size2 < 2.0 * REJECT_SIGMA**2 * np.maximum(width2, own))

    def _estimate(self, x, used, jitter):
        """Return parameters, jitter, covariance (free), degrees of freedom and chi-square at the end."""
        for _ in range(6):
            weights = self._weights(jitter)
            x = self._converge(x, weights, used)
            residual, matrix, _, data = self._normal(x, weights, used)
            covariance = np.linalg.inv(matrix)
            nu = 2.0 * used.sum() - float(np.einsum("pq,qp->", data, covariance))
            before = jitter
            jitter = self.fixed_jitter if self.fixed_jitter is not None else self._jitter(residual, used, nu)
            if abs(jitter - before) <= 1e-3 * max(jitter, 1e-9):
                break
        weights = self._weights(jitter)
        residual, matrix, _, _ = self._normal(x, weights, used)
        chi2 = float(np.einsum("ni,nij,nj->", residual, weights, residual))
        return x, jitter, np.linalg.inv(matrix), nu, chi2

    def _jitter(self, residual, used, nu):
        if nu <= 0.5:
            return self.priors.jitter_arcsec  # nothing to estimate it from: what is usual is assumed

        def excess(jitter):
            weights = self._weights(jitter)
            return float(np.einsum("ni,nij,nj->", residual, weights, residual)) - nu

        if excess(0.0) <= 0:
            return 0.0
        from scipy.optimize import brentq

        high = float(np.sqrt(np.sum(residual[used] ** 2) / nu)) * 2.0
        return float(brentq(excess, 0.0, high, xtol=1e-6))

    def _result(self, x, used, jitter, covariance, nu, chi2):
        own = np.einsum("nii->n", self.s.covariance_arcsec2)[used].mean() / 2.0
        share = 0.0 if self.fixed_jitter is not None else jitter**2 / (jitter**2 + own)
        student = 1.0 + share * (nu / (nu - 2.0) - 1.0) if nu > 2.5 else 1.0 + share * 4.0
        evidence = self._log_evidence(x, used, jitter, covariance, chi2)
        full = np.zeros((len(x), len(x)))
        full[np.ix_(self.free, self.free)] = covariance * student
        units = np.ones(len(x))
        units[2] = 180.0 / np.pi
        full *= np.outer(units, units)
        values = x * units
        values[2] = (values[2] + 180.0) % 360.0 - 180.0
        names = dict(zip(PARAMETERS, values[:6].tolist(), strict=True))
        sigma = np.sqrt(np.diag(full))
        model, _ = self._model(x)
        residual = turn(self.s.places - model, x[2]) * np.exp(x[3])
        along, across, sigma_along, sigma_across = along_across(
            residual,
            self.s.covariance_arcsec2 + jitter**2 * np.eye(2),
            motion(self.s, self.path, self.t0 - x[0]),
        )
        return TrackFit(
            value=names,
            sigma=dict(zip(PARAMETERS, sigma[:6].tolist(), strict=True)),
            covariance=full[:6, :6],
            jitter_arcsec=float(jitter),
            used=used,
            along_arcsec=along,
            across_arcsec=across,
            sigma_along_arcsec=sigma_along,
            sigma_across_arcsec=sigma_across,
            chi2=chi2,
            degrees_of_freedom=float(nu),
            log_evidence=evidence,
            extra_value=values[6:],
            extra_covariance=full[6:, 6:],
        )

    def _log_evidence(self, x, used, jitter, covariance, chi2):
        """Laplace's approximation; frames left out count as lying 5 sigma off, so that dropping them never pays."""
        cov = self.s.covariance_arcsec2 + jitter**2 * np.eye(2)
        log_like = -0.5 * chi2 - 0.5 * float(np.sum(np.log(np.linalg.det(2 * np.pi * cov[used]))))
        left_out = int((~used).sum())
        log_like -= left_out * (
            REJECT_SIGMA**2 + float(np.median(np.log(2 * np.pi * np.linalg.det(cov) ** 0.5)))
        )
        prior = self.prior[self.free]
        held = x[self.free].copy()
        if self.s.on_disc:
            held[self.free == 2] = 0.0
        log_prior = -0.5 * float(np.sum((held / prior) ** 2)) - float(np.sum(np.log(prior)))
        log_prior -= jitter / self.priors.jitter_arcsec
        scale = self._scale_rows(x, used)
        if scale is not None:
            log_like += -0.5 * scale[0] ** 2 * scale[1] + 0.5 * np.log(scale[1])
        return log_like + log_prior + 0.5 * float(np.linalg.slogdet(covariance)[1])


def widening(chi2_dof: float, freedom: int) -> float:
    """Return by what a covariance grows when residuals are larger than their errors, beyond two sigma of chance.

    Within chance they say nothing: growing by every excess above 1 would overstate errors by 6 % with a dozen frames.
    """
    return chi2_dof if chi2_dof > 1.0 + 2.0 * np.sqrt(2.0 / freedom) else 1.0


def along_across(
    residual: np.ndarray, covariance: np.ndarray, velocity: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Return residuals (n, 2) and their sigmas along the motion and across it (to the left, seen on the sky).

    *Left* is 90 degrees of position angle behind the motion: east for a motion to the north.
    """
    speed = np.hypot(velocity[:, 0], velocity[:, 1])
    unit = velocity / np.where(speed > 0, speed, np.nan)[:, None]
    side = np.column_stack([unit[:, 1], -unit[:, 0]])
    along = np.einsum("ni,ni->n", residual, unit)
    across = np.einsum("ni,ni->n", residual, side)
    sigma_along = np.sqrt(np.einsum("ni,nij,nj->n", unit, covariance, unit))
    sigma_across = np.sqrt(np.einsum("ni,nij,nj->n", side, covariance, side))
    return along, across, sigma_along, sigma_across
