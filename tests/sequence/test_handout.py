"""What is handed out says the same as the plan, in formats that others can read."""

import csv
import io
import re
import subprocess
from datetime import UTC, datetime, timedelta

import pytest
from click.testing import CliRunner

from planner.errors import InputError
from planner.sequence import documents
from planner.sequence.agenda import calendar_text
from planner.sequence.frametable import frames_csv
from planner.sequence.outlook import Outlook
from planner.sequence.script import script_text
from planner.sequence.sheet import sheet_of
from planner.sequence.wording import duration_text, exposure_text, local_text
from tests.sequence.briefs import CAMPAIGN, EXAMPLES, OCCULTATION, TRANSIT, example_plan


def unfolded(text: bytes) -> list[str]:
    """RFC 5545, 3.1: lines end in CRLF, are at most 75 octets, and go on after a line break and a space."""
    assert b"\n" not in text.replace(b"\r\n", b"")
    assert all(len(line) <= 75 for line in text.split(b"\r\n"))
    return text.decode().replace("\r\n ", "").split("\r\n")


@pytest.mark.parametrize("name", EXAMPLES)
def test_the_calendar_keeps_to_rfc_5545(name):
    """Section 3.6: one version; every event has uid, dtstamp and dtstart; every alarm has action and trigger."""
    needed = {
        "VEVENT": {"UID", "DTSTAMP", "DTSTART", "SUMMARY"},
        "VALARM": {"ACTION", "TRIGGER", "DESCRIPTION"},
    }
    lines = unfolded(calendar_text(Outlook(example_plan(name))))
    assert lines[0] == "BEGIN:VCALENDAR"
    assert lines[-2] == "END:VCALENDAR"
    assert lines.count("VERSION:2.0") == 1
    stack, uids = [], []
    seen: dict[int, set[str]] = {}
    for line in lines[:-1]:
        key, _, value = line.partition(":")
        if key == "BEGIN":
            stack.append(value)
            seen[len(stack)] = set()
        elif key == "END":
            assert stack.pop() == value
            assert needed.get(value, set()) <= seen[len(stack) + 1]
        else:
            seen[len(stack)].add(key.split(";")[0])
            if key.startswith(("DTSTART", "DTEND")):
                datetime.strptime(value, "%Y%m%dT%H%M%SZ").replace(tzinfo=UTC)
            if key == "UID":
                uids.append(value)
    assert not stack
    assert len(uids) == len(set(uids)) > 1


def test_the_calendar_warns_before_each_contact():
    from icalendar import Calendar

    plan = example_plan(TRANSIT)
    calendar = Calendar.from_ical(calendar_text(Outlook(plan)))
    contacts = [each for each in calendar.walk("VEVENT") if str(each["summary"]).startswith("contact")]
    assert len(contacts) == 4
    predicted = [
        datetime.fromisoformat(i["utc"]) for i in plan.circumstances["instants"] if "contact" in i["name"]
    ]
    for entry, moment in zip(contacts, predicted, strict=True):
        assert abs(entry.decoded("dtstart") - moment) < timedelta(seconds=1)
        assert timedelta(minutes=-10) in [alarm.decoded("trigger") for alarm in entry.walk("VALARM")]


@pytest.mark.parametrize("name", [TRANSIT, OCCULTATION])
def test_the_calendar_says_the_same_to_another_reader(name):
    import vobject  # does not share code with the library that writes the calendar
    from icalendar import Calendar

    text = calendar_text(Outlook(example_plan(name)))
    own = Calendar.from_ical(text).walk("VEVENT")
    theirs = vobject.readOne(text.decode() if isinstance(text, bytes) else text).vevent_list
    assert [(str(e["summary"]), e.decoded("dtstart"), len(e.walk("VALARM"))) for e in own] == [
        (e.summary.value, e.dtstart.value, len(e.contents.get("valarm", []))) for e in theirs
    ]


def test_the_frame_table_has_a_line_a_frame():
    plan = example_plan(OCCULTATION)
    rows = list(csv.DictReader(io.StringIO(frames_csv(Outlook(plan)))))
    assert len(rows) == plan.frames_total
    assert rows[0]["start_utc"] == documents.moment_text(plan.passages[0].shots[0].start_utc)
    assert rows[0]["exposure_s"] == f"{plan.passages[0].shots[0].exposure_s:g}"


def shell(script: str, **environment) -> subprocess.CompletedProcess:
    return subprocess.run(
        ["sh"],
        input=script,
        capture_output=True,
        text=True,
        env={"PATH": "/usr/bin:/bin", **environment},
        timeout=30,
    )


