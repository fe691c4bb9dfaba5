"""Sky brightness agrees with the published models and with what is measured at dusk."""

import numpy as np
import pytest

from planner.sequence import skyglow


def test_units_convert_as_published():
    """79.0 nanolamberts are V = 21.587 (Krisciunas & Schaefer 1991, section 2)."""
    assert skyglow.nanolamberts(21.587) == pytest.approx(79.0, abs=0.05)
    assert skyglow.v_mag_arcsec2(skyglow.nanolamberts(18.3)) == pytest.approx(18.3)


def test_the_dark_sky_brightens_towards_the_horizon_until_extinction_wins():
    """Relative to the zenith, B(60 deg from it) = 1.72 with k = 0.172 (equation 2 of the paper, evaluated by hand)."""
    ratio = skyglow.dark_nl(21.6, 30.0, 0.172) / skyglow.dark_nl(21.6, 90.0, 0.172)
    mass = (1 - 0.96 * 0.75) ** -0.5
    assert ratio == pytest.approx(mass * 10 ** (-0.4 * 0.172 * (mass - 1)))
    assert 1.5 < ratio < 1.8


def test_moonlight_by_hand():
    """Equations 15, 16, 18-21 of the paper at one point, by hand: Moon full and at the zenith, field 45 deg away."""
    illuminance = 10 ** (-0.4 * 3.84)
    scattering = 10**5.36 * (1.06 + 0.5) + 10 ** (6.15 - 45 / 40)
    x_field = (1 - 0.96 * 0.5) ** -0.5
    expected = scattering * illuminance * 10 ** (-0.4 * 0.172) * (1 - 10 ** (-0.4 * 0.172 * x_field))
    assert skyglow.moonlight_nl(45.0, 90.0, 45.0, 0.0, 0.172) == pytest.approx(expected)


def test_a_full_moon_takes_three_to_four_magnitudes_from_a_dark_sky():
    """A moonlit sky of V = 17.5 to 18.5 about full Moon (figure 3 and table 2 of the paper; from memory)."""
    sky = skyglow.sky_v_mag_arcsec2(21.6, 0.172, 60.0, -90.0, 50.0, 60.0, 5.0)
    assert 17.3 < sky < 18.6


def test_a_moon_that_is_down_adds_nothing():
    assert skyglow.moonlight_nl(45.0, -1.0, 60.0, 0.0, 0.172) == 0.0


def test_twilight_is_monotonic_and_ends_at_eighteen_degrees():
    altitude = np.linspace(40, -19, 500)
    sky = skyglow.sky_v_mag_arcsec2(21.6, 0.172, 60.0, altitude)
    assert (np.diff(sky) >= -1e-9).all()
    dark = skyglow.sky_v_mag_arcsec2(21.6, 0.172, 60.0, -30.0)
    assert sky[-1] == pytest.approx(dark)


@pytest.mark.parametrize(
    ("sun_deg", "low", "high"), [(0, 6.5, 7.5), (-6, 12.5, 13.8), (-12, 18.8, 20.0), (-18, 21.2, 21.61)]
)
def test_the_three_twilights_have_their_brightness(sun_deg, low, high):
    """Sunset about 7, end of civil 13, of nautical 19.5 mag/arcsec2 at the zenith: common practice, no source."""
    assert low < skyglow.sky_v_mag_arcsec2(21.6, 0.172, 90.0, sun_deg) < high


def test_the_sky_over_the_sun_by_hand():
    """CIE S 011/E:2003, type 12, at 15 degrees over the point of sunset, terms from a pocket calculator.

    f(15 deg) = 1 + 10 (0.4559 - 0.0090) + 0.45 x 0.9330 = 5.889; phi(75 deg) = 1 - exp(-0.32 / 0.2588) = 0.7096;
    phi(0) = 1 - exp(-0.32) = 0.2739; f(90 deg) = 1.
    """
    assert skyglow.towards_sun(15.0, 0.0, 0.0) == pytest.approx(5.889 * 0.7096 / 0.2739, rel=0.02)
    assert skyglow.towards_sun(90.0, 0.0, 0.0) == pytest.approx(1.0, rel=0.02)


def test_the_sunlit_sky_is_symmetrical_and_brightest_over_the_sun():
    azimuth = np.linspace(-180, 180, 73)
    ratio = skyglow.towards_sun(20.0, -6.0, azimuth)
    assert ratio == pytest.approx(ratio[::-1])
    assert azimuth[np.argmax(ratio)] == 0.0
    assert (np.diff(ratio[36:54]) < 0).all()
    # a Sun that has set counts as standing on the horizon
    assert skyglow.towards_sun(20.0, -12.0, azimuth) == pytest.approx(ratio)


def once_scattered(zenith_deg: float, azimuth_deg: float, depression_deg: float) -> float:
    """Light scattered once by a spherical atmosphere, in any unit: docs/notes/twilight_direction.py."""
    import importlib.util

    from tests.conftest import ROOT

    spec = importlib.util.spec_from_file_location("note", ROOT / "docs/notes/twilight_direction.py")
    note = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(note)
    return note.scattered_once(zenith_deg, azimuth_deg, depression_deg)


@pytest.mark.parametrize("depression", [1.0, 3.0, 6.0])
@pytest.mark.parametrize(
    ("zenith_deg", "azimuth_deg"), [(30, 0), (60, 0), (75, 0), (60, 45), (75, 45), (60, 90)]
)
def test_in_civil_twilight_the_direction_counts_as_scattered_light_has_it(
    depression, zenith_deg, azimuth_deg
):
    """Within 1.1 magnitudes of single scattering (Rozenberg 1966, Twilight), reckoned without the code's formulae."""
    ratio = once_scattered(zenith_deg, azimuth_deg, depression) / once_scattered(0.01, 0.0, depression)
    ours = skyglow.towards_sun(90.0 - zenith_deg, -depression, azimuth_deg)
    assert 2.5 * np.log10(ours / ratio) == pytest.approx(0.0, abs=1.1)


def test_the_zenith_darkens_from_5_to_6_degrees_as_scattered_light_does():
    """Patat's polynomial, whose coefficients are from memory, against single scattering: 1.5 magnitudes."""
    model = 2.5 * np.log10(once_scattered(0.01, 0.0, 5.0) / once_scattered(0.01, 0.0, 6.0))
    ours = float(
        skyglow.v_mag_arcsec2(skyglow.sunlight_nl(-6.0)) - skyglow.v_mag_arcsec2(skyglow.sunlight_nl(-5.0))
    )
    assert ours == pytest.approx(model, abs=0.15)
