"""`check` on rehearsed frames: what was injected comes back, what is broken is set aside, what is found is told."""

from __future__ import annotations

import json
import re
import shutil

import numpy as np
import pytest
from astropy import units as u
from astropy.io import fits
from astropy.table import Table
from astropy.time import Time

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


def told_of(plan, folder, out, capsys):
    """What `check` tells of a folder, and its exit code."""
    capsys.readouterr()
    code = run_with(["check", str(plan), str(folder), "-o", str(out), "--json", "--no-pictures"])
    return json.loads(capsys.readouterr().out), code


def test_frames_out_of_order_are_sorted_by_time_and_it_is_said(rehearsed, checked, tmp_path, capsys):
    plan, frames = rehearsed("transit")
    files = sorted(frames.glob("*.fits"))
    for number, path in enumerate(reversed(files)):
        shutil.copy(path, tmp_path / f"shuffled_{number:02d}.fits")
    told, code = told_of(plan, tmp_path, tmp_path / "out", capsys)
    _, before, _ = checked("transit", capsys)
    assert code == 0
    assert [finding["name"] for finding in told["findings"]] == ["out-of-order", "clock-offset"]
    assert told["clock_offset_s"] == pytest.approx(
        before["clock_offset_s"], abs=0.5 * before["clock_offset_sigma_s"]
    )
    times = read_track(tmp_path / "out" / "track.ecsv")["utc_mid"].tolist()
    assert times == sorted(times)


def test_frames_of_two_cameras_are_not_mixed(rehearsed, tmp_path, capsys):
    """The same size and sky, but another name in the header: a second rig needs a plan of its own."""
    plan, frames = rehearsed("transit")
    shutil.copytree(frames, tmp_path / "frames")
    others = sorted((tmp_path / "frames").glob("*.fits"))[::4]
    for path in others:
        fits.setval(path, "INSTRUME", value="Second camera (invented)")
    told, code = told_of(plan, tmp_path / "frames", tmp_path / "out", capsys)
    assert code == 1
    assert {aside["file"] for aside in told["set_aside"]} == {path.name for path in others}
    assert all("another camera" in aside["reason"] for aside in told["set_aside"])
    assert abs(told["clock_offset_s"] - CLOCK_S) < 4 * told["clock_offset_sigma_s"]


def test_a_plan_for_another_date_is_named_with_the_days(rehearsed, tmp_path, capsys):
    """A camera whose calendar is 40 days late: the frames fit the plan but for that."""
    plan, frames = rehearsed("transit")
    shutil.copytree(frames, tmp_path / "frames")
    for path in sorted((tmp_path / "frames").glob("*.fits")):
        with fits.open(path, mode="update") as hdus:
            header = hdus[0].header
            for key in ("DATE-OBS", "DATE-BEG", "DATE-AVG", "DATE-END"):
                if key in header:
                    header[key] = (Time(header[key]) + 40 * u.day).isot
            for key in [key for key in header if key.startswith("MJD")]:
                header[key] += 40.0
    told, _ = told_of(plan, tmp_path / "frames", tmp_path / "out", capsys)
    findings = {finding["name"]: finding for finding in told["findings"]}
    assert list(findings)[:2] == ["another-date", "date"]
    # from the last planned frame to the first one taken: 40 days less the hours of the transit
    assert re.search(
        r"stamped 39\.[789] days after the last planned frame", findings["another-date"]["sentence"]
    )
    assert "40 days later than it was" in findings["date"]["sentence"]


def pictures_that_are_none_of_the_sun(shape, radius, sky=2000.0, light=30000.0):
    rng = np.random.default_rng(1)
    rows, columns = shape
    y, x = np.mgrid[:rows, :columns]
    r = np.hypot(x - columns / 2, y - rows / 2)
    waves = sum(
        np.sin(2 * np.pi * (x * np.cos(a) / p + y * np.sin(a) / p) + a)
        for a, p in ((0.3, 300), (1.9, 170), (4.0, 520))
    )
    yield "clouds", sky + 1500 * waves
    yield "landscape", np.where(y > rows * 0.45 + 30 * np.sin(x / 40), 400.0, light) + 300 * waves
    yield "ring", sky + (light - sky) * ((r < radius) & (r > 0.55 * radius))
    yield "wider", np.where(np.hypot(x - columns / 2, y + 9 * rows) < 9.6 * rows, light, sky)
    apart = 0.55 * radius
    two = (np.hypot(x - columns / 2 - apart, y - rows / 2) < 0.5 * radius) | (
        np.hypot(x - columns / 2 + apart, y - rows / 2) < 0.5 * radius
    )
    yield "two", np.where(two, light, sky)
    yield "nothing", np.full(shape, sky) + rng.normal(0, 20, shape)


@pytest.mark.slow
def test_what_is_no_disc_gets_no_number_and_harms_no_other_frame(rehearsed, tmp_path, capsys):
    plan, frames = rehearsed("transit")
    shutil.copytree(frames, tmp_path / "frames")
    good = sorted((tmp_path / "frames").glob("*.fits"))
    with fits.open(good[5]) as hdus:
        header, shape = hdus[0].header.copy(), hdus[0].data.shape
    noise = np.random.default_rng(2)
    names = []
    for name, picture in pictures_that_are_none_of_the_sun(shape, radius=0.46 * min(shape)):
        data = np.clip(picture + noise.normal(0, 30, shape), 0, 65535).astype(np.uint16)
        fits.writeto(tmp_path / "frames" / f"zz_{name}.fits", data, header)
        names.append(f"zz_{name}.fits")
    told, code = told_of(plan, tmp_path / "frames", tmp_path / "out", capsys)
    assert code == 1
    track = read_track(tmp_path / "out" / "track.ecsv")
    aside = {one["file"] for one in told["set_aside"]}
    for name in names:
        rows = np.flatnonzero(track["file"] == name)
        assert name in aside or (track["verdict"][rows] == "unmeasured").all(), name
        assert name in aside or all(track["reason"][rows]), name
    assert abs(told["clock_offset_s"] - CLOCK_S) < 3 * told["clock_offset_sigma_s"]
    assert told["on_track"] == told["measured"] >= 4


def test_the_track_says_how_well_the_reference_disc_is_known(checked, capsys, tmp_path):
    folder, _, _ = checked("transit", capsys)
    track = read_track(folder / "track.ecsv")
    sigma = track["reference_sigma_px"][track.measured]
    assert ((sigma > 1e-4) & (sigma < 0.1)).all()
    table = Table.read(folder / "track.ecsv", format="ascii.ecsv")
    table.remove_column("reference_sigma_px")  # as tracks were before
    table.write(tmp_path / "old.ecsv", format="ascii.ecsv")
    assert np.isnan(read_track(tmp_path / "old.ecsv")["reference_sigma_px"]).all()


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
