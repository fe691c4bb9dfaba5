"""Frames with dust, bias and hot pixels give the picture of clean frames once they are calibrated."""

from __future__ import annotations

import json
import shutil

import numpy as np
import pytest
from astropy.io import fits

from planner.cli.main import run_with


def spoiled(source, folder, shade, hot):
    """A copy of the frames as a sensor with a shade, another bias and hot pixels would have taken them."""
    shutil.copytree(source, folder)
    for path in folder.glob("*.fits"):
        with fits.open(path, mode="update") as hdus:
            data = (hdus[0].data.astype(float) - 200.0) * shade + 700.0
            data[hot] = 50_000
            hdus[0].data = np.clip(np.rint(data), 0, 65535).astype("uint16")


def night(folder, shape, shade, hot):
    rng = np.random.default_rng(2)
    for kind, light, length in (("bias", 0.0, 0.0), ("dark", 0.0, 1.0), ("flat", 20_000.0, 1.0)):
        (folder / kind).mkdir(parents=True)
        for i in range(3):
            data = 700 + rng.normal(0, 2, shape) + rng.poisson(light * shade)
            if kind != "bias":
                data[hot] = 50_000
            fits.PrimaryHDU(np.rint(data).astype("uint16"), fits.Header({"EXPTIME": length})).writeto(
                folder / kind / f"{i}.fits"
            )


def test_a_calibrated_composite_is_that_of_clean_frames(transit, tmp_path, monkeypatch):
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    shape = fits.getdata(next(iter(sorted(transit.frames.glob("*.fits"))))).shape
    xx = np.arange(shape[1]) / shape[1]
    shade = np.ones(shape) * (1.0 - 0.7 * xx)
    hot = np.zeros(shape, dtype=bool)
    hot[shape[0] // 2, shape[1] // 2 : shape[1] // 2 + 40 : 10] = True
    spoiled(transit.frames, tmp_path / "frames", shade, hot)
    night(tmp_path / "night", shape, shade, hot)
    pictures = {}
    for name, frames, more in (
        ("clean", transit.frames, []),
        ("raw", tmp_path / "frames", []),
        ("calibrated", tmp_path / "frames", ["--calibration", str(tmp_path / "night")]),
    ):
        code = run_with(
            ["compose", str(transit.plan), str(transit.track), "--frames", str(frames), "-o", str(tmp_path / name),
             "--formats", "fits", "--plots", "none", "--no-page", "--quiet", *more]
        )  # fmt: skip
        assert code in (0, 1)
        pictures[name] = fits.getdata(tmp_path / name / "composite.fits")
    bright = pictures["clean"] > 0.5 * np.nanmax(pictures["clean"])
    off = {
        name: np.abs(pictures[name][bright] / pictures["clean"][bright] - 1) for name in ("raw", "calibrated")
    }
    assert np.nanpercentile(off["raw"], 90) > 0.05
    assert np.nanpercentile(off["calibrated"], 90) < 0.01
    assert np.nanmax(off["calibrated"]) < 0.1  # no hot pixel, and no mended one, shows
    statement = json.loads((tmp_path / "calibrated" / "composite.truth.json").read_text())
    assert "frames were calibrated: master bias" in json.dumps(statement)


def test_a_wrong_calibration_folder_is_one_line(transit, tmp_path, capsys):
    (tmp_path / "empty").mkdir()
    code = run_with(
        ["compose", *transit.arguments, "-o", str(tmp_path / "a"), "--calibration", str(tmp_path / "empty")]
    )
    assert code == 2
    assert "allowed are folders named bias, dark, flat" in capsys.readouterr().err


@pytest.mark.slow
def test_a_check_of_spoiled_frames_is_as_good_as_of_clean_ones_once_they_are_calibrated(
    transit, tmp_path, monkeypatch
):
    from astropy.table import Table

    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    shape = fits.getdata(next(iter(sorted(transit.frames.glob("*.fits"))))).shape
    shade = np.ones(shape) * (1.0 - 0.5 * np.arange(shape[0])[:, None] / shape[0])
    hot = np.random.default_rng(5).random(shape) < 2e-3
    spoiled(transit.frames, tmp_path / "frames", shade, hot)
    night(tmp_path / "night", shape, shade, hot)
    truth = Table.read(transit.frames.with_name("frames.truth.ecsv"), format="ascii.ecsv")
    places = {row["file"]: (row["target_x_px"], row["target_y_px"]) for row in truth}
    code = run_with(
        ["check", str(transit.plan), str(tmp_path / "frames"), "-o", str(tmp_path / "out"), "--no-pictures",
         "--calibration", str(tmp_path / "night")]
    )  # fmt: skip
    assert code in (0, 1)
    track = Table.read(tmp_path / "out" / "track.ecsv", format="ascii.ecsv")
    assert "master flat" in track.meta["provenance"]
    measured = [row for row in track if row["verdict"] == "on-track"]
    assert len(measured) >= 8
    away = [
        np.hypot(row["x_px"] - places[row["file"]][0], row["y_px"] - places[row["file"]][1])
        for row in measured
    ]
    assert np.median(away) < 0.1
    assert abs(track.meta["clock_offset_s"]) < 4 * track.meta["clock_offset_sigma_s"]