def test_a_dry_run_of_the_script_says_what_would_be_shot():
    plan = example_plan(TRANSIT)
    done = shell(script_text(plan, "cam --seconds {exposure_s} --file {name}"), DRY_RUN="1")
    assert done.returncode == 0, done.stderr
    assert "cam --seconds 0.0062 --file approach-approach" in done.stdout
    first = re.search(r"at (\d+): cam", done.stdout).group(1)
    assert int(first) == plan.passages[0].shots[0].start_utc.timestamp() * 1000
    assert "meridian flip" in done.stdout
    assert "front filter" in done.stdout


def test_the_script_can_begin_in_the_middle():
    script = script_text(example_plan(TRANSIT), "cam {exposure_s}")
    done = shell(script, DRY_RUN="1", FROM="egress")
    assert "egress: dense" in done.stdout
    assert "ingress: dense" not in done.stdout


def test_a_template_with_a_count_is_run_once_a_shot():
    plan = example_plan(TRANSIT)
    done = shell(script_text(plan, "cam -n {count} -i {cadence_s} -t {exposure_ms}"), DRY_RUN="1")
    assert done.stdout.count("cam -n") == sum(len(passage.shots) for passage in plan.passages)


def test_the_script_keeps_time_on_a_real_clock(tmp_path):
    """Three frames a second apart: never early, and late only by what a loaded machine takes to start a command."""
    plan = example_plan(TRANSIT)
    start = datetime.now(UTC) + timedelta(seconds=1.5)
    shot = plan.passages[0].shots[0].model_copy(update={"start_utc": start, "cadence_s": 1.0, "count": 3})
    plan = plan.model_copy(
        update={"passages": [plan.passages[0].model_copy(update={"shots": [shot]})], "steps": []}
    )
    done = shell(script_text(plan, f"date +%s.%N >> {tmp_path}/times; : {{exposure_s}}"))
    assert done.returncode == 0, done.stderr
    times = [float(line) for line in (tmp_path / "times").read_text().split()]
    assert len(times) == 3
    for number, moment in enumerate(times):
        assert -0.02 < moment - (start.timestamp() + number) < 0.9


def test_names_cannot_break_out_of_the_script():
    plan = example_plan(TRANSIT)
    evil = plan.passages[0].model_copy(
        update={"name": "'; touch /tmp/owned; '", "purpose": "$(touch /tmp/owned) `id`"}
    )
    script = script_text(
        plan.model_copy(update={"passages": [evil], "title": "x\ntouch /tmp/owned"}), "echo {passage}"
    )
    done = shell(script, DRY_RUN="1")
    assert done.returncode == 0, done.stderr
    assert "touch /tmp/owned" in done.stdout  # said, not done
    assert "uid=" not in done.stdout


@pytest.mark.parametrize(
    ("template", "says"),
    [("cam {shutter}", "allowed are exposure_s"), ("cam {exposure_s", "braces"), (" ", "nothing")],
)
def test_a_wrong_template_is_refused(template, says):
    with pytest.raises(InputError, match=says):
        script_text(example_plan(TRANSIT), template)


def test_the_sheet_tells_contacts_in_utc_and_civil_time():
    sheet = sheet_of(Outlook(example_plan(TRANSIT)))
    first = sheet.instants[0]
    assert first.strong
    assert first.cells[0] == "contact 1"
    # Asia/Nicosia keeps UTC+2 in November (IANA time zone database)
    assert int(first.cells[2][:2]) == int(first.cells[1][6:8]) + 2
    assert first.cells[2].endswith("+02:00")
    assert any("front filter" in row.cells[3] and row.strong for row in sheet.steps)
    assert any("take precedence" in text for text in sheet.cautions)


@pytest.mark.parametrize("name", [TRANSIT, CAMPAIGN])
def test_the_handout_command_writes_all_and_overwrites_nothing(name, tmp_path):
    from planner.cli.main import run_with

    path = tmp_path / "x.plan.yaml"
    path.write_text(documents.dump_plan(example_plan(name)), encoding="utf-8")
    folder = tmp_path / "out"
    assert run_with(["handout", str(path), "-o", str(folder), "--capture", "cam {exposure_s}"]) == 0
    pictures = {"timeline.png", "finder.png", "exposures.png"}
    texts = {"run_sheet.html", "run_sheet.pdf", "plan.ics", "frames.csv", "plan.sh"}
    assert {each.name for each in folder.iterdir()} == pictures | texts
    page = (folder / "run_sheet.html").read_text(encoding="utf-8")
    assert "http://" not in page.replace("http://www.w3.org", "").replace("http://purl.org", "").replace(
        "http://creativecommons.org", ""
    )
    assert b"/Count 1" in (folder / "run_sheet.pdf").read_bytes()
    before = {each.name: each.read_bytes() for each in folder.iterdir()}
    assert run_with(["handout", str(path), "-o", str(folder)]) == 2
    assert before == {each.name: each.read_bytes() for each in folder.iterdir()}


