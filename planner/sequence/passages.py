"""The passages of an event that lasts hours: windows filled with frames, exposed for what is brightest in them."""

from __future__ import annotations

from collections import Counter
from dataclasses import fields, replace
from datetime import datetime, timedelta
from math import ceil, floor
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.events.family import Geometry
from planner.sequence import exposure
from planner.sequence.flips import Pause, cut, focus_pauses, meridian_pause
from planner.sequence.models import Passage, Shot
from planner.sequence.pair import middle_told
from planner.sequence.recipes import Recipe, aim_of, place_of, recipes
from planner.sequence.setting import Setting
from planner.sequence.windows import Window, event_windows
from planner.sky.discs import SkyDisc

SAMPLE_S = 30.0
_LEAST_BURST_CADENCE_S = 0.5
_MOST_BURST_FRAMES = 600
_REGULAR_MOTION_PX = 2.0
_REGULAR_CADENCE_S = (10.0, 60.0)
_HIDDEN_CADENCE_S = 60.0
# Centres of separate discs stand this many diameters apart.
_SEPARATE_DIAMETERS = 1.25


def event_passages(setting: Setting, clock_sigma_s: float | None = None) -> tuple[list[Passage], list[Pause]]:
    """Return the passages of an event in time order, and the pauses between them.

    `clock_sigma_s`: the poorest clock of all cameras, so that their passages share their instants.
    Raises InputError when none of it can be reached from the site.
    """
    windows = event_windows(
        setting.circumstances,
        setting.family.reference,
        clock_sigma_s or setting.rig.clock.sigma_s,
        setting.wish.lead_s,
        setting.wish.burst_s,
    )
    windows = [piece for window in windows for piece in _reachable(setting, window)]
    sample_s = [_samples(window) for window in windows] or [np.array([setting.event.middle_tt_s])]
    aim = aim_of(setting, setting.geometry(np.concatenate(sample_s)))
    flip = meridian_pause(setting, windows, aim)
    pauses = ([flip] if flip else []) + focus_pauses(setting, windows, flip)
    pauses.sort(key=lambda pause: pause.start_tt_s)
    passages = []
    for window in cut(windows, pauses):
        passage = _passage(
            setting, window, aim, flipped=flip is not None and window.start_tt_s >= flip.end_tt_s
        )
        if passage is not None:
            passages.append(passage)
    if not passages:
        reason = setting.circumstances.reason or "it stays below the horizon line or the mount's limit"
        raise InputError(f"event: nothing of it can be photographed from {setting.site.name}: {reason}")
    return _named_apart(passages), pauses


def _reachable(setting: Setting, window: Window) -> list[Window]:
    """Return the parts of a window in which the target can be reached, and stars seen where they are needed."""
    sample_s = _samples(window)
    geometry = setting.geometry(sample_s)
    seen = setting.reachable(geometry)
    if setting.family.reference == "stars" and not window.burst:
        # what is measured against stars waits for them, unless it never gets dark enough
        dark = seen & (geometry.sun_altitude_deg < setting.wish.darkness_deg)
        seen = dark if dark.any() else seen
    edges = np.flatnonzero(np.diff(np.concatenate([[False], seen, [False]]).astype(int)))
    return [
        replace(window, start_tt_s=float(sample_s[first]), end_tt_s=float(sample_s[last - 1]))
        for first, last in zip(edges[::2], edges[1::2], strict=True)
        if last - first > 1
    ]


def _samples(window: Window) -> np.ndarray:
    count = max(3, ceil((window.end_tt_s - window.start_tt_s) / SAMPLE_S) + 1)
    return np.linspace(window.start_tt_s, window.end_tt_s, count)


