"""The one searcher: what it promises about roots and minima, for any function that keeps its side of the bargain."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from planner.events.roots import changes_of_sign, minima_near, roots_between, samples

numbers = st.floats(-1e4, 1e4, allow_nan=False)


@settings(max_examples=60, deadline=None)
@given(st.lists(numbers, min_size=1, max_size=20), st.floats(0.5, 3.0), st.floats(-2e10, 2e10))
def test_every_bracketed_root_of_a_cubic_is_found_to_the_resolution_of_the_clock(places, bend, origin):
    roots = origin + np.array(places)

    def cubic(t, which):
        u = (t - roots[which]) / 1e4
        return u + bend * u**3

    found = roots_between(cubic, roots - 3e4, roots + 2e4)
    assert np.abs(found - roots).max() < 1e-4 + 8 * np.spacing(abs(origin) + 1e5)


def test_a_bracket_without_a_change_of_sign_gives_nan_and_a_root_at_its_end_is_kept():
    found = roots_between(
        lambda t, which: t - np.array([5.0, 0.0, 10.0])[which],
        np.zeros(3) - [9, 0, 0],
        np.array([1.0, 10.0, 10.0]),
    )
    assert np.isnan(found[0])
    assert found[1] == 0.0
    assert found[2] == 10.0


def test_candidates_keep_their_own_function_when_others_have_settled():
    speed = np.geomspace(1e-6, 1e3, 40)
    found = roots_between(
        lambda t, which: np.tanh(speed[which] * (t - which)), np.full(40, -1e3), np.full(40, 1e3)
    )
    assert np.abs(found - np.arange(40)).max() < 1e-3


@settings(max_examples=60, deadline=None)
@given(st.lists(numbers, min_size=1, max_size=20), st.floats(1e-7, 1e-5), st.floats(0.0, 1e-3))
def test_the_minimum_of_a_passing_is_found_from_an_hour_away(places, speed, least):
    middle = 8e8 + np.array(places)

    def squared(t, which):
        return least**2 + (speed * (t - middle[which])) ** 2

    found = minima_near(squared, middle + 3000.0, 1800.0, 1e5)
    assert np.abs(found - middle).max() < 0.01


def test_a_minimum_out_of_reach_is_nan():
    assert np.isnan(minima_near(lambda t, which: (t - 1e6) ** 2, np.array([0.0]), 100.0, 1e4)[0])


def test_brackets_hold_each_change_of_sign_and_samples_hold_both_ends():
    times = samples(0.0, 100.0, 7.0)
    assert times[0] == 0.0
    assert times[-1] == 100.0
    assert np.diff(times).max() <= 7.0
    low, high = changes_of_sign(times, np.sin(times / 10.0))
    assert [(a < root < b) for a, b, root in zip(low, high, [31.4, 62.8, 94.2], strict=True)] == [True] * 3
