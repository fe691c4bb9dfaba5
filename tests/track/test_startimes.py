"""What is said of a star's light in few frames, unevenly spaced, or with its event at their end."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest

from imaging.discs.lightcurve import LightCurve
from imaging.track.startimes import StarCurve, _events, _findings, _told

GONE_S, BACK_S = 919.13, 5659.5
PLANNED = [(0.0, 10.0, 90), (899.2, 0.43, 92), (940.0, 60.0, 76), (5639.6, 0.44, 90), (5680.0, 10.0, 90)]
INSTANTS = [
    SimpleNamespace(name=name, tt_s=at, sigma_s=2.9, visible=True)
    for name, at in (("disappearance", GONE_S), ("reappearance", BACK_S))
]
EVENT = SimpleNamespace(instants=INSTANTS, facts={}, instant=lambda name: INSTANTS[name == "reappearance"])


def light(begin, gone=GONE_S, back=BACK_S, seed=0):
    """Frames of 29 ms, with 1 % of noise."""
    generator, exposure = np.random.default_rng(seed), np.full(begin.size, 0.029)
    star = np.clip((gone - begin) / exposure, 0, 1) + 1 - np.clip((back - begin) / exposure, 0, 1)
    noise = 0.01 * star * generator.standard_normal(begin.size) + 0.002 * generator.standard_normal(
        begin.size
    )
    return LightCurve(begin, exposure, star + noise)


def told(curve):
    events, words = _events(curve, EVENT, 0.0, 1.0)
    made = StarCurve(curve.start_s, curve.exposure_s, curve.flux, curve.flux, False, 3.0, (), "")
    return events, _told("the star", made, words), _findings("the star", (), EVENT, made, words)


@pytest.mark.parametrize("frames", [12, 13, 14, 16, 20, 24, 27, 30, 40, 60, 100, 438])
def test_few_frames_of_a_plan_show_both_instants_to_what_the_gaps_allow(frames):
    planned = np.concatenate([first + step * np.arange(count) for first, step, count in PLANNED])
    begin = planned[np.unique(np.linspace(0, planned.size - 1, frames).astype(int))]
    events, *_ = told(light(begin))
    assert [event.kind for event in events] == ["disappearance", "reappearance"]
    for event, truth in zip(events, (GONE_S, BACK_S), strict=True):
        gap = begin[begin > truth].min() - begin[begin < truth].max()
        assert abs(event.time_s - truth) < 0.6 * gap
        assert event.sigma_s == pytest.approx(gap / np.sqrt(12), rel=0.15)


@pytest.mark.parametrize("frames_left", range(1, 12))
@pytest.mark.parametrize("at_begin", [True, False])
def test_event_near_an_end_is_timed_within_its_error_or_not_at_all(frames_left, at_begin):
    begin = 899.2 + 0.43 * np.arange(92)
    number = frames_left if at_begin else begin.size - frames_left
    gone = begin[number] - 0.07  # in the dead time, off its middle
    events, verdict, findings = told(light(begin, gone))
    if frames_left < 3:
        assert not events
        assert "is dim in" in verdict
        assert "within 2 frames of an end" in verdict
        assert "neither went out" not in verdict
        assert "no-event" not in [finding.name for finding in findings]
    else:
        assert len(events) == 1
        assert abs(events[0].time_s - gone) < 2.5 * events[0].sigma_s


@pytest.mark.parametrize("frames", [8, 9, 10])
def test_a_curve_that_visibly_drops_is_never_called_without_event(frames):
    planned = np.concatenate([first + step * np.arange(count) for first, step, count in PLANNED])
    curve = light(planned[np.linspace(0, planned.size - 1, frames).astype(int)])
    events, verdict, findings = told(curve)
    assert not events
    assert f"of {frames} frames, but no instant can be told" in verdict
    assert [finding.name for finding in findings] == ["event-unclear"]


@pytest.mark.parametrize("noise", [0.01, 0.2, 1.0])
def test_a_star_that_shines_on_is_said_to(noise):
    begin = 899.2 + 0.43 * np.arange(92)
    flux = 1 + noise * np.random.default_rng(1).standard_normal(begin.size)
    events, verdict, findings = told(LightCurve(begin, np.full(92, 0.029), flux))
    assert not events
    assert [finding.name for finding in findings] == ["no-event"]  # the frames begin 20 s before it was due
    assert "neither went out nor came back in 92 frames" in verdict
