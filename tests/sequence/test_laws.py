"""What must hold of every plan, whatever the site, the rig and the wish."""

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st

from planner.errors import InputError
from planner.sequence import documents
from planner.sequence.builder import build_plan
from planner.sequence.capacity import overlaps
from planner.sequence.frametimes import frame_starts, planned_frames
from planner.sequence.rules_camera import _changes_s
from planner.sequence.windows import is_contact
from planner.sky.timescale import tt_s_from_iso
from tests.sequence.briefs import CAMPAIGN, EXAMPLES, OCCULTATION, TRANSIT, changed, example, example_plan

few = settings(max_examples=5, deadline=None, suppress_health_check=[HealthCheck.filter_too_much])


def plan_of(brief):
    try:
        return build_plan(brief)
    except InputError as refused:
        assume("nothing of it can be photographed" not in str(refused))
        raise


@st.composite
def plans(draw):
    brief = example(draw(st.sampled_from([TRANSIT, OCCULTATION])))
    return plan_of(
        changed(
            brief,
            site={
                "latitude_deg": draw(st.floats(-60, 60)),
                "longitude_deg": draw(st.floats(-10, 100)),
                "timezone": "UTC",
                "horizon": [],
            },
            sensor={"readout_s": draw(st.floats(0.0, 8.0))},
            clock={"sigma_s": draw(st.floats(0.01, 20.0))},
            mount={"kind": draw(st.sampled_from(["equatorial", "altazimuth", "fixed"]))},
            rig={
                "filters": [
                    {"name": "V"},
                    {"name": "R", "focus_offset_steps": 9},
                    {"name": "N", "refocus": True},
                ],
                "filter_change_s": draw(st.floats(0.0, 30.0)),
            },
            wish={
                "filters": draw(st.sampled_from([[], ["V", "R"], ["R", "N", "V"]])),
                "filter": draw(st.sampled_from([None, "V", "N"])),
                "burst_cadence_s": draw(st.none() | st.floats(0.05, 5.0)),
                "cadence_s": draw(st.none() | st.floats(1.0, 90.0)),
                "separate_discs": draw(st.booleans()),
            },
        )
    )


@few
@given(plans())
def test_no_two_frames_overlap_on_one_camera_and_the_plan_survives_yaml(plan):
    passage, shot, start, exposure = frame_starts(plan)
    assert not len(overlaps(start, exposure, plan.rig.sensor.readout_s, _changes_s(plan, passage, shot)))
    assert all(passage.slack_s is None or passage.slack_s >= -1e-3 for passage in plan.passages)
    document = documents.strictyaml.parse(documents.dump_plan(plan))
    assert documents._as(type(plan), document) == plan


@few
@given(plans())
def test_every_contacts_three_sigma_window_is_covered_or_there_is_a_finding(plan):
    _, _, start, exposure = frame_starts(plan)
    told = {finding.where for finding in plan.findings if finding.rule.startswith("contact-")}
    flips = {finding.where for finding in plan.findings if finding.rule == "flip-in-burst"}
    for instant in plan.circumstances["instants"]:
        if not is_contact(instant["name"]) or instant["name"] in told | flips:
            continue
        moment = tt_s_from_iso(instant["utc"])
        reach = 3 * np.hypot(instant["sigma_s"], plan.rig.clock.sigma_s)
        cadence = max(shot.cadence_s for passage in plan.passages for shot in passage.shots)
        near = np.abs(start + exposure / 2 - moment) <= reach + 2.5 * cadence
        times = np.sort(start[near])
        gaps = np.diff(
            np.concatenate([[moment - reach], times[np.abs(times - moment) < reach], [moment + reach]])
        )
        assert gaps.max() <= max(2.5 * np.median(np.diff(times)), 2.5) + 0.1, instant["name"]


