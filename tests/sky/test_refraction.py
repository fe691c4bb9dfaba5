"""Refraction lifts and flattens as the published formulae say, and is undone exactly."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.sky import refraction
from planner.sky.observer import Observer

STANDARD = Observer("", 45.0, 0.0, 0.0, pressure_hpa=1010.0, temperature_c=10.0)


def test_the_handbook_example():
    # Meeus, Astronomical Algorithms, example 16.a (Saemundsson's and Bennett's formulae, which carry 0.1' themselves
    # and lie 1.3 % above the refraction integral at the horizon): true altitude 33.246' is seen at 57'51.96"
    seen = refraction.apparent_altitude_deg(33.246 / 60, STANDARD)
    assert seen * 60 == pytest.approx(57 + 51.96 / 60, abs=0.45)


@pytest.mark.parametrize("altitude", [2.0, 5.0, 10.0, 20.0, 45.0, 80.0])
def test_it_agrees_with_bennett(altitude):
    # Bennett 1982: R' = cot(h + 7.31 / (h + 4.4)), h apparent, good to 0.1'
    bennett = 1 / np.tan(np.radians(altitude + 7.31 / (altitude + 4.4)))
    true = altitude - bennett / 60
    assert refraction.refraction_arcsec(true, STANDARD) / 60 == pytest.approx(bennett, abs=0.1)


@pytest.mark.parametrize(
    ("pressure", "temperature"), [(1010.0, 10.0), (1013.25, 0.0), (780.0, -5.0), (600.0, 20.0)]
)
def test_it_agrees_with_erfa_above_twenty_degrees(pressure, temperature):
    import erfa

    a, b = erfa.refco(pressure, temperature, 0.0, 0.55)
    seen = np.arange(20.0, 90.0)
    tangent = np.tan(np.radians(90 - seen))
    erfas = np.degrees(a * tangent + b * tangent**3) * 3600
    site = Observer("", 45.0, 0.0, 0.0, pressure_hpa=pressure, temperature_c=temperature)
    assert refraction.refraction_arcsec(seen - erfas / 3600, site) == pytest.approx(erfas, abs=0.1)


def test_a_star_on_the_horizon_is_lifted_by_thirty_three_minutes():
    # 33.0' at 1013.25 hPa and 15 C is about what sunrise tables assume (34'; common practice, no source)
    sea = Observer("", 45.0, 0.0, 0.0, pressure_hpa=1013.25, temperature_c=15.0)
    assert refraction.true_altitude_deg(0.0, sea) * 60 == pytest.approx(-33.0, abs=1.0)


@pytest.mark.parametrize("altitude", [45.0, 30.0, 20.0])
def test_the_solar_disc_is_flattened(altitude):
    # R = 58" cot h: vertical lengths shrink by 58" / sin^2 h a radian; the next term takes 3 % of it at 20 degrees
    flattened = refraction.disc_flattening(altitude, 960.0, STANDARD)
    assert flattened == pytest.approx(58.0 / 206265 / np.sin(np.radians(altitude)) ** 2, rel=0.035)


@given(st.floats(-0.3, 89.9), st.floats(500, 1050), st.floats(-30, 40))
def test_apparent_and_true_altitude_undo_each_other(altitude, pressure, temperature):
    site = Observer("", 0, 0, 0, pressure_hpa=pressure, temperature_c=temperature)
    seen = refraction.apparent_altitude_deg(altitude, site)
    assert refraction.true_altitude_deg(seen, site) == pytest.approx(altitude, abs=1e-5)


def test_bodies_rise_steadily_through_the_air():
    true = np.linspace(-10, 90, 20001)
    assert np.all(np.diff(refraction.apparent_altitude_deg(true, STANDARD)) > 0)
    assert refraction.refraction_arcsec(-3.0, STANDARD) == 0.0
    assert refraction.refraction_arcsec(90.0, STANDARD) == pytest.approx(0.0, abs=0.2)


def test_without_air_nothing_bends():
    assert refraction.refraction_arcsec(np.array([1.0, 45.0]), None) == pytest.approx(0.0)
    vacuum = Observer("", 0, 0, 0, pressure_hpa=0.0)
    assert refraction.refraction_arcsec(np.array([1.0, 45.0]), vacuum) == pytest.approx(0.0)
