"""Photon rates agree with published magnitudes and with what photographers know."""

import numpy as np
import pytest

from planner.errors import InputError
from planner.sequence import exposure, radiometry
from planner.sequence.models import Rig
from tests.sequence.briefs import TRANSIT, changed, example


def rig_of(**sensor) -> Rig:
    return Rig.model_validate(
        {
            "name": "test",
            "sensor": {"width_px": 1000, "height_px": 800, "pixel_um": 5.0, **sensor},
            "optics": {"focal_length_mm": 1000, "aperture_mm": 100, "transmission": 1.0},
            "filters": [{"name": "V", "bandwidth_nm": 1.0}, {"name": "ND", "optical_density": 2.0}],
        }
    )


def test_magnitude_zero_gives_a_thousand_photons():
    """Close to 1000 photons a second, square centimetre and angstrom at V = 0: common practice, no source."""
    assert radiometry.V_ZERO_PHOTONS / 1e4 / 10 == pytest.approx(1000, rel=0.01)


def test_rates_follow_area_band_and_filter():
    rig = rig_of(quantum_efficiency=1.0)
    through = radiometry.band(rig, "V")
    assert through.zero_rate_e_s == pytest.approx(radiometry.V_ZERO_PHOTONS * np.pi / 4 * 0.1**2)
    assert radiometry.rate_e_s(through, 5.0) == pytest.approx(through.zero_rate_e_s / 100)
    dense, clear = radiometry.band(rig, "ND"), radiometry.band(rig)
    assert dense.efficiency == pytest.approx(clear.efficiency / 100)
    with pytest.raises(InputError, match="filters of test are: V, ND"):
        radiometry.band(rig, "R")


def test_the_sun_needs_a_solar_filter():
    with pytest.raises(InputError, match="solar_filter"):
        radiometry.band(rig_of(), behind_solar_filter=True)


@pytest.mark.parametrize("law", ["lambert", "lommel-seeliger", "sun"])
@pytest.mark.parametrize("phase_deg", [0.0, 50.0, 90.0])
@pytest.mark.parametrize("blur", [0.0, 0.09, 0.4])
def test_a_discs_peak_is_that_of_a_drawn_disc(law, phase_deg, blur):
    """Drawn here four times as fine, at phases and blurs between those of the table."""
    from scipy.ndimage import gaussian_filter

    y, x = np.mgrid[-2:2:641j, -2:2:641j]
    inside = x**2 + y**2 < 1
    mu = np.where(inside, np.sqrt(np.clip(1 - x**2 - y**2, 0, None)), -1)
    angle = np.radians(phase_deg)
    drawn = radiometry.surface_law(law, np.where(inside, mu * np.cos(angle) + x * np.sin(angle), -1), mu)
    expected = gaussian_filter(drawn, blur * 160).max() / (drawn.sum() / inside.sum())
    assert radiometry.peak_over_mean(law, phase_deg, blur) == pytest.approx(expected, rel=0.06)


def test_the_middle_of_the_sun_is_a_quarter_brighter_than_its_mean():
    """Mean over centre 0.81 in V (Cox 2000, Allen's Astrophysical Quantities, 14.7; from memory)."""
    assert 1 / float(radiometry.peak_over_mean("sun", 0.0)) == pytest.approx(0.81, abs=0.01)


def test_a_full_moon_needs_about_what_the_daylight_rule_says():
    """Full Moon: f/11 at 1 / ISO seconds, to a stop and a half. Common practice, no source.

    Taken for a sensor that at ISO 100 holds 60 000 electrons on a 6 micrometre pixel, exposed to a third of its range.
    """
    rig = Rig.model_validate(
        {
            "name": "camera",
            "sensor": {
                "width_px": 6000, "height_px": 4000, "pixel_um": 6.0, "full_well_e": 60000, "gain_e_adu": 4.0,
                "bit_depth": 14, "quantum_efficiency": 0.5, "bayer": "RGGB",
            },
            "optics": {"focal_length_mm": 1100, "aperture_mm": 100},
        }
    )  # fmt: skip
    through = radiometry.band(rig)
    rate = radiometry.disc_rate_e_s_px(
        through, "moon", -12.7 + 0.2 * 1.2, 932.0, 0.0, 3.0, rig.scale_arcsec_px
    )
    found_s = float(exposure.wanted_exposure_s(rig, rate, 0.33))
    assert abs(np.log2(found_s / (1 / 100))) < 1.5


