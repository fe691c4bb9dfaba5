"""A small body hides a star where and when its shadow passes, with the chance its orbit leaves."""

from __future__ import annotations

import dataclasses
import json

import numpy as np
import pytest

from planner.errors import InputError
from planner.events import shadow
from planner.events.asteroid import AsteroidOccultsStar, _chance
from planner.events.catalogue import family
from planner.events.family import EventSpec
from planner.events.occulter import magnitude_drop, occulter_of
from planner.sequence.documents import event_spec, load_brief, observer_of
from planner.sky import places, timescale
from planner.sky.ephemeris import state_km_km_s
from planner.sky.observer import Observer
from planner.sky.stars import star
from tests.conftest import ROOT

FAMILY = AsteroidOccultsStar()


@pytest.fixture(scope="module")
def brief():
    return load_brief(ROOT / "configs/asteroid_occults_star_2028.yaml")


@pytest.fixture(scope="module")
def spec(brief):
    return event_spec(brief.event)


@pytest.fixture(scope="module")
def event(spec):
    return FAMILY.nearest(spec)


@pytest.fixture(scope="module")
def path(event):
    return FAMILY.path(event)


def at(latitude, longitude):
    return Observer("there", float(latitude), float(longitude), 0.0)


def test_the_example_brief_happens_over_its_site(brief, event):
    circumstances = FAMILY.predict(event, observer_of(brief.site))
    assert circumstances.happens
    assert [i.name for i in circumstances.instants] == ["disappearance", "closest", "reappearance"]
    assert all(i.visible and i.sigma_s > 0 for i in circumstances.instants)
    first, _, last = circumstances.instants
    # a central chord lasts the diameter over the speed
    assert last.tt_s - first.tt_s == pytest.approx(circumstances.facts["longest_s"], rel=0.01)
    assert circumstances.facts["chance"] > 0.99


def test_light_time_directions_are_those_of_the_sky_room():
    times = np.linspace(0.0, 1e9, 20)
    here = places.observer_position_km(None, times)
    for body in ("mars", "jupiter"):
        vector, _ = shadow.seen_from(lambda t, b=body: state_km_km_s(b, t), here, times)
        assert np.abs(vector - places.direction(body, None, times).vector_km).max() < 1e-3


@pytest.mark.parametrize("share", [0.1, 0.3, 0.5, 0.7, 0.9])
def test_on_the_centre_line_the_star_passes_behind_the_middle_at_the_printed_time(event, path, share):
    centre = path.lines["centre"]
    seen = np.flatnonzero(np.isfinite(centre.latitude_deg))
    k = seen[int(share * (len(seen) - 1))]
    circumstances = FAMILY.predict(event, at(centre.latitude_deg[k], centre.longitude_deg[k]))
    closest = circumstances.instant("closest")
    assert closest.tt_s == pytest.approx(centre.tt_s[k], abs=0.02)
    assert circumstances.facts["offset_km"] < 0.05
    assert circumstances.facts["shadow_speed_km_s"] == pytest.approx(centre.speed_km_s[k], rel=2e-3)


