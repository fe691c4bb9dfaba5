"""A wrong value is named with file, line, key, what was found and what is allowed."""

import json

import jsonschema
import pytest
from click.testing import CliRunner

from planner.errors import DocumentError
from planner.sequence import documents, models
from tests.conftest import ROOT
from tests.sequence.briefs import EXAMPLES, changed, example, example_plan

SITE = "site: {name: here, latitude_deg: 48, longitude_deg: 11, height_m: 500}"
RIG = (
    "rig: {name: r, sensor: {width_px: 100, height_px: 80, pixel_um: 4},"
    " optics: {focal_length_mm: 100, aperture_mm: 20}}"
)
EVENT = "event: {family: solar-transit, body: mercury, date: 2032-11-13}"


def brief_of(tmp_path, *lines):
    path = tmp_path / "brief.yaml"
    path.write_text("\n".join(("title: t", *lines)), encoding="utf-8")
    return path


WRONG = [
    ((SITE.replace("48", "91"), RIG, EVENT), 2, "site.latitude_deg", "91", "less than or equal to 90"),
    ((SITE.replace("48", "48:30:00"), RIG, EVENT), 2, "site.latitude_deg", "'48:30:00'", "number"),
    ((SITE.replace("500", ".nan"), RIG, EVENT), 2, "site.height_m", "nan", "finite"),
    ((SITE[:-1] + ", timezone: Europe/Atlantis}", RIG, EVENT), 2, "site.timezone", "Atlantis", "IANA"),
    ((SITE, RIG.replace("focal_length_mm", "focal_length"), EVENT), 3, "rig.optics.focal_length", "unknown",
     "did you mean 'focal_length_mm'?"),
    ((SITE, RIG.replace("name: r,", "name: r, pixel_um: 4,"), EVENT), 3, "rig.pixel_um", "unknown",
     "belongs to rig.sensor.pixel_um"),
    ((SITE, RIG[:-1] + ", mount: {kind: equatoral}}", EVENT), 3, "rig.mount.kind", "'equatoral'",
     "did you mean 'equatorial'?"),
    ((SITE, RIG[:-1] + ", mirrored: yes}", EVENT), 3, "rig.mirrored", "'yes'", "true or false"),
    ((SITE, RIG[:-1] + ", storage_gb: '64'}", EVENT), 3, "rig.storage_gb", "'64'", "without quotes"),
    ((SITE, RIG, EVENT.replace("2032-11-13", "2032-11-13T06:00:00")), 4, "event.date", "06:00:00", "Z or an offset"),
    ((SITE, RIG, EVENT.replace("2032-11-13", "20321113")), 4, "event.date", "20321113", "a date is needed"),
    ((SITE, RIG, EVENT.replace("date", "dat")), 4, "event.dat", "unknown", "did you mean 'date'?"),
    ((SITE, RIG), 1, "event", "nothing", "this key is needed"),
    ((SITE, RIG, EVENT, "wish: {visit_when: sidereal-time}"), 5, "wish", "a mapping", "sidereal_time_h"),
    (("site: nowhere.yaml", RIG, EVENT), 2, "site", "'nowhere.yaml'", "no such file"),
    (("site: ../elsewhere.yaml", RIG, EVENT), 2, "site", "elsewhere", "may not leave"),
    (("site: /etc/hostname", RIG, EVENT), 2, "site", "hostname", "may not leave"),
    ((SITE, RIG, "event: soon"), 4, "event", "'soon'", "mapping"),
]  # fmt: skip


@pytest.mark.parametrize(("lines", "line", "key", "found", "allowed"), WRONG)
def test_a_wrong_value_is_named_with_its_place_and_what_is_allowed(
    tmp_path, lines, line, key, found, allowed
):
    path = brief_of(tmp_path, *lines)
    with pytest.raises(DocumentError) as told:
        documents.load_brief(path)
    error = told.value
    assert (error.line, error.key) == (line, key)
    assert found in error.found
    assert allowed in error.allowed
    assert str(error).startswith(f"{path}:{line}: {key}: ")
    assert "\n" not in str(error)