def _passage(setting: Setting, window: Window, aim: str, flipped: bool) -> Passage | None:
    sample_s = _samples(window)
    geometry = setting.geometry(sample_s)
    # the wheel stands still while a contact is awaited
    turns = (setting,) if window.burst else setting.in_turn()
    kinds = [
        kind for each in turns for kind in recipes(each, geometry, aim, target_hidden=window.name == "hidden")
    ]
    rig, readout_s = setting.rig, setting.rig.sensor.readout_s
    star_contact = window.burst and bool(geometry.stars)
    if star_contact:
        # a star goes out in an instant: nothing else is worth a frame then
        kinds = kinds[-1:]
    # kinds of frame take turns; each slot is as long as its longest exposure and the step to the next filter
    unit_s = 0.01 if window.burst else 0.1
    busy_s = [
        float(kind.wanted_s.max()) + readout_s + rig.filter_step_s(kind.filter, after.filter)
        for kind, after in zip(kinds, [*kinds[1:], kinds[0]], strict=True)
    ]
    slots_s = [unit_s * ceil(each / unit_s - 1e-6) for each in busy_s]
    turn_s = sum(slots_s)
    cadence_s = _cadence_s(setting, window, geometry, turn_s, star_contact)
    # before the first and after the last round the wheel stands at the filter of the contacts
    lead_s = rig.filter_step_s(setting.filter_name, kinds[0].filter)
    back_s = rig.filter_step_s(kinds[-1].filter, setting.filter_name)
    last_turn_s = turn_s + max(0.0, back_s - rig.filter_step_s(kinds[-1].filter, kinds[0].filter))
    start, start_tt_s = next_whole(sample_s[0] + lead_s, 0.1 if window.burst else 1.0)
    count = floor((sample_s[-1] - start_tt_s - last_turn_s) / cadence_s + 1e-9) + 1
    if count < 1:
        return None
    shots = []
    for number, kind in enumerate(kinds):
        offset_s = round(sum(slots_s[:number]), 3)
        shots += _shots(
            setting, window, kind, start + timedelta(seconds=offset_s), cadence_s, count, sample_s
        )
    purpose = window.purpose
    if "+" in aim:
        purpose += f", {middle_told(geometry, aim)}"
    aim_place: dict[str, Any] = {}
    if setting.rig.mount.kind == "fixed":
        aim, aim_place = "ground", _ground_aim(setting, geometry, aim)
    return Passage(
        name=window.name,
        purpose=purpose,
        aim=aim,
        flipped=flipped,
        stars_expected=min((kind.stars for kind in kinds if kind.stars is not None), default=None),
        shots=shots,
        **aim_place,
    )


def _ground_aim(setting: Setting, geometry: Geometry, aim: str) -> dict[str, Any]:
    """Return where a tripod points: the middle of what the aim passes through in a passage."""
    from planner.sky.places import altaz

    middle = len(geometry.tt_s) // 2
    ra_deg, dec_deg = place_of(geometry, aim)
    altitude, azimuth = altaz((ra_deg, dec_deg), setting.observer, geometry.tt_s)
    return {
        "aim_altitude_deg": round(float(altitude[middle]), 3),
        "aim_azimuth_deg": round(float(azimuth[middle]), 3),
    }


def _shots(
    setting: Setting,
    window: Window,
    kind: Recipe,
    start: datetime,
    cadence_s: float,
    count: int,
    sample_s: np.ndarray,
) -> list[Shot]:
    """Return the shots of one kind of frame: as many as the changing brightness needs steps of exposure."""
    from planner.sky.timescale import tt_s_from_datetime

    frame_tt_s = float(tt_s_from_datetime(start)) + np.arange(count) * cadence_s
    wanted_s = np.interp(frame_tt_s, sample_s, kind.wanted_s)
    stretches = exposure.steps(wanted_s)
    parts = [window.name, kind.filter if setting.cycle and not window.burst else None, kind.name]
    name = ", ".join(part for part in parts if part and part != "main")
    shots = []
    for number, stretch in enumerate(stretches, 1):
        exposure_s = setting.wish.exposure_s or exposure.rounded_down(float(wanted_s[stretch].min()))
        middle_tt_s = (frame_tt_s[stretch][0] + frame_tt_s[stretch][-1] + exposure_s) / 2
        trail_px = float(kind.motion.trail_px(setting.rig, exposure_s).max())
        shots.append(
            Shot(
                name=name if len(stretches) == 1 else f"{name} {number}",
                start_utc=start + timedelta(seconds=round(stretch.start * cadence_s, 3)),
                cadence_s=cadence_s,
                count=stretch.stop - stretch.start,
                exposure_s=exposure_s,
                gain=kind.gain,
                filter=kind.filter,
                tracking=kind.tracking,
                peak_of=kind.peak_of,
                peak_e=float(
                    f"{exposure_s * np.interp(middle_tt_s, sample_s, kind.rate_at(exposure_s)):.4g}"
                ),
                trail_px=float(f"{trail_px:.2g}"),
            )
        )
    return shots


