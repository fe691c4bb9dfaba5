"""Planets that meet: published mutual occultations, conjunctions, and who stands in front."""

from __future__ import annotations

import numpy as np
import pytest

from planner.errors import InputError
from planner.events.catalogue import family
from planner.events.meeting import PlanetsMeet
from planner.sky import timescale
from planner.sky.observer import Observer
from tests.events.published import civil_s, predicted, rows, spec, utc_s

FAMILY = "planets-meet"
MUTUAL = [
    row
    for row in rows("mutual_occultations")
    if row["back"].lower() in family(FAMILY).targets and int(row["date"][:4]) < 2600
]


@pytest.mark.parametrize(
    "row", MUTUAL, ids=lambda r: f"{r['front']}-{r['back']}-{r['date']}-{r['confidence']}"
)
def test_published_mutual_occultations_happen_with_the_named_planet_in_front(row):
    found = predicted(FAMILY, row["front"].lower(), row["date"], other_body=row["back"].lower())
    # the list is of what some place on Earth sees: geocentrically some pass each other by their parallax
    assert found.facts["discs_meet_somewhere_on_earth"]
    assert found.facts["in_front"] == row["front"].lower()
    if found.facts["discs_meet"]:
        assert (
            found.instant("contact_1").tt_s < found.instant("greatest").tt_s < found.instant("contact_4").tt_s
        )
    if row["time_published"]:
        # from memory, to the minute, "probably TT": within Delta T of that date, whichever it is
        closest = found.instant("greatest").tt_s
        published = civil_s(f"{row['date']} {row['time_published']}:00")
        assert abs(closest - published) < 60.0 + abs(float(timescale.delta_t_s(closest)))


def test_conjunction_in_right_ascension_agrees_with_a_published_second():
    # IMCCE newsletter 55: Mercury and Jupiter, 2010-03-07 19:00:17 UTC, apparent right ascension, 1 degree 11'
    row = next(r for r in rows("stations_oppositions") if r["phenomenon"] == "conjunction with Jupiter")
    found = predicted(FAMILY, "mercury", "2010-03-07", other_body="jupiter")
    instant = found.instant("conjunction_ra")
    assert utc_s(instant.tt_s) == pytest.approx(civil_s(row["date_time_utc"]), abs=2.0)
    assert dict(instant.extra)["separation_arcsec"] / 3600 == pytest.approx(71 / 60, abs=0.02)


def test_the_great_conjunction_of_2020():
    # 2020-12-21: 6.1' apart, conjunction in longitude at 18:20 UTC (almanacs; from memory)
    found = predicted(FAMILY, "saturn", "2020-12-21", other_body="jupiter")
    assert found.least_separation_arcsec / 60 == pytest.approx(6.1, abs=0.1)
    when = timescale.tt_s_from_iso("2020-12-21T18:20:00Z")
    assert found.instant("conjunction_longitude").tt_s == pytest.approx(when, abs=90)
    assert found.facts["in_front"] == "jupiter"


def test_a_meeting_is_the_same_whichever_planet_is_named_first():
    one = predicted(FAMILY, "venus", "2027-08-26", other_body="jupiter")
    two = predicted(FAMILY, "jupiter", "2027-08-26", other_body="venus")
    assert one.instant("greatest").tt_s == pytest.approx(two.instant("greatest").tt_s, abs=1e-3)


def test_the_best_view_of_a_site_is_dark_and_above_its_horizon():
    found = predicted(FAMILY, "venus", "2028-11-10", Observer("x", 34.9, 32.9, 0.0), other_body="jupiter")
    view = found.instant("best_view")
    assert view.visible
    assert view.altitude_deg > 10


def test_a_search_lists_what_is_within_its_limit_and_no_pair_twice():
    start, end = (timescale.tt_s_from_iso(f"{y}-01-01T00:00:00Z") for y in (2027, 2031))
    close = PlanetsMeet(0.5).search(start, end)
    wide = PlanetsMeet(2.0).search(start, end)
    keys = [(e.spec.body, e.spec.other_body, round(e.middle_tt_s)) for e in wide]
    assert len(keys) == len(set(keys))
    assert {e.title for e in close} < {e.title for e in wide}
    only = PlanetsMeet(2.0).search(start, end, bodies=("saturn",))
    assert {e.title for e in only} == {e.title for e in wide if "Saturn" in e.title}


def test_geometry_holds_both_discs_and_stars_are_the_reference():
    one = family(FAMILY)
    event = one.nearest(spec(FAMILY, "venus", "2027-08-26", other_body="jupiter"))
    geometry = one.geometry(event, None, event.middle_tt_s + np.arange(3) * 600.0)
    assert set(geometry.discs) == {"venus", "jupiter"}
    assert geometry.reference == "stars"


@pytest.mark.parametrize(
    ("body", "other", "said"),
    [
        ("venus", None, "other_body: found none"),
        ("venus", "venus", "twice"),
        ("venus", "vulcan", "event.other_body: found 'vulcan'"),
        ("sun", "venus", "event.body: found 'sun'"),
    ],
)
def test_pairs_that_are_none_are_refused(body, other, said):
    with pytest.raises(InputError, match=said):
        family(FAMILY).nearest(spec(FAMILY, body, "2027-08-26", other_body=other))
