"""Discs are as large, as flat, as lit and as tilted as published."""

from __future__ import annotations

import numpy as np
import pytest

from planner.errors import InputError
from planner.sky import bodies
from planner.sky.discs import sky_disc
from planner.sky.observer import Observer
from planner.sky.places import north_of_date_pa_deg
from planner.sky.pole import true_obliquity
from tests.sky.published import numbers, published


def tt_s(julian_day):
    return np.array([(julian_day - 2451545.0) * 86400.0])


@pytest.mark.parametrize("row", published("planet_radii", "pck00010"), ids=lambda row: row["quantity"])
def test_radii_are_those_of_the_iau_working_group(row):
    body = row["quantity"].split()[0].lower()
    if body in ("sun",):
        # the report's 696000 km has been replaced by the nominal 695700 km (IAU 2015 B3)
        assert bodies.radii_km("sun", "iau")[0] == 695700.0
        return
    assert bodies.radii_km(body, "iau") == pytest.approx(numbers(row["value"]))


@pytest.mark.parametrize("row", published("semidiameter_1au"), ids=lambda row: row["quantity"])
def test_semidiameters_at_one_au_are_the_handbooks(row):
    body, *rest = row["quantity"].split()
    body = body.lower()
    name = "surface" if "(surface)" in rest else "tables"
    equatorial, polar = bodies.radii_km(body, name)
    radius = polar if "polar" in rest else equatorial
    arcsec = np.degrees(np.arcsin(radius / bodies.AU_KM)) * 3600
    # the handbook's values for the outer planets predate the spacecraft
    tolerance = {"jupiter": 0.2, "saturn": 1.2, "uranus": 0.3, "neptune": 0.7, "pluto": 0.5}.get(body, 0.006)
    assert arcsec == pytest.approx(float(row["value"]), abs=tolerance)


def test_the_moons_almanac_radius_is_k_of_the_earths():
    assert bodies.radii_km("moon", "tables")[0] == pytest.approx(1738.09, abs=0.01)
    assert bodies.radii_km("moon", "iau")[0] == 1737.4


def test_an_unknown_convention_is_named():
    with pytest.raises(InputError, match=r"event\.radii: found 'mine'; allowed are tables"):
        sky_disc("sun", None, tt_s(2451545.0), radii="mine")


def test_the_sun_of_the_handbook_example():
    # Meeus, example 29.a, 1992-10-13: P 26.27, B0 +5.99
    p, b0, _ = (float(text) for text in published("rotation_sun")[0]["value"].split()[1::2])
    t = tt_s(2448908.50068)
    disc = sky_disc("sun", None, t)
    turned = north_of_date_pa_deg(disc.ra_deg, disc.dec_deg, t)
    assert (disc.pole_pa_deg - turned)[0] % 360 == pytest.approx(p, abs=0.02)
    pole = np.radians(bodies.pole_radec_deg("sun", t))
    sight = np.radians([disc.ra_deg, disc.dec_deg])
    sine = np.sin(pole[1]) * np.sin(sight[1]) + np.cos(pole[1]) * np.cos(sight[1]) * np.cos(
        pole[0] - sight[0]
    )
    assert np.degrees(np.arcsin(-sine))[0] == pytest.approx(b0, abs=0.02)
    assert disc.semidiameter_arcsec[0] == pytest.approx(959.63 / 0.99760852, abs=0.01)
    assert disc.phase_angle_deg[0] == 0.0


def test_the_moons_phase_of_the_handbook_example():
    # Meeus, example 48.a: 1992-04-12 0h TD, i = 69.0756 degrees, k = 0.6775, bright limb 285.0 degrees
    disc = sky_disc("moon", None, tt_s(2448724.5))
    assert disc.phase_angle_deg[0] == pytest.approx(69.0756, abs=0.01)
    lit = (1 + np.cos(np.radians(disc.phase_angle_deg[0]))) / 2
    assert lit == pytest.approx(0.6786, abs=0.0012)
    assert disc.bright_limb_pa_deg[0] == pytest.approx(285.0, abs=0.1)


def test_venuss_phase_of_the_handbook_example():
    # Meeus, example 41.a: 1992-12-20, phase angle 72.96, illuminated 0.647
    disc = sky_disc("venus", None, tt_s(2448976.5))
    assert disc.phase_angle_deg[0] == pytest.approx(72.96, abs=0.02)


def test_saturns_tilt_of_the_handbook_example():
    # Meeus, example 45.a: 1992-12-16, ring latitude of the Earth 16.442, position angle 6.741, minor axis of the globe
    t = tt_s(2448972.50068)
    disc = sky_disc("saturn", None, t)
    turned = north_of_date_pa_deg(disc.ra_deg, disc.dec_deg, t)
    assert (disc.pole_pa_deg - turned)[0] == pytest.approx(6.741, abs=0.05)
    a, b = bodies.radii_km("saturn")
    expected = 1 - np.sqrt(1 - (1 - (b / a) ** 2) * np.cos(np.radians(16.442)) ** 2)
    assert disc.flattening[0] == pytest.approx(expected, abs=2e-4)


def test_a_globe_is_round_from_its_pole_and_flattest_from_its_equator():
    times = np.arange(0, 84 * 365.25 * 86400, 1e7)
    uranus = sky_disc("uranus", None, times)
    a, b = bodies.radii_km("uranus")
    assert uranus.flattening.max() == pytest.approx(1 - b / a, abs=1e-5)
    assert 0 <= uranus.flattening.min() < 5e-4


@pytest.mark.parametrize("body", ["sun", "moon", *bodies.PLANETS])
def test_every_body_is_a_disc_with_finite_numbers(body):
    disc = sky_disc(body, Observer("", 35.0, 33.0, 1400.0), np.linspace(0, 9e8, 50))
    for name in disc.__dataclass_fields__:
        if name != "name":
            values = getattr(disc, name)
            assert values.shape == (50,)
            assert np.all(np.isfinite(values)), name


def test_the_moon_overhead_is_larger_than_at_the_horizon():
    # augmentation: Earth radius / Moon distance, 1.7 %
    t = tt_s(2460000.0)
    geocentric = sky_disc("moon", None, t)
    longitudes = np.arange(-180, 180, 5.0)
    sizes = [
        sky_disc("moon", Observer("", float(geocentric.dec_deg[0]), lon, 0.0), t).semidiameter_arcsec[0]
        for lon in longitudes
    ]
    assert max(sizes) / geocentric.semidiameter_arcsec[0] == pytest.approx(1.0168, abs=0.002)


def test_the_obliquity_of_date_is_the_published_one():
    # J2000: mean obliquity 84381.406" (IAU 2006), nutation in obliquity -5.77" (from memory, IERS)
    assert np.degrees(true_obliquity(np.array([0.0])))[0] * 3600 == pytest.approx(84381.406 - 5.77, abs=0.05)