def _cadence_s(
    setting: Setting, window: Window, geometry: Geometry, least_s: float, star_contact: bool
) -> float:
    """Return the time between starts: hundredths of a second in a burst, tenths elsewhere."""
    wish = setting.wish
    if window.burst:
        fastest = 0.0 if star_contact else _LEAST_BURST_CADENCE_S
        spread_s = (window.end_tt_s - window.start_tt_s) / _MOST_BURST_FRAMES
        asked = wish.burst_cadence_s or max(fastest, spread_s)
        return round(max(least_s, ceil(asked * 100 - 1e-6) / 100), 3)
    if window.name == "hidden":
        asked = wish.cadence_s or _HIDDEN_CADENCE_S
    else:
        rate = max(relative_rate_arcsec_s(geometry), 1e-9)
        motion_s = _REGULAR_MOTION_PX * setting.scale_arcsec_px / rate
        asked = wish.cadence_s or 5.0 * round(float(np.clip(motion_s, *_REGULAR_CADENCE_S)) / 5.0)
        if wish.separate_discs and geometry.target in geometry.discs:
            diameter = 2 * float(geometry.discs[geometry.target].semidiameter_arcsec.max())
            asked = max(asked, ceil(_SEPARATE_DIAMETERS * diameter / rate))
    return round(max(least_s, ceil(asked * 10 - 1e-9) / 10), 3)


def relative_rate_arcsec_s(geometry: Geometry) -> float:
    """Return the median speed of the target against its reference."""
    from planner.sky.places import offsets_arcsec

    ra_deg, dec_deg = place_of(geometry, geometry.target)
    if geometry.reference in geometry.discs:
        origin = geometry.discs[geometry.reference]
        east, north = offsets_arcsec(origin.ra_deg, origin.dec_deg, ra_deg, dec_deg)
    else:
        middle = len(geometry.tt_s) // 2
        east, north = offsets_arcsec(ra_deg[middle], dec_deg[middle], ra_deg, dec_deg)
    step = np.diff(geometry.tt_s)
    return float(np.nanmedian(np.hypot(np.diff(east), np.diff(north)) / step))


def next_whole(tt_s: float, unit_s: float) -> tuple[datetime, float]:
    """Return the first moment of UTC at or after an instant that is a whole multiple of a unit, and the same in TT.

    `unit_s` divides a minute.
    """
    from planner.sky.timescale import datetime_from_tt_s, tt_s_from_datetime

    moment = datetime_from_tt_s(tt_s)
    # a moment holds microseconds, so an exact multiple may come back one or two late
    past_s = moment.second + (moment.microsecond - 2) * 1e-6
    units = ceil(past_s / unit_s)
    moment = moment.replace(second=0, microsecond=0) + timedelta(seconds=round(units * unit_s, 3))
    return moment, float(tt_s_from_datetime(moment))


def _named_apart(passages: list[Passage]) -> list[Passage]:
    """Return the passages with a number added where a pause has cut one in two."""
    total = Counter(passage.name for passage in passages)
    seen: Counter[str] = Counter()
    named = []
    for passage in passages:
        seen[passage.name] += 1
        number = seen[passage.name]
        name = passage.name if total[passage.name] == 1 else f"{passage.name} {number}"
        named.append(passage.model_copy(update={"name": name}))
    return named


def rows_of_disc(disc: SkyDisc, rows: slice | np.ndarray) -> SkyDisc:
    """Return the same disc at fewer times."""
    arrays = {f.name: getattr(disc, f.name) for f in fields(disc) if f.name != "name"}
    return replace(disc, **{name: array[rows] for name, array in arrays.items() if array is not None})
