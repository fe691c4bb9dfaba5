"""A star timed in frames without a plan: cubes and videos, a drifting field, clouds, a shutter that rolls."""

from __future__ import annotations

import json

import numpy as np
import pytest
from astropy.io import fits

from planner.cli.main import run_with

EXPOSURE, COUNT, SHAPE = 0.04, 240, (64, 96)
GONE, BACK = 3.013, 6.507  # seconds from the start
STAR, OTHER = (61.3, 30.2), (25.6, 38.7)


def cube(path, seed=1, gone=GONE, back=BACK, clouds=0.4, light=900.0, readout_s=0.0):
    """Write a cube of planes that begin every 40 ms, drifting by 9 px in x; its rows are read one after the other."""
    generator = np.random.default_rng(seed)
    y, x = np.mgrid[: SHAPE[0], : SHAPE[1]]
    start = np.arange(COUNT) * EXPOSURE + readout_s * (1 - STAR[1] / (SHAPE[0] - 1))
    seen = np.clip((gone - start) / EXPOSURE, 0, 1) + 1 - np.clip((back - start) / EXPOSURE, 0, 1)
    clear = 1 - clouds * np.sin(np.linspace(0, 5, COUNT)) ** 2
    drift = np.linspace(0, 9, COUNT)
    planes = []
    for part, sky, by in zip(np.clip(seen, 0, 1), clear, drift, strict=True):
        image = np.full(SHAPE, 60.0)
        for (px, py), electrons in ((STAR, light * part), (OTHER, 4000.0)):
            image += (
                sky
                * electrons
                / (2 * np.pi * 1.96)
                * np.exp(-((x - px - by) ** 2 + (y - py - 0.5 * by) ** 2) / 3.92)
            )
        planes.append(generator.poisson(image))
    hdu = fits.PrimaryHDU(np.array(planes, np.int32))
    hdu.header["EXPTIME"] = EXPOSURE
    hdu.writeto(path)
    return path


def timed(path, capsys, *options):
    command = ["lightcurve", str(path), "--star", "61,30", "--start", "2027-08-13T18:52:00Z"]
    code = run_with([*command, "--cadence", str(EXPOSURE), "--json", *options])
    return code, json.loads(capsys.readouterr().out)


def seconds(event):
    return float(event["utc"].split(":")[2].rstrip("Z"))


def test_both_instants_through_clouds_and_drift_with_a_comparison_star(tmp_path, capsys):
    code, told = timed(
        cube(tmp_path / "c.fits"), capsys, "--comparison", "26,39", "-o", str(tmp_path / "out")
    )
    assert code == 0
    assert told["compared"]
    assert told["moved_px"] == pytest.approx(9 * np.hypot(1, 0.5), abs=0.5)
    for event, truth in zip(told["events"], (GONE, BACK), strict=True):
        assert abs(seconds(event) - truth) < 4 * event["sigma_s"]
        assert event["sigma_s"] < 0.006
        assert event["depth"] == pytest.approx(1.0, abs=0.1)
        assert event["false_alarm_log10"] < -30
    assert (tmp_path / "out" / "light_curve.png").stat().st_size > 10_000
    assert (tmp_path / "out" / "light_curve.ecsv").is_file()


def test_rolling_shutter_reads_the_star_later_than_the_frame(tmp_path, capsys):
    made = cube(tmp_path / "r.fits", readout_s=0.03)
    late = 0.03 * (1 - STAR[1] / (SHAPE[0] - 1))
    _, plain = timed(made, capsys, "--comparison", "26,39")
    _, rolled = timed(made, capsys, "--comparison", "26,39", "--rolling-readout", "0.03")
    assert seconds(rolled["events"][0]) - seconds(plain["events"][0]) == pytest.approx(late, abs=0.003)
    assert abs(seconds(rolled["events"][0]) - GONE) < 4 * rolled["events"][0]["sigma_s"]


def test_fringes_are_fitted_when_asked_for(tmp_path, capsys):
    """Frames of 40 ms do not show them: the instant stays where the step has it, to its error."""
    made = cube(tmp_path / "d.fits")
    _, told = timed(made, capsys, "--comparison", "26,39", "--diffraction", "620,378000")
    for event, truth in zip(told["events"], (GONE, BACK), strict=True):
        assert abs(seconds(event) - truth) < 0.02


def test_star_that_shines_on_through_clouds_shows_no_event(tmp_path, capsys):
    made = cube(tmp_path / "n.fits", gone=99.0, back=99.0)
    code, told = timed(made, capsys, "--comparison", "26,39")
    assert code == 0
    assert told["events"] == []
    assert "no event" in told["reason"]


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--star", "9999,3"], "allowed is X,Y within the frame"),
        (["--star", "3"], "allowed is X,Y in pixels"),
        (["--star", "61,30", "--start", "2027-08-13T18:52:00"], "both together"),
        (["--star", "61,30", "--diffraction", "fast"], "allowed is speed in m/s"),
        (["--star", "61,30", "--start", "noon", "--cadence", "1"], "allowed is a time with Z"),
    ],
)
def test_mistakes_are_one_line(tmp_path, capsys, options, words):
    made = cube(tmp_path / "c.fits") if options[1] == "9999,3" else tmp_path / "c.fits"
    made.touch()
    extra = ["--start", "2027-08-13T18:52:00Z", "--cadence", "0.04"] if options[1] == "9999,3" else []
    assert run_with(["lightcurve", str(made), *options, *extra]) == 2
    assert words in capsys.readouterr().err


def test_planes_that_tell_no_time_are_set_aside_with_the_reason(tmp_path, capsys):
    made = cube(tmp_path / "c.fits")
    assert run_with(["lightcurve", str(made), "--star", "61,30"]) == 2
    assert "tell their time" in capsys.readouterr().err


def test_a_cube_without_times_is_one_line_and_an_axis_in_seconds_is_enough(tmp_path, capsys):
    made = cube(tmp_path / "c.fits")
    with fits.open(made) as hdus:
        bare, data = hdus[0].header.copy(), hdus[0].data
    fits.PrimaryHDU(data, bare).writeto(tmp_path / "bare.fits")
    assert run_with(["lightcurve", str(tmp_path / "bare.fits"), "--star", "61,30"]) == 2
    printed = "".join(capsys.readouterr())
    assert "0 frames tell their time" in printed
    assert printed.count("the third axis is without a name") == 1
    bare["DATE-OBS"], bare["CUNIT3"], bare["CDELT3"] = "2027-08-13T18:52:00", "s", 0.04
    fits.PrimaryHDU(data, bare).writeto(tmp_path / "unnamed.fits")
    assert run_with(["lightcurve", str(tmp_path / "unnamed.fits"), "--star", "61,30", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["frames"] == COUNT