@pytest.mark.parametrize(("line", "beyond"), [("limit", 0.0), ("sigma", 1.0)])
def test_on_the_limits_the_star_passes_the_edge(event, path, line, beyond):
    for side in (1, 2):
        ground = path.lines[f"{line}_{side}"]
        seen = np.flatnonzero(np.isfinite(ground.latitude_deg))
        k = seen[len(seen) // 2]
        circumstances = FAMILY.predict(event, at(ground.latitude_deg[k], ground.longitude_deg[k]))
        expected = path.width_km / 2 + beyond * path.sigma_across_km
        assert circumstances.facts["offset_km"] == pytest.approx(expected, abs=0.2)
        assert circumstances.happens is (beyond < 0.5 and circumstances.instant("disappearance") is not None)


def test_contacts_bracket_the_disappearance(brief, event):
    here = observer_of(brief.site)
    circumstances = FAMILY.predict(event, here)
    occulter, target = occulter_of(event.spec), star(event.spec.star)

    def hidden(tt_s):
        times = np.array([tt_s])
        apart = places.separation_arcsec(occulter.track(here, times), target.vector(here, times))[0]
        distance = np.sqrt((occulter.track(here, times) ** 2).sum())
        return apart < np.degrees(np.arcsin(70.0 / distance)) * 3600

    first, last = (circumstances.instant(name).tt_s for name in ("disappearance", "reappearance"))
    assert [hidden(t) for t in (first - 0.01, first + 0.01, last - 0.01, last + 0.01)] == [0, 1, 1, 0]


def test_position_angles_turn_half_round_on_a_central_chord(brief, event):
    first, _, last = FAMILY.predict(event, observer_of(brief.site)).instants
    turned = (first.position_angle_deg - last.position_angle_deg) % 360
    assert turned == pytest.approx(180.0, abs=1.0)


@pytest.mark.parametrize(
    ("body", "name", "date"),
    # dates of occultations of stars by planets: a published table (tests/authorities/mutual_occultations.csv)
    [
        ("venus", "Regulus", "1959-07-07"),
        ("jupiter", "HIP 78820", "1971-05-13"),
        ("mars", "HIP 84970", "2078-10-03"),
    ],
)
def test_planets_cover_stars_on_the_published_dates(body, name, date):
    authorities = (ROOT / "tests/authorities/mutual_occultations.csv").read_text(encoding="utf-8")
    assert any(line.startswith(body.capitalize()) and date in line for line in authorities.splitlines())
    asked = EventSpec(
        "asteroid-occults-star", body, timescale.tt_s_from_iso(f"{date}T12:00:00Z") + 40 * 86400.0, star=name
    )
    found = FAMILY.nearest(asked)
    assert timescale.utc_iso(found.middle_tt_s).startswith(date)
    circumstances = FAMILY.predict(found)
    assert circumstances.happens
    assert circumstances.facts["duration_s"] > 60


def test_a_search_finds_the_example_and_a_site_hears_of_what_it_may_see(spec, brief):
    searching = AsteroidOccultsStar(orbit=spec.orbit, magnitude_limit=6.5)
    start = timescale.tt_s_from_iso("2028-09-01T00:00:00Z")
    end = timescale.tt_s_from_iso("2028-12-01T00:00:00Z")
    ticks = []
    found = searching.search(start, end, None, ("asteroid",), lambda done, total: ticks.append((done, total)))
    assert any("HIP 8588" in event.title and "October 14" in event.title for event in found)
    assert ticks
    assert ticks[-1][0] == ticks[-1][1]
    here = searching.search(start, end, observer_of(brief.site), ("asteroid",))
    assert ["HIP 8588" in event.title for event in here] == [True]
    antipode = Observer("antipode", -34.9, -147.1, 0.0)
    assert searching.search(start, end, antipode, ("asteroid",)) == []
    # without an orbit there are planets alone
    assert AsteroidOccultsStar().search(start, start + 86400.0, None, ("asteroid",)) == []


def test_a_search_misses_nothing_that_a_closer_look_finds(spec):
    # every star near the track, looked at one by one on a fine grid
    searching = AsteroidOccultsStar(orbit=spec.orbit, magnitude_limit=9.5)
    start = timescale.tt_s_from_iso("2028-08-01T00:00:00Z")
    end = start + 200 * 86400.0
    found = {round(event.middle_tt_s / 60) for event in searching.search(start, end, None, ("asteroid",))}
    occulter = occulter_of(EventSpec(FAMILY.name, "asteroid", start, orbit=spec.orbit))
    times = np.arange(start, end, 600.0)
    track = occulter.track(None, times)
    distance = np.sqrt((track**2).sum(axis=0))
    from planner.sky.stars import all_stars

    table = all_stars((start + end) / 2, 9.5)
    vectors = places.unit_vector(table.ra_deg, table.dec_deg)
    near = np.flatnonzero(
        (vectors.T @ (track[:, ::144] / distance[::144])).max(axis=1) > np.cos(np.radians(0.5))
    )
    expected = set()
    for k in near:
        one = table.select(np.array([k])).stars()[0]
        apart = places.separation_arcsec(track, one.vector(None, times)) / 206264.8 * distance
        if apart.min() < 6378.0 + 70.0 - 50.0:
            expected.add(round(float(times[np.argmin(apart)]) / 60))
    assert expected
    assert all(any(abs(minute - other) <= 10 for other in found) for minute in expected)


def test_chance_is_that_of_a_normal_error():
    assert _chance(0.0, 10.0, 10.0) == pytest.approx(0.6827, abs=1e-4)
    assert _chance(10.0, 10.0, 5.0) == pytest.approx(0.5, abs=1e-4)
    assert _chance(11.0, 10.0, 0.0) == 0.0
    assert _chance(9.0, 10.0, 0.0) == 1.0


def test_the_drop_in_light_is_that_of_both_less_the_star():
    assert magnitude_drop(12.0, 12.0) == pytest.approx(2.5 * np.log10(2.0))
    assert magnitude_drop(6.0, 16.0) == pytest.approx(10.0, abs=1e-3)
    # Erigone and Regulus 2014: 11.1 magnitudes (IOTA, AAVSO Alert Notice 499), star 1.36, body 12.4
    assert magnitude_drop(1.36, 12.4) == pytest.approx(11.1, abs=0.1)


def test_a_stated_uncertainty_takes_the_place_of_the_elements(event, spec):
    stated = dataclasses.replace(
        event, spec=dataclasses.replace(spec, orbit=dataclasses.replace(spec.orbit, sigma_arcsec=(0.2, 0.1)))
    )
    facts = FAMILY.predict(stated).facts
    assert facts["sigma_across_km"] == pytest.approx(
        0.1 / 206264.8 * facts["distance_au"] * 1.495978707e8, rel=0.01
    )
    assert facts["sigma_along_s"] == pytest.approx(
        2 * facts["sigma_across_km"] / facts["shadow_speed_km_s"], rel=0.01
    )


def test_an_orbit_without_uncertainty_says_what_was_assumed(event, spec):
    bare = dataclasses.replace(spec.orbit, element_sigma=None)
    circumstances = FAMILY.predict(dataclasses.replace(event, spec=dataclasses.replace(spec, orbit=bare)))
    assert any("0.1 arcsec assumed" in text for text in circumstances.cautions)


def test_far_from_the_path_it_does_not_happen(event):
    circumstances = FAMILY.predict(event, at(10.0, 60.0))
    assert not circumstances.happens
    assert "outside the nominal path" in circumstances.reason
    assert [i.name for i in circumstances.instants] == ["closest"]


def test_geojson_is_valid_and_lies_on_the_earth(path):
    document = json.loads(json.dumps(path.as_geojson(), allow_nan=False))
    assert document["type"] == "FeatureCollection"
    lines = {f["properties"]["line"]: f for f in document["features"] if "line" in f["properties"]}
    assert set(lines) == {"centre", "limit_1", "limit_2", "sigma_1", "sigma_2"}
    for feature in document["features"]:
        geometry = feature["geometry"]
        point = geometry["type"] == "Point"
        parts = [geometry["coordinates"]] if point else [p for part in geometry["coordinates"] for p in part]
        for longitude, latitude in parts:
            assert -180 <= longitude <= 180
            assert -90 <= latitude <= 90
    for feature in lines.values():
        for part in feature["geometry"]["coordinates"]:
            # RFC 7946, section 3.1.9: a line is cut at the antimeridian
            assert np.abs(np.diff([point[0] for point in part])).max() < 180


def test_a_line_over_the_antimeridian_is_cut_there():
    latitude = np.array([10.0, 11.0, np.nan, 12.0, 13.0, 14.0])
    longitude = np.array([170.0, 175.0, np.nan, 178.0, -178.0, -170.0])
    nothing = np.zeros(6)
    pieces = shadow._pieces(shadow.Ground(nothing, latitude, longitude, nothing, nothing, np.zeros((3, 6))))
    assert pieces == [
        [[170.0, 10.0], [175.0, 11.0]],
        [[178.0, 12.0], [180.0, 12.5]],
        [[-180.0, 12.5], [-178.0, 13.0], [-170.0, 14.0]],
    ]


def test_geometry_holds_the_star_and_the_body(brief, event):
    times = event.middle_tt_s + np.linspace(-60, 60, 7)
    geometry = FAMILY.geometry(event, observer_of(brief.site), times)
    assert geometry.target == "HIP 8588"
    body = geometry.discs["asteroid"]
    # 140 km at 1.6 au
    assert body.semidiameter_arcsec == pytest.approx(0.060, abs=0.001)
    assert body.magnitude == pytest.approx(10.8, abs=0.3)
    assert geometry.stars[0][0] == "HIP 8588"


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"orbit": None}, r"event\.orbit: found none"),
        ({"body": "vulcan"}, r"event\.body: found 'vulcan'"),
        ({"star": "HIP 999999"}, "does not hold"),
        ({"star": "HIP 11767"}, r"event\.date: found no asteroid-occults-star"),
        ({"date_tt_s": 9e10}, "span of the ephemeris"),
    ],
)
def test_what_cannot_be_is_said_in_one_line(spec, changes, said):
    with pytest.raises(InputError, match=said):
        FAMILY.nearest(dataclasses.replace(spec, **changes))


