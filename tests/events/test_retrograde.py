"""Stations, oppositions and the shape of the path."""

from __future__ import annotations

import numpy as np
import pytest

from planner.events.catalogue import family
from planner.sky.observer import Observer
from tests.events.published import predicted, spec

FAMILY = "retrograde-track"
# Published instants to the minute, in UTC. Opposition: Ciel & Espace (see stations_oppositions.csv); stations of
# 2022-23 in ecliptic longitude: ephemeris calendars, from memory.
MARS_2022 = {
    "opposition": ("2022-12-08T05:41:00Z", 60.0),
    "station_longitude_1": ("2022-10-30T13:26:00Z", 60.0),
    "station_longitude_2": ("2023-01-12T20:56:00Z", 60.0),
}


@pytest.mark.parametrize("name", MARS_2022)
def test_mars_in_2022_stands_still_and_opposes_the_sun_when_published(name):
    from planner.sky import timescale

    text, tolerance_s = MARS_2022[name]
    instant = predicted(FAMILY, "mars", "2022-12-08").instant(name)
    assert instant.tt_s == pytest.approx(timescale.tt_s_from_iso(text), abs=tolerance_s)


def test_a_track_may_be_asked_for_by_any_date_within_it():
    middles = {
        predicted(FAMILY, "mars", day).event.title for day in ("2022-10-01", "2022-12-08", "2023-02-20")
    }
    assert middles == {"The retrograde track of Mars about 2022 December 8"}


def test_between_its_stations_the_planet_moves_west():
    one = family(FAMILY)
    event = one.nearest(spec(FAMILY, "jupiter", "2026-01-10"))
    found = one.predict(event)
    stations = [found.instant(f"station_longitude_{k}").tt_s for k in (1, 2)]
    inside = np.linspace(stations[0] + 86400, stations[1] - 86400, 20)
    ra = np.unwrap(one.geometry(event, None, inside).discs["jupiter"].ra_deg, period=360)
    assert np.all(np.diff(ra) < 0)


def test_the_geometry_is_of_the_observer_not_of_the_geocentre():
    one = family(FAMILY)
    event = one.nearest(spec(FAMILY, "mars", "2022-12-08"))
    times = np.array([event.middle_tt_s])
    site = one.geometry(event, Observer("x", 35.0, 33.0, 0.0), times)
    centre = one.geometry(event, None, times)
    shift = np.hypot(
        (site.discs["mars"].ra_deg - centre.discs["mars"].ra_deg) * np.cos(np.radians(25.0)),
        site.discs["mars"].dec_deg - centre.discs["mars"].dec_deg,
    )
    # horizontal parallax of Mars at 0.55 au is 16"
    assert 3.0 < shift[0] * 3600 < 16.5