def test_an_error_in_a_file_that_the_brief_names_is_told_with_that_file(tmp_path):
    (tmp_path / "site.yaml").write_text("name: x\nlatitude_deg: 10\nlongitude_deg: 500\nheight_m: 1\n")
    with pytest.raises(DocumentError, match=r"site\.yaml:3: longitude_deg: found 500"):
        documents.load_brief(brief_of(tmp_path, "site: site.yaml", RIG, EVENT))


def test_a_link_may_not_lead_out_of_the_folder(tmp_path):
    outside = tmp_path / "outside.yaml"
    outside.write_text("name: x\nlatitude_deg: 10\nlongitude_deg: 50\nheight_m: 1\n")
    folder = tmp_path / "briefs"
    folder.mkdir()
    (folder / "site.yaml").symlink_to(outside)
    with pytest.raises(DocumentError, match="may not leave"):
        documents.load_brief(brief_of(folder, "site: site.yaml", RIG, EVENT))


def test_a_site_from_the_command_line_takes_the_place_of_the_briefs(tmp_path):
    other = documents.load_site(ROOT / "configs/sites/kestrel_ridge.yaml")
    brief = documents.load_brief(brief_of(tmp_path, "site: nowhere.yaml", RIG, EVENT), site=other)
    assert brief.site == other


def test_a_date_without_a_time_means_noon_and_a_time_is_kept():
    from planner.sky.timescale import utc_iso

    request = models.EventRequest(family="solar-transit", body="mercury", date="2032-11-13")
    assert utc_iso(documents.event_spec(request).date_tt_s, 0) == "2032-11-13T12:00:00Z"
    request = models.EventRequest(family="solar-transit", body="mercury", date="2032-11-13T09:00:00+02:00")
    assert utc_iso(documents.event_spec(request).date_tt_s, 0) == "2032-11-13T07:00:00Z"


@pytest.mark.parametrize("name", EXAMPLES)
def test_a_plan_round_trips_through_yaml_unchanged(name, tmp_path):
    plan = example_plan(name)
    path = tmp_path / "plan.yaml"
    path.write_text(documents.dump_plan(plan), encoding="utf-8")
    again = documents.load_plan(path)
    assert again == plan
    assert documents.dump_plan(again) == documents.dump_plan(plan)


def test_two_plans_differ_only_in_the_lines_of_what_changed():
    from planner.sequence.builder import build_plan

    brief = example("mercury_transit_2032")
    before = documents.dump_plan(example_plan("mercury_transit_2032")).splitlines()
    after = documents.dump_plan(build_plan(changed(brief, rig={"storage_gb": 300.0}))).splitlines()
    differing = [line for line in after if line not in before]
    assert len(before) == len(after)
    assert all("300" in line or "brief:" in line for line in differing), differing


@pytest.mark.parametrize("document", ["site", "rig", "brief", "plan"])
def test_schemas_are_valid_and_accept_the_examples(document, root):
    from planner.cli.schema import command

    schema = json.loads(CliRunner().invoke(command, [document]).output)
    jsonschema.Draft202012Validator.check_schema(schema)
    values = {
        "site": [documents.load_site(path) for path in (root / "configs/sites").glob("*.yaml")],
        "rig": [documents.load_rig(path) for path in (root / "configs/rigs").glob("*.yaml")],
        "brief": [example(name) for name in EXAMPLES],
        "plan": [example_plan(name) for name in EXAMPLES],
    }[document]
    for value in values:
        jsonschema.validate(
            value.model_dump(mode="json"),
            schema,
            format_checker=jsonschema.Draft202012Validator.FORMAT_CHECKER,
        )
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate({"nmae": "x"}, schema)
