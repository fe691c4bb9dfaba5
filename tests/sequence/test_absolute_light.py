"""Absolute rates stand on what the code does not use: other zero points, the solar constant, lux, exposure lore."""

import numpy as np
import pytest

from planner.sequence import exposure, radiometry, skyglow
from planner.sequence.models import Rig
from planner.sky.photometry import SUN_MAGNITUDE_1_AU, sun_magnitude

ARCSEC2_SR = 206264.806**2


def camera(focal_mm: float, aperture_mm: float, **more) -> Rig:
    """A colour camera that holds 60 000 electrons at ISO 100 in 6 micrometre pixels, as many did about 2015."""
    sensor = {
        "width_px": 6000, "height_px": 4000, "pixel_um": 6.0, "full_well_e": 60000, "gain_e_adu": 4.0,
        "bit_depth": 14, "quantum_efficiency": 0.5, "bayer": "RGGB",
    }  # fmt: skip
    optics = {"focal_length_mm": focal_mm, "aperture_mm": aperture_mm}
    return Rig.model_validate({"name": "camera", "sensor": sensor, "optics": optics, **more})


def test_the_zero_point_is_that_of_an_older_calibration():
    """V = 0 is 3640 Jy (Bessell 1979, PASP 91, 589), and a jansky 1.51e7 photons / (s m2) a unit of ln(wavelength).

    Ours comes from Bessell, Castelli & Plez 1998 in W / (m2 nm): another paper, another unit.
    """
    assert radiometry.V_ZERO_PHOTONS == pytest.approx(3640 * 1.51e7 / 550.0, rel=0.01)


def test_a_star_of_magnitude_twenty_gives_88_photons_a_second_in_v():
    """3640 Jy x 1.51e7 x 0.16 (width of V over its wavelength) x 1e-8, through a square metre (Bessell 1979)."""
    rig = camera(1000.0, 2000.0 / np.sqrt(np.pi), filters=[{"name": "V", "bandwidth_nm": 88.0}])
    optics = rig.optics.model_copy(update={"transmission": 1.0})
    sensor = rig.sensor.model_copy(update={"quantum_efficiency": 1.0})
    through = radiometry.band(rig.model_copy(update={"optics": optics, "sensor": sensor}), "V")
    assert through.area_m2 == pytest.approx(1.0)
    assert radiometry.rate_e_s(through, 20.0) == pytest.approx(87.9, rel=0.01)


def test_the_sun_sends_what_the_solar_constant_and_its_temperature_say():
    """1361 W / m2 and 5772 K (IAU 2015 resolution B3) give, as a black body, 1.75 W / (m2 nm) at 545 nm.

    The Sun is a few hundredths brighter than that black body in green light: 1.86 at 550 nm in ASTM E490 (from memory).
    """
    wavelength, temperature = 545e-9, 5772.0
    h, c, k, sigma = 6.62607015e-34, 299792458.0, 1.380649e-23, 5.670374419e-8
    planck = 2 * h * c**2 / wavelength**5 / np.expm1(h * c / (wavelength * k * temperature))
    black_body = np.pi * planck / (sigma * temperature**4) * 1361.0 * 1e-9
    ours = radiometry.V_ZERO_PHOTONS * 10 ** (-0.4 * SUN_MAGNITUDE_1_AU) * h * c / wavelength
    assert black_body == pytest.approx(1.75, abs=0.01)
    assert ours == pytest.approx(black_body, rel=0.06)
    assert ours == pytest.approx(1.86, rel=0.06)


def test_sunlight_is_as_many_lux_as_light_meters_find():
    """Visual magnitude -13.98 is one lux (Cox 2000, Allen's Astrophysical Quantities; from memory).

    Sunlight outside the air is 128 000 to 134 000 lux (solar illuminance constant; from memory).
    """
    lux = 10 ** (-0.4 * (float(sun_magnitude(1.0)) + 13.98))
    assert 0.95 * 128e3 < lux < 1.05 * 134e3


def test_a_grey_card_in_sunlight_is_exposed_as_every_photographer_does():
    """At f/16 and 1 / ISO seconds a card of 18 % in full sun comes out in the middle. Common practice, no source.

    The middle is 12.7 % of saturation at the ISO's speed (ISO 12232, saturation-based speed; from memory). The card is
    reckoned as a sky of its brightness: this holds the way from magnitudes an arcsecond squared to electrons a pixel.
    """
    rig = camera(800.0, 50.0)
    sunlight = SUN_MAGNITUDE_1_AU + 0.2 * 1.2
    card = sunlight - 2.5 * np.log10(0.18 / np.pi / ARCSEC2_SR)
    through = radiometry.band(rig)
    electrons = float(radiometry.sky_rate_e_s_px(through, card, rig.scale_arcsec_px)) / 100
    assert abs(np.log2(electrons / (0.127 * 60000))) < 1.0


@pytest.mark.parametrize("f_number", [5.6, 8.0, 16.0])
def test_the_sun_behind_its_filter_is_exposed_as_eclipse_guides_say(f_number):
    """t = N^2 / (ISO 2^8) behind an optical density of 5 (eclipse exposure guides; from memory), to a stop.

    Exposed to a third of the range, where such guides put a disc.
    """
    rig = camera(1000.0, 1000.0 / f_number, solar_filter={"optical_density": 5.0})
    through = radiometry.band(rig, behind_solar_filter=True)
    magnitude = SUN_MAGNITUDE_1_AU + 0.2 * 1.2
    rate = radiometry.disc_rate_e_s_px(through, "sun", magnitude, 959.6, 0.0, 0.0, rig.scale_arcsec_px)
    found_s = float(exposure.wanted_exposure_s(rig, rate, 0.33))
    assert abs(np.log2(found_s * 100 * 2**8 / f_number**2)) < 1.0


@pytest.mark.parametrize("magnitude", [17.0, 20.0, 22.0])
def test_the_night_sky_has_the_luminance_of_another_conversion(magnitude):
    """10.8e4 x 10^(-0.4 m) cd / m2, as sky meters are read: common practice, no source. A lambert: 1e4 / pi cd / m2."""
    candela_m2 = float(skyglow.nanolamberts(magnitude)) * 1e-9 * 1e4 / np.pi
    assert candela_m2 == pytest.approx(10.8e4 * 10 ** (-0.4 * magnitude), rel=0.01)


def test_a_dark_sky_fills_a_fast_lens_in_minutes():
    """At f/2.8 and ISO 1600 under V = 21.5 the sky stands at a third of the camera's histogram after two minutes.

    Common practice, no source, held to a factor of 3. A third on the screen is 0.33^2.2 of the linear range, which at
    ISO 1600 is a sixteenth of the 60 000 electrons at ISO 100.
    """
    rig = camera(50.0, 50.0 / 2.8)
    rate = float(radiometry.sky_rate_e_s_px(radiometry.band(rig), 21.5, rig.scale_arcsec_px))
    assert 40 < 60000 / 16 * 0.33**2.2 / rate < 360
