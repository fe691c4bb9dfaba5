"""What is missing, moved, unreadable or of another size is set aside with a reason; the picture is made of the rest."""

from __future__ import annotations

import json
import shutil
from dataclasses import replace

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from planner.cli.main import run_with


@pytest.fixture
def copy(transit, tmp_path):
    """A copy of the rehearsed transit that a test may spoil."""
    frames, checked = tmp_path / "frames", tmp_path / "checked"
    shutil.copytree(transit.frames, frames)
    shutil.copytree(transit.track.parent, checked)
    return replace(transit, frames=frames, track=checked / "track.ecsv")


def composed(rehearsal, out, *options):
    code = run_with(
        ["compose", *rehearsal.arguments, "-o", str(out), "--formats", "png", "--plots", "none", "--instants", "3",
         "--quiet", *options]
    )  # fmt: skip
    statement = out / "composite.truth.json"
    return code, json.loads(statement.read_text()) if statement.exists() else None


def names(copy):
    return sorted(path.name for path in copy.frames.iterdir())


def test_a_missing_an_empty_and_a_damaged_frame_are_set_aside(copy, tmp_path):
    missing, empty, damaged = names(copy)[5:8]
    (copy.frames / missing).unlink()
    (copy.frames / empty).write_bytes(b"")
    whole = (copy.frames / damaged).read_bytes()
    (copy.frames / damaged).write_bytes(whole[: len(whole) // 3])
    code, statement = composed(copy, tmp_path / "out")
    assert code == 1
    reasons = {item["file"]: item["reason"] for item in statement["set_aside"]}
    assert set(reasons) == {missing, empty, damaged}
    assert "is not in" in reasons[missing]
    assert "empty" in reasons[empty]


def test_frames_moved_into_another_folder_are_found_by_name(copy, tmp_path):
    night = copy.frames / "night 1"
    night.mkdir()
    for name in names(copy):
        if name.endswith(".fits"):
            (copy.frames / name).rename(night / name)
    code, statement = composed(copy, tmp_path / "out")
    assert code == 0
    assert statement["set_aside"] == []


def test_frames_of_another_binning_combine(copy, tmp_path):
    """A frame summed 2 x 2 has twice the scale; the track says so, and the picture does not change its place."""
    table = Table.read(copy.track)
    name = str(table["file"][7])
    with fits.open(copy.frames / name, mode="update") as hdus:
        data = hdus[0].data[: hdus[0].data.shape[0] // 2 * 2, : hdus[0].data.shape[1] // 2 * 2]
        rows, columns = data.shape
        hdus[0].data = data.reshape(rows // 2, 2, columns // 2, 2).mean(axis=(1, 3)).astype(np.float32)
    row = table["file"] == name
    table["scale_arcsec_px"][row] *= 2
    for column in ("x_px", "y_px", "reference_x_px", "reference_y_px"):
        table[column][row] = (table[column][row] - 0.5) / 2
    table["reference_radius_px"][row] /= 2
    table.write(copy.track, overwrite=True)
    code, statement = composed(copy, tmp_path / "out")
    assert code == 0
    assert statement["largest_displacement_px"] < 0.05


def test_no_frame_left_is_one_line_and_exit_code_2(copy, tmp_path, capsys):
    for name in names(copy):
        (copy.frames / name).write_bytes(b"not a frame")
    code, statement = composed(copy, tmp_path / "out")
    assert code == 2
    assert statement is None
    said = capsys.readouterr().err.strip()
    assert said.count("\n") == 0
    assert "no frame registered on the Sun is left" in said


def test_a_track_that_is_off_everywhere_makes_no_picture_unless_asked(copy, tmp_path, capsys):
    table = Table.read(copy.track)
    table["verdict"] = ["off-track"] * len(table)
    table.write(copy.track, overwrite=True)
    code, _ = composed(copy, tmp_path / "out")
    assert code == 2
    assert "--keep-off-track" in capsys.readouterr().err
    assert composed(copy, tmp_path / "out", "--keep-off-track")[0] == 0


@pytest.mark.parametrize(
    "text", ["", "hello", "# %ECSV 1.0\n# ---\n# datatype:\n# - {name: a, datatype: int64}\na\n1\n"]
)
def test_a_file_that_is_no_track_is_said_to_be_none(copy, tmp_path, capsys, text):
    copy.track.write_text(text)
    code, _ = composed(copy, tmp_path / "out")
    assert code == 2
    assert "not a track" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--register", "moon"], "can be registered on sun or stars or target"),
        (["--scale", "0.05"], "choose a larger --scale"),
        (["--frames", "nowhere"], "no folder"),
    ],
)
def test_impossible_choices_name_what_is_possible(copy, tmp_path, capsys, options, words):
    code, _ = composed(copy, tmp_path / "out", *options)
    assert code == 2
    assert words in capsys.readouterr().err


def test_frames_through_different_filters_are_said_to_be_mixed(copy, tmp_path):
    for number, name in enumerate(names(copy)):
        with fits.open(copy.frames / name, mode="update") as hdus:
            hdus[0].header["FILTER"] = ("V", "R")[number % 2]
    code, statement = composed(copy, tmp_path / "out", "--filter", "all")
    assert code == 0
    assert any("different filters (R, V)" in note for note in statement["notes"])


def test_colour_asked_of_a_camera_without_is_grey_in_three_planes(copy, tmp_path):
    code, statement = composed(copy, tmp_path / "out", "--colour")
    assert code == 0
    assert len(statement["drawn"]) == 3


def test_a_disk_too_small_is_named_before_any_picture_is_made(copy, tmp_path, capsys, monkeypatch):
    import shutil as disk

    usage = disk.disk_usage(tmp_path)
    monkeypatch.setattr("shutil.disk_usage", lambda folder: usage._replace(free=1_000_000))
    code, statement = composed(copy, tmp_path / "out")
    said = capsys.readouterr().err.strip()
    assert (code, statement) == (2, None)
    assert "of disk, 0.001 GB are free" in said
    assert said.count("\n") == 0
    assert not (tmp_path / "out").exists()


def test_a_disk_too_small_for_a_film_is_named_before_it_is_begun(copy, tmp_path, capsys, monkeypatch):
    import shutil as disk

    usage = disk.disk_usage(tmp_path)
    monkeypatch.setattr("shutil.disk_usage", lambda folder: usage._replace(free=1_000))
    film = tmp_path / "film.mp4"
    assert run_with(["timelapse", *copy.arguments, "-o", str(film), "--quiet"]) == 2
    assert "the film needs" in capsys.readouterr().err
    assert not list(tmp_path.glob("film*"))


@pytest.mark.parametrize(
    "name",
    [
        "composite.fits",
        "composite.png",
        "path_light.svg",
        "path_dark.svg",
        "composite.truth.json",
        "composite.html",
    ],
)
def test_any_output_that_exists_is_kept_and_none_is_written_beside_it(copy, tmp_path, capsys, name):
    out = tmp_path / "out"
    out.mkdir()
    (out / name).write_text("mine")
    code = run_with(
        ["compose", *copy.arguments, "-o", str(out), "--plots", "svg", "--instants", "2", "--quiet"]
    )
    assert code == 2
    assert "--force" in capsys.readouterr().err
    assert {path.name: path.read_text() for path in out.iterdir()} == {name: "mine"}


def test_no_frame_of_stars_left_is_one_line(loop, tmp_path, capsys):
    frames = tmp_path / "frames"
    frames.mkdir()
    for path in loop.frames.iterdir():
        (frames / path.name).write_bytes(b"not a frame")
    code = run_with(
        [
            "compose",
            str(loop.plan),
            str(loop.track),
            "--frames",
            str(frames),
            "-o",
            str(tmp_path / "out"),
            "--quiet",
        ]
    )
    said = capsys.readouterr().err.strip()
    assert code == 2
    assert said.count("\n") == 0
    assert "no frame registered on stars is left" in said
    assert not (tmp_path / "out").exists()


def test_a_film_that_exists_is_kept(copy, tmp_path, capsys):
    film = tmp_path / "film.mp4"
    film.write_bytes(b"mine")
    assert run_with(["timelapse", *copy.arguments, "-o", str(film)]) == 2
    assert "--force" in capsys.readouterr().err
    assert film.read_bytes() == b"mine"


@pytest.mark.parametrize("shape", [(60, 80), (300, 330)])
def test_a_frame_of_another_size_is_laid_by_its_own_solution(copy, tmp_path, shape):
    """One frame cut or padded at its top and right: pixels keep their numbers, so does its solution."""
    name = names(copy)[8]
    with fits.open(copy.frames / name, mode="update") as hdus:
        data = hdus[0].data
        rows, columns = min(shape[0], data.shape[0]), min(shape[1], data.shape[1])
        other = np.full(shape, np.median(data), np.float32)
        other[:rows, :columns] = data[:rows, :columns]
        hdus[0].data = other
    code, statement = composed(copy, tmp_path / "out")
    assert code in (0, 1)
    assert statement["largest_displacement_px"] < 0.05
    assert all(name == item["file"] for item in statement["set_aside"])
