"""Every rule can be provoked by a brief, and stays silent for a brief without the fault."""

import re

import pytest

from planner.errors import InputError
from planner.sequence import rules_camera, rules_event, rules_gear, rules_pointing, rules_sky
from planner.sequence.builder import build_plan, build_plans
from planner.sequence.feasibility import stop_at_errors
from planner.sequence.models import Brief
from tests.sequence.briefs import CAMPAIGN, OCCULTATION, TRANSIT, changed, example, example_plan


def meeting() -> Brief:
    brief = example(OCCULTATION)
    event = {"family": "planets-meet", "body": "venus", "other_body": "jupiter", "date": "2026-06-09"}
    return brief.model_copy(update={"event": type(brief.event).model_validate(event)})


def by_day() -> Brief:
    """Mars and Moon 18 degrees from the Sun, high in the day sky of the site."""
    brief = example(OCCULTATION)
    event = {"family": "moon-occults-planet", "body": "mars", "date": "2027-12-29"}
    return brief.model_copy(update={"event": type(brief.event).model_validate(event)})


def eclipsed() -> Brief:
    """Uranus behind the Moon in total eclipse, seen from Japan on 2022 November 8 (published almanacs; from memory)."""
    brief = changed(
        example(OCCULTATION),
        site={"latitude_deg": 35.7, "longitude_deg": 139.7, "timezone": "Asia/Tokyo", "horizon": []},
    )
    event = {"family": "moon-occults-planet", "body": "uranus", "date": "2022-11-08"}
    return brief.model_copy(update={"event": type(brief.event).model_validate(event)})


NARROW = {"width_px": 1200, "height_px": 900}
WHEEL = {"filters": [{"name": "V"}, {"name": "R"}, {"name": "B"}]}
LONG = {"focal_length_mm": 300.0, "aperture_mm": 75.0}

