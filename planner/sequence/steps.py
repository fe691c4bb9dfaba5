"""What is done between frames: setting up, filters, focus, the flip, taking down."""

from __future__ import annotations

from datetime import datetime, timedelta

from planner.sequence.capacity import end_utc
from planner.sequence.flips import Pause
from planner.sequence.models import Passage, Step
from planner.sequence.setting import Setting

_SET_UP_S = 2700.0
_SOLAR_FILTER_S = 300.0


def steps_of(setting: Setting, passages: list[Passage], pauses: list[Pause]) -> list[Step]:
    """Return the steps in time order; each ends before the frames that need it. Campaigns set up once a visit."""
    from planner.sky.timescale import datetime_from_tt_s

    steps = []
    if setting.family.campaign:
        seen: set[int | None] = set()
        for passage in passages:
            if not passage.done and passage.visit not in seen:
                steps += _before(setting, passage)
            seen.add(passage.visit)
        return steps
    steps += _before(setting, passages[0])
    for pause in pauses:
        start = _whole_second(datetime_from_tt_s(pause.start_tt_s))
        length = pause.end_tt_s - pause.start_tt_s
        text = {
            "flip": "meridian flip: turn the mount over, centre again; the picture is upside down from here",
            "focus": "refocus; touch nothing else",
        }[pause.kind]
        steps.append(Step(kind=pause.kind, start_utc=start, duration_s=round(length, 1), text=text))
    last = max(end_utc(passage) for passage in passages)
    solar = setting.family.reference == "sun"
    ending = (
        "turn the optics away from the Sun, cover them, then take the filter off"
        if solar
        else "cover the optics"
    )
    steps.append(
        Step(
            kind="take-down",
            start_utc=_whole_second(last),
            duration_s=900,
            text=f"{ending}; calibration frames; copy the data",
        )
    )
    return sorted(steps, key=lambda step: step.start_utc)


def _before(setting: Setting, passage: Passage) -> list[Step]:
    """Return the steps that end at the first frame of a passage."""
    rig = setting.rig
    first = min(shot.start_utc for shot in passage.shots)
    focus = first - timedelta(seconds=rig.refocus_s + rig.mount.settle_s)
    change = focus - timedelta(seconds=rig.filter_change_s if rig.filters else 0.0)
    slew = change - timedelta(seconds=180.0 / rig.mount.slew_deg_s)
    steps = []
    solar = setting.family.reference == "sun"
    ready = slew - timedelta(seconds=_SOLAR_FILTER_S if solar else 0.0)
    level = "level the tripod" if rig.mount.kind != "equatorial" else "align the polar axis"
    steps.append(
        Step(
            kind="set-up",
            start_utc=_whole_second(ready - timedelta(seconds=_SET_UP_S)),
            duration_s=_SET_UP_S,
            text=f"set up, {level}, set the clock from {rig.clock.source}, "
            f"check power and {rig.storage_gb:g} GB of space",
        )
    )
    if solar:
        steps.append(
            Step(
                kind="solar-filter",
                start_utc=_whole_second(ready),
                duration_s=_SOLAR_FILTER_S,
                text="fit and secure the front filter, cap the finder; only then point at the Sun",
            )
        )
    steps.append(
        Step(
            kind="slew",
            start_utc=_whole_second(slew),
            duration_s=180.0 / rig.mount.slew_deg_s,
            text="slew and centre" + (f"; guide on {passage.guide}" if passage.guide else ""),
        )
    )
    if rig.filters and setting.filter_name:
        steps.append(
            Step(
                kind="filter",
                start_utc=_whole_second(change),
                duration_s=rig.filter_change_s,
                text=f"filter {passage.shots[0].filter}" + _in_turn(setting),
            )
        )
    steps.append(Step(kind="focus", start_utc=_whole_second(focus), duration_s=rig.refocus_s, text="focus"))
    return steps


def _in_turn(setting: Setting) -> str:
    """Return what to know of stepping through filters, empty where there is one."""
    if not setting.cycle:
        return ""
    names = [band.name for band in setting.cycle]
    focus = [each.name for each in setting.rig.filters if each.name in names and each.refocus]
    offsets = any(each.focus_offset_steps for each in setting.rig.filters if each.name in names)
    return (
        f"; then in turn {', '.join(names)}"
        + (f" (focus anew after {', '.join(focus)})" if focus else "")
        + ("; check the focuser's offsets" if offsets else "")
        + ("; contacts in the first alone" if not setting.family.campaign else "")
    )


def _whole_second(moment: datetime) -> datetime:
    return moment.replace(microsecond=0)
