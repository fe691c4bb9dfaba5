"""`predict` and `search` at the front door: the machine interface, the table to shoot from, and wrong input."""

from __future__ import annotations

import json
import re

import pytest

from planner.cli.main import run_with
from tests.conftest import ROOT

TRANSIT = ROOT / "configs/mercury_transit_2032.yaml"
MUNICH = "48.137,11.575,520"


def run(capsys, *arguments):
    code = run_with([str(a) for a in arguments])
    captured = capsys.readouterr()
    return code, captured.out, captured.err


def predict(capsys, *arguments):
    code, out, err = run(capsys, "predict", *arguments, "--json")
    assert code == 0, err
    return json.loads(out)


def test_a_prediction_as_json_has_the_keys_that_scripts_rely_on(capsys):
    found = predict(capsys, "--event", "moon-occults-planet:mars:2022-12-08", "--at", MUNICH)
    assert found["family"] == "moon-occults-planet"
    assert found["body"] == "mars"
    assert found["happens"] is True
    assert found["reason"] is None
    assert found["site"] == {
        "name": MUNICH,
        "latitude_deg": 48.137,
        "longitude_deg": 11.575,
        "height_m": 520.0,
    }
    names = [instant["name"] for instant in found["instants"]]
    assert names == [
        "disappearance_start",
        "disappearance_end",
        "closest",
        "reappearance_start",
        "reappearance_end",
    ]
    for instant in found["instants"]:
        assert re.fullmatch(r"2022-12-08T\d\d:\d\d:\d\d\.\d+Z", instant["utc"])
        assert instant["sigma_s"] > 0
        assert instant["largest_term"] in instant["budget_s"]
        assert 0 <= instant["position_angle_deg"] < 360
        assert instant["visible"] is True
        assert instant["limited_by"] is None
    assert {"least_separation_arcsec", "conventions", "cautions", "title"} <= set(found)
    assert "radii" in found["conventions"]


def test_geocentric_predictions_have_no_altitude_and_name_the_geocentre(capsys):
    found = predict(capsys, "--event", "solar-transit:venus:2012-06-06", "--geocentric")
    assert found["site"] == "geocentre"
    assert [i["name"] for i in found["instants"]] == [
        "contact_1",
        "contact_2",
        "greatest",
        "contact_3",
        "contact_4",
    ]
    assert all(i["altitude_deg"] is None for i in found["instants"])
    assert found["instants"][2]["utc"].startswith("2012-06-06T01:29:3")
    assert found["least_separation_arcsec"] == pytest.approx(554.4, abs=0.1)


@pytest.mark.parametrize(
    ("event", "names"),
    [
        ("moon-occults-star:HIP 49669:2017-07-25", {"disappearance", "closest", "reappearance"}),
        ("planets-meet:jupiter+saturn:2020-12-21", {"greatest", "conjunction_ra", "conjunction_longitude"}),
        (
            "retrograde-track:mars:2022-12-08",
            {"station_ra_1", "station_ra_2", "station_longitude_1", "station_longitude_2", "opposition"},
        ),
        ("retrograde-track:mercury:2026-11-04", {"station_ra_1", "station_longitude_2", "conjunction"}),
        (
            "apparition-arc:venus:2028-03-01",
            {
                "superior_conjunction",
                "greatest_elongation_east",
                "greatest_brilliancy",
                "inferior_conjunction",
            },
        ),
    ],
)
def test_every_family_answers_without_a_file_and_geocentrically(capsys, event, names):
    found = predict(capsys, "--event", event, "--geocentric")
    assert names <= {instant["name"] for instant in found["instants"]}
    json.dumps(found, allow_nan=False)


def test_what_does_not_happen_at_a_site_is_no_error(capsys):
    found = predict(capsys, "--event", "moon-occults-planet:mars:2022-12-08", "--at", "-35.3,149.1,580")
    assert found["happens"] is False
    assert found["reason"]


def test_a_brief_and_its_options_say_the_same(capsys):
    by_brief = predict(capsys, TRANSIT)
    site = ROOT / "configs/sites/kestrel_ridge.yaml"
    by_option = predict(capsys, "--event", "solar-transit:mercury:2032-11-13", "--site", site)
    assert by_brief["instants"] == by_option["instants"]


@pytest.mark.parametrize("brief", sorted((ROOT / "configs").glob("*.yaml")), ids=lambda p: p.stem)
def test_every_example_brief_happens_at_its_site(capsys, brief):
    assert predict(capsys, brief)["happens"] is True


def test_the_table_gives_utc_civil_time_what_is_seen_and_the_caution_for_the_sun(capsys):
    code, out, _ = run(capsys, "predict", TRANSIT)
    assert code == 0
    row = next(line for line in out.splitlines() if line.strip().startswith("contact I "))
    assert "2032-11-13 06:41:2" in row
    assert "11-13 08:41:2" in row
    assert "EET" in row
    assert row.rstrip().endswith("yes")
    assert "CAUTION: Never look at the Sun" in out
    assert "least separation" in out