# rule, level, brief, and the change that provokes it
PROVOKED = [
    ("contact-out-of-reach", "caution", TRANSIT, {"site": {"longitude_deg": -20.0, "timezone": "UTC"}}),
    ("contact-out-of-reach", "caution", TRANSIT, {"mount": {"max_altitude_deg": 30.0}}),
    ("contact-uncovered", "caution", TRANSIT, {"wish": {"burst_s": 5.0}}),
    ("contact-sparse", "caution", TRANSIT, {"wish": {"burst_cadence_s": 9.0}}),
    ("contact-low", "caution", TRANSIT, {"site": {"longitude_deg": 10.0, "latitude_deg": 40.0, "horizon": []}}),
    ("clock-too-poor", "caution", TRANSIT, {"clock": {"sigma_s": 3.0}, "wish": {"timing_s": 0.5}}),
    ("zone-suspicious", "caution", TRANSIT, {"site": {"timezone": "America/Denver"}}),
    ("zone-suspicious", "caution", TRANSIT, {"site": {"longitude_deg": -32.87}}),
    ("shots-collide", "error", TRANSIT, {"sensor": {"readout_s": 0.4}, "collide": True}),
    ("buffer-overflows", "error", TRANSIT, {"sensor": {"buffer_frames": 20, "drain_frames_s": 1.0}}),
    ("storage-short", "error", TRANSIT, {"rig": {"storage_gb": 10.0}}),
    ("battery-short", "caution", TRANSIT, {"power": {"battery_wh": 50.0, "draw_w": 30.0}}),
    ("saturates", "caution", TRANSIT, {"wish": {"exposure_s": 0.05}}),
    ("too-faint", "caution", OCCULTATION, {"wish": {"exposure_s": 0.00012}}),
    ("signal-short", "caution", TRANSIT, {"wish": {"signal_to_noise": 300.0}}),
    ("rolling-shutter", "caution", TRANSIT, {"sensor": {"shutter": "rolling", "rolling_readout_s": 0.1}}),
    ("sampling-poor", "note", TRANSIT, {"site": {"seeing_arcsec": 12.0}}),
    ("planet-clipped", "note", CAMPAIGN, {}),
    ("no-exposure-does-both", "note", CAMPAIGN, {"wish": {"planet_frames": 3, "visits": 6}}),
    ("flip-in-burst", "caution", TRANSIT, {"mount": {"flip_s": 60.0}, "site": {"longitude_deg": 10.0},
                                           "wish": {"burst_s": 7000.0}}),
    ("trails", "caution", CAMPAIGN, {"wish": {"exposure_s": 60.0, "visits": 6},
                                     "mount": {"periodic_error_arcsec": 60.0}}),
    ("field-turns", "note", TRANSIT, {"mount": {"kind": "altazimuth"}}),
    ("near-zenith", "caution", TRANSIT, {"mount": {"kind": "altazimuth"}, "site": {"latitude_deg": -18.0,
                                          "longitude_deg": 45.0, "horizon": []}}),
    ("does-not-fit", "caution", TRANSIT, {"sensor": NARROW}),
    ("does-not-fit", "note", CAMPAIGN, {}),
    ("other-body-outside", "caution", meeting, {"wish": {"darkness_deg": 0.0}}),
    ("margin-thin", "note", TRANSIT, {"mount": {"pointing_error_arcsec": 200.0}}),
    ("too-few-stars", "error", CAMPAIGN, {"sensor": {"width_px": 100, "height_px": 80}, "wish": {"visits": 6}}),
    ("target-leaves-frame", "caution", CAMPAIGN, {"mount": {"kind": "fixed"}, "wish": {"visits": 8}}),
    ("sun-near", "caution", by_day, {}),
    ("twilight", "caution", by_day, {}),
    ("twilight", "caution", meeting, {"wish": {"darkness_deg": 0.0}}),
    ("sky-fills-well", "caution", meeting, {"wish": {"exposure_s": 20.0, "darkness_deg": 0.0}}),
    ("moon-glare", "caution", CAMPAIGN, {}),
    ("moon-eclipsed", "caution", eclipsed, {}),
    ("target-low", "note", CAMPAIGN, {"wish": {"visit_when": "solar-depression", "solar_depression_deg": 15.0,
                                               "most_airmass": 20.0}}),
    ("filters-slow", "note", TRANSIT, {"rig": WHEEL, "wish": {"filters": ["V", "R"]}}),
    ("filters-slow", "caution", TRANSIT, {"rig": WHEEL, "wish": {"filters": ["V", "R"], "cadence_s": 10.0}}),
    ("mosaic-long", "note", CAMPAIGN, {"optics": LONG, "wish": {"mosaic": "track", "visits": 6}}),
    ("panel-out-of-reach", "caution", CAMPAIGN, {"wish": {"mosaic": {"columns": 1, "rows": 9}, "visits": 6},
                                                 "site": {"horizon": [[0, 45], [360, 45]]}}),
    ("guide-unfit", "caution", TRANSIT, {"guiding": {"on": "star"}}),
    ("guide-unfit", "caution", CAMPAIGN, {"guiding": {"on": "moon"}}),
    ("guide-unfit", "caution", CAMPAIGN, {"guiding": {"on": "star", "faintest_mag": 2.0}, "wish": {"visits": 6}}),
]  # fmt: skip

# briefs without that fault, in which the rule must be silent
INNOCENT = {
    TRANSIT: {each[0] for each in PROVOKED},
    CAMPAIGN: {"trails", "too-few-stars", "target-leaves-frame", "sun-near", "twilight", "no-exposure-does-both",
               "filters-slow", "mosaic-long", "panel-out-of-reach", "guide-unfit"},
}  # fmt: skip


def findings(brief: Brief) -> dict[str, str]:
    return {each.rule: each.level for each in reversed(build_plan(brief).findings)}


