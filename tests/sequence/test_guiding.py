"""What a rig guides on is named in the plan, and rules the rate at which the mount runs."""

import pytest

from planner.sequence.builder import build_plan
from planner.sequence.guiding import guide_star
from tests.sequence.briefs import CAMPAIGN, OCCULTATION, TRANSIT, changed, example

EPOCH_2030_S = 30 * 365.25 * 86400.0


def test_in_the_pleiades_one_guides_on_alcyone_and_without_it_on_atlas():
    """Alcyone is HIP 17702, V 2.87, Atlas HIP 17847, V 3.6 (Hipparcos catalogue; from memory)."""
    middle, alcyone = (56.75, 24.12), (56.8712, 24.1051)
    assert guide_star(middle, (0.0, 0.0), 0.7, 9.0, EPOCH_2030_S).startswith("HIP 17702 (V 2.")
    assert guide_star(middle, alcyone, 0.7, 9.0, EPOCH_2030_S).startswith("HIP 17847 (V 3.")
    assert guide_star(middle, (0.0, 0.0), 0.01, 3.0, EPOCH_2030_S) is None


@pytest.mark.parametrize(
    ("name", "on", "guide", "rate"),
    [(TRANSIT, "sun", "the Sun's limb", "solar"), (OCCULTATION, "moon", "the Moon's limb", "lunar")],
)
def test_a_disc_that_is_followed_is_guided_on(name, on, guide, rate):
    plan = build_plan(changed(example(name), guiding={"on": on}))
    assert {passage.guide for passage in plan.passages} == {guide}
    assert {shot.tracking for passage in plan.passages for shot in passage.shots} == {rate}
    assert any(guide in step.text for step in plan.steps)


def test_guiding_on_a_star_lets_the_moon_trail():
    """The Moon moves half an arcsecond a second among the stars, and a mount that holds a star cannot follow it."""
    on_moon, on_star = (
        build_plan(
            changed(example(OCCULTATION), guiding={"on": on, "faintest_mag": 12.0}, wish={"exposure_s": 0.5})
        )
        for on in ("moon", "star")
    )
    trails = [max(s.trail_px for p in plan.passages for s in p.shots) for plan in (on_moon, on_star)]
    assert trails[1] > 2 * trails[0]


def test_a_star_is_named_for_each_visit_in_plan_and_sheet():
    from planner.sequence.outlook import Outlook
    from planner.sequence.sheet import sheet_of

    plan = build_plan(
        changed(example(CAMPAIGN), guiding={"on": "star", "reach_deg": 2.0}, wish={"visits": 6})
    )
    assert all(passage.guide and "arcmin from the middle" in passage.guide for passage in plan.passages)
    sheet = sheet_of(Outlook(plan))
    assert [row.cells[-1] for row in sheet.passages] == [passage.guide for passage in plan.passages]
    assert any("guide on what is named for the visit" in row.cells[-1] for row in sheet.steps)
