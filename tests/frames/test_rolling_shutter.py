"""A rolling shutter exposes each row at its own time; the target's own row is what counts."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import yaml
from astropy.table import Table

from imaging.frames.frame import FrameTime, Shutter
from planner.cli.main import run_with
from planner.sequence.models import Sensor

READOUT_S = 10.0
TIME = FrameTime(100.0, 101.0, 102.0, 0.01, "DATE-OBS")


def sensor(**more):
    return Sensor(width_px=200, height_px=101, pixel_um=4.0, rolling_readout_s=READOUT_S, **more)


# rows of a FITS array count from the bottom of the picture, those of a raster from its top
@pytest.mark.parametrize(
    ("row_zero", "first", "y_px", "delay_s"),
    [
        ("top", "top", 0, 0.0),
        ("top", "top", 100, READOUT_S),
        ("top", "bottom", 25, 7.5),
        ("bottom", "top", 25, 7.5),
        ("bottom", "bottom", 25, 2.5),
        ("bottom", "top", 400, 0.0),  # beyond the frame: the nearest row
        ("bottom", "top", float("nan"), 5.0),
    ],
)
def test_begin_middle_and_end_are_those_of_the_row(row_zero, first, y_px, delay_s):
    shutter = Shutter.of(sensor(shutter="rolling", rolling_from=first))
    time = TIME.at_row(y_px, 101, row_zero, shutter)
    assert (time.begin_tt_s, time.middle_tt_s, time.end_tt_s) == pytest.approx(
        (100 + delay_s, 101 + delay_s, 102 + delay_s)
    )
    assert ("rolling shutter" in time.source) == (delay_s > 0)


def test_binned_rows_take_as_many_lines():
    shutter = Shutter.of(sensor(shutter="rolling"), binning=4)
    assert TIME.at_row(10, 25, "top", shutter).middle_tt_s == pytest.approx(101 + 40 * READOUT_S / 100)


def test_a_global_shutter_exposes_all_rows_at_once():
    assert TIME.at_row(77, 101, "top", Shutter.of(sensor())) is TIME


@pytest.mark.slow
@pytest.mark.parametrize("first", ["top", "bottom"])
def test_a_check_times_the_target_at_its_row(root, tmp_path, first):
    """A slow readout, and a target that lies high in the frame: without its row the clock would seem seconds off."""
    plan = tmp_path / "plan.yaml"
    assert run_with(["plan", str(root / "configs" / "mercury_transit_2032.yaml"), "-o", str(plan)]) == 0
    text = yaml.safe_load(plan.read_text())
    text["rig"]["sensor"] |= {"shutter": "rolling", "rolling_readout_s": READOUT_S, "rolling_from": first}
    plan.write_text(yaml.safe_dump(text, sort_keys=False, allow_unicode=True))
    frames, out = tmp_path / "frames", tmp_path / "out"
    cut = ["--frames", "6", "--binning", "10", "--jobs", "1", "--quiet"]
    assert run_with(["rehearse", str(plan), "-o", str(frames), *cut]) == 0
    run_with(["check", str(plan), str(frames), "-o", str(out), "--no-pictures"])
    track, truth = (
        Table.read(path, format="ascii.ecsv") for path in (out / "track.ecsv", Path(f"{frames}.truth.ecsv"))
    )
    meta = track.meta
    assert abs(meta["clock_offset_s"]) < 3.5 * meta["clock_offset_sigma_s"] < 4.0
    from astropy.time import Time

    delay = (Time(list(truth["true_utc_mid"])) - Time(list(truth["stamped_utc_mid"]))).sec
    assert (
        np.median(delay) > 2.0
    )  # far more than the clock's error: without the row the clock would be blamed
    by_name = dict(zip(truth["file"], truth["true_utc_mid"], strict=True))
    measured = track[[v != "unmeasured" for v in track["verdict"]]]
    away = (Time(list(measured["utc_mid"])) - Time([by_name[name] for name in measured["file"]])).sec
    assert np.abs(away).max() < 0.02 * READOUT_S  # the rows of a binned frame
