"""An observer stands where geodesy says, turns with the Earth, and sees the horizon the site gives."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.sky import observer as stand
from planner.sky import pole
from planner.sky.observer import Observer
from planner.sky.timescale import SPAN, ut1_s
from tests.sky.published import numbers, published

TIMES = np.random.default_rng(5).uniform(-9e8, 1.5e9, 200)


def test_the_ellipsoid_is_erfas():
    # ERFA test suite, gd2gc for WGS 84
    row = published("geodesy", "gd2gc")[0]
    longitude, latitude, height = numbers(row["inputs"])
    xyz_m = numbers(row["value"])
    here = Observer("", np.degrees(latitude), np.degrees(longitude), height)
    assert stand.itrs_position_km(here) * 1e3 == pytest.approx(xyz_m, abs=1e-6)


def test_the_pole_and_the_equator_stand_at_the_radii_of_the_ellipsoid():
    assert stand.itrs_position_km(Observer("", 90.0, 0.0, 0.0)) == pytest.approx(
        [0, 0, 6356.752314], abs=1e-6
    )
    assert stand.itrs_position_km(Observer("", 0.0, 90.0, 1000.0)) == pytest.approx(
        [0, 6379.137, 0], abs=1e-6
    )


def test_the_turn_of_the_earth_is_erfas():
    import erfa

    from planner.sky.rotation import polar_motion_arcsec

    x, y = polar_motion_arcsec(TIMES)
    reference = erfa.c2t06a(
        2451545.0, TIMES / 86400, 2451545.0, ut1_s(TIMES) / 86400, x * pole.ARCSEC, y * pole.ARCSEC
    )
    difference = pole.celestial_to_terrestrial(TIMES) - reference
    # 0.05 mas is 1.5 mm at the equator
    assert np.abs(difference).max() / pole.ARCSEC < 5e-5


def test_the_interpolated_pole_is_the_full_series():
    import erfa

    days = np.random.default_rng(6).uniform(*SPAN, 400) / 86400
    x, y, s = erfa.xys06a(2451545.0, days)
    ours = pole.pole_columns(days * 86400)
    assert np.abs(ours[0] - x).max() / pole.ARCSEC < 5e-5
    assert np.abs(ours[1] - y).max() / pole.ARCSEC < 5e-5
    assert np.abs(ours[2] - s).max() / pole.ARCSEC < 5e-5
    _, nutation = erfa.nut06a(2451545.0, days)
    assert np.abs(ours[4] - erfa.obl06(2451545.0, days) - nutation).max() / pole.ARCSEC < 5e-5
    assert (
        np.abs(pole.true_equator_matrix(days * 86400) - erfa.pnm06a(2451545.0, days)).max() / pole.ARCSEC
        < 1e-4
    )


def test_velocity_is_the_slope_of_position():
    here = Observer("", 35.0, 33.0, 1400.0)
    slope = (stand.gcrs_position_km(here, TIMES + 5) - stand.gcrs_position_km(here, TIMES - 5)) / 10
    assert np.abs(slope - stand.gcrs_velocity_km_s(here, TIMES)).max() < 1e-6


@given(st.floats(-90, 90), st.floats(-180, 180))
def test_local_axes_are_a_right_handed_triad(latitude, longitude):
    east, north, up = stand.local_axes(Observer("", latitude, longitude, 0.0), TIMES[:1])[0]
    assert np.cross(east, north) == pytest.approx(up, abs=1e-9)


def test_the_geocentre_does_not_move():
    assert not stand.gcrs_position_km(None, TIMES).any()
    assert not stand.gcrs_velocity_km_s(None, TIMES).any()


def test_a_horizon_line_is_closed_over_north():
    site = Observer("", 35.0, 33.0, 0.0, horizon=((350.0, 10.0), (10.0, 20.0), (180.0, 0.0)))
    assert stand.horizon_altitude_deg(site, np.array([0.0, 350.0, 10.0, 95.0])) == pytest.approx(
        [15, 10, 20, 10]
    )
    assert stand.horizon_altitude_deg(Observer("", 0, 0, 0), np.array([123.0])) == 0.0


def test_pressure_falls_with_height_as_in_the_standard_atmosphere():
    # ISO 2533: 1013.25 hPa at sea level, 898.75 hPa at 1000 m, 540.2 hPa at 5000 m (from memory)
    pressures = [Observer("", 0, 0, h).pressure_here_hpa for h in (0.0, 1000.0, 5000.0)]
    assert pressures == pytest.approx([1013.25, 898.75, 540.2], abs=0.1)
    assert Observer("", 0, 0, 0.0, pressure_hpa=0.0).pressure_here_hpa == 0.0
