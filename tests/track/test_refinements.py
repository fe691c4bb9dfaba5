"""Finer findings on the events of the example briefs: clock, drift, start for middle, site, scale, roll."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from imaging.track.displaced import compass
from imaging.track.findings import diagnose
from imaging.track.path import PredictedPath
from imaging.track.refinements import clock_findings
from imaging.track.result import clock_words, with_sigma
from planner.sequence.documents import observer_of
from tests.track.synthetic import disc_sightings, star_sightings
from tests.track.test_recognition import scene


def told(event, frames):
    promise, question, *_ = scene(event)
    found = diagnose(frames, question)
    return found, clock_findings(found.reading, promise.plan, promise, question)


def times(event, count, rng):
    return np.sort(rng.choice(scene(event)[2], count, replace=False))


def test_a_slow_clock_is_told_with_its_size_and_sense():
    rng = np.random.default_rng(1)
    frames = disc_sightings(scene("transit")[0].path, times("transit", 30, rng), rng, -2.4, jitter_arcsec=0.1)
    found, clock = told("transit", frames)
    assert found.findings == ()
    assert [finding.name for finding in clock.findings] == ["clock-offset"]
    assert "slow: its stamps are earlier than UTC" in clock.findings[0].sentence
    assert clock.findings[0].value == pytest.approx(-2.4, abs=3 * clock.findings[0].sigma)


def test_a_drifting_clock_is_told_and_a_steady_one_is_not_accused():
    rng = np.random.default_rng(2)
    planned = times("transit", 60, rng)
    path = scene("transit")[0].path
    steady = disc_sightings(path, planned, rng, jitter_arcsec=0.1)
    drifting = disc_sightings(path, planned, rng, jitter_arcsec=0.1, drift=100.0 / 86400.0 * 10)
    assert [finding.name for finding in told("transit", steady)[1].findings] == []
    clock = told("transit", drifting)[1]
    assert "clock-drift" in [finding.name for finding in clock.findings]
    assert clock.drift_s_day == pytest.approx(1000.0, abs=4 * clock.drift_sigma_s_day)


def test_a_start_taken_for_the_middle_is_told_apart_from_a_wrong_clock():
    """Stamps are half an exposure early, and exposures differ: no constant offset explains both."""
    rng = np.random.default_rng(3)
    planned = times("retrograde", 40, rng)
    exposure = np.where(np.arange(40) % 2, 60.0, 300.0)
    frames = star_sightings(scene("retrograde")[0].path, planned, rng, sigma_arcsec=0.2)
    frames = replace(frames, tt_s=planned - exposure / 2, exposure_s=exposure)
    clock = told("retrograde", frames)[1]
    assert [finding.name for finding in clock.findings] == ["start-for-middle"]
    assert clock.findings[0].sentence.startswith("The start of each exposure was taken for its middle")
    assert "as exposures that differ tell" in clock.findings[0].sentence


@pytest.mark.parametrize(("sigma_arcsec", "name"), [(0.01, "start-for-middle"), (0.5, "clock-offset")])
def test_with_exposures_all_alike_a_start_for_a_middle_and_a_wrong_clock_are_both_named(sigma_arcsec, name):
    """The closer an offset is known to half the exposure, the less likely is a clock wrong by as much: odds say it."""
    rng = np.random.default_rng(3)
    planned = times("retrograde", 40, rng)
    frames = star_sightings(scene("retrograde")[0].path, planned, rng, sigma_arcsec=sigma_arcsec)
    exposure = np.full(40, 120.0)
    frames = replace(frames, tt_s=planned - exposure / 2, exposure_s=exposure)
    found = told("retrograde", frames)[1].findings
    assert [finding.name for finding in found] == [name]
    assert "taken for its middle" in found[0].sentence
    assert "slow" in found[0].sentence
    assert "odds" in found[0].sentence


def test_a_site_typed_wrong_by_a_fifth_of_a_degree_is_found_beside_the_moon():
    rng = np.random.default_rng(4)
    promise = scene("occultation")[0]
    there = replace(observer_of(promise.plan.site), latitude_deg=promise.plan.site.latitude_deg + 0.2)
    path = PredictedPath.of_plan(promise.plan, there)
    frames = disc_sightings(path, times("occultation", 40, rng), rng, sigma_arcsec=0.03, jitter_arcsec=0.05)
    found, clock = told("occultation", frames)
    assert found.explained
    moved = next(finding for finding in clock.findings if finding.name == "site-displaced")
    assert moved.value == pytest.approx(22.2, abs=max(4 * moved.sigma, 3.0))
    assert moved.unit == "km"


@pytest.mark.parametrize(("bearing", "name"), [(0, "N"), (90, "E"), (181, "S"), (359, "N"), (225, "SW")])
def test_directions_are_told_as_on_a_compass(bearing, name):
    assert compass(bearing) == name


@pytest.mark.parametrize(
    ("value", "sigma", "text"),
    [(7.3123, 0.42, "7.31 ± 0.42"), (1234.6, 30.0, "1235 ± 30"), (0.001234, 0.000031, "0.001234 ± 0.000031")],
)
def test_two_digits_of_the_sigma_decide_the_digits_shown(value, sigma, text):
    assert with_sigma(value, sigma) == text


def test_words_for_a_clock():
    assert "right as far as they tell" in clock_words(1.0, 0.5)
    assert clock_words(7.3, 0.5).endswith("7.30 ± 0.50 s fast")
    assert clock_words(-7.3, 0.5).endswith("7.30 ± 0.50 s slow")


@pytest.mark.parametrize("event", ["transit", "occultation"])
@pytest.mark.parametrize(
    ("slip", "faults"),
    [
        ("zone", {"clock_s": 3600.0 + 7.3}),
        ("zone", {"clock_s": -5.5 * 3600 + 7.3}),
        ("date", {"clock_s": 86400.0 + 7.3}),
        ("mirrored", {"clock_s": 7.3, "mirrored": True}),
    ],
)
def test_a_clock_error_is_named_beside_the_slip(event, slip, faults):
    rng = np.random.default_rng(5)
    frames = disc_sightings(scene(event)[0].path, times(event, 40, rng), rng, jitter_arcsec=0.1, **faults)
    found, clock = told(event, frames)
    assert [finding.name for finding in found.findings] == [slip]
    assert [finding.name for finding in clock.findings] == ["clock-offset"]
    assert clock.findings[0].value == pytest.approx(7.3, abs=4 * clock.findings[0].sigma)
    assert clock.findings[0].sentence.startswith("Beyond that the frames' clock is ")


def test_a_drift_and_a_wrong_site_are_named_beside_a_zone():
    rng = np.random.default_rng(6)
    promise = scene("occultation")[0]
    there = replace(observer_of(promise.plan.site), latitude_deg=promise.plan.site.latitude_deg + 0.2)
    path = PredictedPath.of_plan(promise.plan, there)
    planned = times("occultation", 40, rng)
    frames = disc_sightings(path, planned, rng, 3600.0, sigma_arcsec=0.03, jitter_arcsec=0.05)
    found, clock = told("occultation", frames)
    assert [finding.name for finding in found.findings] == ["zone"]
    assert "site-displaced" in [finding.name for finding in clock.findings]
    drifting = disc_sightings(promise.path, planned, rng, 3600.0, jitter_arcsec=0.05, drift=0.002)
    found, clock = told("occultation", drifting)
    assert [finding.name for finding in found.findings] == ["zone"]
    assert "clock-drift" in [finding.name for finding in clock.findings]