def test_the_finder_shows_the_frame_as_the_camera_sees_it():
    """North lies at minus the camera angle from up; east is to its left, unless the picture is mirrored."""
    from planner.sequence.framing import Field

    north = Field(100.0, 80.0, 12.0).along(0.0, 1.0)
    east = Field(100.0, 80.0, 12.0).along(1.0, 0.0)
    mirrored = Field(100.0, 80.0, 12.0, -1).along(1.0, 0.0)
    assert north[0] > 0
    assert north[1] > 0.97
    assert east[0] < -0.97
    assert mirrored[0] > 0.97


def test_the_finder_draws_mercury_where_the_position_angle_says():
    from matplotlib.figure import Figure

    from planner.sequence.finder import draw_finder

    plan = example_plan(TRANSIT)
    axes = Figure().add_subplot()
    draw_finder(axes, Outlook(plan), next(p for p in plan.passages if p.name == "ingress"))
    here = [line for line in axes.lines if line.get_marker() == "o"][-1]
    x, y = float(here.get_xdata()[0]), float(here.get_ydata()[0])
    contact = plan.circumstances["instants"][0]
    import math

    # position angle in the frame, anticlockwise from up, plus the camera angle: from ICRS north, which is 0.2 deg off
    drawn = (math.degrees(math.atan2(-x, y)) + plan.rig.camera_angle_deg) % 360
    assert drawn == pytest.approx(contact["position_angle_deg"], abs=0.5)


def test_words_for_numbers():
    assert exposure_text(0.0062) == "1/160 s"
    assert exposure_text(2.5) == "2.5 s"
    assert duration_text(50) == "50 s"
    assert duration_text(4 * 3600 + 1800) == "4 h 30 min"
    moment = datetime(2027, 2, 1, 23, 30, tzinfo=UTC)
    assert local_text(moment, "Asia/Nicosia", seconds=False) == "01:30 +02:00 (+1 d)"


def test_comparison_names_what_differs(root):
    from planner.cli.plan import command

    brief = str(root / "configs/mercury_transit_2032.yaml")
    lens = str(root / "configs/rigs/lens_135mm.yaml")
    shown = CliRunner().invoke(command, [brief, "--compare", lens, "--exposure", "0.001", "--json"])
    assert shown.exit_code == 0, shown.output
    import json

    table = json.loads(shown.output)
    assert len(table) == 3
    alone, without, short = table.values()
    assert without["frames"] == "none"
    assert short["exposure"] == "1/1000 s"
    assert float(short["signal-to-noise of the brightest pixel"]) < float(
        alone["signal-to-noise of the brightest pixel"]
    )
    assert alone["frames within 1 sigma of contact 1"] == short["frames within 1 sigma of contact 1"]


def test_sites_and_several_exposures_are_compared_too(root, tmp_path):
    import json

    import yaml

    from planner.cli.plan import command

    site = tmp_path / "elsewhere.yaml"
    site.write_text(
        yaml.safe_dump(
            {"name": "Elsewhere (invented)", "latitude_deg": 35.0, "longitude_deg": -25.0, "height_m": 10.0}
        ),
        encoding="utf-8",
    )
    brief = str(root / "configs/mercury_transit_2032.yaml")
    arguments = [brief, "--compare", str(site), "--exposure", "0.001", "--exposure", "0.002", "--json"]
    shown = CliRunner().invoke(command, arguments)
    assert shown.exit_code == 0, shown.output
    own, elsewhere, fast, slow = json.loads(shown.output).values()
    # ingress happens before sunrise there
    assert elsewhere["frames within 1 sigma of contact 1"] == "0"
    assert int(own["frames within 1 sigma of contact 1"]) > 3
    key = "signal-to-noise of the brightest pixel"
    assert float(slow[key]) / float(fast[key]) == pytest.approx(2**0.5, rel=0.03)


def test_another_rig_is_compared_with_the_filters_it_has(root):
    from planner.sequence.comparison import compare, variants
    from tests.sequence.briefs import changed, example

    wheel = {"filters": [{"name": "L"}, {"name": "R"}]}
    brief = changed(example(CAMPAIGN), rig=wheel, wish={"filters": ["L", "R"], "visits": 6})
    table = compare(variants(brief, (root / "configs/rigs/lens_135mm.yaml",)))
    assert not table.reasons
    frames = next(row for row in table.rows if row.label == "frames")
    assert int(frames.values[0]) == 2 * int(frames.values[1])