def test_a_small_disc_peaks_like_a_star_and_the_change_is_smooth():
    from planner.sequence.exposure import peak_rate_e_s
    from planner.sequence.models import Site
    from planner.sky.discs import sky_disc

    site = Site(name="invented", latitude_deg=0, longitude_deg=0, height_m=0)
    disc = sky_disc("jupiter", None, np.full(1, 8e8))
    peaks = []
    for focal_mm in np.geomspace(40, 4000, 60):
        rig = rig_of()
        optics = rig.optics.model_copy(update={"focal_length_mm": focal_mm})
        rig = rig.model_copy(update={"optics": optics})
        through = radiometry.band(rig, "V")
        peaks.append(float(peak_rate_e_s(rig, site, through, "jupiter", disc, np.full(1, 60.0))[0]))
    steps = np.abs(np.diff(np.log(peaks)))
    assert steps.max() < 0.25
    assert (np.diff(peaks) < 0.05 * np.array(peaks[1:])).all()


def test_a_star_trailed_over_pixels_loses_its_peak_in_proportion():
    still, trailed = radiometry.star_peak_fraction(2.0), radiometry.star_peak_fraction(2.0, 40.0)
    # a trail of L pixels leaves about 1/L of the light of its cross-section in a pixel, within the Gaussian stand-in
    assert 0.02 < trailed / still < 0.12
    assert radiometry.star_peak_fraction(0.01) == pytest.approx(1.0, abs=0.01)


def test_seeing_worsens_with_airmass_to_the_power_of_three_fifths():
    rig = rig_of()
    at_zenith = radiometry.psf_fwhm_arcsec(rig, 2.0, 1.0, 0.0)
    low = radiometry.psf_fwhm_arcsec(rig, 2.0, 4.0, 0.0)
    diffraction = 1.029 * np.degrees(545e-9 / 0.1) * 3600
    assert at_zenith == pytest.approx(np.hypot(2.0, diffraction))
    assert low == pytest.approx(np.hypot(2.0 * 4**0.6, diffraction))


def test_saturation_is_the_well_or_the_end_of_the_converter():
    assert radiometry.saturation_e(rig_of(full_well_e=50000, gain_e_adu=1.0)) == 50000
    assert radiometry.saturation_e(rig_of(full_well_e=50000, bit_depth=12, bias_adu=95)) == 4000
    assert radiometry.at_gain(rig_of(), 200).e_adu == pytest.approx(0.1)
    listed = {"gain": 120, "e_adu": 0.3, "read_noise_e": 1.2, "full_well_e": 15000}
    assert radiometry.at_gain(rig_of(gains=[listed]), 120).read_noise_e == 1.2


def test_exposure_for_a_signal_to_noise_gives_that_signal_to_noise():
    rate, background, variance = np.array([3.0, 300.0, 3e4]), 20.0, 60.0
    seconds = exposure.time_for_signal_to_noise_s(rate, background, variance, 25.0)
    assert rate * seconds / np.sqrt((rate + background) * seconds + variance) == pytest.approx(25.0)


def test_exposures_are_rounded_as_people_set_them():
    assert exposure.rounded_down(0.0123456) == 0.012
    assert exposure.rounded_up(0.0123456) == 0.013
    assert exposure.rounded_down(0.5) == exposure.rounded_up(0.5) == 0.5


def test_a_step_of_exposure_is_a_third_of_a_stop():
    wanted = np.geomspace(0.01, 0.02, 1000)
    stretches = exposure.steps(wanted)
    assert 3 <= len(stretches) <= 4
    assert sum(s.stop - s.start for s in stretches) == 1000
    assert all(wanted[s].max() / wanted[s].min() <= exposure.STEP for s in stretches)


