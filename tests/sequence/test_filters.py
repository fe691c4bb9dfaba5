"""A plan may step through several filters, each with its own exposure, and stands still at contacts."""

import csv
import io

import numpy as np
import pytest
from click.testing import CliRunner

from planner.errors import InputError
from planner.sequence import documents
from planner.sequence.builder import build_plan, build_plans
from planner.sequence.capacity import overlaps
from planner.sequence.frametable import frames_csv
from planner.sequence.frametimes import frame_starts
from planner.sequence.outlook import Outlook
from planner.sequence.rules_camera import _changes_s
from planner.sequence.script import script_text
from planner.sequence.sheet import sheet_of
from tests.sequence.briefs import CAMPAIGN, TRANSIT, changed, example

WHEEL = [
    {"name": "V", "bandwidth_nm": 88.0},
    {"name": "R", "bandwidth_nm": 140.0, "focus_offset_steps": 30},
    {"name": "narrow", "bandwidth_nm": 8.8, "refocus": True},
]
CYCLE = {"filters": ["V", "R", "narrow"]}


@pytest.fixture(scope="module")
def transit():
    return build_plan(changed(example(TRANSIT), rig={"filters": WHEEL}, wish=CYCLE))


@pytest.fixture(scope="module")
def campaign():
    wish = {**CYCLE, "visits": 6, "planet_frames": 2}
    return build_plan(changed(example(CAMPAIGN), rig={"filters": WHEEL}, wish=wish))


def test_a_change_takes_the_wheel_the_focuser_and_a_new_focus_where_stated(transit):
    step = transit.rig.filter_step_s
    assert step("V", "V") == 0.0
    assert step("V", "R") == transit.rig.filter_change_s + transit.rig.focus_move_s
    assert step("R", "narrow") == transit.rig.filter_change_s + transit.rig.refocus_s


def test_regular_passages_step_through_all_and_bursts_stay_with_the_first(transit):
    for passage in transit.passages:
        names = {shot.filter for shot in passage.shots}
        assert names == ({"V"} if passage.name in ("ingress", "egress") else {"V", "R", "narrow"})


def test_each_filter_has_the_exposure_its_band_needs(transit):
    """A tenth of the bandwidth needs ten times the exposure: two significant digits and thirds of a stop apart."""
    crossing = next(passage for passage in transit.passages if passage.name.startswith("crossing"))
    exposures = {shot.filter: shot.exposure_s for shot in crossing.shots}
    assert exposures["narrow"] / exposures["V"] == pytest.approx(10.0, rel=0.27)
    peaks = [shot.peak_e for shot in crossing.shots]
    assert max(peaks) < 1.3 * min(peaks)


@pytest.mark.parametrize("name", ["transit", "campaign"])
def test_no_frame_begins_before_its_filter_is_in_place(name, request):
    plan = request.getfixturevalue(name)
    passage, shot, start, exposure = frame_starts(plan)
    between = _changes_s(plan, passage, shot)
    assert between.max() >= plan.rig.filter_change_s
    assert not len(overlaps(start, exposure, plan.rig.sensor.readout_s, between))
    assert "shots-collide" not in {finding.rule for finding in plan.findings}


def test_a_visit_takes_every_kind_of_frame_through_every_filter(campaign):
    for passage in campaign.passages:
        kinds = {(shot.filter, shot.name.rsplit(", ")[-1]) for shot in passage.shots}
        assert kinds == {(name, kind) for name in CYCLE["filters"] for kind in ("stars", "planet")}


def test_flats_are_listed_for_every_filter_used(transit):
    assert {each.filter for each in transit.calibration if each.kind == "flat"} == set(CYCLE["filters"])


def test_sheet_table_and_script_name_the_filter_of_each_frame(transit):
    sheet = sheet_of(Outlook(transit))
    crossing = next(row for row in sheet.passages if row.cells[0].startswith("crossing"))
    assert crossing.cells[7] == "V/R/narrow"
    steps = " ".join(row.cells[-1] for row in sheet.steps)
    assert "in turn V, R, narrow (focus anew after narrow); check the focuser's offsets" in steps
    rows = list(csv.DictReader(io.StringIO(frames_csv(Outlook(transit)))))
    first = [row["filter"] for row in rows if row["passage"] == crossing.cells[0].split(" (")[0]][:6]
    assert first == [*CYCLE["filters"], *CYCLE["filters"]]
    script = script_text(transit, "cam -f {filter} -t {exposure_s}")
    assert "cam -f narrow -t" in script


def test_the_filters_survive_yaml(transit):
    document = documents.strictyaml.parse(documents.dump_plan(transit))
    assert documents._as(type(transit), document) == transit


def test_the_contacts_may_have_a_filter_of_their_own():
    wish = {"filter": "narrow", "filters": ["V", "R"]}
    plan = build_plan(changed(example(TRANSIT), rig={"filters": WHEEL}, wish=wish))
    ingress = next(passage for passage in plan.passages if passage.name == "ingress")
    assert {shot.filter for shot in ingress.shots} == {"narrow"}
    assert "shots-collide" not in {finding.rule for finding in plan.findings}


def test_another_camera_uses_the_filters_it_has():
    brief = changed(example(CAMPAIGN), rig={"filters": WHEEL}, wish={**CYCLE, "visits": 6})
    other = changed(brief, rig={"filters": WHEEL[:1]}).rig.model_copy(update={"name": "plain"})
    first, second = build_plans(brief.model_copy(update={"other_rigs": [other]}))
    assert {shot.filter for shot in first.passages[0].shots} == set(CYCLE["filters"])
    assert {shot.filter for shot in second.passages[0].shots} == {"V"}


def test_a_filter_the_rig_lacks_or_that_is_named_twice_is_refused(tmp_path):
    with pytest.raises(InputError, match=r"'U'; the filters of .* are: V, R, narrow"):
        build_plan(changed(example(TRANSIT), rig={"filters": WHEEL}, wish={"filters": ["V", "U"]}))
    with pytest.raises(ValueError, match="each filter once"):
        changed(example(TRANSIT), wish={"filters": ["V", "V"]})


def test_a_rehearsed_frame_carries_its_filter(campaign, tmp_path):
    """The light of the narrow filter is a tenth of V's in the same exposure."""
    from astropy.io import fits

    from planner.cli.rehearse import command

    path = tmp_path / "c.plan.yaml"
    path.write_text(documents.dump_plan(campaign), encoding="utf-8")
    frames = tmp_path / "frames"
    arguments = [
        str(path),
        "-o",
        str(frames),
        "--passage",
        "visit 1",
        "--thin",
        "8",
        "--binning",
        "8",
        "--jobs",
        "1",
    ]
    done = CliRunner().invoke(command, [*arguments, "--quiet"], standalone_mode=False)
    assert done.exception is None, done.exception
    seen = {fits.getheader(each)["FILTER"] for each in frames.iterdir()}
    planned = [shot.filter for shot in campaign.passages[0].shots]
    assert seen <= set(planned)
    assert len(seen) > 1
    rows = [shot.count for shot in campaign.passages[0].shots]
    order = np.repeat(planned, rows)[::8]
    told = [fits.getheader(each)["FILTER"] for each in sorted(frames.iterdir())]
    assert told == list(order)
