"""Films run at the pace they state, show their gaps, and open in other readers."""

from __future__ import annotations

import json

import numpy as np
import pytest

from imaging.compose.timelapse import schedule
from planner.cli.main import run_with


def test_at_a_pace_every_picture_stands_for_its_instant():
    tt_s = np.arange(0, 100, 10.0)
    plan = schedule(tt_s, pace=25.0, fps=25)
    assert len(plan) == 91
    assert [item.index for item in plan] == [int(k // 10) for k in range(91)]
    assert all(item.gap_tt_s is None for item in plan)


def test_a_gap_is_shown_for_as_long_as_it_lasted():
    tt_s = np.array([0.0, 10, 20, 30, 130, 140, 150])
    plan = schedule(tt_s, pace=25.0, fps=25)
    gap = [item for item in plan if item.gap_tt_s is not None]
    assert {item.index for item in gap} == {3}
    assert len(gap) == 130 - 30 - 15 - 1  # less the time for which the last exposure still stands
    assert gap[0].gap_tt_s == pytest.approx(46.0)


def test_without_a_pace_every_exposure_is_shown_once_and_a_gap_half_a_second():
    tt_s = np.array([0.0, 10, 20, 30, 130, 140, 150])
    plan = schedule(tt_s, pace=None, fps=24)
    assert [item.index for item in plan if item.gap_tt_s is None] == list(range(7))
    assert sum(item.gap_tt_s is not None for item in plan) == 12


def test_between_many_visits_gaps_are_written_instead():
    tt_s = np.concatenate([visit * 86400.0 + np.arange(4) * 5 for visit in range(10)])
    plan = schedule(tt_s, pace=None, fps=25)
    assert len(plan) == 40
    assert [round(item.after_gap_s / 86400) for item in plan if item.after_gap_s] == [1] * 9


def test_a_film_is_h264_in_yuv420p_of_the_stated_length(transit, tmp_path, capsys):
    film = tmp_path / "transit.mp4"
    code = run_with(
        ["timelapse", *transit.arguments, "-o", str(film), "--pace", "1500", "--size", "480x320", "--json"]
    )
    assert code == 0
    said = json.loads(capsys.readouterr().out)
    import av

    with av.open(str(film)) as container:
        stream = container.streams.video[0]
        assert stream.codec_context.name == "h264"
        assert stream.codec_context.pix_fmt == "yuv420p"
        pictures = [frame.to_ndarray(format="gray") for frame in container.decode(video=0)]
    assert len(pictures) == said["pictures"]
    assert said["seconds"] == pytest.approx(len(pictures) / 25)
    assert pictures[0].shape[0] <= 320
    # the Sun stays where it is, and white stays white
    middle = pictures[0].shape[0] // 2, pictures[0].shape[1] // 2
    centers = []
    for picture in pictures[:: len(pictures) // 6]:
        lit = picture[: -picture.shape[0] // 10] > 128
        if picture[middle] > 200:
            centers.append(np.array(np.nonzero(lit)).mean(axis=1))
    assert len(centers) >= 3
    assert np.ptp(np.array(centers), axis=0).max() < 1.0
    assert max(picture.max() for picture in pictures) > 240


@pytest.mark.parametrize("name", ["moon.gif", "moon.png"])
def test_short_films_may_be_animated_pictures(occultation, tmp_path, name):
    film = tmp_path / name
    assert run_with(
        ["timelapse", *occultation.arguments, "-o", str(film), "--fps", "10", "--size", "240x240", "--up", "zenith",
         "--quiet"]
    ) == 0  # fmt: skip
    from PIL import Image

    with Image.open(film) as image:
        assert image.is_animated
        assert image.n_frames >= 10  # equal pictures may be joined by the format
        assert image.info["duration"] >= 100


def test_the_horizon_can_be_kept_still(occultation, tmp_path):
    """The Moon sinks: by 17 degrees in 88 minutes at this site, so that the picture is tall and the Moon moves down."""
    film = tmp_path / "moon.mp4"
    assert run_with(
        ["timelapse", *occultation.arguments, "-o", str(film), "--steady-on", "horizon", "--size", "300x300", "--quiet",
         "--no-stamp"]
    ) == 0  # fmt: skip
    import av

    with av.open(str(film)) as container:
        pictures = [frame.to_ndarray(format="gray").astype(int) for frame in container.decode(video=0)]
    rows = [np.nonzero(p > 150)[0].mean() for p in (pictures[0], pictures[-1])]
    columns = [np.nonzero(p > 150)[1].mean() for p in (pictures[0], pictures[-1])]
    assert rows[1] - rows[0] > 100
    assert columns[1] - columns[0] > 50  # toward the west, to the right when one looks south-west


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["-o", "film.avi"], "ends in .mp4"),
        (["-o", "film.mp4", "--size", "large"], "WxH"),
        (["-o", "film.mp4", "--pace", "0.01"], "choose a larger pace"),
        (["-o", "film.gif", "--pace", "30"], "too many for an animated picture"),
        (["-o", "film.mp4", "--steady-on", "moon"], "no frame is registered on it"),
    ],
)
def test_impossible_films_are_refused_in_one_line(transit, tmp_path, capsys, monkeypatch, options, words):
    monkeypatch.chdir(tmp_path)
    assert run_with(["timelapse", *transit.arguments, *options]) == 2
    said = capsys.readouterr().err
    assert words in said
    assert said.strip().count("\n") == 0
    assert list(tmp_path.iterdir()) == []
