"""Before the event: how well plans would tell a distance or an orbit, through the commands a user types."""

from __future__ import annotations

import json
import shutil

import pytest

from planner.cli.main import run_with
from tests.conftest import ROOT

SITES = {
    "north": "{name: Northern camp (invented), latitude_deg: 38.3, longitude_deg: 140.9, height_m: 60}",
    "south": "{name: Southern camp (invented), latitude_deg: -33.5, longitude_deg: 150.2, height_m: 60}",
    "near": "{name: A camp nearby (invented), latitude_deg: 33.3, longitude_deg: 140.9, height_m: 60}",
}


@pytest.fixture(scope="module")
def venus_plans(tmp_path_factory):
    home = tmp_path_factory.mktemp("venus")
    shutil.copy(ROOT / "configs/rigs/refractor_1000mm.yaml", home / "rig.yaml")
    for name, site in SITES.items():
        (home / f"{name}.yaml").write_text(
            f"title: Venus crosses the Sun, 2012\nsite: {site}\nrig: rig.yaml\n"
            "event: {family: solar-transit, body: venus, date: 2012-06-06}\n",
            encoding="utf-8",
        )
        assert run_with(["plan", str(home / f"{name}.yaml"), "-o", str(home / f"{name}.plan.yaml")]) == 0
    return {name: str(home / f"{name}.plan.yaml") for name in SITES}


def told_by(command, capsys):
    capsys.readouterr()
    assert run_with([*command, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


def test_two_plans_forecast_a_parallax_and_a_longer_baseline_a_better_one(venus_plans, capsys):
    far = told_by(["parallax", venus_plans["north"], venus_plans["south"]], capsys)
    near = told_by(["parallax", venus_plans["north"], venus_plans["near"]], capsys)
    assert far["forecast"] is True
    assert far["baseline_km"] > 5 * near["baseline_km"]
    assert far["solar_parallax_arcsec"] == pytest.approx(8.794143, abs=1e-6)  # the value is the ephemeris'
    ratio = near["solar_parallax_sigma_arcsec"] / far["solar_parallax_sigma_arcsec"]
    assert ratio > 0.5 * far["baseline_km"] / near["baseline_km"]
    assert 0.001 < far["solar_parallax_sigma_arcsec"] < 0.5


def test_a_plan_forecasts_an_orbit(tmp_path, capsys):
    plan = tmp_path / "mars.plan.yaml"
    assert run_with(["plan", str(ROOT / "configs/mars_retrograde_2027.yaml"), "-o", str(plan)]) == 0
    found = told_by(["orbit", str(plan)], capsys)
    assert found["forecast"] is True
    assert found["residual_rms_arcsec"] is None
    assert found["semi_major_axis_au"]["value"] == pytest.approx(1.5237, abs=1e-3)
    assert 0 < found["semi_major_axis_au"]["sigma"] < 1e-3


def test_a_plan_of_a_disc_forecasts_no_orbit(venus_plans, capsys):
    assert run_with(["orbit", venus_plans["north"]]) == 2
    assert "needs places among the stars" in capsys.readouterr().err