def test_the_family_is_registered():
    assert isinstance(family("asteroid-occults-star"), AsteroidOccultsStar)


def test_the_path_command_writes_what_it_says(tmp_path):
    from planner.cli.main import run_with

    out = tmp_path / "path.geojson"
    brief = str(ROOT / "configs/asteroid_occults_star_2028.yaml")
    assert run_with(["path", brief, "-o", str(out)]) == 0
    assert json.loads(out.read_text(encoding="utf-8"))["properties"]["width_km"] == 140.0
    assert run_with(["path", brief, "-o", str(out)]) == 2
    assert run_with(["path", str(ROOT / "configs/mercury_transit_2032.yaml")]) == 2


def test_the_search_command_takes_orbits(capsys):
    from planner.cli.main import run_with

    site = str(ROOT / "configs/sites/kestrel_ridge.yaml")
    orbit = str(ROOT / "configs/orbits/halcyon.yaml")
    span = ["--from", "2028-10-01", "--to", "2028-11-01", "--site", site, "--json"]
    assert run_with(["search", *span, "--family", "asteroid-occults-star", "--orbit", orbit]) == 0
    (found,) = json.loads(capsys.readouterr().out)
    assert found["star"] == "HIP 8588"
    assert found["happens"]


def test_two_sites_see_the_body_displaced_by_their_baseline(event, brief):
    from planner.events.against import compare

    here = observer_of(brief.site)
    there = Observer("there", 36.0, 34.0, 100.0)
    comparison = compare(event, here, there)
    middle = next(shift for shift in comparison.shifts if shift.name == "closest")
    facts = comparison.one.facts
    # along: the speed of the shadow times the difference in time; across: what the other site is off the line
    along_km = -middle.later_s * facts["shadow_speed_km_s"]
    kilometres = np.array([along_km, comparison.other.facts["offset_km"]])
    seen = (
        np.abs([middle.along_arcsec, middle.across_arcsec]) / 206264.8 * facts["distance_au"] * 1.495978707e8
    )
    assert seen == pytest.approx(np.abs(kilometres), abs=1.0)