def test_the_sun_is_exposed_to_the_fraction_of_the_well_that_is_asked():
    from planner.sequence.builder import build_plan

    brief = example(TRANSIT)
    for fraction in (0.3, 0.6):
        plan = build_plan(changed(brief, wish={"well_fraction": fraction}))
        peaks = [s.peak_e / radiometry.saturation_e(plan.rig) for p in plan.passages for s in p.shots]
        assert max(peaks) <= fraction * 1.001
        assert min(peaks) > fraction * 0.75


def test_guiding_takes_the_place_of_the_mounts_own_error():
    rig = rig_of()
    guided = rig.model_copy(
        update={"guiding": rig.guiding.model_copy(update={"on": "star", "error_arcsec": 0.5})}
    )
    still = rig.model_copy(update={"mount": rig.mount.model_copy(update={"kind": "fixed"})})
    assert radiometry.tracking_error_of(rig) == rig.mount.tracking_error_arcsec
    assert radiometry.tracking_error_of(guided) == 0.5
    assert radiometry.tracking_error_of(still) == 0.0
    assert radiometry.psf_fwhm_px(guided, 2.0, 1.0) < radiometry.psf_fwhm_px(rig, 2.0, 1.0)


def saturn_on(*date):
    from datetime import UTC, datetime

    from planner.sky.discs import sky_disc
    from planner.sky.timescale import tt_s_from_datetime

    return sky_disc("saturn", None, np.atleast_1d(tt_s_from_datetime(datetime(*date, tzinfo=UTC))))


def test_the_rings_send_more_than_half_of_saturns_light_when_open_and_none_when_edge_on():
    """Opposition on 2017 June 15, rings open by 26.5 degrees; edge-on on 2025 March 23 (almanacs; from memory).

    Mallama & Hilton 2018, by hand at phase angle 0: -8.914 - (1.825 + 0.378) sin 26.5 deg against -8.95; the phase
    angle of the day, up to a tenth of a degree, takes up to 0.02 magnitudes of the surge.
    """
    from planner.sky.discs import ring_share, ring_sine

    wide, edge = saturn_on(2017, 6, 15), saturn_on(2025, 3, 23)
    assert np.degrees(np.arcsin(ring_sine(wide))) == pytest.approx(26.5, abs=0.2)
    assert np.degrees(np.arcsin(ring_sine(edge))) < 1.0
    by_hand = 1 - 10 ** (-0.4 * (-8.95 + 8.914 + 2.203 * np.sin(np.radians(26.5))))
    assert ring_share(wide) == pytest.approx(by_hand, abs=0.02)
    assert ring_share(wide) > 0.5
    assert ring_share(edge) < 0.03


def test_saturns_globe_has_the_surface_brightness_that_handbooks_give():
    """6.9 V magnitudes a square arcsecond at mean opposition (Cox 2000, Allen's Astrophysical Quantities; from memory).

    With the light of the open rings put on the globe it would come out 0.9 magnitudes too bright.
    """
    disc = saturn_on(2017, 6, 15)
    area = np.pi * disc.semidiameter_arcsec**2 * (1 - disc.flattening)
    assert disc.globe_magnitude + 2.5 * np.log10(area) == pytest.approx(6.9, abs=0.15)
    assert disc.globe_magnitude - disc.magnitude > 0.8


def test_a_signal_to_noise_may_be_wished_for():
    """A signal-to-noise of 50 takes 2500 electrons and a few for the read noise; two digits are kept of exposures."""
    from planner.sequence.builder import build_plan

    plan = build_plan(changed(example(TRANSIT), wish={"signal_to_noise": 50.0}))
    for passage in plan.passages:
        for shot in passage.shots:
            assert shot.peak_e / np.sqrt(shot.peak_e + plan.rig.sensor.read_noise_e**2) == pytest.approx(
                50, rel=0.12
            )
    assert "signal-short" not in {finding.rule for finding in plan.findings}
