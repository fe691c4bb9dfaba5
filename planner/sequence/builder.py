"""From a brief to a plan: passages, predicted track, storage, cautions, provenance."""

from __future__ import annotations

import json
from collections.abc import Callable
from datetime import timedelta
from typing import Any

import numpy as np

from planner.events.family import Circumstances
from planner.provenance import content_hash, versions
from planner.sequence.models import Brief, Passage, Plan, PredictedPoint
from planner.sequence.passages import event_passages
from planner.sequence.setting import Setting, setting_of

_TRACK_POINTS = 121
_GIGABYTE = 1e9


def build_plan(brief: Brief, tick: Callable[[int, int], None] | None = None) -> Plan:
    """Return the plan of a brief for its rig; raises InputError when nothing of the event can be photographed."""
    setting = setting_of(brief)
    if setting.family.campaign:
        from planner.sequence.nights import campaign_passages

        passages = campaign_passages(setting, tick)
    else:
        passages = event_passages(setting)
    frames_total = sum(shot.count for passage in passages for shot in passage.shots)
    return Plan(
        title=brief.title,
        event=brief.event,
        site=setting.site,
        rig=setting.rig,
        circumstances=circumstances_of(setting.circumstances),
        passages=passages,
        track=predicted_track(setting, passages),
        frames_total=frames_total,
        storage_gb=round(frames_total * frame_bytes(setting) / _GIGABYTE, 3),
        assumptions=[],
        findings=[],
        cautions=list(setting.circumstances.cautions),
        provenance={
            **versions(),
            "brief": content_hash(json.dumps(brief.model_dump(mode="json"), sort_keys=True)),
        },
    )


def frame_bytes(setting: Setting) -> int:
    """Return the size of a frame as stored: whole bytes a sample, without compression, and a header."""
    sensor = setting.rig.sensor
    return sensor.width_px * sensor.height_px * (-(-sensor.bit_depth // 8)) + 5760


def circumstances_of(circumstances: Circumstances) -> dict[str, Any]:
    """Return what a plan keeps of the circumstances: plain data, rounded to what is known."""
    from planner.sky.timescale import utc_iso

    def rounded(value: float) -> float | None:
        return round(float(value), 2) if np.isfinite(value) else None

    return {
        "happens": circumstances.happens,
        "reason": circumstances.reason,
        "least_separation_arcsec": rounded(circumstances.least_separation_arcsec),
        "instants": [
            {
                "name": instant.name,
                "utc": utc_iso(instant.tt_s, 2),
                "sigma_s": float(f"{instant.sigma_s:.3g}"),
                "position_angle_deg": rounded(instant.position_angle_deg),
                "altitude_deg": rounded(instant.altitude_deg),
                "azimuth_deg": rounded(instant.azimuth_deg),
                "visible": bool(instant.visible),
                "limited_by": instant.limited_by,
            }
            for instant in circumstances.instants
        ],
        "conventions": dict(circumstances.conventions),
    }


def predicted_track(setting: Setting, passages: list[Passage]) -> list[PredictedPoint]:
    """Return the predicted track from the first frame to the last; for a campaign over the whole event as well."""
    from planner.sky.places import offsets_arcsec
    from planner.sky.timescale import datetime_from_tt_s, tt_s_from_datetime

    starts = [shot.start_utc for passage in passages for shot in passage.shots]
    first, last = (float(tt_s_from_datetime(moment)) for moment in (min(starts), max(starts)))
    final = max(
        float(tt_s_from_datetime(s.start_utc)) + s.cadence_s * (s.count - 1) + s.exposure_s
        for passage in passages
        for s in passage.shots
    )
    last = max(last, final)
    if setting.family.campaign:
        first, last = min(first, setting.event.start_tt_s), max(last, setting.event.end_tt_s)
    moments = [
        (moment + timedelta(milliseconds=500)).replace(microsecond=0)
        for moment in datetime_from_tt_s(np.linspace(first, last, _TRACK_POINTS))
    ]
    tt_s = np.asarray(tt_s_from_datetime(moments))
    geometry = setting.geometry(tt_s)
    target = geometry.discs[geometry.target]
    east = north = np.full(len(tt_s), np.nan)
    if geometry.reference in geometry.discs:
        reference = geometry.discs[geometry.reference]
        east, north = offsets_arcsec(reference.ra_deg, reference.dec_deg, target.ra_deg, target.dec_deg)
    return [
        PredictedPoint(
            utc=moments[i],
            ra_deg=round(float(target.ra_deg[i]), 7),
            dec_deg=round(float(target.dec_deg[i]), 7),
            east_arcsec=round(float(east[i]), 3) if np.isfinite(east[i]) else None,
            north_arcsec=round(float(north[i]), 3) if np.isfinite(north[i]) else None,
            altitude_deg=round(float(geometry.altitude_deg[i]), 3),
        )
        for i in range(len(tt_s))
    ]