def test_an_spk_file_serves_as_an_orbit(spec, event, tmp_path):
    # places of the example's body, written to a file of Chebyshev records for forty days
    from numpy.polynomial.chebyshev import chebinterpolate

    from planner.sequence.documents import load_orbit, orbit_of
    from tests.sky.test_smallbody import write_spk

    occulter = occulter_of(spec)
    start, interval, count = event.middle_tt_s - 20 * 86400.0, 4 * 86400.0, 10
    records = []
    for k in range(count):
        middle, half = start + (k + 0.5) * interval, interval / 2
        parts = [
            chebinterpolate(lambda s, a=axis, m=middle, h=half: occulter.state(m + h * s)[0][a], 12)
            for axis in range(3)
        ]
        records.append(np.concatenate([[middle, half], *parts]))
    words = np.concatenate([*records, [start, interval, len(records[0]), count]])
    write_spk(tmp_path / "body.bsp", 2, words, start, start + count * interval, centre=0)
    document = tmp_path / "orbit.yaml"
    document.write_text(
        "name: By file\nspk: body.bsp\ndiameter_km: 140\nsigma_along_arcsec: 0.04\nsigma_across_arcsec: 0.01\n"
    )
    by_file = dataclasses.replace(spec, orbit=orbit_of(load_orbit(document)))
    found = FAMILY.nearest(by_file)
    assert found.middle_tt_s == pytest.approx(event.middle_tt_s, abs=0.01)
    assert FAMILY.predict(found).facts["sigma_across_km"] == pytest.approx(11.6, abs=0.3)
    # beyond the file there is nothing to find, which is said
    with pytest.raises(InputError, match=r"event\.date: found no asteroid-occults-star"):
        FAMILY.nearest(dataclasses.replace(by_file, date_tt_s=event.middle_tt_s + 8 * 365.25 * 86400.0))