@few
@given(st.floats(-0.4, 0.4))
def test_moving_the_site_moves_the_contacts_and_not_the_purpose(shift_deg):
    before = example_plan(TRANSIT)
    after = build_plan(changed(example(TRANSIT), site={"longitude_deg": 32.87 + shift_deg}))
    times = [
        np.array([tt_s_from_iso(i["utc"]) for i in plan.circumstances["instants"]])
        for plan in (before, after)
    ]
    # Mercury's parallax against the Sun, 4", passes in 40 s; half a degree of the Earth is a hundredth of it
    assert np.abs(times[1] - times[0]).max() < 1.0
    assert [p.purpose for p in before.passages] == [p.purpose for p in after.passages]
    # the flip follows the meridian: 240 s a degree of longitude
    flips = [next(step for step in plan.steps if step.kind == "flip").start_utc for plan in (before, after)]
    moved = (flips[1] - flips[0]).total_seconds()
    assert moved == pytest.approx(-239.3 * shift_deg, abs=60.0)


@pytest.mark.parametrize("name", EXAMPLES)
def test_the_frames_counted_are_the_frames_planned_and_stored(name):
    plan = example_plan(name)
    frames = planned_frames(plan)
    assert len(frames) == plan.frames_total
    assert np.isfinite(frames.ra_deg).all()
    assert (np.diff(frames.start_tt_s) >= 0).all()
    size = plan.rig.sensor.width_px * plan.rig.sensor.height_px * 2 + 5760
    extra = sum(each.count for each in plan.calibration)
    assert plan.storage_gb == pytest.approx((len(frames) + extra) * size / 1e9, abs=1e-3)


def test_the_frame_follows_the_sun_and_turns_over_with_the_mount():
    from planner.events.catalogue import family
    from planner.sequence.frametimes import planned_event

    plan = example_plan(TRANSIT)
    frames = planned_frames(plan)
    observer = documents.observer_of(plan.site)
    sun = family("solar-transit").geometry(planned_event(plan), observer, frames.middle_tt_s).discs["sun"]
    assert frames.ra_deg == pytest.approx(sun.ra_deg)
    flipped = np.array([plan.passages[p].flipped for p in frames.passage])
    assert flipped.any()
    assert not flipped.all()
    assert frames.rotation_deg == pytest.approx(np.where(flipped, 192.0, 12.0))


def test_a_frame_on_an_alt_azimuth_mount_keeps_its_angle_to_the_zenith():
    from planner.sky.places import zenith_pa_deg

    plan = build_plan(changed(example(TRANSIT), mount={"kind": "altazimuth"}))
    frames = planned_frames(plan)
    observer = documents.observer_of(plan.site)
    zenith = zenith_pa_deg(frames.ra_deg, frames.dec_deg, observer, frames.middle_tt_s)
    assert np.cos(np.radians(frames.rotation_deg - zenith - 12.0)) == pytest.approx(1.0)


def test_a_tripod_points_where_it_is_set():
    from planner.sky.places import altaz

    plan = build_plan(changed(example(OCCULTATION), mount={"kind": "fixed"}))
    frames = planned_frames(plan)
    altitude, azimuth = altaz(
        (frames.ra_deg, frames.dec_deg), documents.observer_of(plan.site), frames.middle_tt_s
    )
    first = frames.passage == 0
    assert altitude[first] == pytest.approx(plan.passages[0].aim_altitude_deg, abs=0.01)
    assert azimuth[first] == pytest.approx(plan.passages[0].aim_azimuth_deg, abs=0.02)
    assert {shot.tracking for passage in plan.passages for shot in passage.shots} == {"none"}


def test_separate_discs_do_not_touch():
    plan = build_plan(changed(example(TRANSIT), wish={"separate_discs": True}))
    crossing = next(passage for passage in plan.passages if passage.name.startswith("crossing"))
    starts = [crossing.shots[0].start_utc.timestamp() + n * crossing.shots[0].cadence_s for n in (0, 1)]
    track_s = np.array([point.utc.timestamp() for point in plan.track])
    east, north = ([getattr(point, name) for point in plan.track] for name in ("east_arcsec", "north_arcsec"))
    moved = np.hypot(*(np.diff(np.interp(starts, track_s, axis))[0] for axis in (east, north)))
    # Mercury's disc is 9.9" wide in a November transit (3.36" at 1 au, Meeus 1998, chapter 55; at 0.676 au)
    assert moved > 1.15 * 2 * 3.36 / 0.676


