"""A picture of a meeting shows both planets, or the plan says why not."""

import re

import numpy as np
import pytest

from planner.sequence.builder import build_plan, build_plans
from planner.sequence.finder import finder_figure
from planner.sequence.frametimes import planned_frames
from planner.sequence.framing import MARGIN, field_of, inside
from planner.sequence.models import Brief, Plan
from planner.sequence.outlook import Outlook
from tests.sequence.briefs import changed, example, example_plan

MEETING = "planets_meet_2028"


def of_focal_length(focal_length_mm: float, **rig) -> Brief:
    return changed(example(MEETING), optics={"focal_length_mm": focal_length_mm}, rig=rig)


def held(plan: Plan, margin: float) -> dict[str, np.ndarray]:
    """Return in which frames each planet lies inside the margin."""
    frames, sky = planned_frames(plan), Outlook(plan).geometry(planned_frames(plan).middle_tt_s)
    field = field_of(plan.rig, float(frames.rotation_deg[0]))
    assert np.ptp(frames.rotation_deg) == 0
    return {
        name: inside(field, frames.ra_deg, frames.dec_deg, disc.ra_deg, disc.dec_deg, margin)
        for name, disc in sky.discs.items()
    }


def test_every_frame_of_the_example_holds_both_planets_inside_its_margin():
    both = held(example_plan(MEETING), MARGIN)
    assert set(both) == {"venus", "jupiter"}
    assert all(frames.all() for frames in both.values())


def test_short_frames_point_where_the_long_ones_beside_them_do():
    frames = planned_frames(example_plan(MEETING))
    short = frames.exposure_s < 0.01
    assert short[1::2].all()
    assert not short[::2].any()
    # in the two seconds between them the middle of the planets moves by less than a tenth of an arcsecond
    assert frames.dec_deg[1::2] == pytest.approx(frames.dec_deg[::2], abs=0.1 / 3600)
    assert frames.ra_deg[1::2] == pytest.approx(frames.ra_deg[::2], abs=0.1 / 3600)


def test_a_camera_whose_field_does_not_hold_both_follows_the_nearer_and_says_what_would():
    plan = build_plan(of_focal_length(1400.0))
    assert {passage.aim for passage in plan.passages} == {"venus"}
    assert held(plan, 0.0)["venus"].all()
    assert not held(plan, 0.0)["jupiter"].any()
    told = next(each for each in plan.findings if each.rule == "other-body-outside")
    assert "mosaic" in told.cure
    angle_deg = float(re.search(r"camera_angle_deg: ([\d.]+)", told.cure)[1])
    focal_length_mm = float(re.search(r"focal length of ([\d.]+) mm", told.cure)[1])
    for cured in (of_focal_length(1400.0, camera_angle_deg=angle_deg), of_focal_length(focal_length_mm)):
        plan = build_plan(cured)
        assert "other-body-outside" not in {each.rule for each in plan.findings}
        assert all(frames.all() for frames in held(plan, MARGIN).values())


def test_no_camera_angle_is_promised_where_none_holds_both():
    told = {each.rule: each for each in build_plan(of_focal_length(2400.0)).findings}
    assert "camera_angle_deg" not in told["other-body-outside"].cure


@pytest.mark.parametrize(("longer_mm", "aim"), [(900.0, "venus+jupiter"), (1400.0, "venus")])
def test_cameras_on_one_mount_share_the_aim_that_serves_the_narrowest(longer_mm, aim):
    brief = example(MEETING)
    second = of_focal_length(longer_mm).rig.model_copy(update={"name": "second camera (invented)"})
    plans = build_plans(brief.model_copy(update={"other_rigs": [second]}))
    assert {passage.aim for plan in plans for passage in plan.passages} == {aim}
    for plan in plans:
        rules = {each.rule for each in plan.findings}
        assert "one-mount-two-pointings" not in rules
        assert ("other-body-outside" in rules) == (aim == "venus")


def test_an_altazimuth_mount_holds_both_while_the_pair_turns_in_its_field():
    plan = build_plan(changed(of_focal_length(700.0), mount={"kind": "altazimuth"}))
    frames, sky = planned_frames(plan), Outlook(plan).geometry(planned_frames(plan).middle_tt_s)
    assert np.ptp(frames.rotation_deg) > 0.5
    for disc in sky.discs.values():
        for row in range(0, len(frames), 10):
            field, one = field_of(plan.rig, float(frames.rotation_deg[row])), slice(row, row + 1)
            assert inside(
                field, frames.ra_deg[row], frames.dec_deg[row], disc.ra_deg[one], disc.dec_deg[one], MARGIN
            )


def test_the_plan_tells_where_to_point_between_them():
    plan = example_plan(MEETING)
    frames = planned_frames(plan)
    told = re.search(
        r"between Venus and Jupiter \(RA ([\d.]+), Dec ([-+][\d.]+) degrees\)", plan.passages[0].purpose
    )
    assert float(told[1]) == pytest.approx(np.median(frames.ra_deg), abs=0.01)
    assert float(told[2]) == pytest.approx(np.median(frames.dec_deg), abs=0.01)


def test_the_finder_names_both_planets_inside_the_frame():
    plan = example_plan(MEETING)
    axes = finder_figure(Outlook(plan)).axes[0]
    field = field_of(plan.rig)
    places = {text.get_text(): text.get_position() for text in axes.texts}
    for name in ("Venus", "Jupiter"):
        x, y = places[name]
        assert abs(x) < field.half_width_arcsec / 60
        assert abs(y) < field.half_height_arcsec / 60


def test_a_star_behind_a_minor_planet_is_no_pair():
    frames = planned_frames(example_plan("asteroid_occults_star_2028"))
    assert np.ptp(frames.ra_deg) * 3600 < 1.0  # on the star throughout