def test_a_one_line_orbit_serves_as_an_orbit(spec, event, tmp_path):
    from planner.sequence.documents import load_orbit, orbit_of

    line = (
        "Z0001    7.40  0.15 K28AH  73.44451   95.00000  205.03144    7.50000  0.1200000  0.22847471   2.6500000  0 "
        "MPO000000   100  10 2000-2028 0.50 M-v 3Ek Some       0000      (0) Halcyon                20280101"
    )
    path = tmp_path / "orbit.txt"
    path.write_text(line + "\n")
    read = orbit_of(load_orbit(path))
    # a day later than the elements' own epoch, so that the date is that of another place on the orbit
    same = dataclasses.replace(read, epoch_jd_tdb=spec.orbit.epoch_jd_tdb)
    found = FAMILY.nearest(dataclasses.replace(spec, orbit=same))
    # five decimals of a degree are 0.02" heliocentric, some seconds of the event
    assert found.middle_tt_s == pytest.approx(event.middle_tt_s, abs=10.0)
    assert any("U = 0" in text for text in FAMILY.predict(found).cautions)


def test_the_budget_is_how_far_contacts_scatter_when_the_orbit_is_off(spec, event, path):
    # a site well off the centre line, where an error across the path shortens the chord
    ground = path.lines["limit_1"]
    centre = path.lines["centre"]
    k = np.flatnonzero(np.isfinite(centre.latitude_deg))[180]
    share = 0.7
    here = at(
        centre.latitude_deg[k] + share * (ground.latitude_deg[k] - centre.latitude_deg[k]),
        centre.longitude_deg[k] + share * (ground.longitude_deg[k] - centre.longitude_deg[k]),
    )
    nominal = FAMILY.predict(event, here).instant("disappearance")
    stated = dict((term.name, term.sigma_s) for term in nominal.budget)["orbit"]
    shifts = []
    for which, sigma in enumerate(spec.orbit.element_sigma):
        elements = list(spec.orbit.elements)
        elements[which] += 0.3 * sigma
        off = dataclasses.replace(spec.orbit, elements=tuple(elements))
        moved = dataclasses.replace(event, spec=dataclasses.replace(event.spec, orbit=off))
        shifts.append((FAMILY.predict(moved, here).instant("disappearance").tt_s - nominal.tt_s) / 0.3)
    assert stated == pytest.approx(float(np.linalg.norm(shifts)), rel=0.1)
