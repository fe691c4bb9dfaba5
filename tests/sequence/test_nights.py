"""Campaigns use good nights, spread evenly along the path, and go on from what was taken."""

import numpy as np
import pytest
from astropy.table import Table

from planner.errors import InputError
from planner.sequence.builder import build_plan, build_plans
from planner.sequence.documents import observer_of
from planner.sequence.framing import field_of
from planner.sequence.motion import hour_angle_deg
from planner.sequence.nights import spread_evenly
from planner.sequence.replan import taken_from
from planner.sky import places
from planner.sky.timescale import tt_s_from_datetime
from tests.sequence.briefs import CAMPAIGN, changed, example, example_plan


def visits(plan):
    return np.array([float(tt_s_from_datetime(passage.shots[0].start_utc)) for passage in plan.passages])


def sky_of(plan, tt_s):
    observer = observer_of(plan.site)
    mars = places.direction("mars", observer, tt_s)
    sun = places.direction("sun", observer, tt_s)
    moon = places.direction("moon", observer, tt_s)
    return (
        places.altaz(mars.vector_km, observer, tt_s)[0],
        places.altaz(sun.vector_km, observer, tt_s, refracted=False)[0],
        places.separation_arcsec(mars.vector_km, moon.vector_km) / 3600,
        mars,
    )


def test_visits_are_dark_high_and_away_from_the_moon():
    plan = example_plan(CAMPAIGN)
    altitude, sun, moon, _ = sky_of(plan, visits(plan))
    assert (sun < -11.5).all()
    assert (altitude > 15.0).all()
    assert (moon > 14.9).all()


def test_visits_are_even_along_the_path_not_in_time():
    """Mars stands still at its stations: nights are far apart there and close together at opposition."""
    plan = build_plan(changed(example(CAMPAIGN), wish={"moon_distance_deg": 0.0}))
    _, _, _, mars = sky_of(plan, visits(plan))
    steps = places.separation_arcsec(mars.vector_km[:, :-1], mars.vector_km[:, 1:]) / 3600
    days = np.diff(visits(plan)) / 86400
    turning = np.arange(len(steps))[
        np.argsort(steps)[:4]
    ]  # chords across a station are shorter than the path
    rest = np.setdiff1d(np.arange(len(steps)), turning)
    assert steps[rest].std() / steps[rest].mean() < 0.25
    assert days.max() > 3 * days.min()


def test_a_fixed_sidereal_time_is_kept_to_a_minute():
    plan = build_plan(
        changed(example(CAMPAIGN), wish={"visit_when": "sidereal-time", "sidereal_time_h": 9.5})
    )
    zero = np.zeros(len(plan.passages))
    angle = hour_angle_deg(observer_of(plan.site), zero, zero, visits(plan))
    # the direction of right ascension 0 of J2000 moves by precession: 27 years of 50" are 0.35 degrees
    assert (angle % 360) / 15 == pytest.approx(9.5, abs=0.05)


def test_a_fixed_solar_depression_is_kept_in_the_evening():
    wish = {
        "visit_when": "solar-depression",
        "solar_depression_deg": 14.0,
        "twilight": "evening",
        "most_airmass": 8.0,
    }
    plan = build_plan(changed(example(CAMPAIGN), wish=wish))
    _, sun, _, _ = sky_of(plan, visits(plan))
    _, later, _, _ = sky_of(plan, visits(plan) + 600)
    assert sun == pytest.approx(-14.0, abs=0.25)
    assert (later < sun).all()


def test_reserves_lie_between_the_visits():
    plan = build_plan(changed(example(CAMPAIGN), wish={"reserves": 2, "visits": 10}))
    for passage, after in zip(plan.passages[:-1], plan.passages[1:], strict=True):
        assert len(passage.reserve_utc) == 2
        assert all(
            passage.shots[0].start_utc < moment < after.shots[0].start_utc for moment in passage.reserve_utc
        )


def test_a_target_never_up_at_night_is_refused_with_what_is_missing():
    with pytest.raises(InputError, match=r"no night from .* fewest moments are"):
        build_plan(changed(example(CAMPAIGN), site={"horizon": [[0, 80], [180, 80]]}))


@pytest.mark.parametrize("count", [1, 2, 7, 30])
def test_places_are_spread_evenly_and_none_is_taken_twice(count):
    path = np.sort(np.random.default_rng(4).uniform(0, 100, 200))
    chosen = spread_evenly(path, count)
    assert len(chosen) == len(set(chosen)) <= count
    if count > 2:
        assert np.diff(path[chosen]).std() < 2.0


def track_of(tmp_path, passages, verdict="on-track"):
    path = tmp_path / "track.ecsv"
    Table({"file": ["f"] * len(passages), "passage": passages, "verdict": [verdict] * len(passages)}).write(
        path, format="ascii.ecsv"
    )
    return path


def test_a_new_plan_keeps_what_was_taken_and_spreads_the_rest(tmp_path):
    plan = example_plan(CAMPAIGN)
    taken = [passage.name for passage in plan.passages[:5]]
    again = build_plans(example(CAMPAIGN), taken=taken_from(plan, track_of(tmp_path, taken)))[0]
    assert [p.name for p in again.passages if p.done] == taken
    assert [p.shots for p in again.passages[:5]] == [p.shots for p in plan.passages[:5]]
    assert len(again.passages) == len(plan.passages)
    assert len({passage.name for passage in again.passages}) == len(again.passages)
    assert visits(again)[5] > visits(plan)[4]
    assert abs(visits(again)[5] - visits(plan)[5]) < 3 * 86400


