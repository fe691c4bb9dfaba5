"""The passages of an event that lasts hours: windows filled with frames, exposed for what is brightest in them."""

from __future__ import annotations

from dataclasses import fields, replace
from datetime import datetime, timedelta
from math import ceil, floor

import numpy as np

from planner.errors import InputError
from planner.events.family import Geometry
from planner.sequence import exposure
from planner.sequence.models import Passage, Shot
from planner.sequence.setting import Setting
from planner.sequence.windows import Window, event_windows
from planner.sky.discs import SkyDisc

SAMPLE_S = 30.0
TRACKING = {"sun": "solar", "moon": "lunar"}
_LEAST_BURST_CADENCE_S = 0.5
_MOST_BURST_FRAMES = 600
_REGULAR_MOTION_PX = 2.0
_REGULAR_CADENCE_S = (10.0, 60.0)
_HIDDEN_CADENCE_S = 60.0


def event_passages(setting: Setting) -> list[Passage]:
    """Return the passages of an event in time order; raises InputError when none of it can be reached from the site."""
    windows = event_windows(
        setting.circumstances,
        setting.family.reference,
        setting.rig.clock.sigma_s,
        setting.wish.lead_s,
        setting.wish.burst_s,
    )
    passages = [passage for window in windows for passage in _fill(setting, window)]
    if not passages:
        reason = setting.circumstances.reason or "it stays below the horizon line or the mount's limit"
        raise InputError(f"event: nothing of it can be photographed from {setting.site.name}: {reason}")
    return passages


def aim_of(setting: Setting) -> str:
    """Return what the middle of the frame follows."""
    reference = setting.family.reference
    return reference if reference in ("sun", "moon") else setting.event.spec.body


def tracking_of(setting: Setting, aim: str) -> str:
    """Return the rate at which the mount follows this aim."""
    return "none" if setting.rig.mount.kind == "fixed" else TRACKING.get(aim, "sidereal")


def limiting_peak_e_s(setting: Setting, geometry: Geometry) -> tuple[str, np.ndarray]:
    """Return the body whose brightest pixel limits the exposure, and its electrons a second at each time."""
    names = [geometry.reference] if geometry.reference == "sun" else list(geometry.discs)
    rates = {
        name: exposure.peak_rate_e_s(
            setting.rig, setting.site, setting.through, name, geometry.discs[name], geometry.altitude_deg
        )
        for name in names
    }
    if not rates:
        raise InputError(f"event.family: {setting.family.name} shows no disc to expose for")
    brightest = max(rates, key=lambda name: float(np.median(rates[name])))
    return brightest, np.max(list(rates.values()), axis=0) if len(rates) > 1 else rates[brightest]


def _fill(setting: Setting, window: Window) -> list[Passage]:
    """Return a window's frames as a passage, or as several where the horizon cuts it."""
    count = max(3, ceil((window.end_tt_s - window.start_tt_s) / SAMPLE_S) + 1)
    sample_s = np.linspace(window.start_tt_s, window.end_tt_s, count)
    geometry = setting.geometry(sample_s)
    seen = setting.reachable(geometry)
    if not seen.any():
        return []
    edges = np.flatnonzero(np.diff(np.concatenate([[False], seen, [False]]).astype(int)))
    passages = []
    for first, last in zip(edges[::2], edges[1::2], strict=True):
        passage = _passage(setting, window, sample_s[first:last], rows_of(geometry, slice(first, last)))
        if passage is not None:
            passages.append(passage)
    return passages