def test_two_sites_differ_by_their_parallax(capsys):
    found = predict(capsys, TRANSIT, "--against", "-31.2,149.1,1100")
    against = found["against"]
    assert against["baseline_km"] == pytest.approx(11_900, rel=0.1)
    greatest = next(i for i in against["instants"] if i["name"] == "greatest")
    shift = (greatest["along_arcsec"] ** 2 + greatest["across_arcsec"] ** 2) ** 0.5
    # Mercury at 0.678 au against the Sun at 0.990: 8.794 (1/0.678 - 1/0.990) = 4.1" over an Earth's radius
    assert 2.0 < shift < 4.1 * 2
    contact = next(i for i in against["instants"] if i["name"] == "contact_3")
    assert abs(contact["later_s"]) > 20


def test_a_site_against_itself_differs_by_nothing(capsys):
    found = predict(
        capsys, "--event", "moon-occults-planet:mars:2022-12-08", "--at", MUNICH, "--against", MUNICH
    )
    for row in found["against"]["instants"]:
        assert row["later_s"] == pytest.approx(0.0, abs=1e-6)
        assert row["along_arcsec"] == pytest.approx(0.0, abs=1e-6)


def test_the_moon_shifts_by_its_parallax_between_two_sites(capsys):
    # a degree of latitude is 111 km: 111 / 384,000 rad = 60", seen from below at the Moon's altitude
    found = predict(
        capsys,
        "--event",
        "moon-occults-planet:mars:2022-12-08",
        "--at",
        MUNICH,
        "--against",
        "47.137,11.575,520",
    )
    row = next(r for r in found["against"]["instants"] if r["name"] == "closest")
    assert 25 < (row["along_arcsec"] ** 2 + row["across_arcsec"] ** 2) ** 0.5 < 62


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        ((), "give a BRIEF or --event"),
        (("--event", "solar-transit:mercury:2032-11-13"), "site: found none"),
        (("--event", "solar-transit:mercury", "--geocentric"), "FAMILY:BODY:DATE"),
        (("--event", "solar-transit:mercury:tomorrow", "--geocentric"), "found date 'tomorrow'"),
        (("--event", "solar-transit:mercury:2032-13-40", "--geocentric"), "found date"),
        (
            ("--event", "solar-transit:mars:2032-11-13", "--geocentric"),
            "allowed for solar-transit are mercury, venus",
        ),
        (("--event", "sun-dance:mars:2032-11-13", "--geocentric"), "event.family: found 'sun-dance'"),
        (("--event", "solar-transit:venus:1400-01-01", "--geocentric"), "allowed is 1550"),
        (("--event", "solar-transit:venus:2012-06-06", "--at", "48.1,11.5"), "without height"),
        (
            ("--event", "solar-transit:venus:2012-06-06", "--at", "98.1,11.5,0"),
            "latitude 98.1; allowed is -90 to 90",
        ),
        (("--event", "solar-transit:venus:2012-06-06", "--at", "a,b,c"), "LAT,LON,HEIGHT"),
        (("--event", "solar-transit:venus:2012-06-06", "--at", "nan,1,1"), "latitude nan"),
        (
            ("--event", "solar-transit:venus:2012-06-06", "--at", MUNICH, "--geocentric"),
            "found more than one",
        ),
        (("--event", "solar-transit:venus:2012-06-06", "--at", MUNICH, "--timezone", "Mars/Olympus"), "IANA"),
        (("--event", "solar-transit:venus:2012-06-06", "--geocentric", "--radii", "round"), "event.radii"),
        (("--event", "moon-occults-star:HIP 999999:2027-01-01", "--geocentric"), "does not hold"),
        (("--event", "planets-meet:venus:2027-01-01", "--geocentric"), "event.other_body"),
        (
            ("--event", "moon-occults-star:10.0,5.0:2027-01-01", "--geocentric", "--pm", "fast"),
            "--pm: found 'fast'",
        ),
        (
            ("--event", "moon-occults-planet:mars:2022-12-08", "--geocentric", "--limb-orientation", "x.bpc"),
            "--limb: found none",
        ),
        (("--event", "moon-occults-planet:mars:2022-12-08", "--geocentric", "--limb", __file__), "found"),
        (
            ("--event", "moon-occults-planet:mars:2022-12-08", "--at", MUNICH, "--against", "nowhere"),
            "--against",
        ),
    ],
)
def test_wrong_input_is_one_line_that_says_what_was_found_and_what_is_allowed(capsys, arguments, said):
    code, out, err = run(capsys, "predict", *arguments)
    assert code == 2
    assert out == ""
    assert said in err
    assert len(err.strip().splitlines()) == 1
    assert "Traceback" not in err


def search(capsys, *arguments):
    code, out, err = run(capsys, "search", *arguments, "--json")
    assert code == 0, err
    return json.loads(out)


def test_a_search_lists_the_same_objects_with_less_in_them(capsys):
    found = search(
        capsys,
        "--from",
        "2032-01-01",
        "--to",
        "2033-01-01",
        "--at",
        "34.93,32.87,1420",
        "--family",
        "solar-transit",
    )
    assert [one["title"] for one in found] == ["Mercury crosses the Sun, 2032 November 13"]
    assert {"name", "utc", "sigma_s", "visible", "limited_by"} <= set(found[0]["instants"][0])
    assert "budget_s" not in found[0]["instants"][0]


