"""Distances and orbits out of rendered frames, through the commands a user types."""

from __future__ import annotations

import json
import shutil

import pytest

from planner.cli.main import run_with
from tests.conftest import ROOT

pytestmark = pytest.mark.slow

# IMCCE/ESO VT-2004 EIS-B1: solar horizontal parallax, IAU 1976
PUBLISHED_SOLAR_PARALLAX_ARCSEC = 8.794148
SITES = {
    "north": "{name: Northern camp (invented), latitude_deg: 38.3, longitude_deg: 140.9, height_m: 60}",
    "south": "{name: Southern camp (invented), latitude_deg: -33.5, longitude_deg: 150.2, height_m: 60}",
}


def told_by(command, capsys):
    capsys.readouterr()
    assert run_with([*command, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


def test_solar_parallax_from_rehearsed_frames_of_the_transit_of_2012_at_two_sites(tmp_path, capsys):
    shutil.copy(ROOT / "configs/rigs/refractor_1000mm.yaml", tmp_path / "rig.yaml")
    plans, tracks = [], []
    for name, site in SITES.items():
        brief, plan, frames = tmp_path / f"{name}.yaml", tmp_path / f"{name}.plan.yaml", tmp_path / name
        brief.write_text(
            f"title: Venus crosses the Sun, 2012\nsite: {site}\nrig: rig.yaml\n"
            "event: {family: solar-transit, body: venus, date: 2012-06-06}\n"
        )
        assert run_with(["plan", str(brief), "-o", str(plan)]) == 0
        faults = ["--seed", str(len(plans) + 1), "--limb-motion", "0.3"]
        assert (
            run_with(["rehearse", str(plan), "-o", str(frames), "--frames", "12", "--binning", "8", *faults])
            == 0
        )
        out = tmp_path / f"{name}_checked"
        assert run_with(["check", str(plan), str(frames), "-o", str(out), "--no-pictures"]) == 0
        plans.append(str(plan))
        tracks.append(str(out / "track.ecsv"))
    forecast = told_by(["parallax", *plans], capsys)
    assert forecast["forecast"] is True
    found = told_by(["parallax", plans[0], tracks[0], plans[1], tracks[1]], capsys)
    error = found["solar_parallax_arcsec"] - PUBLISHED_SOLAR_PARALLAX_ARCSEC
    assert abs(error) < 3 * found["solar_parallax_sigma_arcsec"] < 0.6
    assert found["baseline_km"] > 5000


def test_the_orbit_of_mars_from_rehearsed_frames(tmp_path, capsys):
    """Published mean elements (Standish, JPL; from memory) differ from one epoch's by some 1e-4."""
    plan, frames, out = tmp_path / "mars.plan.yaml", tmp_path / "mars", tmp_path / "checked"
    assert run_with(["plan", str(ROOT / "configs/mars_retrograde_2027.yaml"), "-o", str(plan)]) == 0
    assert run_with(["rehearse", str(plan), "-o", str(frames), "--frames", "6", "--binning", "3"]) == 0
    assert run_with(["check", str(plan), str(frames), "-o", str(out), "--no-pictures"]) == 0
    found = told_by(["orbit", str(plan), str(out / "track.ecsv")], capsys)
    assert found["semi_major_axis_au"]["value"] == pytest.approx(1.52371034, abs=3e-4)
    assert found["eccentricity"]["value"] == pytest.approx(0.09339410, abs=3e-4)
    assert found["inclination_deg"]["value"] == pytest.approx(1.84969142, abs=0.01)
    forecast = told_by(["orbit", str(plan)], capsys)
    assert forecast["forecast"] is True
    assert 0 < forecast["eccentricity"]["sigma"] < 1e-4