def test_a_gap_of_cloudy_weeks_is_passed_over(tmp_path):
    plan = example_plan(CAMPAIGN)
    taken = [passage.name for passage in plan.passages[:3]]
    again = build_plans(example(CAMPAIGN), taken=taken_from(plan, track_of(tmp_path, taken), "2027-02-01"))[0]
    waiting = [passage for passage in again.passages if not passage.done]
    assert min(passage.shots[0].start_utc for passage in waiting).strftime("%Y-%m-%d") >= "2027-02-01"


def test_unmeasured_frames_do_not_count_as_taken(tmp_path):
    plan = example_plan(CAMPAIGN)
    assert not taken_from(plan, track_of(tmp_path, ["visit 1"], "unmeasured")).passages


def logbook_of(tmp_path, rows):
    """A logbook as DEVELOPERS.md has it, with a column and a table more than a reader needs."""
    import sqlite3
    from contextlib import closing

    path = tmp_path / "logbook.db"
    with closing(sqlite3.connect(path)) as book:
        book.execute(
            "CREATE TABLE frames (file TEXT, passage TEXT, shot TEXT, start_utc TEXT, exposure_s REAL, "
            "state TEXT, verdict TEXT, temperature_c REAL)"
        )
        book.execute("CREATE TABLE happenings (utc TEXT, text TEXT)")
        for number, (passage, state, verdict) in enumerate(rows):
            row = (f"f{number}.fits", passage, "stars", "2026-12-01T03:00:00Z", 2.0, state, verdict, -10.0)
            book.execute("INSERT INTO frames VALUES (?, ?, ?, ?, ?, ?, ?, ?)", row)
        book.commit()
    return path


def test_a_logbook_says_what_was_taken(tmp_path):
    """Checked frames count by their verdict, unchecked ones when half of a visit was taken."""
    plan = example_plan(CAMPAIGN)
    wanted = sum(shot.count for shot in plan.passages[0].shots)
    rows = [("visit 1", "taken", None)] * wanted
    rows += [("visit 2", "taken", "on-track"), ("visit 2", "failed", None)]
    rows += [("visit 3", "taken", "unmeasured")] * wanted  # clouds
    rows += [("visit 4", "failed", None)] * wanted
    rows += [("visit 5", "taken", None)] * (wanted // 2 - 1)  # broken off
    taken = taken_from(plan, logbook_of(tmp_path, rows))
    assert [passage.name for passage in taken.passages] == ["visit 1", "visit 2"]
    again = build_plans(example(CAMPAIGN), taken=taken)[0]
    assert [p.name for p in again.passages if p.done] == ["visit 1", "visit 2"]
    assert len(again.passages) == len(plan.passages)


def test_a_logbook_of_another_kind_or_of_another_plan_is_refused(tmp_path):
    import sqlite3
    from contextlib import closing

    other = tmp_path / "other.db"
    with closing(sqlite3.connect(other)) as book:
        book.execute("CREATE TABLE frames (name TEXT)")
        book.commit()
    with pytest.raises(InputError, match="not a logbook: no such column: passage"):
        taken_from(example_plan(CAMPAIGN), other)
    stranger = logbook_of(tmp_path, [("crossing", "taken", "on-track")])
    with pytest.raises(InputError, match="'crossing' is not in the plan"):
        taken_from(example_plan(CAMPAIGN), stranger)


def test_a_file_that_is_no_track_is_refused(tmp_path):
    plan = example_plan(CAMPAIGN)
    stranger = tmp_path / "x.ecsv"
    stranger.write_text("not a table\n")
    with pytest.raises(InputError, match="not a track"):
        taken_from(plan, stranger)
    with pytest.raises(InputError, match="no such file"):
        taken_from(plan, tmp_path / "none.ecsv")
    with pytest.raises(InputError, match="'visit 99' is not in the plan"):
        taken_from(plan, track_of(tmp_path, ["visit 99"]))
    with pytest.raises(InputError, match="a date such as"):
        taken_from(plan, None, "next week")


def test_the_best_camera_angle_leaves_most_room():
    level = build_plan(changed(example(CAMPAIGN), wish={"camera_angle": "best"}))
    _, _, _, mars = sky_of(level, visits(level))
    fills = {}
    for angle in (level.rig.camera_angle_deg, 5.0, 30.0, 90.0, 150.0):
        field = field_of(level.rig, angle)
        middle = places.radec_deg(places.unit_vector(mars.ra_deg, mars.dec_deg).mean(axis=1, keepdims=True))
        right, up = field.along(*places.offsets_arcsec(middle[0], middle[1], mars.ra_deg, mars.dec_deg))
        fills[angle] = max(np.ptp(right) / field.half_width_arcsec, np.ptp(up) / field.half_height_arcsec)
    assert min(fills, key=fills.get) == level.rig.camera_angle_deg


def test_a_mount_near_the_meridian_is_not_turned_over_every_night():
    plan = example_plan(CAMPAIGN)
    turns = np.diff([passage.flipped for passage in plan.passages]).sum()
    assert turns <= 2
