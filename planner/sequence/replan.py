"""What of a campaign is done: visits that a track or a logbook shows as taken, so that the rest can be planned anew."""

from __future__ import annotations

from collections import Counter
from contextlib import closing
from datetime import UTC, datetime, time
from pathlib import Path

import numpy as np

from planner.errors import InputError
from planner.sequence.builder import Taken
from planner.sequence.models import Passage, Plan

_NEEDED = ("passage", "verdict")
_SQLITE = b"SQLite format 3\0"
# Of a visit whose frames nobody has checked yet, this part must have been taken.
_ENOUGH = 0.5


def taken_from(plan: Plan, record: Path | None, from_date: str | None = None) -> Taken:
    """Return the visits of a plan that a track or a logbook shows as taken.

    A visit counts with one measured frame; with frames that were not checked (logbook) when half of them were taken.
    The rest is planned from the last of them on, or from `from_date` (ISO date, or a time with an offset) if later.
    Raises InputError for a file that is neither, or one of another plan.
    """
    from planner.sky.timescale import tt_s_from_datetime

    names: set[str] = set()
    if record is not None:
        if not record.is_file():
            raise InputError(
                f"{record}: no such file; a track (track.ecsv) or a logbook (logbook.db) is needed"
            )
        with record.open("rb") as head:
            logbook = head.read(len(_SQLITE)) == _SQLITE
        names = logged_passages(record, plan) if logbook else measured_passages(record)
    strangers = names - {passage.name for passage in plan.passages}
    if strangers:
        raise InputError(
            f"{record}: its passage {sorted(strangers)[0]!r} is not in the plan {plan.title!r}; "
            "give the plan it was taken with"
        )
    visits = {passage.visit for passage in plan.passages if passage.name in names}
    done: list[Passage] = [
        passage.model_copy(update={"done": True})
        for passage in plan.passages
        if passage.visit in visits or passage.done
    ]
    after = float(tt_s_from_datetime(_moment(from_date))) if from_date else None
    return Taken(tuple(done), after)


def measured_passages(track: Path) -> set[str]:
    """Return the names of the passages in which a track has a measured frame; raises InputError for no track."""
    from astropy.table import Table

    try:
        table = Table.read(track, format="ascii.ecsv")
    except Exception as wrong:
        raise InputError(f"{track}: not a track: {str(wrong).splitlines()[0]}") from None
    missing = [name for name in _NEEDED if name not in table.colnames]
    if missing:
        raise InputError(f"{track}: not a track: the column {missing[0]!r} is missing")
    measured = np.asarray(table["verdict"]).astype(str) != "unmeasured"
    return {str(name) for name in np.asarray(table["passage"]).astype(str)[measured] if name}


def logged_passages(logbook: Path, plan: Plan) -> set[str]:
    """Return the names of the passages that a logbook shows as taken (its table `frames`, see DEVELOPERS.md).

    It is opened for reading only, so that a run may go on meanwhile. Raises InputError for another database.
    """
    import sqlite3

    query = "SELECT passage, state, verdict FROM frames"
    try:
        with closing(sqlite3.connect(f"{logbook.resolve().as_uri()}?mode=ro", uri=True)) as connection:
            rows = connection.execute(query).fetchall()
    except sqlite3.Error as wrong:
        raise InputError(
            f"{logbook}: not a logbook: {wrong}; its table frames needs passage, state, verdict"
        ) from None
    planned = {p.name: sum(shot.count for shot in p.shots) for p in plan.passages}
    kept = [(str(passage), verdict) for passage, state, verdict in rows if state == "taken"]
    measured = {passage for passage, verdict in kept if verdict and verdict != "unmeasured"}
    unchecked = Counter(passage for passage, verdict in kept if not verdict)
    enough = {name for name, count in unchecked.items() if count >= _ENOUGH * planned.get(name, 1)}
    return measured | enough


def _moment(text: str) -> datetime:
    try:
        moment = datetime.fromisoformat(text)
    except ValueError:
        raise InputError(f"--from: found {text!r}; a date such as 2027-02-19 is needed") from None
    if moment.tzinfo is not None:
        return moment
    if len(text) > 10:
        raise InputError(f"--from: found {text!r}; a time needs Z or an offset")
    return datetime.combine(moment.date(), time(0), tzinfo=UTC)