def test_the_example_occultation_is_what_its_comment_says_finds_it(capsys):
    found = search(
        capsys,
        "--from",
        "2030-01-01",
        "--to",
        "2031-01-01",
        "--site",
        ROOT / "configs/sites/kestrel_ridge.yaml",
        "--family",
        "moon-occults-planet",
        "--night",
    )
    assert [one["body"] for one in found] == ["uranus"]


def test_limits_leave_out_what_is_low_faint_or_by_day(capsys):
    span = (
        "--from",
        "2027-08-01",
        "--to",
        "2027-12-01",
        "--at",
        "34.93,32.87,1420",
        "--family",
        "moon-occults-star",
    )
    everything = search(capsys, *span, "--magnitude", "5", "--altitude", "0")
    titles = {one["title"] for one in everything}
    assert {one["title"] for one in search(capsys, *span, "--magnitude", "5", "--altitude", "40")} < titles
    assert {one["title"] for one in search(capsys, *span, "--magnitude", "3", "--altitude", "0")} < titles
    assert {
        one["title"] for one in search(capsys, *span, "--magnitude", "5", "--altitude", "0", "--night")
    } <= titles


def test_a_search_over_all_families_tells_of_each(capsys):
    found = search(capsys, "--from", "2027-01-01", "--to", "2028-06-01", "--at", "34.93,32.87,1420")
    families = {one["family"] for one in found}
    assert {
        "moon-occults-planet",
        "moon-occults-star",
        "planets-meet",
        "retrograde-track",
        "apparition-arc",
    } <= families


def test_a_geocentric_search_needs_no_site(capsys):
    span = ("--from", "2004-01-01", "--to", "2013-01-01", "--geocentric")
    found = search(capsys, *span, "--body", "venus", "--family", "solar-transit")
    titles = [one["title"] for one in found]
    assert titles == ["Venus crosses the Sun, 2004 June 8", "Venus crosses the Sun, 2012 June 6"]


def test_the_list_for_people_has_a_line_an_event(capsys):
    span = ("--from", "2030-03-01", "--to", "2030-04-01", "--at", "34.93,32.87,1420")
    code, out, _ = run(capsys, "search", *span, "--family", "moon-occults-planet")
    assert code == 0
    assert sum("The Moon covers" in line for line in out.splitlines()) == 1


def test_a_table_and_a_calendar_are_written_and_never_overwritten(capsys, tmp_path):
    import icalendar
    from astropy.table import QTable

    table, calendar = tmp_path / "events.ecsv", tmp_path / "events.ics"
    span = ("--from", "2030-03-01", "--to", "2030-06-01", "--at", "34.93,32.87,1420")
    code, _, err = run(capsys, "search", *span, "--ecsv", table, "--ical", calendar)
    assert code == 0, err
    rows = QTable.read(table, format="ascii.ecsv")
    assert rows["sigma"].unit == "s"
    assert "disappearance_start" in list(rows["instant"])
    assert "34.93" in rows.meta["site"]
    entries = icalendar.Calendar.from_ical(calendar.read_bytes()).walk("VEVENT")
    uranus = [e for e in entries if "Uranus" in str(e["summary"]) and "covers" in str(e["summary"])]
    assert len(uranus) == 1
    assert uranus[0].decoded("dtstart").isoformat() == "2030-03-11T19:14:22+00:00"
    assert "disappearance start" in str(uranus[0]["description"])
    assert len({str(e["uid"]) for e in entries}) == len(entries)
    before = table.read_bytes()
    code, _, err = run(capsys, "search", *span, "--ecsv", table)
    assert code == 2
    assert "exists already and is kept" in err
    assert table.read_bytes() == before


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("--from", "2027-01-01", "--to", "2026-01-01", "--geocentric"), "--to: found 2026-01-01, not after"),
        (("--from", "soon", "--to", "2026-01-01", "--geocentric"), "--from: found 'soon'"),
        (("--from", "1500-01-01", "--to", "2026-01-01", "--geocentric"), "allowed is 1550"),
        (("--from", "2026-01-01", "--to", "2027-01-01"), "give one of --at"),
        (
            ("--from", "2026-01-01", "--to", "2027-01-01", "--geocentric", "--body", "vulcan"),
            "--body: found 'vulcan'",
        ),
        (
            ("--from", "2026-01-01", "--to", "2027-01-01", "--geocentric", "--family", "eclipse"),
            "event.family",
        ),
    ],
)
def test_a_wrong_search_is_one_line(capsys, arguments, said):
    code, _, err = run(capsys, "search", *arguments)
    assert code == 2
    assert said in err
    assert len(err.strip().splitlines()) == 1


@pytest.mark.parametrize("command", ["predict", "search"])
def test_help_shows_an_example(capsys, command):
    code, out, _ = run(capsys, command, "--help")
    assert code == 0
    assert f"syzygraph {command} " in out
