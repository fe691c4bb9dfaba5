"""Stars that the Moon or a minor planet covers: rehearsed from the example briefs, timed by their light in `check`."""

from __future__ import annotations

import json
from html import unescape

import pytest

from planner.cli.main import run_with
from tests.conftest import ROOT

ASTEROID, MOON = "asteroid_occults_star_2028", "moon_occults_star_2027"
DENSE = "disappearance and reappearance"


def checked(tmp_path, capsys, brief, passage, options):
    """Plan, rehearse one passage and check it; returns (exit code, JSON, page, true instants by name)."""
    plan, frames = tmp_path / "p.plan.yaml", tmp_path / "frames"
    assert run_with(["plan", str(ROOT / "configs" / f"{brief}.yaml"), "-o", str(plan)]) == 0
    drawn = ["rehearse", str(plan), "-o", str(frames), "--passage", passage, "--jobs", "1", "--quiet"]
    assert run_with([*drawn, *options.split()]) == 0
    capsys.readouterr()
    code = run_with(["check", str(plan), str(frames), "-o", str(tmp_path / "out"), "--json", "--no-pictures"])
    told = json.loads(capsys.readouterr().out)
    page = unescape((tmp_path / "out" / "report.html").read_text(encoding="utf-8")).replace("\u00a0", " ")
    return code, told, page


def test_star_behind_a_minor_planet_is_timed_though_frames_are_too_short_to_be_solved(tmp_path, capsys):
    """Exposures of 10 ms every 0.42 s: an instant between two of them is known to 0.41 / sqrt(12) = 0.12 s."""
    code, told, page = checked(
        tmp_path, capsys, ASTEROID, DENSE, "--crop 320x280 --clock-offset 1.5 --pointing-error 20"
    )
    assert code == 0
    assert [contact["name"] for contact in told["contacts"]] == ["disappearance", "reappearance"]
    for contact in told["contacts"]:
        assert abs(contact["difference_s"] - 1.5) < 0.25
        assert contact["sigma_s"] == pytest.approx(0.12, abs=0.02)
        assert contact["note"] == "between two exposures"
        assert contact["false_alarm_log10"] < -20
    assert "went out at" in told["verdict"]
    assert told["verdict"] in page
    assert "The star's light" in page
    assert (tmp_path / "out" / "figures" / "light_curve.png").stat().st_size > 10_000
    assert len(told["light_curve"]["flux"]) == 122


@pytest.mark.slow
def test_star_that_is_not_covered_from_where_the_rig_stands_shows_no_event(tmp_path, capsys):
    _, told, page = checked(
        tmp_path, capsys, ASTEROID, DENSE, "--crop 320x280 --from-site 30,32.87,0 --pointing-error 5"
    )
    assert told["contacts"] == []
    assert [finding["name"] for finding in told["findings"]] == ["no-event"]
    assert "neither went out nor came back" in told["verdict"]
    assert "no-event" in page


@pytest.mark.slow
@pytest.mark.parametrize(("passage", "binning"), [("disappearance", 4), ("reappearance", 2)])
def test_star_behind_the_moon_is_timed_at_the_dark_limb_and_at_the_bright_one(
    tmp_path, capsys, passage, binning
):
    """Frames of 29 ms every 0.43 s; the Moon's own glow is taken off by its distance from the limb."""
    _, told, _ = checked(tmp_path, capsys, MOON, passage, f"--binning {binning} --clock-offset -2")
    contact = next(contact for contact in told["contacts"] if contact["name"] == passage)
    assert abs(contact["difference_s"] + 2) < 0.3
    assert contact["sigma_s"] < 0.2