def _passage(setting: Setting, window: Window, sample_s: np.ndarray, geometry: Geometry) -> Passage | None:
    aim = aim_of(setting)
    sensor, wish = setting.rig.sensor, setting.wish
    peak_of, rate_e_s = limiting_peak_e_s(setting, geometry)
    wanted_s = exposure.wanted_exposure_s(setting.rig, rate_e_s, wish.well_fraction)
    if wish.exposure_s is not None:
        wanted_s = np.full_like(wanted_s, wish.exposure_s)
    least_cadence_s = float(wanted_s.max()) + sensor.readout_s
    cadence_s = _cadence_s(setting, window, geometry, least_cadence_s)
    start, start_tt_s = next_whole(sample_s[0], 0.1 if window.burst else 1.0)
    count = floor((sample_s[-1] - start_tt_s - least_cadence_s) / cadence_s) + 1
    if count < 1:
        return None
    frame_tt_s = start_tt_s + np.arange(count) * cadence_s
    frame_wanted_s = np.interp(frame_tt_s, sample_s, wanted_s)
    stretches = exposure.steps(frame_wanted_s)
    shots = []
    for number, stretch in enumerate(stretches, 1):
        exposure_s = wish.exposure_s or exposure.rounded_down(float(frame_wanted_s[stretch].min()))
        middle_tt_s = (frame_tt_s[stretch][0] + frame_tt_s[stretch][-1] + exposure_s) / 2
        shots.append(
            Shot(
                name=window.name if len(stretches) == 1 else f"{window.name} {number}",
                start_utc=start + timedelta(seconds=round(stretch.start * cadence_s, 3)),
                cadence_s=cadence_s,
                count=stretch.stop - stretch.start,
                exposure_s=exposure_s,
                filter=setting.filter_name,
                tracking=tracking_of(setting, aim),
                peak_of=peak_of,
                peak_e=float(f"{exposure_s * np.interp(middle_tt_s, sample_s, rate_e_s):.4g}"),
            )
        )
    return Passage(name=window.name, purpose=window.purpose, aim=aim, shots=shots)


def _cadence_s(setting: Setting, window: Window, geometry: Geometry, least_s: float) -> float:
    """Return the time between starts: a tenth of a second is the finest step that is written."""
    wish = setting.wish
    if window.burst:
        asked = wish.burst_cadence_s or max(
            _LEAST_BURST_CADENCE_S, (window.end_tt_s - window.start_tt_s) / _MOST_BURST_FRAMES
        )
    elif window.name == "hidden":
        asked = wish.cadence_s or _HIDDEN_CADENCE_S
    else:
        motion_s = _REGULAR_MOTION_PX * setting.scale_arcsec_px / max(relative_rate_arcsec_s(geometry), 1e-9)
        asked = wish.cadence_s or 5.0 * round(float(np.clip(motion_s, *_REGULAR_CADENCE_S)) / 5.0)
    return round(max(ceil(least_s * 10 - 1e-9) / 10, asked), 3)


def relative_rate_arcsec_s(geometry: Geometry) -> float:
    """Return the median speed of the target against its reference."""
    from planner.sky.places import offsets_arcsec

    target = geometry.discs[geometry.target]
    if geometry.reference in geometry.discs:
        origin = geometry.discs[geometry.reference]
        east, north = offsets_arcsec(origin.ra_deg, origin.dec_deg, target.ra_deg, target.dec_deg)
    else:
        middle = len(geometry.tt_s) // 2
        east, north = offsets_arcsec(
            target.ra_deg[middle], target.dec_deg[middle], target.ra_deg, target.dec_deg
        )
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


def rows_of_disc(disc: SkyDisc, rows: slice | np.ndarray) -> SkyDisc:
    """Return the same disc at fewer times."""
    return replace(disc, **{f.name: getattr(disc, f.name)[rows] for f in fields(disc) if f.name != "name"})


def rows_of(geometry: Geometry, rows: slice | np.ndarray) -> Geometry:
    """Return the same geometry at fewer times."""
    arrays = {
        name: getattr(geometry, name)[rows]
        for name in ("tt_s", "altitude_deg", "azimuth_deg", "zenith_pa_deg", "sun_altitude_deg")
    }
    return replace(
        geometry,
        discs={name: rows_of_disc(disc, rows) for name, disc in geometry.discs.items()},
        stars=tuple((name, ra[rows], dec[rows], magnitude) for name, ra, dec, magnitude in geometry.stars),
        **arrays,
    )
