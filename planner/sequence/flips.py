"""When nothing may be photographed: the meridian flip, placed where it costs least, and pauses to refocus."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from planner.sequence.motion import hour_angle_deg
from planner.sequence.setting import Setting
from planner.sequence.windows import Window

# How long focus is trusted while the air's temperature changes; common practice, no source.
FOCUS_HOLDS_S = 7200.0
_FLIP_STEP_S = 30.0
_BURST_COST = 1000.0


@dataclass(frozen=True)
class Pause:
    """A stretch without frames: `flip` or `focus`."""

    kind: Literal["flip", "focus"]
    start_tt_s: float
    end_tt_s: float


def meridian_pause(setting: Setting, windows: list[Window], aim: str) -> Pause | None:
    """Return the flip that the mount must make within these windows, where it costs fewest frames, or None."""
    mount = setting.rig.mount
    if mount.kind != "equatorial" or not mount.meridian_flip or not windows:
        return None
    first, last = windows[0].start_tt_s, windows[-1].end_tt_s
    tt_s = np.arange(first, last + _FLIP_STEP_S, _FLIP_STEP_S)
    from planner.sequence.recipes import place_of

    hour_angle = hour_angle_deg(setting.observer, *place_of(setting.geometry(tt_s), aim), tt_s)
    if hour_angle[0] >= 0 or hour_angle[-1] < 0 or abs(hour_angle[0]) > 170:
        return None
    allowed = tt_s[(hour_angle >= 0) & (hour_angle <= max(mount.meridian_limit_deg, 0.25))]
    if not len(allowed) or last - allowed[0] < mount.flip_s:
        return None
    cost = [_cost(windows, start, start + mount.flip_s) for start in allowed]
    start = float(allowed[int(np.argmin(cost))])
    return Pause("flip", start, start + mount.flip_s)


def _cost(windows: list[Window], start_tt_s: float, end_tt_s: float) -> float:
    """Return the seconds of frames a pause costs; a second of a burst weighs as a thousand others."""
    total = 0.0
    for window in windows:
        lost = min(end_tt_s, window.end_tt_s) - max(start_tt_s, window.start_tt_s)
        total += max(lost, 0.0) * (_BURST_COST if window.burst else 1.0)
    return total


def focus_pauses(setting: Setting, windows: list[Window], flip: Pause | None) -> list[Pause]:
    """Return pauses to refocus in the middle of long regular windows; the time after a flip serves as one."""
    length = setting.rig.refocus_s
    pauses = []
    last_focus = windows[0].start_tt_s if windows else 0.0
    for window in windows:
        if window.burst:
            continue
        while window.end_tt_s - last_focus > FOCUS_HOLDS_S:
            if flip and last_focus < flip.end_tt_s < last_focus + 1.5 * FOCUS_HOLDS_S:
                last_focus = flip.end_tt_s
                continue
            start = max(last_focus + FOCUS_HOLDS_S, window.start_tt_s + length)
            if start + 2 * length > window.end_tt_s:
                break
            pauses.append(Pause("focus", start, start + length))
            last_focus = start + length
    return pauses


def cut(windows: list[Window], pauses: list[Pause]) -> list[Window]:
    """Return the windows without the pauses, in time order."""
    left = list(windows)
    for pause in pauses:
        pieces = []
        for window in left:
            if pause.end_tt_s <= window.start_tt_s or pause.start_tt_s >= window.end_tt_s:
                pieces.append(window)
                continue
            pieces.append(replace(window, end_tt_s=pause.start_tt_s))
            pieces.append(replace(window, start_tt_s=pause.end_tt_s))
        left = [piece for piece in pieces if piece.end_tt_s > piece.start_tt_s]
    return left
