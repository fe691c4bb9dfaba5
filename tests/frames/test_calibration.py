"""Calibration takes off what the camera added, and the noise it measures is the noise that was put in."""

from __future__ import annotations

import shutil
from dataclasses import replace

import numpy as np
import pytest
from astropy.io import fits

from imaging.frames.calibrating import Calibration, calibration_of
from imaging.frames.calibration import bad_pixels, calibrate, make_master, outliers_in_time
from imaging.frames.hotpixels import hot_pixels
from imaging.frames.photontransfer import photon_transfer
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


@pytest.fixture
def night(camera, tmp_path):
    """The camera's calibration frames in the folders that a night has, and a cache of its own."""
    folder = tmp_path / "calibration"
    for kind in ("bias", "dark", "flat"):
        (folder / kind).mkdir(parents=True)
        for path in camera[kind]:
            path.rename(folder / kind / path.name)
    return folder, tmp_path / "cache", camera


def test_a_folder_of_calibration_frames_makes_frames_flat_and_dark(night):
    folder, cache, camera = night
    calibration = calibration_of(folder, cache)
    frame = read_frame(camera["light"], calibration=calibration)
    assert np.isfinite(frame.data).all()  # the hot pixel is mended
    assert frame.data[20, 30] == pytest.approx(np.median(frame.data), rel=0.1)
    assert frame.data.mean() == pytest.approx(200 * camera["shade"].mean(), rel=0.01)
    assert np.median(frame.data[:10, :10]) == pytest.approx(np.median(frame.data[55:65, 75:85]), rel=0.02)
    assert frame.bias_adu == 0.0
    said = calibration.provenance()
    assert {"master bias", "master dark 10 s", "master flat", "bad pixels"} <= said.keys()


def test_masters_of_a_folder_are_made_once(night):
    folder, cache, _ = night
    first = calibration_of(folder, cache).provenance()
    kept = {path.name: path.stat().st_mtime_ns for path in cache.iterdir()}
    assert len(kept) == 3
    assert calibration_of(folder, cache).provenance() == first
    assert {path.name: path.stat().st_mtime_ns for path in cache.iterdir()} == kept
    for path in cache.iterdir():  # damaged by whatever: made again
        path.write_bytes(b"SIMPLE")
    assert calibration_of(folder, cache).provenance() == first


def test_noise_is_measured_where_the_frames_do_not_state_it(tmp_path):
    rng = np.random.default_rng(8)
    gain, read = 1.7, 6.0

    def shot(electrons):
        return (rng.poisson(electrons, SHAPE) + rng.normal(0, read, SHAPE)) / gain + 300

    for kind, electrons, length in (("bias", 0, 0.0), ("flat", 20_000, 2.0)):
        (tmp_path / kind).mkdir()
        for i in range(4):
            write(tmp_path / kind / f"{i}.fits", shot(electrons * (1 + 0.02 * i)), length)
    calibration = calibration_of(tmp_path, tmp_path / "cache")
    frame = read_frame(write(tmp_path / "light.fits", shot(500), 2.0), calibration=calibration)
    assert frame.gain_e_adu == pytest.approx(gain, rel=0.03)
    assert frame.read_noise_e == pytest.approx(read, rel=0.03)


def test_a_mosaic_is_calibrated_before_it_is_taken_apart(tmp_path):
    rng = np.random.default_rng(9)
    colours = np.tile(np.array([[3.0, 1.0], [1.0, 0.4]]), (60, 80))
    shade = np.linspace(1.0, 0.5, SHAPE[1])
    header = {"EXPTIME": 2.0, "DATE-OBS": "2027-02-19T20:00:00", "BAYERPAT": "RGGB"}

    def save(path, data):
        fits.PrimaryHDU(data.astype("float32"), fits.Header(header)).writeto(path)
        return path

    for kind, light in (("bias", 0.0), ("flat", 4000.0)):
        (tmp_path / kind).mkdir()
        for i in range(3):
            save(tmp_path / kind / f"{i}.fits", 300 + light * colours * shade + rng.normal(0, 3, SHAPE))
    light = save(tmp_path / "light.fits", 300 + 900 * colours * shade + rng.normal(0, 3, SHAPE))
    frame = read_frame(light, colour=True, calibration=calibration_of(tmp_path, tmp_path / "cache"))
    # the shade is gone, the colours are the light's own
    for plane, strength in zip(np.moveaxis(frame.colour, -1, 0), (3.0, 1.0, 0.4), strict=True):
        assert np.median(plane[:, :20]) == pytest.approx(np.median(plane[:, -20:]), rel=0.03)
        assert np.median(plane) == pytest.approx(900 * 0.75 * strength, rel=0.03)


def test_made_colours_are_set_aside_when_calibration_is_asked_for(night, tmp_path):
    from PIL import Image

    folder, cache, _ = night
    picture = np.random.default_rng(1).integers(0, 255, (*SHAPE, 3), dtype="uint8")
    Image.fromarray(picture).save(tmp_path / "a.png")
    with pytest.raises(FrameSetAside, match="the values themselves"):
        read_frame(tmp_path / "a.png", calibration=calibration_of(folder, cache))


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda folder: shutil.rmtree(folder / "bias"), None),
        (
            lambda folder: [shutil.rmtree(folder / kind) for kind in ("bias", "dark", "flat")],
            "folders named bias",
        ),
        (lambda folder: (folder / "dark" / "notes.txt").write_text("clouds"), "allowed are frames"),
        (
            lambda folder: write(folder / "flat" / "small.fits", np.ones((50, 60)) + np.eye(50, 60), 5.0),
            "one size",
        ),
    ],
)
def test_a_wrong_calibration_folder_is_one_line(night, change, words):
    folder, cache, camera = night
    change(folder)
    if words is None:  # without a bias a dark cannot be scaled to the frame
        with pytest.raises(FrameSetAside, match="scaling is not allowed"):
            read_frame(camera["light"], calibration=calibration_of(folder, cache))
        return
    with pytest.raises(InputError, match=words) as wrong:
        calibration_of(folder, cache)
    assert "\n" not in str(wrong.value)


def test_hot_pixels_are_told_by_time_and_rays_and_stars_are_not(tmp_path):
    rng = np.random.default_rng(11)
    yy, xx = np.mgrid[0 : SHAPE[0], 0 : SHAPE[1]]
    star = 4000 * np.exp(-((xx - 100) ** 2 + (yy - 40) ** 2) / 2 / 0.7**2)  # FWHM 1.6 px, always in one place
    limb = np.where(np.hypot(xx - 40, yy - 80) < 30, 5000.0, 0.0)
    paths = []
    for i in range(6):
        data = 300 + rng.normal(0, 4, SHAPE) + star + limb
        data[20, 30] += 900
        data[5 + 10 * i, 140] += 5000  # a ray
        paths.append(write(tmp_path / f"{i}.fits", data, 2.0))
    hot = hot_pixels(paths)
    assert np.argwhere(hot).tolist() == [[20, 30]]
    assert hot_pixels(paths[:3]) is None
    frame = read_frame(paths[0], calibration=Calibration(hot=hot))
    assert frame.data[20, 30] == pytest.approx(300, abs=20)
    assert frame.data[40, 100] > 3000
