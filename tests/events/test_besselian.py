"""Polynomials for many sites against direct evaluation, and what the search over the Moon's path may not miss."""

from __future__ import annotations

import numpy as np
import pytest

from planner.events.contacts import Passing, Shape, star_track
from planner.events.moon import limb_track
from planner.events.moon_planet import MoonOccultsPlanet
from planner.events.moon_search import as_table, moon_candidates, zodiac_stars
from planner.sky import bodies, starlist, stars, timescale
from planner.sky.observer import Observer

SITES = [
    Observer("middle", 34.93, 32.87, 1420.0),
    Observer("south", -31.2, 149.1, 1100.0),
    Observer("north", 78.2, 15.6, 0.0),
    Observer("high", 0.0, -78.0, 5000.0),
]


@pytest.fixture(scope="module")
def year():
    start, end = (timescale.tt_s_from_iso(f"{y}-01-01T00:00:00Z") for y in (2027, 2028))
    rows = zodiac_stars(4.5)
    return start, end, rows, moon_candidates(start, end, bodies.PLANETS, starlist.star_list()[rows])


@pytest.mark.parametrize("site", SITES, ids=lambda s: s.name)
def test_contacts_from_polynomials_agree_with_direct_evaluation(year, site):
    _, _, rows, candidates = year
    seen = candidates.passings.contacts(site)
    worst = 0.0
    for k in np.flatnonzero(np.isfinite(seen.outer).all(axis=1) & (candidates.star >= 0))[:25]:
        star = stars.star(stars.star_names(rows[candidates.star[k] : candidates.star[k] + 1])[0])
        passing = Passing(
            limb_track,
            star_track(star),
            Shape(bodies.radii_km("moon")[0]),
            Shape(0.0),
            site,
        )
        direct = passing.contacts(seen.closest[k : k + 1], 8000.0, inner=False)[0]
        half_s = 0.5 * (direct[1] - direct[0])
        # an error of 1 m in the chord's height is an error of 1 m / (1 km/s) times R / chord in a contact
        worst = max(worst, np.abs(direct - seen.outer[k]).max() * min(1.0, half_s / 1000.0))
    assert 0.0 < worst < 1.5e-3


def test_discs_of_planets_agree_too(year):
    _, _, _, candidates = year
    one = MoonOccultsPlanet()
    compared = 0
    for site in SITES:
        seen = candidates.passings.contacts(site)
        for k in np.flatnonzero(np.isfinite(seen.inner).all(axis=1) & (candidates.planet >= 0)):
            body = candidates.planets[candidates.planet[k]]
            event = one._event(body, float(candidates.passings.middle_tt_s[k]))
            found = one.predict(event, site)
            for name, t in (
                ("disappearance_start", seen.outer[k, 0]),
                ("disappearance_end", seen.inner[k, 0]),
                ("reappearance_start", seen.inner[k, 1]),
                ("reappearance_end", seen.outer[k, 1]),
            ):
                assert found.instant(name).tt_s == pytest.approx(t, abs=5e-3)
                compared += 1
    assert compared >= 8


def test_no_passing_is_missed_that_a_dense_search_of_the_moons_path_finds(year):
    from planner.sky.places import direction, separation_arcsec

    start, end, rows, candidates = year
    times = np.arange(start, end, 900.0)
    moon = direction("moon", None, times).vector_km
    distance = np.sqrt((moon**2).sum(axis=0))
    reach = np.degrees(np.arcsin(6378.137 / distance) + np.arcsin(1738.09 / distance)) * 3600
    for index, row in enumerate(rows[:40]):
        star = stars.star(stars.star_names(np.array([row]))[0])
        apart = separation_arcsec(moon, star.vector(None, times)) - reach
        dense = np.flatnonzero((apart[1:-1] < apart[:-2]) & (apart[1:-1] < apart[2:]) & (apart[1:-1] < -60))
        ours = candidates.passings.middle_tt_s[candidates.star == index]
        for t in times[1 + dense]:
            assert np.abs(ours - t).min() < 3600.0


def test_a_place_in_degrees_is_the_same_star_as_its_catalogue_row():
    star = stars.star("Antares")
    row = as_table(star)
    assert row["ra_deg"][0] == pytest.approx(star.ra_deg)
    moved = stars.star("247.35192,-26.43200", epoch_year=2000.0, pm_mas_yr=(-12.11, -23.30))
    assert as_table(moved)["dec_deg"][0] == pytest.approx(-26.43200 - 16 * 23.30e-3 / 3600, abs=1e-9)


def test_nothing_to_search_is_no_error():
    assert len(moon_candidates(0.0, 86400.0)) == 0
