"""Buffers fill and drain as a queue does; disks and batteries as arithmetic says."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.sequence.capacity import buffer_load, energy_wh, frame_bytes, overlaps
from tests.sequence.briefs import TRANSIT, changed, example, example_plan


def queue_by_hand(ready, rate):
    """Frame by frame: a frame leaves one drain time after the one before it, or after it is ready."""
    left, waiting = [], []
    for moment in ready:
        begun = max(moment, left[-1]) if left else moment
        left.append(begun + 1 / rate)
        waiting.append(sum(1 for end in left if end > moment + 1e-9))
    return np.array(waiting)


@given(st.lists(st.floats(0.0, 3.0), min_size=1, max_size=60), st.floats(0.2, 5.0))
def test_the_queue_without_a_loop_is_the_queue(gaps, rate):
    ready = 8e8 + np.cumsum(np.round(gaps, 3))
    assert (buffer_load(ready, rate).waiting == queue_by_hand(ready, rate)).all()


def test_a_burst_fills_the_buffer_by_what_does_not_drain():
    ready = np.arange(100) * 0.1
    assert buffer_load(ready, 4.0).most == pytest.approx(100 - 9.9 * 4, abs=2)


def test_frames_that_collide_are_found():
    start, exposure = np.array([0.0, 1.0, 1.4, 3.0]), np.full(4, 0.5)
    assert overlaps(start, exposure, 0.1).tolist() == [2]


def test_a_frame_takes_two_bytes_a_pixel():
    assert frame_bytes(example(TRANSIT).rig) == 4800 * 3600 * 2 + 5760
    assert frame_bytes(changed(example(TRANSIT), sensor={"bit_depth": 8}).rig) == 4800 * 3600 + 5760


def test_energy_is_power_times_time():
    plan = example_plan(TRANSIT)
    hours = (
        plan.passages[-1].shots[-1].start_utc - plan.passages[0].shots[0].start_utc
    ).total_seconds() / 3600
    assert energy_wh(plan) == pytest.approx((hours + 0.5) * 20.0, rel=0.02)
