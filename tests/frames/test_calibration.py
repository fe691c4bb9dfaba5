"""Calibration takes off what the camera added, and the noise it measures is the noise that was put in."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from astropy.io import fits

from imaging.frames.calibration import bad_pixels, calibrate, make_master, outliers_in_time, photon_transfer
from imaging.frames.reading import read_frame
from planner.errors import FrameSetAside, InputError

SHAPE = (120, 160)


def write(path, data, exposure):
    header = fits.Header({"EXPTIME": exposure, "DATE-OBS": "2027-02-19T20:00:00"})
    fits.PrimaryHDU(data.astype("float32"), header).writeto(path)
    return path


@pytest.fixture
def camera(tmp_path):
    """A camera with a bias of 300, a dark current of 5 a second with hot pixels, and a vignetted field."""
    rng = np.random.default_rng(2)
    yy, xx = np.mgrid[0 : SHAPE[0], 0 : SHAPE[1]]
    shade = 1 - 0.4 * ((xx - 80) ** 2 + (yy - 60) ** 2) / 10_000
    current = np.full(SHAPE, 5.0)
    current[20, 30] = 4000.0

    def shot(light, exposure):
        return 300 + rng.normal(0, 3, SHAPE) + current * exposure + light * shade * exposure

    def some(kind, light, exposure, count=9):
        return [write(tmp_path / f"{kind}{i}.fits", shot(light, exposure), exposure) for i in range(count)]

    return {"bias": some("bias", 0, 0.0), "dark": some("dark", 0, 10.0), "flat": some("flat", 2000, 5.0),
            "light": some("light", 50, 4.0, 1)[0], "shade": shade}  # fmt: skip


def test_what_is_left_is_the_light(camera):
    bias = make_master(camera["bias"], "bias")
    dark = make_master(camera["dark"], "dark", bias=bias)
    flat = make_master(camera["flat"], "flat", bias=bias)
    frame = calibrate(read_frame(camera["light"]), bias, dark, flat, scale_dark=True, bad=bad_pixels(dark))
    assert np.isnan(frame.data[20, 30])
    assert np.nanmean(frame.data) == pytest.approx(200 * camera["shade"].mean(), rel=0.01)
    edge, middle = np.nanmedian(frame.data[:10, :10]), np.nanmedian(frame.data[55:65, 75:85])
    assert edge == pytest.approx(middle, rel=0.02)


def test_a_dark_of_another_exposure_is_refused_unless_scaling_is_allowed(camera):
    bias = make_master(camera["bias"], "bias")
    dark = make_master(camera["dark"], "dark", bias=bias)
    with pytest.raises(FrameSetAside, match="scaling is not allowed"):
        calibrate(read_frame(camera["light"]), bias, dark)


def test_a_cosmic_ray_in_one_dark_does_not_reach_the_master(camera, tmp_path):
    with fits.open(camera["dark"][3], mode="update") as hdus:
        hdus[0].data[50, 50] = 60000
    assert make_master(camera["dark"], "dark").data[50, 50] < 370


def test_a_master_is_made_once_and_again_when_an_input_changes(camera, tmp_path):
    cache = tmp_path / "masters"
    first = make_master(camera["bias"], "bias", cache)
    assert np.array_equal(make_master(camera["bias"], "bias", cache).data, first.data)
    assert len(list(cache.iterdir())) == 1
    with fits.open(camera["bias"][0], mode="update") as hdus:
        hdus[0].data[5, 5] = 999
    assert make_master(camera["bias"], "bias", cache).hash != first.hash
    assert len(list(cache.iterdir())) == 2


def test_masters_that_do_not_fit_are_refused(camera):
    bias = make_master(camera["bias"], "bias")
    with pytest.raises(FrameSetAside, match="the master bias is"):
        calibrate(read_frame(camera["light"]), replace(bias, data=bias.data[:50]))
    with pytest.raises(InputError, match="no frames"):
        make_master([], "bias")


# Janesick 2007: variance of a difference = 2 (read noise^2 + signal / gain), in counts
@pytest.mark.parametrize(("gain", "read"), [(0.8, 2.5), (2.55, 11.0)])
def test_photon_transfer_finds_the_gain_and_read_noise_put_in(gain, read):
    rng = np.random.default_rng(4)
    pattern = rng.normal(1, 0.02, (300, 300))  # fixed-pattern noise, which pairs cancel

    def shot(electrons):
        return (rng.poisson(electrons * pattern) + rng.normal(0, read, pattern.shape)) / gain + 500

    noise = photon_transfer([(shot(e), shot(e)) for e in (500, 3000, 12000)], [(shot(0), shot(0))] * 3)
    assert abs(noise.gain_e_adu - gain) < 4 * noise.gain_sigma + 0.002 * gain
    assert noise.gain_e_adu == pytest.approx(gain, rel=0.02)
    assert noise.read_noise_e == pytest.approx(read, rel=0.03)


def test_struck_pixels_are_found_in_time_and_a_sharp_limb_is_kept():
    rng = np.random.default_rng(6)
    yy, xx = np.mgrid[0:100, 0:100]
    disc = np.where(np.hypot(xx - 50, yy - 50) < 30, 5000.0, 100.0)
    stack = disc + rng.normal(0, 10, (7, 100, 100))
    stack[2, 40, 10] += 3000
    struck = outliers_in_time(stack, 10.0)
    assert struck[2, 40, 10]
    assert struck.sum() <= 3
