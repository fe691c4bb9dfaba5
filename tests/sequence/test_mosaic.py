"""A mosaic shows the whole track at each visit: panels overlap, leave no gap, are shot in turn and named."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from planner.errors import InputError
from planner.sequence import documents
from planner.sequence.agenda import calendar_text
from planner.sequence.builder import build_plan, build_plans
from planner.sequence.framing import Field, inside
from planner.sequence.models import Grid
from planner.sequence.mosaic import panels_over
from planner.sequence.outlook import Outlook
from planner.sky.places import separation_arcsec, unit_vector
from tests.sequence.briefs import CAMPAIGN, TRANSIT, changed, example

OPTICS = {"focal_length_mm": 300.0, "aperture_mm": 75.0}


def mosaic_brief(**wish):
    return changed(
        example(CAMPAIGN), optics=OPTICS, wish={"mosaic": "track", "visits": 6, "frames_per_visit": 2, **wish}
    )


@pytest.fixture(scope="module")
def plan():
    return build_plan(mosaic_brief())


def test_every_visit_shoots_every_panel_once_beginning_with_the_targets(plan):
    visits = plan.visits()
    panels = {passage.panel for passage in visits[0]}
    assert len(panels) == 8
    assert {"A1", "D2"} <= panels
    for visit in visits:
        assert {passage.panel for passage in visit} == panels
        assert len(visit) == len(panels)
        assert visit[0].holds_target
        assert visit[0].shots[0].peak_of == "mars"
        assert all(passage.holds_target == (passage.shots[0].peak_of is not None) for passage in visit)


def test_the_whole_track_lies_in_the_panels_with_its_margin(plan):
    ra, dec = (np.array([getattr(point, name) for point in plan.track]) for name in ("ra_deg", "dec_deg"))
    field = Field(3600 * 6.88 / 2, 3600 * 4.58 / 2, plan.rig.camera_angle_deg)
    seen = np.zeros(len(ra), bool)
    for passage in plan.visits()[0]:
        seen |= inside(field, passage.aim_ra_deg, passage.aim_dec_deg, ra, dec, margin=0.05)
    assert seen.all()


def test_slews_and_settling_are_counted_and_the_angle_is_held(plan):
    from planner.sequence.capacity import end_utc

    for visit in plan.visits():
        for before, after in pairwise(visit):
            places = [
                unit_vector(np.array([p.aim_ra_deg]), np.array([p.aim_dec_deg])) for p in (before, after)
            ]
            slew_s = separation_arcsec(*places)[0] / 3600 / plan.rig.mount.slew_deg_s
            gap_s = (after.shots[0].start_utc - end_utc(before)).total_seconds()
            assert gap_s >= plan.rig.sensor.readout_s + slew_s + plan.rig.mount.settle_s - 1e-6
        assert len({passage.flipped for passage in visit}) == 1
    assert "shots-collide" not in {finding.rule for finding in plan.findings}


def test_a_visit_stays_in_the_dark(plan):
    assert not {"twilight", "panel-out-of-reach", "target-leaves-frame"} & {
        each.rule for each in plan.findings
    }


def test_a_visit_of_hours_is_dark_from_its_first_frame_to_its_last():
    """Four frames of a minute through two filters on eight panels: nights and hours are chosen for all of it."""
    from planner.sequence.capacity import end_utc
    from planner.sky import places
    from planner.sky.timescale import tt_s_from_datetime

    brief = changed(
        mosaic_brief(exposure_s=60.0, frames_per_visit=4, filters=["V", "R"], trail_px=9.0),
        rig={"filters": [{"name": "V"}, {"name": "R"}]},
    )
    plan = build_plan(brief)
    observer = documents.observer_of(plan.site)
    for visit in plan.visits():
        moments = [visit[0].shots[0].start_utc, end_utc(visit[-1])]
        assert (moments[1] - moments[0]).total_seconds() > 3600
        tt_s = np.asarray(tt_s_from_datetime(moments))
        sun = places.direction("sun", observer, tt_s)
        assert (places.altaz(sun.vector_km, observer, tt_s, refracted=False)[0] < -11.5).all()
    assert "twilight" not in {finding.rule for finding in plan.findings}


def test_the_panels_of_a_visit_are_exposed_alike(plan):
    for visit in plan.visits():
        assert (
            len({shot.exposure_s for passage in visit for shot in passage.shots if "stars" in shot.name}) == 1
        )


def test_a_visit_is_one_entry_in_the_calendar_and_one_setting_up(plan):
    from icalendar import Calendar

    entries = [
        str(each["summary"]) for each in Calendar.from_ical(calendar_text(Outlook(plan))).walk("VEVENT")
    ]
    assert sum("reserve" not in each for each in entries) == 6
    assert sum(step.kind == "set-up" for step in plan.steps) == 6


def test_a_grid_may_be_named():
    plan = build_plan(mosaic_brief(mosaic={"columns": 2, "rows": 1}))
    assert sorted(passage.panel for passage in plan.visits()[0]) == ["A1", "B1"]


def test_cameras_on_one_mount_take_each_panel_together():
    brief = mosaic_brief()
    wide = changed(brief, optics={"focal_length_mm": 200.0, "aperture_mm": 40.0}).rig
    plans = build_plans(brief.model_copy(update={"other_rigs": [wide.model_copy(update={"name": "wide"})]}))
    assert not [each for plan in plans for each in plan.findings if each.rule == "one-mount-two-pointings"]
    for first, second in zip(plans[0].passages, plans[1].passages, strict=True):
        assert first.shots[0].start_utc == second.shots[0].start_utc
        assert (first.aim_ra_deg, first.panel) == (second.aim_ra_deg, second.panel)


def test_what_was_taken_of_a_mosaic_counts_by_visit(plan, tmp_path):
    from astropy.table import Table

    from planner.sequence.replan import taken_from

    track = tmp_path / "track.ecsv"
    names = [plan.visits()[0][0].name]
    Table({"passage": names, "verdict": ["on-track"]}).write(track, format="ascii.ecsv")
    again = build_plans(mosaic_brief(), taken=taken_from(plan, track))[0]
    assert [passage.done for passage in again.passages] == [True] * 8 + [False] * 40
    assert [visit[0].visit for visit in again.visits()] == [1, 2, 3, 4, 5, 6]


def test_a_mosaic_survives_yaml(plan):
    document = documents.strictyaml.parse(documents.dump_plan(plan))
    assert documents._as(type(plan), document) == plan


@pytest.mark.parametrize(
    ("brief", "change", "says"),
    [
        (TRANSIT, {"wish": {"mosaic": "track"}}, "allowed in campaigns"),
        (CAMPAIGN, {"mount": {"kind": "altazimuth"}, "wish": {"mosaic": "track"}}, "allowed is equatorial"),
        (
            CAMPAIGN,
            {"optics": {"focal_length_mm": 2000.0}, "wish": {"mosaic": "track"}},
            "at most 60 are allowed",
        ),
    ],
)
def test_a_mosaic_that_cannot_be_is_refused(brief, change, says):
    with pytest.raises(InputError, match=says):
        build_plan(changed(example(brief), **change))


@settings(max_examples=40, deadline=None)
@given(
    st.floats(-70, 70), st.floats(0, 360), st.floats(0, 360), st.integers(1, 5), st.integers(1, 4),
    st.floats(0.05, 0.4),
)  # fmt: skip
def test_a_grid_leaves_no_gap_wherever_it_lies(dec, ra, angle, columns, rows, overlap):
    """Meridians converge towards the poles and turn the panels against each other: they are moved closer there."""
    from planner.sky.places import offsets_arcsec, radec_from_offsets

    field = Field(3600 * 3.0, 3600 * 2.0, angle)
    panels = panels_over(field, np.array([ra]), np.array([dec]), Grid(columns=columns, rows=rows), overlap)
    assert len(panels) == columns * rows
    right, up = field.along(*offsets_arcsec(ra, dec, panels.ra_deg, panels.dec_deg))
    draw = np.random.default_rng(3)
    x, y = draw.uniform(right.min(), right.max(), 400), draw.uniform(up.min(), up.max(), 400)
    place = radec_from_offsets(ra, dec, *field.on_sky(x, y))
    seen = inside(field, panels.ra_deg[:, None], panels.dec_deg[:, None], *place).any(axis=0)
    assert seen.all()
