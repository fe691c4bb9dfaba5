"""The fringes that a star shows at an edge, where frames are short enough: its instant and its diameter together."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from imaging.discs.lightcurve import EventFit, Kind, LightCurve, fit_fresnel, fit_step
from planner.errors import NoSolutionError

REACH = 15.0  # scales of the first fringe that are fitted, on either side: a band of 90 nm leaves six fringes in four
# Diameters tried, in angles of the first fringe's scale as seen from the Earth (the Moon: 5.5 mas): smaller ones leave
# the fringes alone, greater ones nothing of them.
DIAMETERS = np.concatenate([[0.0], np.geomspace(0.15, 6.0, 9)])
FINER = 8  # diameters more about the best of these
LEAST_GAIN = 5.0  # of log-likelihood over a step, from which fringes are believed


@dataclass(frozen=True)
class Edge:
    """What covers the star: speed across its limb (m/s), distance (km), and the light: wavelength, width (nm)."""

    speed_m_s: float
    distance_km: float
    wavelength_nm: float = 550.0
    bandwidth_nm: float = 100.0

    @property
    def scale_m(self) -> float:
        """Scale of the first fringe, sqrt(wavelength distance / 2): 10 m on the Moon."""
        return float(np.sqrt(self.wavelength_nm * 1e-9 * self.distance_km * 1e3 / 2))

    @property
    def scale_s(self) -> float:
        """Time in which the edge moves by it."""
        return self.scale_m / self.speed_m_s

    @property
    def scale_mas(self) -> float:
        """Its angle."""
        return float(np.degrees(self.scale_m / (self.distance_km * 1e3)) * 3.6e6)

    def shown_by(self, curve: LightCurve, near_s: float) -> bool:
        """Say whether the frames about an instant are short and dense enough to tell fringes from a step."""
        close = np.flatnonzero(np.abs(curve.start_s - near_s) < REACH * self.scale_s)
        if close.size < 8:
            return False
        cadence = float(np.median(np.diff(curve.start_s[close])))
        return max(cadence, float(np.median(curve.exposure_s[close]))) <= self.scale_s


@dataclass(frozen=True)
class Fringes:
    """An event timed by its fringes. `event`: at the edge of the geometric shadow, its sigma with the diameter free.

    `diameter_mas`, `diameter_sigma_mas`: of a uniform disc; `diameter_limit_mas`: 95 % lie below. `gain`: of
    log-likelihood over a step.
    """

    event: EventFit
    diameter_mas: float
    diameter_sigma_mas: float
    diameter_limit_mas: float
    gain: float

    @property
    def told(self) -> str:
        """What is to be said of the star's size."""
        if self.diameter_mas > 3 * self.diameter_sigma_mas:
            return f"by its fringes; star {self.diameter_mas:.2g} ± {self.diameter_sigma_mas:.1g} mas across"
        return f"by its fringes; star under {self.diameter_limit_mas:.2g} mas across (95 %)"


def fit_fringes(curve: LightCurve, step: EventFit, edge: Edge, star_mas: float | None = None) -> Fringes:
    """Return an event whose step was found, fitted anew by fringes; `star_mas` is fitted when None.

    The likelihood is profiled over instants for each diameter, and averaged over diameters (all alike before). The
    sigma of a diameter is that of its product with the speed: a limb that slopes by 20 degrees changes both by 6 %.
    Raises NoSolutionError when the frames show no fringes, or fit a step as well.
    """
    if not edge.shown_by(curve, step.time_s):
        raise NoSolutionError(
            f"frames must be shorter and closer than {1e3 * edge.scale_s:.2g} ms to show fringes of this edge"
        )
    reach = max(REACH * edge.scale_s, 5 * step.sigma_s)
    window = step.time_s - reach, step.time_s + reach
    near = curve.part(np.abs(curve.start_s - step.time_s) < 1.5 * reach)

    def fits_of(diameters: np.ndarray) -> list[EventFit | None]:
        return [_fit(near, step.kind, edge, float(diameter), window) for diameter in diameters]

    tried = edge.scale_mas * DIAMETERS if star_mas is None else np.array([star_mas])
    fits = fits_of(tried)
    if tried.size > 1:
        best = int(np.argmax(_log_likelihoods(fits)))
        low, high = tried[max(best - 1, 0)], tried[min(best + 1, tried.size - 1)]
        finer = np.setdiff1d(np.linspace(low, high, FINER + 2), tried)
        fits += fits_of(finer)
        order = np.argsort(np.concatenate([tried, finer]), kind="stable")
        tried, fits = np.concatenate([tried, finer])[order], [fits[i] for i in order]
    if all(fit is None for fit in fits):
        raise NoSolutionError("no fringes of this edge are in its light")
    log_likelihood = _log_likelihoods(fits)
    gain = float(log_likelihood.max() - fit_step(near, step.kind, window).log_likelihood)
    if gain < LEAST_GAIN:
        raise NoSolutionError("a step explains its light as well as fringes do")
    # diameters are not evenly spaced: each stands for its stretch
    weight = np.exp(log_likelihood - log_likelihood.max()) * (np.gradient(tried) if tried.size > 1 else 1.0)
    weight = weight / weight.sum()
    instants = np.array([(fit.time_s, fit.sigma_s) if fit is not None else (0.0, 0.0) for fit in fits])
    time = float(weight @ instants[:, 0])
    spread = instants[:, 1] ** 2 + (instants[:, 0] - time) ** 2
    diameter = float(weight @ tried)
    likeliest = fits[int(np.argmax(log_likelihood))]
    assert likeliest is not None
    return Fringes(
        replace(likeliest, time_s=time, sigma_s=float(np.sqrt(weight @ spread))),
        diameter,
        float(np.sqrt(weight @ (tried - diameter) ** 2)),
        float(np.interp(0.95, np.cumsum(weight), tried)) if tried.size > 1 else diameter,
        gain,
    )


def _fit(
    curve: LightCurve, kind: Kind, edge: Edge, star_mas: float, window_s: tuple[float, float]
) -> EventFit | None:
    """Return the fit for one diameter; None where noise shows as much of its pattern."""
    try:
        return fit_fresnel(
            curve,
            kind,
            edge.speed_m_s,
            edge.distance_km * 1e3,
            edge.wavelength_nm,
            edge.bandwidth_nm,
            star_mas,
            window_s,
        )
    except NoSolutionError:
        return None


def _log_likelihoods(fits: list[EventFit | None]) -> np.ndarray:
    return np.array([fit.log_likelihood if fit is not None else -np.inf for fit in fits])
