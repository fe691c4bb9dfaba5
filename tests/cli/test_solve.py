"""`syzygraph solve` tells where frames point, for people and for machines, and never touches a frame."""

from __future__ import annotations

import hashlib
import json

import numpy as np
import pytest
from astropy.io import fits
from astropy.wcs import WCS

from planner.cli.main import run_with

RA, DEC = 83.947396, -5.745667  # of the 400 mm frame: its author's own solution (../shared/frames/README.md)


@pytest.fixture
def frame(real_frames):
    return real_frames / "field_400mm_2022-10-23.jpg"


def solved(capsys, *arguments):
    code = run_with(["solve", *[str(one) for one in arguments]])
    return code, capsys.readouterr()


def test_json_holds_what_scripts_rely_on(frame, capsys):
    code, printed = solved(capsys, frame, "--near", f"{RA},{DEC}", "--scale", "2.3", "--json")
    assert code == 0
    (one,) = json.loads(printed.out)
    # the machine interface: stable, scripts rely on it
    expected = {
        "file", "solved", "center_ra_deg", "center_dec_deg", "scale_arcsec_px", "position_angle_deg",
        "mirrored", "stars_matched", "rms_px", "false_alarm_log10", "reason",
    }  # fmt: skip
    assert expected <= one.keys()
    assert one["solved"] is True
    assert one["reason"] is None
    assert one["mirrored"] is False
    assert abs(one["center_ra_deg"] - RA) < 5 / 3600
    assert abs(one["center_dec_deg"] - DEC) < 5 / 3600


def test_focal_length_and_pixel_give_the_scale(frame, capsys):
    code, printed = solved(
        capsys, frame, "--near", f"{RA},{DEC}", "--focal-mm", 400, "--pixel-um", 4.3, "--json"
    )
    assert code == 0
    assert json.loads(printed.out)[0]["how"] == "hinted"


def test_the_solution_and_the_picture_go_beside_and_the_frame_stays(frame, tmp_path, capsys):
    before = hashlib.sha256(frame.read_bytes()).hexdigest()
    where = tmp_path / "out"
    code, printed = solved(capsys, frame, "--near", f"{RA},{DEC}", "--scale", 2.2, "-o", where, "--copy")
    assert code == 0
    assert "83.947" in printed.out
    names = {path.name for path in where.iterdir()}
    stem = frame.stem
    assert names == {f"{stem}.wcs.fits", f"{stem}.solved.png", f"{stem}.solved.fits"}
    assert hashlib.sha256(frame.read_bytes()).hexdigest() == before
    with fits.open(where / f"{stem}.solved.fits") as hdus:
        wcs = WCS(hdus[0].header)
        height, width = hdus[0].data.shape
    ra, dec = wcs.all_pix2world((width - 1) / 2, (height - 1) / 2, 0)
    assert np.hypot((ra - RA) * np.cos(np.radians(DEC)), dec - DEC) < 5 / 3600
    code, printed = solved(capsys, frame, "--near", f"{RA},{DEC}", "--scale", 2.2, "-o", where)
    assert code == 2
    assert "exists already" in printed.err


def test_what_cannot_be_solved_says_what_was_tried_and_the_rest_goes_on(frame, tmp_path, capsys):
    noise = np.random.default_rng(1).normal(100, 5, (400, 600)).astype("float32")
    fits.PrimaryHDU(noise).writeto(tmp_path / "noise.fits")
    (tmp_path / "notes.txt").write_text("clouds\n")
    files = [tmp_path / "noise.fits", tmp_path / "notes.txt", frame]
    code, printed = solved(capsys, *files, "--near", f"{RA},{DEC}", "--scale", 2.2, "--no-blind", "--json")
    assert code == 1
    first, second, third = json.loads(printed.out)
    assert "stars found" in first["reason"]
    assert "none of the formats" in second["reason"]
    assert third["solved"]


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--near", "here"], "RA,DEC in degrees"),
        (["--near", "400,10"], "0 to 360"),
        (["--focal-mm", "400"], "both together"),
        (["--learn"], "--rig"),
        (["--copy"], "-o"),
    ],
)
def test_a_wrong_option_is_one_line_and_exit_code_2(tmp_path, capsys, arguments, words):
    (tmp_path / "a.fits").write_text("x")
    code, printed = solved(capsys, tmp_path / "a.fits", *arguments)
    assert code == 2
    assert words in printed.err
    assert len(printed.err.strip().splitlines()) == 1


def test_a_file_that_does_not_exist_is_the_users_mistake(tmp_path, capsys):
    code, printed = solved(capsys, tmp_path / "no.fits")
    assert code == 2
    assert "does not exist" in printed.err
