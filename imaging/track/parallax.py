"""The distance of a planet or the Moon from tracks of two or more sites: how much their views differ.

Every station's path is predicted with the ephemeris and the site. The difference that the Earth's size makes, the
path from the site minus the path from the Earth's centre, is scaled by one number kappa, common to all stations;
kappa = 1 is the ephemeris. Where the ephemeris puts the path is *not* used: an offset common to all stations is free,
a rate nearly so, and so are each station's clock (within what it promises), camera roll and scale. So the differences
of the stations decide, as in the classical campaigns. Distances follow by Kepler's third law, which gives their
ratios: all scale with 1 / kappa, and so does the solar parallax with kappa.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from imaging.track.fit import motion, widening
from imaging.track.path import PredictedPath
from imaging.track.sightings import Sightings, among_stars
from imaging.track.table import Track
from planner.errors import InputError, NoSolutionError
from planner.sky.bodies import AU_KM, EARTH_RADIUS_KM

if TYPE_CHECKING:
    from planner.sequence.models import Plan

SOLAR_PARALLAX_ARCSEC = 8.794143  # 6378.1366 km at the au of IAU 2012 resolution B2
FREE_OFFSET_ARCSEC = 100.0
FREE_RATE_ARCSEC = 1.0  # over half of the frames' span: the body's angular speed is known from any one track
FREE_ROTATION_RAD = 1.0
UNSEEN_ARCSEC = 1e3  # a contact says nothing of where on the limb the planet is
INDEPENDENT_S = (
    10.0  # frames nearer in time share the seeing's motion of the limb; common practice, no source
)


@dataclass(frozen=True)
class Station:
    """One site's share: its sightings (measured or planned), its path, what its clock and scale promise (1-sigma)."""

    name: str
    sightings: Sightings
    path: PredictedPath
    clock_sigma_s: float
    scale_sigma: float
    body: str
    distance_km: float


@dataclass(frozen=True)
class Parallax:
    """What the stations together say. `kappa`: measured over assumed parallax; distances are geocentric, at mid-time.

    `chi2_dof`: of the fit; sigmas are scaled up by its root when it is above 1 by more than chance. `baseline_km`:
    largest distance between sites across the line of sight, mean over the frames.
    """

    body: str
    stations: tuple[str, ...]
    frames: int
    kappa: float
    kappa_sigma: float
    distance_km: float
    distance_sigma_km: float
    horizontal_parallax_arcsec: float
    horizontal_parallax_sigma_arcsec: float
    solar_parallax_arcsec: float
    solar_parallax_sigma_arcsec: float
    astronomical_unit_km: float
    astronomical_unit_sigma_km: float
    baseline_km: float
    chi2_dof: float
    forecast: bool


def station_of_track(name: str, plan: Plan, track: Track) -> Station:
    """Return a station from a track and the plan it was checked with; raises InputError when they do not belong."""
    if track.meta.get("family") != plan.event.family:
        raise InputError(
            f"{track.path}: is a track of {track.meta.get('family')}, the plan is of {plan.event.family}"
        )
    rows = np.flatnonzero(track["verdict"] == "on-track")
    if rows.size < 3:
        raise InputError(f"{track.path}: {rows.size} frames are on track; a station needs at least 3")
    path = PredictedPath.of_plan(plan)
    sightings = sightings_of_track(track, rows, path)
    scale = track.meta.get("scale_arcsec_px")
    scale_sigma = track.meta.get("scale_sigma_arcsec_px")
    relative = float(scale_sigma) / float(scale) if scale and scale_sigma else 1e-4
    return _station(name, plan, sightings, path, relative)


def station_of_plan(name: str, plan: Plan) -> Station:
    """Return a station as it will be if every planned frame succeeds with the scatter usual for rig and seeing."""
    from imaging.track.checking import usual_jitter_arcsec
    from planner.sequence.frametimes import planned_frames

    path = PredictedPath.of_plan(plan)
    tt_s = np.sort(planned_frames(plan).middle_tt_s)
    geometry = path.geometry(tt_s)
    expected = path.at(tt_s)
    seen = np.isfinite(expected.altitude_deg) & (expected.altitude_deg > 0)
    if geometry.reference != "stars":
        apart = np.hypot(expected.east_arcsec, expected.north_arcsec)
        inner = apart < expected.reference_semidiameter_arcsec
        seen &= inner if geometry.reference == "sun" else ~inner
    if seen.sum() < 3:
        raise InputError(f"{plan.title}: fewer than 3 planned frames show the target")
    tt_s = tt_s[seen]
    jitter = usual_jitter_arcsec(plan, geometry.reference)
    # a burst of frames is one sample of the seeing
    alone = np.diff(tt_s, prepend=-np.inf)
    share = np.clip(np.minimum(alone, np.diff(tt_s, append=np.inf)) / INDEPENDENT_S, 1e-3, 1.0)
    covariance = (jitter**2 / share)[:, None, None] * np.eye(2)
    expected = path.at(tt_s)
    nothing = np.full(tt_s.shape, np.nan)
    if geometry.reference == "stars":
        sightings = among_stars(tt_s, 0 * tt_s, expected.ra_deg, expected.dec_deg, covariance)
    else:
        sightings = Sightings(
            tt_s, 0 * tt_s, expected.east_arcsec, expected.north_arcsec, covariance, nothing, nothing
        )
    return _station(name, plan, sightings, path, 1e-4)


