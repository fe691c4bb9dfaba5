"""Lists of events for other programs: an ECSV table of instants, an iCalendar file."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np

from planner.events.family import Circumstances
from planner.events.listing import as_table, body_of
from planner.outputs import whole_file
from planner.provenance import content_hash, versions
from planner.sky import timescale
from planner.sky.observer import Observer

# Events of weeks enter a calendar with their instants, an hour each.
_INSTANT_LENGTH = timedelta(hours=1)
_LEAD = timedelta(minutes=10)


def write_ecsv(
    found: list[Circumstances], observer: Observer | None, path: str | Path, force: bool = False
) -> None:
    """Write one row an instant as an astropy ECSV table; raises OutputExistsError unless `force`."""
    from astropy import units as u
    from astropy.table import QTable

    rows = [(c, instant) for c in found for instant in c.instants]
    table = QTable(
        {
            "title": [c.event.title for c, _ in rows],
            "family": [c.event.spec.family for c, _ in rows],
            "body": [body_of(c.event) for c, _ in rows],
            "instant": [i.name for _, i in rows],
            "utc": [timescale.utc_iso(i.tt_s, 3) for _, i in rows],
            "sigma": np.array([i.sigma_s for _, i in rows]) * u.s,
            "largest_term": [i.largest_term or "" for _, i in rows],
            "position_angle": np.array([i.position_angle_deg for _, i in rows]) * u.deg,
            "altitude": np.array([i.altitude_deg for _, i in rows]) * u.deg,
            "azimuth": np.array([i.azimuth_deg for _, i in rows]) * u.deg,
            "visible": [bool(i.visible) for _, i in rows],
            "limited_by": [i.limited_by or "" for _, i in rows],
            "least_separation": np.array([c.least_separation_arcsec for c, _ in rows]) * u.arcsec,
        }
    )
    table.meta["site"] = _site_text(observer)
    table.meta["provenance"] = dict(versions())
    with whole_file(path, force) as part:
        table.write(part, format="ascii.ecsv", overwrite=True)


def write_calendar(
    found: list[Circumstances], observer: Observer | None, path: str | Path, force: bool = False
) -> None:
    """Write a calendar (RFC 5545) with one entry an event, or an instant for what lasts weeks.

    Entries begin ten minutes early; the description is the table to shoot from. Raises OutputExistsError.
    """
    from icalendar import Calendar

    calendar = Calendar()
    calendar.add("prodid", "-//Syzygraph//events//EN")
    calendar.add("version", "2.0")
    for circumstances in found:
        instants = circumstances.instants
        if instants[-1].tt_s - instants[0].tt_s > 2 * timescale.DAY_S:
            for instant in instants:
                title = f"{instant.name.replace('_', ' ')}: {circumstances.event.title}"
                start = timescale.datetime_from_tt_s(instant.tt_s)
                calendar.add_component(
                    _entry(circumstances, observer, title, start, start + _INSTANT_LENGTH, instant.name)
                )
            continue
        start = timescale.datetime_from_tt_s(instants[0].tt_s) - _LEAD
        end = timescale.datetime_from_tt_s(instants[-1].tt_s) + _LEAD
        calendar.add_component(
            _entry(circumstances, observer, circumstances.event.title, start, end, "event")
        )
    with whole_file(path, force) as part:
        part.write_bytes(calendar.to_ical())


def _entry(circumstances: Circumstances, observer: Observer | None, title: str, start, end, name: str):  # type: ignore[no-untyped-def]
    from icalendar import Event

    entry = Event()
    entry.add("summary", title)
    # to the second: the table in the description holds the rest
    entry.add("dtstart", start.replace(microsecond=0))
    entry.add("dtend", end.replace(microsecond=0))
    entry.add("dtstamp", datetime.now(UTC).replace(microsecond=0))
    # the same event must keep its identity when it is predicted again, so that a calendar updates it
    key = f"{circumstances.event.title} {_site_text(observer)} {name}"
    entry.add("uid", f"{content_hash(key)}@syzygraph")
    entry.add("location", _site_text(observer))
    entry.add("description", as_table(circumstances))
    return entry


def _site_text(observer: Observer | None) -> str:
    if observer is None:
        return "geocentre"
    return f"{observer.name} ({observer.latitude_deg:.5f}, {observer.longitude_deg:.5f}, {observer.height_m:.0f} m)"
