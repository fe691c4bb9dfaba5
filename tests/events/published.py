"""Rows of the published tables in tests/authorities, each with its source and its confidence."""

from __future__ import annotations

import csv
from datetime import UTC, datetime, timedelta

from planner.events.catalogue import family
from planner.events.family import EventSpec
from planner.sky import timescale
from planner.sky.observer import Observer
from tests.conftest import ROOT

J2000 = datetime(2000, 1, 1, 12, tzinfo=UTC)
CONTACTS = {
    "I": "contact_1",
    "II": "contact_2",
    "greatest": "greatest",
    "III": "contact_3",
    "IV": "contact_4",
}


def rows(table, **wanted):
    """Return the rows of a table whose columns have these values."""
    with (ROOT / f"tests/authorities/{table}.csv").open(encoding="utf-8", newline="") as file:
        return [row for row in csv.DictReader(file) if all(row[k] == v for k, v in wanted.items())]


def civil_s(text):
    """Return seconds from 2000-01-01T12:00 of a date and time without a zone, on whatever scale it is."""
    return (datetime.fromisoformat(text).replace(tzinfo=UTC) - J2000).total_seconds()


def transit_contacts(row):
    """Return {our name: seconds from J2000 on the row's own time scale} of a geocentric transit row."""
    shift = {}
    for entry in row["day_offsets"].split():
        name, sign = entry[:-2], entry[-2]
        shift[name] = 1 if sign == "+" else -1
    found = {}
    for column, name in CONTACTS.items():
        if row[column]:
            parts = [float(part) for part in row[column].split(":")] + [0.0]
            clock = timedelta(hours=parts[0], minutes=parts[1], seconds=parts[2])
            day = datetime.fromisoformat(row["date"]).replace(tzinfo=UTC) + timedelta(
                days=shift.get(column, 0)
            )
            found[name] = (day + clock - J2000).total_seconds()
    return found


def spec(family_name, body, when, **more):
    """Return an EventSpec near a date such as 2012-06-06, or a time."""
    text = when if "T" in when else f"{when}T12:00:00Z"
    return EventSpec(family_name, body, timescale.tt_s_from_iso(text), **more)


def predicted(family_name, body, when, observer=None, **more):
    """Return the circumstances of the event nearest to a date."""
    one = family(family_name)
    return one.predict(one.nearest(spec(family_name, body, when, **more)), observer)


def utc_s(tt_s):
    """Return UTC seconds from 2000-01-01T12:00."""
    return (timescale.datetime_from_tt_s(tt_s) - J2000).total_seconds()


def site_of(row):
    """Return the observer of a row that names a site."""
    height = float(row["height_m"] or 0.0)
    return Observer(row["site"], float(row["lat_deg"]), float(row["lon_deg_east"]), height)
