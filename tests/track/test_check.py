"""`check` on rehearsed frames: what was injected comes back, what is broken is set aside, what is found is told."""

from __future__ import annotations

import json
import re
import shutil

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from imaging.track.table import COLUMNS, read_track
from planner.cli.main import run_with
from tests.conftest import ROOT

CLOCK_S = 7.3
REHEARSALS = {
    "transit": ("mercury_transit_2032", "--frames 10 --binning 8"),
    "occultation": ("moon_occults_planet_2030", "--frames 10 --binning 4"),
    "retrograde": ("mars_retrograde_2027", "--frames 5 --binning 3"),
}


@pytest.fixture(scope="module")
def rehearsed(tmp_path_factory):
    """Plans and frames, made once: `rehearsed(name)` gives (plan, folder of frames)."""
    home, made = tmp_path_factory.mktemp("check"), {}

    def make(name):
        if name not in made:
            brief, options = REHEARSALS[name]
            plan, frames = home / f"{name}.plan.yaml", home / name
            assert run_with(["plan", str(ROOT / "configs" / f"{brief}.yaml"), "-o", str(plan)]) == 0
            clock = [] if name == "retrograde" else ["--clock-offset", str(CLOCK_S)]
            command = [
                "rehearse",
                str(plan),
                "-o",
                str(frames),
                "--jobs",
                "1",
                "--quiet",
                *options.split(),
                *clock,
            ]
            assert run_with(command) == 0
            made[name] = plan, frames
        return made[name]

    return make


@pytest.fixture(scope="module")
def checked(rehearsed, tmp_path_factory):
    """The folder and the JSON of a check of each rehearsal, made once."""
    home, made = tmp_path_factory.mktemp("checked"), {}

    def make(name, capsys):
        if name not in made:
            plan, frames = rehearsed(name)
            capsys.readouterr()
            code = run_with(
                ["check", str(plan), str(frames), "-o", str(home / name), "--json", "--apply", "clock"]
            )
            made[name] = home / name, json.loads(capsys.readouterr().out), code
        return made[name]

    return make


@pytest.mark.parametrize("name", ["transit", "occultation"])
def test_a_clock_offset_comes_back_within_three_of_its_stated_sigmas(checked, capsys, name):
    _, told, code = checked(name, capsys)
    assert code == 0
    assert abs(told["clock_offset_s"] - CLOCK_S) < 3 * told["clock_offset_sigma_s"]
    assert told["clock_offset_sigma_s"] < 1.5
    assert [finding["name"] for finding in told["findings"]] == ["clock-offset"]
    assert told["measured"] >= 4
    assert told["on_track"] == told["measured"]


def test_planets_among_stars_are_placed_to_a_seventh_of_a_pixel(rehearsed, checked, capsys):
    folder, told, code = checked("retrograde", capsys)
    assert code == 0
    assert told["measured"] == 5
    assert told["findings"] == []
    track = read_track(folder / "track.ecsv")
    truth = Table.read(rehearsed("retrograde")[1].with_suffix(".truth.ecsv"), format="ascii.ecsv")
    place = {row["file"]: (row["target_x_px"], row["target_y_px"]) for row in truth}
    away = np.array([place[name] for name in track["file"]]) - np.column_stack([track["x_px"], track["y_px"]])
    assert np.sqrt(np.mean(away**2)) < 0.15
    assert all((folder / name).is_file() for name in track["wcs_file"])


@pytest.mark.parametrize("name", ["transit", "occultation", "retrograde"])
def test_a_check_leaves_track_report_and_figures(checked, capsys, name):
    folder, told, _ = checked(name, capsys)
    table = Table.read(folder / "track.ecsv", format="ascii.ecsv")
    assert table.colnames == list(COLUMNS)
    assert table.meta["clock_offset_s"] == told["clock_offset_s"]
    assert set(table["verdict"]) <= {"on-track", "off-track", "unmeasured"}
    page = (folder / "report.html").read_text(encoding="utf-8")
    assert told["verdict"].split(",")[0] in page
    assert "default-src 'none'" in page  # the browser itself forbids any fetch
    assert not re.search(r"<(script|link|img)[^>]+(src|href)=.?https?:", page)
    for figure in ("residuals", "path"):
        for kind in ("png", "svg", "pdf"):
            assert (folder / "figures" / f"{figure}.{kind}").stat().st_size > 1000


