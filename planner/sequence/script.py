"""A shell script of timed steps, for those who drive their camera from a command line."""

from __future__ import annotations

import shlex
import string

import numpy as np

from planner.errors import InputError
from planner.sequence.capacity import end_utc
from planner.sequence.models import Passage, Plan, Shot

PLACEHOLDERS = (
    "exposure_s",
    "exposure_ms",
    "gain",
    "filter",
    "tracking",
    "passage",
    "panel",
    "ra_deg",
    "dec_deg",
    "shot",
    "start_utc",
    "count",
    "cadence_s",
    "name",
)

_HEAD = """#!/bin/sh
# {title}
# {rig}, {site}; {frames} frames from {first} to {last} UTC.
# Written by Syzygraph. It waits for each time of this computer's clock: set that clock first.
# DRY_RUN=1 sh {file}   prints what would be done, without waiting and without the camera.
# FROM=PASSAGE sh {file}   begins with that passage.
{cautions}
set -u

now_ms() {{
    t=$(date +%s%3N 2>/dev/null)
    case $t in '' | *[!0-9]*) t=$(date +%s)000 ;; esac
    printf '%s' "$t"
}}

wait_until_ms() {{
    left=$(($1 - $(now_ms)))
    while [ "$left" -gt 0 ]; do
        if [ "$left" -gt 60000 ]; then
            sleep 30
        else
            sleep "$((left / 1000)).$(printf '%03d' "$((left % 1000))")" 2>/dev/null || sleep 1
        fi
        left=$(($1 - $(now_ms)))
    done
}}

say() {{ printf '%s %s\\n' "$(date -u +%H:%M:%S)" "$*"; }}

# frames FIRST_MS CADENCE_MS COUNT LAST_START_MS: runs `shoot` at each time; a frame whose turn is over is left out
frames() {{
    n=0
    missed=0
    while [ "$n" -lt "$3" ]; do
        at=$(($1 + n * $2))
        n=$((n + 1))
        if [ -n "${{DRY_RUN:-}}" ]; then
            [ "$n" -gt 2 ] || {{ printf 'at %s: ' "$at"; shoot "$n"; }}
            continue
        fi
        if [ "$(now_ms)" -gt "$((at + $2))" ]; then
            missed=$((missed + 1))
            continue
        fi
        wait_until_ms "$at"
        shoot "$n" || say "the camera command failed (frame $n)"
    done
    [ "$missed" -eq 0 ] || say "$missed frames came too late and were left out"
}}

run() {{ if [ -n "${{DRY_RUN:-}}" ]; then printf '%s\\n' "$*"; else eval "$*"; fi; }}

begun=${{FROM:+no}}
begins() {{ [ "${{FROM:-}}" != "$1" ] || begun=yes; [ "${{begun:-yes}}" = yes ]; }}
"""


def script_text(plan: Plan, template: str, file: str = "plan.sh") -> str:
    """Return a POSIX shell script that runs a command for each frame, or once a shot if the template holds {count}.

    The template is the user's own command with placeholders in braces, see `PLACEHOLDERS`; their values are quoted
    for the shell. Raises InputError for a placeholder that is unknown or a brace that is not closed.
    """
    asked = _placeholders(template)
    once = "count" in asked
    starts = [shot.start_utc for passage in plan.passages for shot in passage.shots]
    ends = [end_utc(passage) for passage in plan.passages]
    cautions = "\n".join(f"# CAUTION: {_one_line(text)}" for text in plan.cautions)
    parts = [
        _HEAD.format(
            title=_one_line(plan.title),
            rig=_one_line(plan.rig.name),
            site=_one_line(plan.site.name),
            frames=plan.frames_total,
            first=f"{min(starts):%Y-%m-%d %H:%M:%S}",
            last=f"{max(ends):%Y-%m-%d %H:%M:%S}",
            file=shlex.quote(file),
            cautions=cautions,
        )
    ]
    waiting = sorted(plan.steps, key=lambda step: step.start_utc)
    for passage in plan.passages:
        if passage.done:
            continue
        first = min(shot.start_utc for shot in passage.shots)
        parts.append("")
        while waiting and waiting[0].start_utc < first:
            step = waiting.pop(0)
            parts.append(f"say {shlex.quote(_one_line(f'from {step.start_utc:%H:%M:%S} UTC: {step.text}'))}")
        parts.append(f"if begins {shlex.quote(passage.name)}; then")
        parts.append(f"    say {shlex.quote(_one_line(f'{passage.name}: {passage.purpose}'))}")
        for shots in _turns(passage):
            parts += _block(passage, shots, template, once)
        parts.append("fi")
    parts += [f"say {shlex.quote(_one_line(f'then: {step.text}'))}" for step in waiting]
    parts.append("say 'the plan is over'\n")
    return "\n".join(parts)


