"""`syzygraph rehearse` as a user types it."""

from __future__ import annotations

import pytest

from planner.cli.main import run_with
from tests.conftest import ROOT

PLAN = str(ROOT / "sample_frames" / "transit.plan.yaml")


def test_frames_and_truth_are_written_and_kept(tmp_path, capsys):
    folder = tmp_path / "frames"
    arguments = ["rehearse", PLAN, "-o", str(folder), "--frames", "2", "--binning", "16", "--jobs", "1"]
    assert run_with(arguments) == 0
    assert len(list(folder.glob("*.fits"))) == 2
    assert (tmp_path / "frames.truth.ecsv").is_file()
    assert "what was injected" in capsys.readouterr().out
    assert run_with(arguments) == 2
    assert "exists already" in capsys.readouterr().err
    assert run_with([*arguments, "--force"]) == 0


def test_two_workers_draw_the_same_frames_as_one(tmp_path):
    from astropy.io import fits

    common = ["rehearse", PLAN, "--frames", "3", "--binning", "16", "--quiet"]
    assert run_with([*common, "-o", str(tmp_path / "one"), "--jobs", "1"]) == 0
    assert run_with([*common, "-o", str(tmp_path / "two"), "--jobs", "2"]) == 0
    for path in sorted((tmp_path / "one").glob("*.fits")):
        assert (fits.getdata(path) == fits.getdata(tmp_path / "two" / path.name)).all()


@pytest.mark.parametrize(
    ("option", "said"),
    [
        (["--crop", "wide"], "--crop: found 'wide'"),
        (["--passage", "lunch"], "--passage: found 'lunch'"),
        (["--from-site", "here"], "--from-site: found 'here'"),
        (["--limb-motion", "much"], "--limb-motion: found 'much'"),
    ],
)
def test_mistakes_are_one_line(tmp_path, capsys, option, said):
    assert run_with(["rehearse", PLAN, "-o", str(tmp_path / "x"), *option]) == 2
    error = capsys.readouterr().err
    assert said in error
    assert "Traceback" not in error
