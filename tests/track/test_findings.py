"""Readings of a track: each slip is named when it was made, and none is claimed when none was."""

from __future__ import annotations

import numpy as np
import pytest

from imaging.track.findings import DAY_S, Question, diagnose
from tests.track.synthetic import T0, chord_path, disc_sightings, star_sightings, stars_path

CHORD, LOOP = chord_path(), stars_path()
CROSSING = T0 + np.linspace(-7500, 7500, 30)
CAMPAIGN = T0 + np.arange(30) * 2 * DAY_S
ON_DISC = Question(CHORD, 0.7, 0.5, T0, {}, {}, "mercury")
AMONG_STARS = Question(LOOP, 1.0, 0.5, T0 + 30 * DAY_S, {}, {}, "mars")


def on_disc(seed, **faults):
    return diagnose(
        disc_sightings(CHORD, CROSSING, np.random.default_rng(seed), jitter_arcsec=0.5, **faults), ON_DISC
    )


def among_stars(seed, **faults):
    return diagnose(
        star_sightings(LOOP, CAMPAIGN, np.random.default_rng(seed), sigma_arcsec=1.0, **faults), AMONG_STARS
    )


SLIPS = {
    "an hour of zone": ("zone", {"clock_s": 3600.0}),
    "summer time the other way": ("zone", {"clock_s": -3600.0}),
    "a zone of five and a half hours": ("zone", {"clock_s": 5.5 * 3600.0}),
    "a zone and a slow clock": ("zone", {"clock_s": 7200.0 - 3.0}),
    "the day after": ("date", {"clock_s": DAY_S}),
    "month and day swapped": ("date", {"clock_s": -61 * DAY_S}),
    "a clock that is an odd amount off": ("clock-far-off", {"clock_s": 1000.0}),
}


@pytest.mark.parametrize("slip", SLIPS)
@pytest.mark.parametrize("look", [on_disc, among_stars])
def test_a_slip_of_the_clock_is_named_with_its_size(look, slip):
    name, faults = SLIPS[slip]
    found = look(1, **faults)
    assert [finding.name for finding in found.findings] == [name]
    assert found.reading.clock_offset_s == pytest.approx(
        faults["clock_s"], abs=5 * found.reading.fit.sigma["clock_s"]
    )
    assert found.findings[0].odds > 1e4
    assert found.explained


def test_a_mirrored_camera_is_named_whatever_its_roll():
    for roll in (0.0, 40.0, 170.0):
        found = on_disc(2, mirrored=True, rotation_deg=roll)
        assert [finding.name for finding in found.findings] == ["mirrored"]


@pytest.mark.parametrize("look", [on_disc, among_stars])
def test_nothing_is_found_in_right_frames(look):
    for seed in range(3):
        found = look(seed, clock_s=0.3)
        assert found.findings == ()
        assert found.explained
        assert found.reading.name == "plain"


def test_a_spot_that_stands_still_on_the_disc_is_not_the_planet():
    rng = np.random.default_rng(3)
    frames = disc_sightings(CHORD, np.full(30, T0), rng, jitter_arcsec=0.5)
    frames.tt_s[:] = CROSSING
    assert [finding.name for finding in diagnose(frames, ON_DISC).findings] == ["wrong-body"]


def test_nonsense_is_not_explained_away():
    rng = np.random.default_rng(4)
    frames = disc_sightings(CHORD, CROSSING, rng)
    frames.east_arcsec[:] = rng.uniform(-900, 900, 30)
    frames.north_arcsec[:] = rng.uniform(-900, 900, 30)
    found = diagnose(frames, ON_DISC)
    assert not found.explained
    assert [finding.name for finding in found.findings] == ["unexplained"]