def _block(passage: Passage, shots: list[Shot], template: str, once: bool) -> list[str]:
    """Return the lines for one shot, or for shots that take turns frame by frame."""
    lines = []
    if len(shots) == 1:
        shot = shots[0]
        command = _filled(template, passage, shot)
        first, cadence = _milliseconds(shot), round(shot.cadence_s * 1000)
        if once:
            return [
                f'    [ -n "${{DRY_RUN:-}}" ] || wait_until_ms {first}',
                f"    run {shlex.quote(command)}",
            ]
        return [
            f"    shoot() {{ run {shlex.quote(command)}; }}",
            f"    frames {first} {cadence} {shot.count}",
        ]
    # frames of several kinds in turn, in order of time: a line for each
    times = np.concatenate([_milliseconds(s) + np.arange(s.count) * round(s.cadence_s * 1000) for s in shots])
    which = np.concatenate([np.full(shot.count, number) for number, shot in enumerate(shots)])
    for number, shot in enumerate(shots):
        command = _filled(template, passage, shot.model_copy(update={"count": 1}))
        lines.append(f"    shoot_{number}() {{ run {shlex.quote(command)}; }}")
    for row in np.argsort(times, kind="stable"):
        lines.append(f"    shoot() {{ shoot_{which[row]}; }}; frames {times[row]} 1000 1")
    return lines


def _turns(passage: Passage) -> list[list[Shot]]:
    """Return the shots of a passage in time order, those that overlap in time together."""
    from planner.sequence.capacity import shot_end_utc

    groups: list[list[Shot]] = []
    for shot in sorted(passage.shots, key=lambda each: each.start_utc):
        if groups and shot.start_utc < max(shot_end_utc(other) for other in groups[-1]):
            groups[-1].append(shot)
        else:
            groups.append([shot])
    return groups


def _placeholders(template: str) -> set[str]:
    try:
        names = {name for _, name, _, _ in string.Formatter().parse(template) if name is not None}
    except ValueError as wrong:
        raise InputError(f"--capture: found {template!r}: {wrong}; braces hold placeholders") from None
    unknown = sorted(names - set(PLACEHOLDERS))
    if unknown:
        raise InputError(f"--capture: found {{{unknown[0]}}}; allowed are {', '.join(PLACEHOLDERS)}")
    if not template.strip():
        raise InputError("--capture: found nothing; give your camera's command")
    return names


def _filled(template: str, passage: Passage, shot: Shot) -> str:
    slug = "-".join("".join(c if c.isalnum() else " " for c in f"{passage.name} {shot.name}").split())
    values = {
        "exposure_s": f"{shot.exposure_s:g}",
        "exposure_ms": f"{shot.exposure_s * 1000:g}",
        "gain": f"{shot.gain:g}",
        "filter": shot.filter or "none",
        "tracking": shot.tracking,
        "passage": passage.name,
        "panel": passage.panel or "none",
        "ra_deg": "none" if passage.aim_ra_deg is None else f"{passage.aim_ra_deg:.5f}",
        "dec_deg": "none" if passage.aim_dec_deg is None else f"{passage.aim_dec_deg:.5f}",
        "shot": shot.name,
        "start_utc": shot.start_utc.strftime("%Y-%m-%dT%H:%M:%SZ"),
        "count": str(shot.count),
        "cadence_s": f"{shot.cadence_s:g}",
        "name": slug,
    }
    return template.format(**{key: shlex.quote(value) for key, value in values.items()})


def _milliseconds(shot: Shot) -> int:
    return round(shot.start_utc.timestamp() * 1000)


def _one_line(text: str) -> str:
    return " ".join(text.split())