def _station(name: str, plan: Plan, sightings: Sightings, path: PredictedPath, scale_sigma: float) -> Station:
    from planner.sky.places import direction

    middle = np.array([float(np.median(sightings.tt_s))])
    target = path.geometry(middle).target
    distance = float(direction(target, None, middle).distance_km[0])
    return Station(name, sightings, path, plan.rig.clock.sigma_s, scale_sigma, target, distance)


def sightings_of_track(track: Track, rows: np.ndarray, path: PredictedPath) -> Sightings:
    """Return the sightings that rows of a track hold, turned and scaled as the check found; sigmas hold the scatter."""
    from planner.sky.timescale import tt_s_from_iso

    tt_s = np.array([tt_s_from_iso(text) for text in track["utc_mid"][rows]])
    exposure = track["exposure_s"][rows]
    path.at(tt_s[:1])
    if path.among_stars:
        sightings = among_stars(
            tt_s,
            exposure,
            track["measured_ra_deg"][rows],
            track["measured_dec_deg"][rows],
            np.tile(np.eye(2), (rows.size, 1, 1)),
        )
    else:
        nothing = np.full(rows.size, np.nan)
        sightings = Sightings(
            tt_s,
            exposure,
            track["measured_east_arcsec"][rows],
            track["measured_north_arcsec"][rows],
            np.tile(np.eye(2), (rows.size, 1, 1)),
            nothing,
            nothing,
        )
    velocity = motion(sightings, path, tt_s)
    unit = velocity / np.hypot(*velocity.T)[:, None]
    side = np.column_stack([unit[:, 1], -unit[:, 0]])
    covariance = np.einsum("n,ni,nj->nij", track["sigma_along_arcsec"][rows] ** 2, unit, unit)
    covariance += np.einsum("n,ni,nj->nij", track["sigma_across_arcsec"][rows] ** 2, side, side)
    return replace(sightings, covariance_arcsec2=covariance)


def station_of_contacts(
    name: str,
    path: PredictedPath,
    signs: np.ndarray,
    tt_s: np.ndarray,
    sigma_s: np.ndarray,
    clock_sigma_s: float = 1e-3,
) -> Station:
    """Return a station from timed contacts alone: each says how far from the Sun's centre the planet stood then.

    `signs`: +1 for outer contacts (I, IV), -1 for inner ones (II, III). `clock_sigma_s`: error common to the station.
    """
    from planner.sky.places import direction

    airless = path.airless()
    expected = airless.at(tt_s)
    place = np.column_stack([expected.east_arcsec, expected.north_arcsec])
    apart = np.hypot(*place.T)
    outward = place / apart[:, None]
    radius = expected.reference_semidiameter_arcsec + signs * expected.target_semidiameter_arcsec
    later = airless.at(tt_s + 1.0)
    rate = np.hypot(later.east_arcsec, later.north_arcsec) - apart
    covariance = np.einsum("n,ni,nj->nij", (rate * sigma_s) ** 2, outward, outward)
    along = np.column_stack([-outward[:, 1], outward[:, 0]])
    covariance += UNSEEN_ARCSEC**2 * np.einsum("ni,nj->nij", along, along)
    nothing = np.full(tt_s.shape, np.nan)
    seen = outward * radius[:, None]
    sightings = Sightings(tt_s, 0 * tt_s, seen[:, 0], seen[:, 1], covariance, nothing, nothing)
    middle = np.array([float(np.median(tt_s))])
    target = path.geometry(middle).target
    distance = float(direction(target, None, middle).distance_km[0])
    return Station(name, sightings, airless, clock_sigma_s, 1e-6, target, distance)


def lever(station: Station) -> np.ndarray:
    """Return the path from the site minus the path from the Earth's centre, (n, 2) in arcseconds, without air."""
    tt_s = station.sightings.tt_s
    from_site = station.sightings.expected(station.path.airless(), tt_s)
    return from_site - station.sightings.expected(station.path.from_center(), tt_s)


