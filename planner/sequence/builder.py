"""From a brief to plans, one a camera: passages, steps, predicted track, storage, findings, cautions, provenance."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass, replace
from datetime import timedelta
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.events.family import Circumstances
from planner.provenance import content_hash, versions
from planner.sequence import campaign as campaigns
from planner.sequence.assumptions import assumptions_of
from planner.sequence.calibration import calibration_of
from planner.sequence.capacity import end_utc, frame_bytes
from planner.sequence.cautions import cautions_of
from planner.sequence.feasibility import judge, judge_together
from planner.sequence.flips import Pause
from planner.sequence.guiding import with_guides
from planner.sequence.models import Brief, Passage, Plan, PredictedPoint
from planner.sequence.passages import event_passages
from planner.sequence.setting import Setting, settings_of
from planner.sequence.steps import steps_of

_TRACK_POINTS = 121
_GIGABYTE = 1e9

Tick = Callable[[int, int], None]


@dataclass(frozen=True)
class Taken:
    """What a campaign has already: the visits that were taken, and the moment from which the rest is planned."""

    passages: tuple[Passage, ...]
    after_tt_s: float | None = None


def build_plan(brief: Brief, tick: Tick | None = None) -> Plan:
    """Return the plan of a brief for its own rig; raises InputError when nothing of the event can be photographed."""
    return build_plans(brief, tick)[0]


def build_plans(brief: Brief, tick: Tick | None = None, taken: Taken | None = None) -> list[Plan]:
    """Return the plans of a brief, one for each of its rigs, its own first; their passages share their instants.

    Findings of level `error` are in the plans too: it is for the caller to stop at them (`feasibility.stop_at_errors`).
    Raises InputError when nothing of the event can be photographed.
    """
    settings = settings_of(brief)
    clock_sigma_s = max(setting.rig.clock.sigma_s for setting in settings)
    chosen = None
    prepared: list[campaigns.Prepared] = []
    if settings[0].family.campaign:
        taken = taken or Taken(())
        chosen = campaigns.choose_campaign(settings[0], taken.passages, taken.after_tt_s)
        prepared = _prepared(settings, chosen)
        visit_s = campaigns.longest_visit_s(prepared)
        if visit_s > campaigns.LONG_VISIT_S:
            chosen = campaigns.choose_campaign(settings[0], taken.passages, taken.after_tt_s, visit_s)
            prepared = _prepared(settings, chosen)
        if brief.wish.camera_angle == "best":
            angle = campaigns.best_camera_angle_deg(settings[0], chosen)
            settings = [replace(each, rig=campaigns.rig_at_angle(each.rig, angle)) for each in settings]
            prepared = _prepared(settings, chosen)
    elif settings[0].wish.mosaic is not None:
        raise InputError(
            f"wish.mosaic: found in a brief for {settings[0].family.name}; allowed in campaigns of many nights "
            "(retrograde-track, apparition-arc): within hours the camera follows what moves"
        )
    plans = []
    for number, setting in enumerate(settings):
        pauses: list[Pause] = []
        if chosen is not None:
            slowest_s = campaigns.slowest_s(prepared, setting.rig.mount.name)
            passages = campaigns.campaign_passages(prepared[number], slowest_s, tick if number == 0 else None)
        else:
            passages, pauses = event_passages(setting, clock_sigma_s)
        passages = with_guides(setting, with_slack(passages, setting.rig.sensor.readout_s))
        plans.append(_plan(setting, passages, pauses, settings))
    return judge_together(plans)


def _prepared(settings: list[Setting], chosen: campaigns.Campaign) -> list[campaigns.Prepared]:
    """Return what each camera does; what was taken already is kept in the plan of the first."""
    return [
        campaigns.prepare(setting, chosen if number == 0 else replace(chosen, done=()))
        for number, setting in enumerate(settings)
    ]


def _plan(setting: Setting, passages: list[Passage], pauses: list[Pause], settings: list[Setting]) -> Plan:
    frames_total = sum(shot.count for passage in passages for shot in passage.shots)
    calibration = calibration_of(setting, passages) if setting.wish.calibration else []
    calibration_total = sum(each.count for each in calibration)
    brief = setting.brief
    plan = Plan(
        title=brief.title,
        event=brief.event,
        site=setting.site,
        rig=setting.rig,
        companions=[other.rig.name for other in settings if other.rig.name != setting.rig.name],
        circumstances=circumstances_of(setting.circumstances),
        passages=passages,
        steps=steps_of(setting, passages, pauses),
        calibration=calibration,
        track=predicted_track(setting, passages),
        frames_total=frames_total,
        storage_gb=round((frames_total + calibration_total) * frame_bytes(setting.rig) / _GIGABYTE, 3),
        assumptions=assumptions_of(setting),
        cautions=cautions_of(setting),
        provenance={
            **versions(),
            "brief": content_hash(json.dumps(brief.model_dump(mode="json"), sort_keys=True)),
        },
    )
    return plan.model_copy(update={"findings": judge(plan, setting)})


def with_slack(passages: list[Passage], readout_s: float) -> list[Passage]:
    """Return the passages in time order, each with the time that is left after it before the next one."""
    passages = sorted(passages, key=lambda passage: min(shot.start_utc for shot in passage.shots))
    result = []
    for passage, after in zip(passages, [*passages[1:], None], strict=True):
        slack = None
        if after is not None:
            begins = min(shot.start_utc for shot in after.shots)
            slack = round((begins - end_utc(passage)).total_seconds() - readout_s, 3)
        result.append(passage.model_copy(update={"slack_s": slack}))
    return result


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
    from planner.sequence.recipes import place_of
    from planner.sky.places import offsets_arcsec
    from planner.sky.timescale import datetime_from_tt_s, tt_s_from_datetime

    first = float(tt_s_from_datetime(min(shot.start_utc for passage in passages for shot in passage.shots)))
    last = float(tt_s_from_datetime(max(end_utc(passage) for passage in passages)))
    if setting.family.campaign:
        first, last = min(first, setting.event.start_tt_s), max(last, setting.event.end_tt_s)
    moments = [
        (moment + timedelta(milliseconds=500)).replace(microsecond=0)
        for moment in datetime_from_tt_s(np.linspace(first, last, _TRACK_POINTS))
    ]
    tt_s = np.asarray(tt_s_from_datetime(moments))
    geometry = setting.geometry(tt_s)
    ra_deg, dec_deg = place_of(geometry, geometry.target)
    east = north = np.full(len(tt_s), np.nan)
    if geometry.reference in geometry.discs:
        reference = geometry.discs[geometry.reference]
        east, north = offsets_arcsec(reference.ra_deg, reference.dec_deg, ra_deg, dec_deg)
    return [
        PredictedPoint(
            utc=moments[i],
            ra_deg=round(float(ra_deg[i]), 7),
            dec_deg=round(float(dec_deg[i]), 7),
            east_arcsec=round(float(east[i]), 3) if np.isfinite(east[i]) else None,
            north_arcsec=round(float(north[i]), 3) if np.isfinite(north[i]) else None,
            altitude_deg=round(float(geometry.altitude_deg[i]), 3),
        )
        for i in range(len(tt_s))
    ]
