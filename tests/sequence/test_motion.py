"""Trails and turning fields follow the sky's own motion."""

import numpy as np
import pytest

from planner.sequence.models import Rig
from planner.sequence.motion import field_rotation_deg_s, hour_angle_deg, motion, place_rate_arcsec_s
from planner.sky import places
from planner.sky.observer import Observer

HERE = Observer("invented", 43.0, 12.0, 500.0)
NOON = 86400.0 * 9500


def rig_of(**mount) -> Rig:
    return Rig.model_validate(
        {
            "name": "test",
            "sensor": {"width_px": 4000, "height_px": 3000, "pixel_um": 4.0},
            "optics": {"focal_length_mm": 500, "aperture_mm": 100},
            "mount": mount,
        }
    )


@pytest.mark.parametrize("dec_deg", [0.0, 30.0, 60.0])
def test_without_tracking_a_star_trails_by_fifteen_arcseconds_times_cosine_of_declination(dec_deg):
    tt_s = NOON + np.arange(3) * 30.0
    moving = motion(rig_of(kind="fixed"), HERE, "none", np.full(3, 80.0), np.full(3, dec_deg), tt_s)
    assert moving.target_arcsec_s == pytest.approx(15.041 * np.cos(np.radians(dec_deg)), rel=1e-4)
    scale = 206.264806 * 4.0 / 500
    assert moving.trail_px(rig_of(kind="fixed"), 2.0)[0] == pytest.approx(
        moving.target_arcsec_s[0] * 2 / scale
    )


def test_under_sidereal_tracking_the_moon_trails_and_under_lunar_by_less():
    tt_s = NOON + np.arange(5) * 60.0
    moon = places.direction("moon", HERE, tt_s)
    sidereal = motion(rig_of(), HERE, "sidereal", moon.ra_deg, moon.dec_deg, tt_s).target_arcsec_s
    lunar = motion(rig_of(), HERE, "lunar", moon.ra_deg, moon.dec_deg, tt_s).target_arcsec_s
    assert 0.2 < sidereal.mean() < 0.9
    assert lunar.mean() < sidereal.mean()


def test_a_periodic_error_moves_a_star_at_most_at_its_steepest_slope():
    mount = {"periodic_error_arcsec": 20.0, "periodic_error_period_s": 480.0}
    tt_s = NOON + np.arange(3) * 10.0
    rate = motion(rig_of(**mount), HERE, "sidereal", np.full(3, 80.0), np.zeros(3), tt_s).target_arcsec_s
    assert rate == pytest.approx(np.pi * 20 / 480)


@pytest.mark.parametrize("azimuth_deg", [20.0, 90.0, 150.0, 180.0, 260.0])
@pytest.mark.parametrize("altitude_deg", [25.0, 60.0])
def test_a_field_turns_as_the_published_formula_says(azimuth_deg, altitude_deg):
    """15.041 deg/h cos(latitude) cos(azimuth) / cos(altitude): standard formula, reference table of worked examples."""
    from planner.sky.observer import local_axes

    altitude, azimuth = np.radians([altitude_deg, azimuth_deg])
    horizontal = np.array(
        [np.cos(altitude) * np.sin(azimuth), np.cos(altitude) * np.cos(azimuth), np.sin(altitude)]
    )
    tt_s = np.array([NOON])
    ra_deg, dec_deg = places.radec_deg(np.einsum("nij,i->jn", local_axes(HERE, tt_s), horizontal))
    rate = field_rotation_deg_s(HERE, ra_deg, dec_deg, tt_s)[0] * 3600
    expected = -15.041 * np.cos(np.radians(43.0)) * np.cos(azimuth) / np.cos(altitude)
    assert rate == pytest.approx(expected, rel=1e-3, abs=2e-2)


def test_at_latitude_43_a_field_in_the_east_stands_still_and_in_the_south_turns_eleven_degrees_an_hour():
    """15 cos 43 = 11.0 deg/h: worked example in the reference table (row field_rotation)."""
    assert 15.041 * np.cos(np.radians(43)) == pytest.approx(11.0, abs=0.01)


def test_hour_angle_is_negative_in_the_east_and_grows_by_fifteen_degrees_an_hour():
    tt_s = NOON + np.arange(0, 86400, 1800.0)
    angle = hour_angle_deg(HERE, np.full(len(tt_s), 100.0), np.full(len(tt_s), 20.0), tt_s)
    _, azimuth = places.altaz(
        (np.full(len(tt_s), 100.0), np.full(len(tt_s), 20.0)), HERE, tt_s, refracted=False
    )
    east = (azimuth > 0) & (azimuth < 180)
    clear = np.abs(np.abs(angle) - 90) < 80
    assert (east[clear] == (angle[clear] < 0)).all()
    step = np.diff(np.unwrap(np.radians(angle)))
    assert np.degrees(step) == pytest.approx(7.5205, abs=2e-3)


def test_rates_are_taken_through_the_zero_of_right_ascension():
    ra_deg, tt_s = np.array([359.99, 0.0, 0.01]), np.array([0.0, 36.0, 72.0])
    east, north = place_rate_arcsec_s(ra_deg, np.zeros(3), tt_s)
    assert east == pytest.approx(1.0)
    assert north == pytest.approx(0.0)