def test_a_transit_that_cannot_be_filtered_cannot_be_planned():
    with pytest.raises(InputError, match=r"rig\.solar_filter: found nothing"):
        build_plan(changed(example(TRANSIT), rig={"solar_filter": None}))


def test_all_cameras_of_a_brief_share_their_instants():
    from planner.sequence.builder import build_plans

    brief = example(OCCULTATION)
    wide = changed(brief, optics={"focal_length_mm": 400.0, "aperture_mm": 60.0}, clock={"sigma_s": 1.0}).rig
    wide = wide.model_copy(update={"name": "wide"})
    first, second = build_plans(brief.model_copy(update={"other_rigs": [wide]}))
    assert first.companions == ["wide"]
    assert second.companions == [first.rig.name]
    assert [p.name for p in first.passages] == [p.name for p in second.passages]
    for a, b in zip(first.passages, second.passages, strict=True):
        assert abs((a.shots[0].start_utc - b.shots[0].start_utc).total_seconds()) < 1.0
    assert first.passages[1].shots[0].exposure_s != second.passages[1].shots[0].exposure_s


def test_two_rigs_of_one_name_or_one_mount_described_twice_are_refused():
    from planner.sequence.builder import build_plans

    brief = example(OCCULTATION)
    with pytest.raises(InputError, match="two rigs named"):
        build_plans(brief.model_copy(update={"other_rigs": [brief.rig]}))
    other = changed(brief, mount={"slew_deg_s": 9.0}).rig.model_copy(update={"name": "other"})
    with pytest.raises(InputError, match="give each mount a name"):
        build_plans(brief.model_copy(update={"other_rigs": [other]}))


def test_a_campaign_holds_its_pointing_where_the_field_allows():
    plan = build_plan(changed(example(CAMPAIGN), optics={"focal_length_mm": 50.0, "aperture_mm": 18.0}))
    aims = {(passage.aim_ra_deg, passage.aim_dec_deg) for passage in plan.passages}
    assert len(aims) == 1


def neptune_beside_a_bright_moon():
    """Neptune, of magnitude 7.8, behind a Moon lit by 93 %: what shows the one shows nothing of the other."""
    brief = example(OCCULTATION)
    event = {"family": "moon-occults-planet", "body": "neptune", "date": "2024-08-21"}
    return brief.model_copy(update={"event": type(brief.event).model_validate(event)})


def test_short_and_long_frames_take_turns_where_no_exposure_does_both():
    plan = build_plan(neptune_beside_a_bright_moon())
    approach = plan.passages[0]
    short = [shot for shot in approach.shots if shot.peak_of == "moon"]
    long = [shot for shot in approach.shots if shot.peak_of == "neptune"]
    assert max(shot.exposure_s for shot in short) * 3 < min(shot.exposure_s for shot in long)
    assert sum(shot.count for shot in short) == sum(shot.count for shot in long)
    assert all(shot.peak_of == "moon" for shot in next(p for p in plan.passages if p.name == "hidden").shots)
    _, _, start, exposure = frame_starts(plan)
    assert not len(overlaps(start, exposure, plan.rig.sensor.readout_s))
    assert "no-exposure-does-both" in {finding.rule for finding in plan.findings}


def test_a_script_takes_turns_too():
    import subprocess

    from planner.sequence.script import script_text

    plan = build_plan(neptune_beside_a_bright_moon())
    script = script_text(plan, "cam {exposure_s}")
    done = subprocess.run(
        ["sh"],
        input=script,
        capture_output=True,
        text=True,
        env={"PATH": "/usr/bin:/bin", "DRY_RUN": "1"},
        timeout=60,
    )
    assert done.returncode == 0, done.stderr
    lines = [line for line in done.stdout.splitlines() if line.startswith("at ")]
    times = [int(line.split()[1].rstrip(":")) for line in lines]
    assert times == sorted(times)
    assert lines[0].endswith(f"cam {plan.passages[0].shots[0].exposure_s:g}")
    assert lines[1].split()[-1] != lines[0].split()[-1]
