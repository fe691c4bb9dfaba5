"""The whole road, driven through the front door: a brief is planned, rehearsed with faults, checked, composed."""

from __future__ import annotations

import contextlib
import io
import json
import shutil
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from planner.cli.main import run_with
from tests.conftest import ROOT

CLOCK_OFFSET_S = 7.3


@dataclass(frozen=True)
class Road:
    """What one journey left behind."""

    folder: Path
    plan: Path
    frames: Path
    code: int
    answer: dict
    track: Table
    truth: Table


def run(*words) -> tuple[int, str]:
    out = io.StringIO()
    with contextlib.redirect_stdout(out):
        code = run_with([str(word) for word in words])
    return code, out.getvalue()


def drive(folder: Path, brief: str, frames: int, binning: int) -> Road:
    plan, drawn, checked = folder / "plan.yaml", folder / "frames", folder / "checked"
    assert run("plan", ROOT / "configs" / f"{brief}.yaml", "-o", plan)[0] == 0
    cut = ("--frames", frames, "--binning", binning, "--jobs", 1, "--quiet")
    assert run("rehearse", plan, "-o", drawn, "--clock-offset", CLOCK_OFFSET_S, *cut)[0] == 0
    code, text = run("check", plan, drawn, "-o", checked, "--json", "--no-pictures")
    track = Table.read(checked / "track.ecsv", format="ascii.ecsv")
    truth = Table.read(folder / "frames.truth.ecsv", format="ascii.ecsv")
    return Road(folder, plan, drawn, code, json.loads(text), track, truth)


@pytest.fixture(scope="module")
def transit(tmp_path_factory) -> Road:
    return drive(tmp_path_factory.mktemp("transit"), "mercury_transit_2032", 16, 4)


@pytest.fixture(scope="module")
def occultation(tmp_path_factory) -> Road:
    return drive(tmp_path_factory.mktemp("occultation"), "moon_occults_planet_2030", 18, 3)


@pytest.fixture(scope="module")
def retrograde(tmp_path_factory) -> Road:
    return drive(tmp_path_factory.mktemp("retrograde"), "mars_retrograde_2027", 10, 4)


def clock_is_found(road: Road) -> None:
    error = road.answer["clock_offset_s"] - CLOCK_OFFSET_S
    sigma = road.answer["clock_offset_sigma_s"]
    assert abs(error) < 3 * sigma
    # a sigma so wide that anything would pass proves nothing
    assert sigma < 1.0


def test_a_clock_7_seconds_fast_is_found_on_the_sun(transit):
    clock_is_found(transit)


def test_a_clock_7_seconds_fast_is_found_at_the_moon(occultation):
    clock_is_found(occultation)


@pytest.mark.parametrize("name", ["transit", "occultation"])
def test_nothing_but_the_clock_is_found_wrong(name, request):
    found = {finding["name"] for finding in request.getfixturevalue(name).answer["findings"]}
    assert found == {"clock-offset"}


def test_mars_among_the_stars_is_placed_within_0_15_pixel_rms(retrograde):
    measured = {row["file"]: row for row in retrograde.track if row["solved_by"] == "stars"}
    assert len(measured) >= 0.9 * len(retrograde.truth)
    errors = np.array(
        [
            [
                measured[row["file"]]["x_px"] - row["target_x_px"],
                measured[row["file"]]["y_px"] - row["target_y_px"],
            ]
            for row in retrograde.truth
            if row["file"] in measured
        ]
    )
    assert np.sqrt((errors**2).mean()) < 0.15


def test_star_frames_point_where_the_renderer_says(retrograde):
    truth = {row["file"]: row for row in retrograde.truth}
    for row in retrograde.track:
        if row["solved_by"] == "stars":
            turned = (row["rotation_deg"] - truth[row["file"]]["rotation_deg"] + 180) % 360 - 180
            assert abs(turned) < 0.05
            assert row["parity"] == truth[row["file"]]["parity"]


@pytest.mark.parametrize("name", ["transit", "occultation", "retrograde"])
def test_composite_and_path_plot_are_made_with_their_statement(name, request):
    road = request.getfixturevalue(name)
    pictures = road.folder / "pictures"
    code, _ = run(
        "compose", road.plan, road.folder / "checked" / "track.ecsv", "--frames", road.frames, "-o", pictures
    )
    assert code in (0, 1)
    made = {path.suffix for path in pictures.iterdir()}
    assert {".png", ".svg", ".json"} <= made


def test_what_cannot_be_used_is_set_aside_and_the_rest_is_measured(transit, tmp_path):
    mixed = tmp_path / "mixed"
    mixed.mkdir()
    good = sorted(transit.frames.glob("*.fits"))[4:10]
    for path in good:
        shutil.copy(path, mixed)
    broken = mixed / "broken.fits"
    broken.write_bytes(good[0].read_bytes()[:5000])
    (mixed / "notes.txt").write_text("cirrus from nine o'clock")
    with fits.open(good[1]) as black:
        black[0].data = np.zeros_like(black[0].data)
        black.writeto(mixed / "black.fits")
    with fits.open(good[2]) as timeless:
        for key in [
            key for key in timeless[0].header if key.startswith("DATE") or key in ("MJD-OBS", "TIMESYS")
        ]:
            del timeless[0].header[key]
        timeless.writeto(mixed / "timeless.fits")
    code, text = run("check", transit.plan, mixed, "-o", tmp_path / "checked", "--json", "--no-pictures")
    answer = json.loads(text)
    assert code == 1
    reasons = {Path(each["file"]).name: each["reason"] for each in answer["set_aside"]}
    assert set(reasons) == {"broken.fits", "notes.txt", "black.fits", "timeless.fits"}
    assert all(reasons.values())
    assert "when it was taken" in reasons["timeless.fits"]
    assert answer["measured"] == len(good)


def test_check_again_keeps_what_stands(transit, capsys):
    code, _ = run("check", transit.plan, transit.frames, "-o", transit.folder / "checked", "--json")
    assert code == 2
    assert "--force" in capsys.readouterr().err
