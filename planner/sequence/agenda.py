"""A plan in a calendar: iCalendar (RFC 5545) with alarms, for the phone of the one who has to be there."""

from __future__ import annotations

from datetime import datetime, timedelta

from planner.provenance import content_hash
from planner.sequence.capacity import end_utc
from planner.sequence.models import Passage, Plan
from planner.sequence.outlook import Outlook
from planner.sequence.windows import is_contact
from planner.sequence.wording import exposure_range_text, nearest_second

_ALARMS = (timedelta(days=-1), timedelta(hours=-1))
_CONTACT_ALARMS = (timedelta(minutes=-10), timedelta(minutes=-1))
_SET_UP = timedelta(minutes=60)


def calendar_text(outlook: Outlook) -> bytes:
    """Return a calendar: the session or each visit, from setting up to the end, its reserves, and each contact."""
    from icalendar import Calendar

    plan = outlook.plan
    calendar = Calendar()
    calendar.add("prodid", "-//Syzygraph//plan//EN")
    calendar.add("version", "2.0")
    calendar.add("x-wr-calname", plan.title)
    if outlook.campaign:
        for passages in plan.visits():
            if passages[0].done:
                continue
            start = min(shot.start_utc for passage in passages for shot in passage.shots)
            end = max(end_utc(passage) for passage in passages)
            text = "\n".join(_passage_text(passage) for passage in passages)
            name = f"{plan.title}: visit {passages[0].visit}"
            calendar.add_component(_entry(plan, name, start - _SET_UP, end, text, _ALARMS))
            for number, reserve in enumerate(passages[0].reserve_utc, 1):
                title = f"{name}, reserve {number} (only if it was missed)"
                calendar.add_component(
                    _entry(plan, title, reserve - _SET_UP, reserve + (end - start), text, ())
                )
        return calendar.to_ical()
    lines = [_passage_text(passage) for passage in plan.passages]
    begin = min((step.start_utc for step in plan.steps), default=outlook.first_utc)
    calendar.add_component(_entry(plan, plan.title, begin, outlook.last_utc, "\n".join(lines), _ALARMS))
    for name, moment, sigma_s in outlook.instants():
        if is_contact(name) and outlook.first_utc <= moment <= outlook.last_utc:
            moment = nearest_second(moment)
            text = f"{moment:%H:%M:%S} UTC, 1 sigma {sigma_s:.1f} s"
            title = f"{name.replace('_', ' ')}: {plan.title}"
            calendar.add_component(
                _entry(plan, title, moment, moment + timedelta(minutes=1), text, _CONTACT_ALARMS)
            )
    return calendar.to_ical()


def _passage_text(passage: Passage) -> str:
    first = min(shot.start_utc for shot in passage.shots)
    count = sum(shot.count for shot in passage.shots)
    exposures = exposure_range_text([shot.exposure_s for shot in passage.shots])
    return f"{first:%H:%M:%S} UTC {passage.name}: {count} frames of {exposures}; {passage.purpose}"


def _entry(  # type: ignore[no-untyped-def]
    plan: Plan, title: str, start: datetime, end: datetime, text: str, alarms: tuple[timedelta, ...]
):
    from icalendar import Alarm, Event

    entry = Event()
    # the same plan gives the same entry again, so that a calendar that is read twice is not doubled
    entry.add("uid", f"{content_hash(f'{plan.title}|{plan.site.name}|{plan.rig.name}|{title}')}@syzygraph")
    entry.add("dtstamp", start)
    entry.add("dtstart", start.replace(microsecond=0))
    entry.add("dtend", max(end, start + timedelta(seconds=1)).replace(microsecond=0))
    entry.add("summary", title)
    entry.add("description", text)
    entry.add("location", f"{plan.site.name}, {plan.site.latitude_deg:.4f}, {plan.site.longitude_deg:.4f}")
    longitude_deg = round((plan.site.longitude_deg + 180) % 360 - 180, 6)
    entry.add("geo", (round(plan.site.latitude_deg, 6), longitude_deg))
    for before in alarms:
        alarm = Alarm()
        alarm.add("action", "DISPLAY")
        alarm.add("description", title)
        alarm.add("trigger", before)
        entry.add_component(alarm)
    return entry
