"""What every family promises to those above it, tried on each example brief."""

from __future__ import annotations

import json

import numpy as np
import pytest

from planner.errors import InputError
from planner.events import listing
from planner.events.catalogue import FAMILIES, family
from planner.sequence.documents import event_spec, load_brief, observer_of
from tests.conftest import ROOT

BRIEFS = sorted((ROOT / "configs").glob("*.yaml"))


@pytest.fixture(scope="module", params=BRIEFS, ids=lambda path: path.stem)
def asked(request):
    brief = load_brief(request.param)
    spec = event_spec(brief.event)
    one = family(spec.family)
    return one, one.nearest(spec), observer_of(brief.site)


def test_there_is_an_example_brief_for_every_family():
    assert {load_brief(path).event.family for path in BRIEFS} == set(FAMILIES)


def test_instants_come_in_time_order_with_names_of_their_own_and_a_budget_each(asked):
    one, event, observer = asked
    for where in (observer, None):
        found = one.predict(event, where)
        times = [instant.tt_s for instant in found.instants]
        names = [instant.name for instant in found.instants]
        assert times == sorted(times)
        assert len(set(names)) == len(names)
        for instant in found.instants:
            assert instant.budget
            assert np.isfinite(instant.sigma_s)
            assert instant.largest_term in {term.name for term in instant.budget}
            assert np.isfinite(instant.altitude_deg) == (where is not None)
            assert instant.visible == (instant.limited_by is None)
        assert found.conventions
        assert found.cautions


def test_the_event_holds_its_instants_and_its_middle(asked):
    one, event, observer = asked
    assert event.start_tt_s < event.middle_tt_s < event.end_tt_s
    assert event.spec.date_tt_s == pytest.approx(event.middle_tt_s, abs=1.0)
    found = one.predict(event, observer)
    slack = 1.0 if one.campaign else 0.6 * 86400
    for instant in found.instants:
        if not instant.name.startswith(("conjunction", "best")):
            assert event.start_tt_s - slack <= instant.tt_s <= event.end_tt_s + slack


def test_geometry_is_arrays_of_as_many_values_as_times(asked):
    one, event, observer = asked
    times = np.linspace(event.start_tt_s, event.end_tt_s, 7)
    for where in (observer, None):
        geometry = one.geometry(event, where, times)
        assert geometry.reference == one.reference
        assert geometry.reference == "stars" or geometry.reference in geometry.discs
        assert geometry.target in geometry.discs or geometry.target in [star[0] for star in geometry.stars]
        for disc in geometry.discs.values():
            for name in (
                "ra_deg",
                "dec_deg",
                "semidiameter_arcsec",
                "phase_angle_deg",
                "pole_pa_deg",
                "distance_km",
            ):
                values = getattr(disc, name)
                assert values.shape == times.shape
                assert np.isfinite(values).all()
        for values in (
            geometry.altitude_deg,
            geometry.azimuth_deg,
            geometry.zenith_pa_deg,
            geometry.sun_altitude_deg,
        ):
            assert values.shape == times.shape
            assert np.isfinite(values).all() == (where is not None)


def test_geometry_of_one_time_is_that_of_many(asked):
    one, event, observer = asked
    times = np.linspace(event.start_tt_s, event.end_tt_s, 5)
    many = one.geometry(event, observer, times)
    for k in (0, 3):
        alone = one.geometry(event, observer, times[k : k + 1])
        for name, disc in alone.discs.items():
            assert disc.ra_deg[0] == pytest.approx(many.discs[name].ra_deg[k], abs=1e-9)
        assert alone.altitude_deg[0] == pytest.approx(many.altitude_deg[k], abs=1e-6)


def test_the_table_and_the_object_say_the_same_and_hold_no_nan(asked):
    one, event, observer = asked
    found = one.predict(event, observer)
    text = json.dumps(listing.as_object(found), allow_nan=False)
    page = listing.as_table(found)
    assert event.title in page
    assert "nan" not in page
    for instant in json.loads(text)["instants"]:
        assert instant["utc"][:19].replace("T", " ")[:16] in page or instant["sigma_s"] >= 5
    assert all(f"CAUTION: {caution}" in page for caution in found.cautions)


def test_asking_again_gives_the_same_to_the_last_digit(asked):
    one, event, observer = asked
    first, second = (one.predict(event, observer) for _ in range(2))
    assert [i.tt_s for i in first.instants] == [i.tt_s for i in second.instants]


def test_a_family_that_does_not_exist_is_refused_with_those_that_do():
    with pytest.raises(InputError, match=r"event\.family: found 'sun-dance'; allowed are solar-transit"):
        family("sun-dance")