def test_the_offset_is_applied_to_a_copy_only(checked, capsys):
    folder, told, _ = checked("transit", capsys)
    before, after = read_track(folder / "track.ecsv"), read_track(folder / "track_clock.ecsv")
    good = before.measured
    assert np.median(before["along_arcsec"][good]) < -0.5
    assert abs(np.median(after["along_arcsec"][good])) < 0.1
    assert after.meta["clock_offset_s"] == 0
    assert after.meta["clock_applied_s"] == told["clock_offset_s"]


def test_contacts_are_timed_by_the_frames_own_clock(checked, capsys):
    _, told, _ = checked("transit", capsys)
    contacts = {contact["name"]: contact for contact in told["contacts"]}
    assert set(contacts) == {"contact_1", "contact_2", "contact_3", "contact_4"}
    for contact in contacts.values():
        assert abs(contact["difference_s"] - CLOCK_S) < 3 * contact["sigma_s"]
        assert contact["sigma_s"] < 15


def test_what_cannot_be_used_is_set_aside_with_its_reason(rehearsed, tmp_path, capsys):
    plan, frames = rehearsed("transit")
    folder = tmp_path / "mixed"
    shutil.copytree(frames, folder)
    good = sorted(folder.glob("*.fits"))
    for spare in good[::3]:
        spare.unlink()
    good = sorted(folder.glob("*.fits"))
    (folder / "broken.fits").write_bytes(good[3].read_bytes()[:20000])
    (folder / "notes.txt").write_text("seeing 2 arcsec, some haze\n")
    with fits.open(good[4]) as hdus:
        header, data = hdus[0].header.copy(), hdus[0].data
    fits.writeto(folder / "black.fits", np.zeros_like(data), header)
    fits.writeto(folder / "small.fits", data[:300, :300], header)
    for key in [key for key in header if key.startswith(("DATE", "MJD"))]:
        del header[key]
    fits.writeto(folder / "timeless.fits", data, header)
    shutil.copy(good[2], folder / "zz_copy.fits")
    capsys.readouterr()
    code = run_with(["check", str(plan), str(folder), "-o", str(tmp_path / "out"), "--json", "--no-pictures"])
    told = json.loads(capsys.readouterr().out)
    assert code == 1
    reasons = {aside["file"]: aside["reason"] for aside in told["set_aside"]}
    assert set(reasons) == {
        "broken.fits",
        "notes.txt",
        "black.fits",
        "small.fits",
        "timeless.fits",
        "zz_copy.fits",
    }
    assert "cut short" in reasons["broken.fits"]
    assert "none of the formats" in reasons["notes.txt"]
    assert "black" in reasons["black.fits"]
    assert "another camera" in reasons["small.fits"]
    assert "tells when it was taken" in reasons["timeless.fits"]
    assert "same pixels" in reasons["zz_copy.fits"]
    assert told["measured"] >= 4
    assert abs(told["clock_offset_s"] - CLOCK_S) < 3 * told["clock_offset_sigma_s"]


def test_nothing_of_the_users_is_overwritten(rehearsed, tmp_path, capsys):
    plan, frames = rehearsed("transit")
    (tmp_path / "track.ecsv").write_text("mine")
    assert run_with(["check", str(plan), str(frames), "-o", str(tmp_path)]) == 2
    assert "is kept" in capsys.readouterr().err
    assert (tmp_path / "track.ecsv").read_text() == "mine"


def test_an_empty_folder_is_the_users_mistake(rehearsed, tmp_path, capsys):
    plan, _ = rehearsed("transit")
    (tmp_path / "frames").mkdir()
    assert run_with(["check", str(plan), str(tmp_path / "frames"), "-o", str(tmp_path / "out")]) == 2
    assert "holds no files" in capsys.readouterr().err


def test_frames_of_another_event_are_not_forced_onto_the_plan(rehearsed, tmp_path, capsys):
    """Frames of a retrograde track, checked with the plan of a transit."""
    plan, _ = rehearsed("transit")
    _, frames = rehearsed("retrograde")
    code = run_with(["check", str(plan), str(frames), "-o", str(tmp_path / "out"), "--json", "--no-pictures"])
    told = json.loads(capsys.readouterr().out)
    assert code == 1
    assert told["measured"] == 0
    assert told["clock_offset_s"] is None
    assert "another-date" in [finding["name"] for finding in told["findings"]]
