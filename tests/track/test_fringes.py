"""A star at the Moon's edge in frames of milliseconds: instant and diameter by its fringes, from the front door.

Light curves are drawn with the published law of a straight edge (Born & Wolf, section 8.7), integrated over exposures.
"""

from __future__ import annotations

import json
from functools import lru_cache

import numpy as np
import pytest
from astropy.io import fits

from imaging.discs.diffraction import straight_edge
from imaging.discs.lightcurve import LightCurve, find_events
from imaging.track.fringes import Edge, fit_fringes
from imaging.track.nominal import Promise
from imaging.track.startimes import _by_fringes, edge_of_moon
from planner.cli.main import run_with
from planner.errors import NoSolutionError
from planner.sequence.builder import build_plan
from planner.sequence.documents import load_brief
from tests.conftest import ROOT

MOON = Edge(600.0, 3.8e5, 550.0, 90.0)
FRAME_S = 0.002


@lru_cache
def light(edge, frames, instant_s, frame_s, star_mas):
    """The light of a disappearance in each of many frames without dead time, 1 for the whole star."""
    fine = (np.arange(20) + 0.5) / 20 * frame_s
    away = (instant_s - (np.arange(frames)[:, None] * frame_s + fine)) * edge.speed_m_s
    flat = straight_edge(
        away.ravel(), edge.distance_km * 1e3, edge.wavelength_nm, edge.bandwidth_nm, star_mas
    )
    return flat.reshape(away.shape).mean(axis=1)


def curve(star_mas=0.0, snr=20.0, seed=0, frame_s=FRAME_S, frames=400, instant_s=0.4013, edge=MOON):
    flux = 100 * light(edge, frames, instant_s, frame_s, star_mas) + 5
    noise = np.random.default_rng(seed).normal(0, 100 / snr, frames)
    return LightCurve(np.arange(frames) * frame_s, np.full(frames, frame_s), flux + noise)


def fitted(made, edge=MOON, star_mas=None):
    return fit_fringes(made, find_events(made)[0], edge, star_mas)


@pytest.mark.parametrize("runs", [2, pytest.param(40, marks=pytest.mark.slow)])
def test_a_star_of_eight_milliarcseconds_is_measured_and_timed(runs):
    errors, pulls = [], []
    for seed in range(runs):
        found = fitted(curve(8.0, seed=seed))
        errors.append(found.event.time_s - 0.4013)
        pulls += [errors[-1] / found.event.sigma_s, (found.diameter_mas - 8.0) / found.diameter_sigma_mas]
        assert found.diameter_sigma_mas < 1.0
    assert np.abs(pulls).max() < 3.5
    assert runs < 10 or np.sqrt(np.mean(np.square(pulls))) == pytest.approx(
        1.0, abs=0.25
    )  # 80 know it to 8 %
    assert np.max(np.abs(errors)) < 1e-3


def test_a_point_is_given_a_limit():
    found = fitted(curve(0.0))
    assert found.diameter_limit_mas < 3.0
    assert found.event.time_s == pytest.approx(0.4013, abs=4 * found.event.sigma_s)
    assert "star under" in found.told


def test_frames_too_long_for_fringes_are_left_to_the_step():
    made = curve(frame_s=0.04, frames=100, instant_s=2.013)
    with pytest.raises(NoSolutionError, match="shorter and closer than 17 ms"):
        fitted(made)


def test_an_edge_without_fringes_is_left_to_the_step():
    """A reappearance in fog, say: nothing but a step is there."""
    start = np.arange(400) * FRAME_S
    flux = 5 + 100 * np.clip((0.4013 - start) / FRAME_S, 0, 1)
    made = LightCurve(start, np.full(400, FRAME_S), flux + np.random.default_rng(1).normal(0, 5, 400))
    with pytest.raises(NoSolutionError, match="as well as"):
        fitted(made)


def test_lightcurve_fits_instant_and_diameter_in_a_fast_cube(tmp_path, capsys):
    frames, (y, x) = 400, np.mgrid[:61, :61]
    star = np.exp(-((x - 30.2) ** 2 + (y - 29.7) ** 2) / 2 / 1.5**2)
    generator = np.random.default_rng(2)
    bright = light(MOON, frames, 0.4013, FRAME_S, 8.0)
    cube = generator.poisson(4000 * bright[:, None, None] * star / star.sum() + 20).astype(np.float32)
    header = fits.Header(
        {"DATE-OBS": "2027-08-13T18:52:00", "EXPTIME": FRAME_S, "CTYPE3": "TIME", "CUNIT3": "s", "CDELT3": FRAME_S,
         "CRPIX3": 1.0, "CRVAL3": FRAME_S / 2}
    )  # fmt: skip
    fits.PrimaryHDU(cube, header).writeto(tmp_path / "cube.fits")
    command = [
        "lightcurve",
        str(tmp_path / "cube.fits"),
        "--star",
        "30,30",
        "--diffraction",
        "600,380000,550,90",
    ]
    assert run_with([*command, "--json"]) == 0
    event = json.loads(capsys.readouterr().out)["events"][0]
    assert event["star_diameter_mas"] == pytest.approx(8.0, abs=3 * event["star_diameter_sigma_mas"])
    assert event["star_diameter_sigma_mas"] < 1.5
    assert event["utc"].startswith("2027-08-13T18:52:00.40")


def test_check_times_a_star_by_the_fringes_of_the_moons_edge_where_frames_show_them():
    """The speed across the limb, the distance and the band are those of the plan."""
    promise = Promise(build_plan(load_brief(ROOT / "configs" / "moon_occults_star_2027.yaml")))
    predicted = promise.planned.middle_tt_s[len(promise.planned) // 3]
    edge = edge_of_moon(promise, float(predicted))
    assert 100 < edge.speed_m_s < 1100
    assert edge.distance_km == pytest.approx(384400, rel=0.08)
    made = curve(8.0, edge=edge)
    step = find_events(made)[0]
    event, told = _by_fringes(made, step, float(predicted) - 0.4013, promise)
    assert "by its fringes; star" in told
    assert abs(event.time_s - 0.4013) < 4 * event.sigma_s
    assert event.sigma_s < step.sigma_s + 1e-3
    slow = curve(frame_s=0.04, frames=100, instant_s=2.013, edge=edge)
    assert _by_fringes(slow, find_events(slow)[0], float(predicted), promise)[1] == ""
