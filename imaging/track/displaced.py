"""A displaced site: the place from which the frames fit, when it is not the plan's.

Moving the observer shifts the path by an amount that is nearly linear in kilometres (0.5 arcsec a kilometre beside the
Moon, 0.0006 for Mercury on the Sun); two kilometre parameters join the global fit, and the fit is repeated from where
they lead.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from imaging.track.findings import SLIP, SMALL_CLOCK_S, Finding, Question, Reading, odds
from imaging.track.fit import fit_track
from imaging.track.nominal import Promise
from imaging.track.path import PredictedPath
from imaging.track.result import with_sigma
from planner.errors import NoSolutionError

CLAIM_SIGMA = 5.0
LEAST_FRAMES = 6
SITE_PRIOR_KM = 500.0
FARTHEST_KM = 3000.0
AT_THE_SITE = ("plain", "zone", "date", "mirrored")  # readings that leave the site as the plan has it


def displaced_site(reading: Reading, promise: Promise, question: Question) -> tuple[Finding, Reading] | None:
    """Return a finding and its reading when another site, a distance away, fits far better.

    A displacement along the path looks like a clock error; only what the frames tell apart is claimed.
    """
    if reading.name not in AT_THE_SITE or reading.fit.used.sum() < LEAST_FRAMES:
        return None
    priors = question.priors(SMALL_CLOCK_S)
    sigmas = np.array([SITE_PRIOR_KM, SITE_PRIOR_KM])
    north_km = east_km = 0.0
    path, fit = reading.path, None
    try:
        plain = fit_track(reading.sightings, path, priors, reading.clock_s)
        for _ in range(4):
            shifts = _site_shifts(reading, promise, path, north_km, east_km)
            fit = fit_track(reading.sightings, path, priors, reading.clock_s, shifts, sigmas)
            step = fit.extra_value
            if not np.isfinite(step).all() or np.hypot(*step) > FARTHEST_KM:
                return None
            north_km, east_km = north_km + step[0], east_km + step[1]
            path = _path_at(promise, north_km, east_km)
            if np.hypot(*step) < 0.5:
                break
    except (NoSolutionError, np.linalg.LinAlgError):
        return None
    assert fit is not None
    weight = fit.log_evidence - plain.log_evidence + SLIP
    away = np.array([north_km, east_km])
    covariance = fit.extra_covariance
    significance = float(np.sqrt(away @ np.linalg.solve(covariance, away)))
    if weight < np.log(1e4) or significance < CLAIM_SIGMA:
        return None
    size = float(np.hypot(*away))
    sigma = float(np.sqrt(away @ covariance @ away) / size)
    worst = float(np.sqrt(np.linalg.eigvalsh(covariance)[-1]))
    bearing = np.degrees(np.arctan2(east_km, north_km)) % 360
    text = (
        f"The frames fit a site {with_sigma(size, sigma)} km away from the plan's, towards {compass(bearing)}"
    )
    if worst > 0.3 * size:
        text += f"; in the other direction it is free to {worst:.0f} km, being like a clock error"
    finding = Finding("site-displaced", odds(weight), text + ".", size, sigma, "km")
    return finding, replace(reading, name="site-displaced", fit=fit, path=path, sentence=finding.sentence)


def _site_shifts(
    reading: Reading, promise: Promise, path: PredictedPath, north_km: float, east_km: float
) -> np.ndarray:
    """Return the change of the predicted places by a kilometre north and by one east, (2, n, 2)."""
    s, t = reading.sightings, reading.sightings.tt_s - reading.clock_offset_s
    step_km = 20.0
    here = s.expected(path, t)
    moves = []
    for north, east in ((step_km, 0.0), (0.0, step_km)):
        other = _path_at(promise, north_km + north, east_km + east)
        moves.append((s.expected(other, t) - here) / step_km)
    return np.stack(moves)


def _path_at(promise: Promise, north_km: float, east_km: float) -> PredictedPath:
    from planner.sequence.documents import observer_of

    observer = observer_of(promise.plan.site)
    north_km_deg, east_km_deg = km_per_degree(observer.latitude_deg)
    latitude = float(np.clip(observer.latitude_deg + north_km / north_km_deg, -89.9, 89.9))
    longitude = (observer.longitude_deg + east_km / max(east_km_deg, 1.0) + 180.0) % 360.0 - 180.0
    moved = replace(observer, latitude_deg=latitude, longitude_deg=longitude)
    return PredictedPath.of_plan(promise.plan, moved)


def km_per_degree(latitude_deg: float) -> tuple[float, float]:
    """Return kilometres a degree of latitude and of longitude at sea level (WGS 84, series to 10 m)."""
    phi = np.radians(latitude_deg)
    return 111.1329 - 0.5598 * float(np.cos(2 * phi)), 111.4128 * float(np.cos(phi)) - 0.0935 * float(
        np.cos(3 * phi)
    )


def compass(bearing_deg: float) -> str:
    """Return one of 16 directions of the compass."""
    names = "N NNE NE ENE E ESE SE SSE S SSW SW WSW W WNW NW NNW".split()
    return names[round(bearing_deg / 22.5) % 16]
