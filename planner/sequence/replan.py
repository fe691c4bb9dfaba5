"""What of a campaign is done: visits that a track shows as measured, so that the rest can be planned anew."""

from __future__ import annotations

from datetime import UTC, datetime, time
from pathlib import Path

import numpy as np

from planner.errors import InputError
from planner.sequence.builder import Taken
from planner.sequence.models import Passage, Plan

_NEEDED = ("passage", "verdict")


def taken_from(plan: Plan, track: Path | None, from_date: str | None = None) -> Taken:
    """Return the visits of a plan that a track shows as taken: those with at least one frame that was measured.

    The rest is planned from the last of them on, or from `from_date` (ISO date, or a time with an offset) if later.
    Raises InputError for a file that is no track, or a track of another plan.
    """
    from planner.sky.timescale import tt_s_from_datetime

    names = measured_passages(track) if track is not None else set()
    strangers = names - {passage.name for passage in plan.passages}
    if strangers:
        raise InputError(
            f"{track}: its passage {sorted(strangers)[0]!r} is not in the plan {plan.title!r}; "
            "give the plan it was taken with"
        )
    done: list[Passage] = [
        passage.model_copy(update={"done": True})
        for passage in plan.passages
        if passage.name in names or passage.done
    ]
    after = float(tt_s_from_datetime(_moment(from_date))) if from_date else None
    return Taken(tuple(done), after)


def measured_passages(track: Path) -> set[str]:
    """Return the names of the passages in which a track has a measured frame; raises InputError for no track."""
    from astropy.table import Table

    if not track.is_file():
        raise InputError(f"{track}: no such file; the track of a check is needed (track.ecsv)")
    try:
        table = Table.read(track, format="ascii.ecsv")
    except Exception as wrong:
        raise InputError(f"{track}: not a track: {str(wrong).splitlines()[0]}") from None
    missing = [name for name in _NEEDED if name not in table.colnames]
    if missing:
        raise InputError(f"{track}: not a track: the column {missing[0]!r} is missing")
    measured = np.asarray(table["verdict"]).astype(str) != "unmeasured"
    return {str(name) for name in np.asarray(table["passage"]).astype(str)[measured] if name}


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
