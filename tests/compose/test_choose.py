"""Instants shown are evenly spaced, the sharpest near each, and a gap stays a gap."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from imaging.compose.choose import evenly_spaced, spacing_sentence


def test_dense_frames_give_the_instants_asked_for():
    tt_s = np.arange(0, 1000, 5.0)
    chosen = evenly_spaced(tt_s, 9)
    assert len(chosen) == 9
    assert np.ptp(np.diff(tt_s[chosen])) <= 10


def test_the_sharpest_frame_near_an_instant_is_taken():
    tt_s = np.arange(0, 100, 1.0)
    merit = np.zeros(100)
    merit[[2, 48, 97]] = 1.0
    assert evenly_spaced(tt_s, 3, merit).tolist() == [2, 48, 97]


def test_few_frames_are_thinned_evenly():
    """14 frames at equal steps and 9 instants wanted: 7 at every second step are more even than 9."""
    tt_s = np.arange(14) * 20.0
    steps = np.diff(tt_s[evenly_spaced(tt_s, 9)])
    assert steps.max() / steps.min() <= 1.5


def test_instants_of_a_thinned_run_are_even_to_a_tenth():
    """Frames every 11 minutes with crowds at both ends, as a rehearsal thins a transit."""
    minutes = np.concatenate(
        [
            np.arange(2.0, 4.0, 0.35),
            8.0 + 10.95 * np.arange(15),
            186.0 + 10.95 * np.arange(8),
            np.arange(266.5, 268, 0.35),
        ]
    )
    tt_s = 60 * minutes
    steps = np.diff(tt_s[evenly_spaced(tt_s, 9)])
    assert len(steps) >= 6
    assert steps.max() / steps.min() < 1.12


def test_what_is_missing_is_said():
    from planner.sky.timescale import tt_s_from_iso

    start = float(tt_s_from_iso("2032-11-13T07:00:00Z"))
    even = start + 1800.0 * np.arange(6)
    assert spacing_sentence(even) == "the instants drawn are 30 min apart"
    broken = np.delete(even, 3)
    assert spacing_sentence(broken) == (
        "the instants drawn are 30 min apart; no frame shows the target between 2032-11-13T08:00:00Z and "
        "2032-11-13T09:00:00Z"
    )
    assert "25 min to 35 min apart" in spacing_sentence(even + np.array([0, 100, 0, 300, 0, 0]))
    assert spacing_sentence(even[:2]) is None


def test_a_hidden_stretch_is_not_filled():
    tt_s = np.concatenate([np.arange(0, 100, 2.0), np.arange(900, 1000, 2.0)])
    chosen = tt_s[evenly_spaced(tt_s, 11)]
    assert not ((chosen > 100) & (chosen < 900)).any()


@given(st.lists(st.floats(0, 1e5), min_size=1, max_size=60, unique=True), st.integers(1, 20))
def test_never_more_than_wanted_never_twice_and_always_usable(times, wanted):
    tt_s = np.sort(np.array(times))
    usable = np.arange(len(tt_s)) % 3 != 1
    chosen = evenly_spaced(tt_s, wanted, None, usable)
    assert len(chosen) <= wanted
    assert len(set(chosen.tolist())) == len(chosen)
    assert usable[chosen].all()


@pytest.mark.parametrize("wanted", [0, -1])
def test_none_wanted_is_none(wanted):
    assert evenly_spaced(np.arange(5.0), wanted).size == 0
