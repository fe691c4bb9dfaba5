"""A narrow field that the installed catalogue cannot solve is solved with the user's; frames are calibrated first."""

from __future__ import annotations

import json

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from astropy.wcs import WCS

from planner.cli.main import run_with
from tests.stars.test_detection import render

RA, DEC, SCALE = 120.0, 20.0, 1.5  # 0.33 x 0.25 degrees: one star to G = 10, if any
SHAPE = (600, 800)


@pytest.fixture(scope="module")
def narrow(tmp_path_factory):
    """A frame of invented faint stars, a catalogue that holds them and their motions, and where it points."""
    folder = tmp_path_factory.mktemp("narrow")
    rng = np.random.default_rng(3)
    wcs = WCS(naxis=2)
    wcs.wcs.ctype, wcs.wcs.crval = ["RA---TAN", "DEC--TAN"], [RA, DEC]
    wcs.wcs.crpix = [(SHAPE[1] + 1) / 2, (SHAPE[0] + 1) / 2]
    turn = np.radians(33.0)
    wcs.wcs.cd = SCALE / 3600 * np.array([[-np.cos(turn), np.sin(turn)], [np.sin(turn), np.cos(turn)]])
    x, y = rng.uniform(-200, SHAPE[1] + 200, 120), rng.uniform(-200, SHAPE[0] + 200, 120)
    magnitude = rng.uniform(10.5, 13.5, 120)
    now_ra, now_dec = wcs.all_pix2world(x, y, 0)
    pm = rng.normal(0, 40, (2, 120))
    years = 2027.0 - 2016.0
    table = Table(
        {"RA_ICRS": now_ra - pm[0] * years / 3.6e6 / np.cos(np.radians(now_dec)),
         "DE_ICRS": now_dec - pm[1] * years / 3.6e6, "Gmag": magnitude,
         "pmRA": pm[0], "pmDE": pm[1], "epoch": np.full(120, 2016.0)}
    )  # fmt: skip
    table.write(folder / "field.csv")
    on = (x > 0) & (x < SHAPE[1] - 1) & (y > 0) & (y < SHAPE[0] - 1)
    frame = render(SHAPE, x[on], y[on], 10 ** (-0.4 * (magnitude[on] - 20.3)), 3.0)
    header = fits.Header({"DATE-OBS": "2027-01-01T00:00:00", "EXPTIME": 10.0})
    fits.PrimaryHDU(frame, header).writeto(folder / "a.fits")
    return folder


def solved(capsys, *arguments):
    code = run_with(["solve", *[str(one) for one in arguments], "--json"])
    return code, json.loads(capsys.readouterr().out)[0]


def test_a_deeper_catalogue_solves_what_the_installed_one_cannot(narrow, capsys):
    near = narrow / "a.fits", "--near", f"{RA + 0.05},{DEC - 0.04}", "--scale", SCALE * 1.03, "--no-blind"
    code, one = solved(capsys, *near)
    assert code == 1
    assert not one["solved"]
    code, one = solved(capsys, *near, "--catalogue", narrow / "field.csv")
    assert code == 0
    assert one["stars_matched"] > 20
    away = np.hypot((one["center_ra_deg"] - RA) * np.cos(np.radians(DEC)), one["center_dec_deg"] - DEC) * 3600
    assert away < 0.1 * SCALE


def test_a_wrong_catalogue_is_one_line(narrow, tmp_path, capsys):
    (tmp_path / "a.csv").write_text("x,y\n1,2\n")
    code = run_with(["solve", str(narrow / "a.fits"), "--catalogue", str(tmp_path / "a.csv")])
    printed = capsys.readouterr()
    assert code == 2
    assert "ra: found the columns x, y" in printed.err
    assert len(printed.err.strip().splitlines()) == 1


def test_frames_are_calibrated_before_they_are_solved(narrow, tmp_path, capsys, monkeypatch):
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    rng = np.random.default_rng(4)
    yy, xx = np.mgrid[0 : SHAPE[0], 0 : SHAPE[1]]
    dust = 1 - 0.5 * np.exp(-((xx - 300) ** 2 + (yy - 200) ** 2) / 2 / 40**2)
    night = tmp_path / "night"
    for kind, light, length in (("bias", 0.0, 0.0), ("flat", 20_000.0, 2.0)):
        (night / kind).mkdir(parents=True)
        for i in range(3):
            data = 500 + rng.poisson(light * dust) + rng.normal(0, 3, SHAPE)
            fits.PrimaryHDU(data.astype("float32"), fits.Header({"EXPTIME": length})).writeto(
                night / kind / f"{i}.fits"
            )
    with fits.open(narrow / "a.fits") as hdus:
        raw = hdus[0].data * dust + 500
        fits.PrimaryHDU(raw.astype("float32"), hdus[0].header).writeto(tmp_path / "raw.fits")
    out = tmp_path / "out"
    code, one = solved(
        capsys, tmp_path / "raw.fits", "--near", f"{RA},{DEC}", "--scale", SCALE, "--no-blind", "--catalogue",
        narrow / "field.csv", "--calibration", night, "-o", out, "--copy",
    )  # fmt: skip
    assert code == 0
    assert one["solved"]
    flat = fits.getdata(out / "raw.solved.fits")
    # where the dust lay the sky is as bright as elsewhere, and the bias is gone
    assert np.median(flat[180:220, 280:320]) == pytest.approx(np.median(flat), rel=0.03)
    assert np.median(flat) == pytest.approx(200, rel=0.05)