def fit_parallax(stations: Sequence[Station], forecast: bool = False) -> Parallax:
    """Return the parallax of the body from all stations together.

    Raises InputError when the stations are not of one body, NoSolutionError when their difference is too small.
    """
    bodies = {station.body for station in stations}
    if len(bodies) != 1 or len(stations) < 2:
        raise InputError(
            "two stations or more of one body are needed; found "
            + ", ".join(f"{station.body} at {station.name}" for station in stations)
        )
    spans = [(station.sightings.tt_s.min(), station.sightings.tt_s.max()) for station in stations]
    if (
        max(low for low, _ in spans) - min(high for _, high in spans) > 86400.0
        and stations[0].sightings.on_disc
    ):
        raise InputError("the stations' frames are more than a day apart: they are not of one event")
    middle = float(np.mean([np.mean(span) for span in spans]))
    half = max(float(np.max([high for _, high in spans]) - np.min([low for low, _ in spans])) / 2.0, 60.0)
    matrix, vector, prior, chi2, rows = _normal_equations(stations, middle, half)
    matrix = matrix + np.diag(prior)
    scale = np.sqrt(np.diag(matrix))
    covariance = np.linalg.inv(matrix / np.outer(scale, scale)) / np.outer(scale, scale)
    solution = covariance @ vector
    chi2_dof = float("nan")
    stretch = 1.0
    if not forecast:
        freedom = max(rows - len(solution), 1)
        chi2_dof = (chi2 - float(vector @ solution)) / freedom
        stretch = float(np.sqrt(widening(chi2_dof, freedom)))
    kappa, sigma = 1.0 + float(solution[0]), float(np.sqrt(covariance[0, 0])) * stretch
    if not np.isfinite(sigma) or (not forecast and kappa < 3 * sigma):
        raise NoSolutionError(
            f"the stations' views do not differ enough to tell a distance: parallax {kappa:.2f} +- {sigma:.2f} of the "
            "assumed one; a longer baseline, more frames or a better clock would help"
        )
    distance = stations[0].distance_km
    horizontal = np.degrees(np.arcsin(EARTH_RADIUS_KM / distance)) * 3600.0
    relative = sigma / kappa
    return Parallax(
        body=stations[0].body,
        stations=tuple(station.name for station in stations),
        frames=sum(len(station.sightings) for station in stations),
        kappa=kappa,
        kappa_sigma=sigma,
        distance_km=distance / kappa,
        distance_sigma_km=distance / kappa * relative,
        horizontal_parallax_arcsec=horizontal * kappa,
        horizontal_parallax_sigma_arcsec=horizontal * sigma,
        solar_parallax_arcsec=SOLAR_PARALLAX_ARCSEC * kappa,
        solar_parallax_sigma_arcsec=SOLAR_PARALLAX_ARCSEC * sigma,
        astronomical_unit_km=AU_KM / kappa,
        astronomical_unit_sigma_km=AU_KM / kappa * relative,
        baseline_km=_baseline_km(stations),
        chi2_dof=chi2_dof,
        forecast=forecast,
    )


def _normal_equations(
    stations: Sequence[Station], middle: float, half: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray, float, int]:
    """Return normal matrix, right side, prior weights, chi-square of no change, number of data.

    Parameters: kappa - 1, common offset (2) and rate (2), then clock, rotation, scale of each station.
    """
    size = 5 + 3 * len(stations)
    matrix, vector, prior = np.zeros((size, size)), np.zeros(size), np.zeros(size)
    prior[1:3], prior[3:5] = FREE_OFFSET_ARCSEC**-2.0, FREE_RATE_ARCSEC**-2.0
    chi2, rows = 0.0, 0
    for number, station in enumerate(stations):
        s, path = station.sightings, station.path
        expected = s.expected(path, s.tt_s)
        design = np.zeros((len(s), 2, size))
        design[:, :, 0] = lever(station)
        x = (s.tt_s - middle) / half
        design[:, 0, 1] = design[:, 1, 2] = 1.0
        design[:, 0, 3] = design[:, 1, 4] = x
        at = 5 + 3 * number
        design[:, :, at] = -motion(s, path, s.tt_s)
        prior[at] = station.clock_sigma_s**-2.0
        if s.on_disc:
            design[:, 0, at + 1], design[:, 1, at + 1] = expected[:, 1], -expected[:, 0]
            design[:, :, at + 2] = expected
            prior[at + 1] = FREE_ROTATION_RAD**-2.0
            prior[at + 2] = station.scale_sigma**-2.0
        else:
            prior[at + 1 : at + 3] = 1.0
        weight = np.linalg.inv(s.covariance_arcsec2)
        residual = s.places - expected
        matrix += np.einsum("nip,nij,njq->pq", design, weight, design)
        vector += np.einsum("nip,nij,nj->p", design, weight, residual)
        chi2 += float(np.einsum("ni,nij,nj->", residual, weight, residual))
        rows += 2 * len(s)
    prior[0] = 1e-4  # nothing is assumed of kappa: sigma 100
    return matrix, vector, prior, chi2, rows


def _baseline_km(stations: Sequence[Station]) -> float:
    """Return the largest projected distance between two stations, from the mean of their levers."""
    if stations[0].sightings.on_disc:
        means = [lever(station).mean(axis=0) for station in stations]
        per_km = _lever_arcsec_km(stations[0])
    else:
        means = [lever(station).mean(axis=0) for station in stations]
        per_km = 206264.806 / stations[0].distance_km
    apart = [np.hypot(*(a - b)) for i, a in enumerate(means) for b in means[i + 1 :]]
    return float(max(apart) / per_km)


def _lever_arcsec_km(station: Station) -> float:
    """Return by how much the offset from the reference disc changes for a kilometre across the line of sight."""
    from planner.sky.places import direction

    middle = np.array([float(np.median(station.sightings.tt_s))])
    reference = station.path.geometry(middle).reference
    other = float(direction(reference, None, middle).distance_km[0])
    return 206264.806 * abs(1.0 / station.distance_km - 1.0 / other)