@pytest.mark.parametrize(
    ("rule", "level", "start", "change"), PROVOKED, ids=[f"{p[0]}-{i}" for i, p in enumerate(PROVOKED)]
)
def test_a_brief_provokes_the_rule(rule, level, start, change):
    brief = example(start) if isinstance(start, str) else start()
    change = dict(change)
    if change.pop("collide", False):
        plan = build_plan(brief)
        from planner.sequence.feasibility import judge
        from planner.sequence.setting import settings_of

        shot = plan.passages[2].shots[0].model_copy(update={"cadence_s": 0.1})
        passages = [
            *plan.passages[:2],
            plan.passages[2].model_copy(update={"shots": [shot]}),
            *plan.passages[3:],
        ]
        found = judge(plan.model_copy(update={"passages": passages}), settings_of(brief)[0])
        assert {each.rule: each.level for each in found}[rule] == level
        return
    plan = build_plan(changed(brief, **change))
    told = [each for each in plan.findings if each.rule == rule]
    assert told, [each.rule for each in plan.findings]
    assert level in {each.level for each in told}
    for each in told:
        assert each.where
        assert each.cure.endswith(".")
        assert any(character.isdigit() for character in each.sentence) or rule in (
            "does-not-fit",
            "planet-clipped",
            "guide-unfit",
        )


@pytest.mark.parametrize("name", INNOCENT)
def test_a_sound_brief_does_not(name):
    assert not {each.rule for each in example_plan(name).findings} & INNOCENT[name]


def test_an_event_that_does_not_happen_at_the_site_is_said():
    brief = changed(
        example(OCCULTATION), site={"latitude_deg": 5.0, "longitude_deg": 20.0, "timezone": "UTC"}
    )
    assert findings(brief)["event-does-not-happen"] == "caution"


def test_an_event_below_the_horizon_is_refused_with_the_reason():
    brief = changed(example(TRANSIT), site={"longitude_deg": -140.0, "timezone": "UTC"})
    with pytest.raises(
        InputError, match=r"nothing of it can be photographed from .*: the Sun is below the horizon"
    ):
        build_plan(brief)


def test_a_prediction_too_uncertain_is_said():
    """In the year 2600 the Earth's rotation is not known to a minute."""
    brief = example(OCCULTATION)
    event = {"family": "solar-transit", "body": "venus", "date": "2620-12-01"}
    brief = brief.model_copy(update={"event": type(brief.event).model_validate(event)})
    found = None
    for longitude in range(-180, 180, 45):
        try:
            found = findings(
                changed(brief, site={"longitude_deg": float(longitude), "timezone": "UTC", "horizon": []})
            )
        except InputError:
            continue
        break
    assert found is not None
    assert found["prediction-uncertain"] == "caution"


def test_one_mount_is_never_asked_for_two_pointings():
    brief = example(CAMPAIGN)
    other = brief.rig.model_copy(update={"name": "second"})
    plans = build_plans(changed(brief.model_copy(update={"other_rigs": [other]}), wish={"visits": 6}))
    assert not [each for plan in plans for each in plan.findings if each.rule == "one-mount-two-pointings"]
    moved = plans[1].passages[0].model_copy(update={"aim_ra_deg": 10.0})
    plans[1] = plans[1].model_copy(update={"passages": [moved, *plans[1].passages[1:]]})
    told = list(rules_pointing.shared_mount(plans))
    assert told[0].rule == "one-mount-two-pointings"
    assert told[0].level == "error"


def test_errors_stop_a_plan_and_cautions_stay_in_it():
    plan = build_plan(changed(example(TRANSIT), rig={"storage_gb": 10.0}))
    with pytest.raises(InputError, match=r"storage-short.*10 GB are there.*larger disk"):
        stop_at_errors(plan)
    stop_at_errors(example_plan(CAMPAIGN))


def test_the_documents_name_every_rule(root):
    text = (root / "docs/planning.md").read_text(encoding="utf-8").split("## Findings")[1]
    named = set(re.findall(r"^\| `([a-z-]+)` \|", text, re.MULTILINE))
    source = "".join(
        (root / f"planner/sequence/{name}.py").read_text(encoding="utf-8")
        for name in ("rules_event", "rules_camera", "rules_gear", "rules_pointing", "rules_sky")
    )
    assert named == set(re.findall(r'rule="([a-z-]+)"', source))


def test_every_rule_is_provoked_somewhere():
    rules = {
        rule.__name__.replace("_", "-")
        for module in (rules_event, rules_camera, rules_gear, rules_pointing, rules_sky)
        for rule in module.RULES
    }
    elsewhere = {"event-does-not-happen", "prediction-uncertain"}
    assert rules - {each[0] for each in PROVOKED} == elsewhere
