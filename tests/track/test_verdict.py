"""The first sentence of a check: the slip, how the frames lie when it is put right, and the clock beyond it."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np

from imaging.track.findings import Finding
from imaging.track.result import CheckResult
from imaging.track.table import TrackRow

ZONE = (
    "The frames' times are 1 h ahead of UTC: a time zone or daylight saving was left in. "
    "Read them with --zone +01:00."
)


def checked(name, sentence="", clock_s=0.0, offset_s=0.4, explained=True, verdict="on-track"):
    reading = SimpleNamespace(name=name, clock_s=clock_s)
    findings = (Finding(name, 1e6, sentence),) if sentence else ()
    return CheckResult(
        title="Mercury crosses the Sun",
        family="solar-transit",
        target="mercury",
        reference="sun",
        plan_name="p.plan.yaml",
        rows=tuple(TrackRow(file=f"{n}.fits", verdict=verdict) for n in range(12)),
        times_tt_s=np.arange(12.0),
        set_aside=(),
        diagnosis=SimpleNamespace(reading=reading, explained=explained),
        findings=findings,
        clock_offset_s=offset_s,
        clock_offset_sigma_s=0.5,
        rms_along_arcsec=0.03,
        rms_across_arcsec=0.04,
    ).verdict


def test_frames_that_follow_the_plan():
    assert checked("plain") == (
        "Mercury is on its predicted path in all 12 frames, to 0.05 arcsec rms; the frames' clock is right as far as "
        "they tell (offset 0.40 ± 0.50 s)."
    )


def test_a_slip_comes_first_and_the_clock_is_told_beyond_it():
    assert checked("zone", ZONE, 3600.0, 3607.3) == (
        "The frames' times are 1 h ahead of UTC: a time zone or daylight saving was left in; read so, Mercury is on "
        "its predicted path in all 12 frames, to 0.05 arcsec rms; the clock beyond that is 7.30 ± 0.50 s fast."
    )


def test_another_body_is_not_said_to_be_on_the_path_of_the_target():
    told = checked(
        "wrong-body", "What was measured moves as Venus does: it is Venus, not Mercury.", verdict="off-track"
    )
    assert told == "What was measured moves as Venus does: it is Venus, not Mercury (in 12 frames)."


def test_nothing_is_promised_of_frames_that_nothing_explains():
    told = checked(
        "unexplained", "The measured places do not follow the prediction of Mercury.", explained=False
    )
    assert told == "The measured places do not follow the prediction of Mercury."


def test_a_clock_that_is_an_odd_amount_off_is_told_with_its_number():
    told = checked("clock-far-off", "The frames' clock is off by an odd amount.", 900.0, 1000.0)
    assert told.endswith("the frames' clock is 1000.00 ± 0.50 s fast.")
