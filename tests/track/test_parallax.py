"""Distances from two sites: the classical measurement, on rehearsed tracks and on published contact times."""

from __future__ import annotations

import csv
from datetime import date
from functools import lru_cache

import numpy as np
import pytest

from imaging.track.parallax import Station, fit_parallax, station_of_contacts
from imaging.track.path import PredictedPath
from imaging.track.sightings import Sightings
from planner.errors import InputError, NoSolutionError
from planner.sequence.models import EventRequest
from planner.sky.observer import Observer
from planner.sky.timescale import tt_s_from_iso
from tests.conftest import ROOT

# IMCCE/ESO VT-2004 EIS-B1: solar horizontal parallax, IAU 1976
PUBLISHED_SOLAR_PARALLAX_ARCSEC = 8.794148
VENUS_2012 = EventRequest(family="solar-transit", body="venus", date=date(2012, 6, 6))
NORTH = Observer("Sendai", 38.2667, 140.8667, 0.0)
SOUTH = Observer("invented, south", -33.0, 151.0, 0.0)


@lru_cache
def path_of(observer):
    return PredictedPath.of_event(VENUS_2012, observer)


def rehearsed(
    observer, rng, assumed_over_true=1.0, sigma=0.3, clock_s=0.0, frames=60, offset=(0.0, 0.0), scale=1.0
):
    """A station whose planet is nearer or farther than the ephemeris has it, on a path off by an offset.

    `scale`: of the measured places, over the true one.
    """
    path = path_of(observer)
    tt_s = np.linspace(tt_s_from_iso("2012-06-05T22:40:00Z"), tt_s_from_iso("2012-06-06T04:20:00Z"), frames)
    covariance = np.tile(np.eye(2) * sigma**2, (frames, 1, 1))
    nothing = np.full(frames, np.nan)
    seen = path.at(tt_s - clock_s)
    geocentric = path.from_center().at(tt_s - clock_s)
    east = (
        geocentric.east_arcsec + (seen.east_arcsec - geocentric.east_arcsec) / assumed_over_true + offset[0]
    )
    north = (
        geocentric.north_arcsec
        + (seen.north_arcsec - geocentric.north_arcsec) / assumed_over_true
        + offset[1]
    )
    east, north = scale * np.array([east, north]) + rng.normal(0, sigma, (2, frames))
    sightings = Sightings(tt_s, 0 * tt_s, east, north, covariance, nothing, nothing)
    return Station(observer.name, sightings, path, 0.1, 1e-4, "venus", 4.32e7)


def test_solar_parallax_comes_out_of_two_rehearsed_tracks_of_the_transit_of_2012():
    rng = np.random.default_rng(1)
    found = fit_parallax([rehearsed(NORTH, rng), rehearsed(SOUTH, rng)])
    assert found.solar_parallax_sigma_arcsec < 0.1
    error = found.solar_parallax_arcsec - PUBLISHED_SOLAR_PARALLAX_ARCSEC
    assert abs(error) < 3 * found.solar_parallax_sigma_arcsec
    assert found.astronomical_unit_km == pytest.approx(149597870.7, abs=3 * found.astronomical_unit_sigma_km)


def test_a_planet_twice_as_far_as_assumed_is_found_twice_as_far():
    """The ephemeris gives the shape of the lever only: the answer is the frames'."""
    rng = np.random.default_rng(2)
    stations = [rehearsed(site, rng, assumed_over_true=2.0, offset=(9.0, -7.0)) for site in (NORTH, SOUTH)]
    found = fit_parallax(stations)
    assert found.kappa == pytest.approx(0.5, abs=3 * found.kappa_sigma)
    assert found.distance_km == pytest.approx(2 * 4.32e7, abs=3 * found.distance_sigma_km)


@pytest.mark.parametrize("runs", [200, pytest.param(2000, marks=pytest.mark.slow)])
def test_stated_sigma_of_a_parallax_is_true(runs):
    """Clocks and scales are off by what the stations promise of them."""
    rng = np.random.default_rng(3)
    pulls = []
    for _ in range(runs):
        stations = [
            rehearsed(site, rng, clock_s=rng.normal(0, 0.1), frames=12, scale=1 + rng.normal(0, 1e-4))
            for site in (NORTH, SOUTH)
        ]
        found = fit_parallax(stations)
        pulls.append((found.kappa - 1.0) / found.kappa_sigma)
    assert np.sqrt(np.mean(np.square(pulls))) == pytest.approx(1.0, abs=0.1)
    assert abs(np.mean(pulls)) < 0.22


def test_published_contact_times_of_three_cities_hold_the_published_solar_parallax():
    """Predicted times as agencies printed them, to 1 s (rows and sources in the file); city centres cost a second."""
    rows = [
        row
        for row in csv.DictReader(open(ROOT / "tests/authorities/transits_topocentric.csv", encoding="utf-8"))
        if row["event_date"] == "2012-06-06" and row["site"] in ("Sendai", "Tokyo", "Quebec City")
    ]
    stations = []
    for city in ("Sendai", "Tokyo", "Quebec City"):
        mine = [row for row in rows if row["site"] == city and row["contact"] in ("I", "II", "III", "IV")]
        observer = Observer(
            city, float(mine[0]["lat_deg"]), float(mine[0]["lon_deg_east"]), float(mine[0]["height_m"])
        )
        path = PredictedPath.of_event(VENUS_2012, observer)
        tt_s = np.array([tt_s_from_iso(row["time_utc"].replace(" ", "T") + "Z") for row in mine])
        signs = np.array([1.0 if row["contact"] in ("I", "IV") else -1.0 for row in mine])
        stations.append(station_of_contacts(city, path, signs, tt_s, np.full(len(mine), 1.5)))
    found = fit_parallax(stations)
    assert found.solar_parallax_sigma_arcsec < 0.15
    error = found.solar_parallax_arcsec - PUBLISHED_SOLAR_PARALLAX_ARCSEC
    assert abs(error) < 3 * found.solar_parallax_sigma_arcsec
    assert found.chi2_dof < 4


def test_blurred_frames_of_one_site_tell_no_distance():
    rng = np.random.default_rng(4)
    with pytest.raises(NoSolutionError, match="longer baseline"):
        fit_parallax(
            [rehearsed(NORTH, rng, sigma=60.0, frames=5), rehearsed(NORTH, rng, sigma=60.0, frames=5)]
        )


def test_a_single_station_is_refused():
    with pytest.raises(InputError, match="two stations or more"):
        fit_parallax([rehearsed(NORTH, np.random.default_rng(5))])
