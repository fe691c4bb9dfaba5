"""The passages of a campaign: one a visit (or a panel of its mosaic), framed together, timed together on one mount."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from datetime import timedelta
from math import ceil
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.sequence.framing import Field, best_angle_deg, field_of, frame_track, fullest_aim
from planner.sequence.models import Passage, Rig
from planner.sequence.mosaic import panels_over
from planner.sequence.motion import hour_angle_deg
from planner.sequence.nights import (
    Nights,
    reserve_nights,
    spread_evenly,
    usable_nights,
    visit_rule,
    wanted_visits,
)
from planner.sequence.passages import next_whole
from planner.sequence.setting import Setting
from planner.sequence.visit import Exposures, Stops, exposures_at

# A visit longer than this is centred on its best moment, and its night chosen for all of it.
LONG_VISIT_S = 600.0


@dataclass(frozen=True)
class Campaign:
    """Visits chosen for all cameras together: the nights, the reserves of each, and what was taken before."""

    nights: Nights
    chosen: np.ndarray
    reserves: list[np.ndarray]
    done: tuple[Passage, ...] = ()


def choose_campaign(
    setting: Setting,
    done: tuple[Passage, ...] = (),
    after_tt_s: float | None = None,
    visit_s: float = 0.0,
) -> Campaign:
    """Return the visits of a campaign; what was taken is kept and the rest of the path is spread anew.

    `visit_s`: how long the longest visit lasts, where that is known.
    """
    from planner.sky.timescale import tt_s_from_datetime

    if not done and after_tt_s is None:
        nights = usable_nights(setting, visit_s=visit_s)
        chosen = spread_evenly(
            nights.path_arcsec, wanted_visits(setting, nights), moonlight_mag=nights.moonlight_mag
        )
        return Campaign(nights, chosen, reserve_nights(nights, chosen, setting.wish.reserves))
    every = usable_nights(setting)
    taken = [float(tt_s_from_datetime(passage.shots[0].start_utc)) for passage in done]
    after = max([*taken, after_tt_s if after_tt_s is not None else -np.inf])
    nights = usable_nights(setting, after, visit_s)
    taken_path = float(np.interp(max(taken), every.tt_s, every.path_arcsec)) if taken else None
    left = max(1, wanted_visits(setting, every) - len({passage.visit for passage in done}))
    chosen = spread_evenly(nights.path_arcsec, left, taken_path, nights.moonlight_mag)
    return Campaign(nights, chosen, reserve_nights(nights, chosen, setting.wish.reserves), done)


def best_camera_angle_deg(setting: Setting, campaign: Campaign) -> float:
    """Return the camera angle at which the track of the visits has most room."""
    disc = campaign.nights.rows(campaign.chosen).disc
    return best_angle_deg(setting.rig, disc.ra_deg, disc.dec_deg)


@dataclass(frozen=True)
class Prepared:
    """What one camera does at the visits of a campaign, before cameras on one mount wait for each other."""

    setting: Setting
    campaign: Campaign
    stops: Stops
    exposures: Exposures
    ground: dict[str, Any] | None
    busy_s: np.ndarray


def prepare(setting: Setting, campaign: Campaign) -> Prepared:
    """Return a camera's pointings, what it exposes there and how long that takes."""
    visits = campaign.nights.rows(campaign.chosen)
    narrowest = min((setting.rig, *setting.mount_mates), key=lambda rig: field_of(rig).radius_deg)
    angle = setting.rig.camera_angle_deg if narrowest is not setting.rig else None
    stops, ground = _stops(setting, visits, field_of(narrowest, angle))
    exposures = exposures_at(setting, visits, stops)
    busy_s = np.array([exposures.busy_s(row) for row in range(len(stops))])
    return Prepared(setting, campaign, stops, exposures, ground, busy_s)


def campaign_passages(
    prepared: Prepared, busy_s: np.ndarray | None = None, tick: Callable[[int, int], None] | None = None
) -> list[Passage]:
    """Return one passage a pointing, which is one a visit unless a mosaic is wanted.

    `busy_s`: how long the slowest camera on the mount needs at each pointing; its own time when None.
    """
    setting, campaign, stops, exposures = (
        prepared.setting,
        prepared.campaign,
        prepared.stops,
        prepared.exposures,
    )
    busy_s = prepared.busy_s if busy_s is None else busy_s
    visits = campaign.nights.rows(campaign.chosen)
    hour_angle = hour_angle_deg(setting.observer, visits.disc.ra_deg, visits.disc.dec_deg, visits.tt_s)
    turned = _turned(setting.rig, hour_angle)
    starts_s = visits.tt_s - _lead_s(setting, visits, stops, busy_s)
    done_visits = [passage.visit or 0 for passage in campaign.done]
    first = max(done_visits, default=0) + 1
    passages = list(campaign.done)
    moment = None
    for row in range(len(stops)):
        index = int(stops.visit[row])
        begins = row == 0 or stops.visit[row - 1] != index
        if begins:
            number_in_visit = 0
            moment, _ = next_whole(float(starts_s[index]), 60.0)
        assert moment is not None
        start = moment + timedelta(seconds=ceil(float(stops.slew_s[row]) - 1e-9))
        shots, _ = exposures.shots(row, start, reverse=number_in_visit % 2 == 1)
        moment = start + timedelta(seconds=float(busy_s[row]))
        number_in_visit += 1
        number, panel = first + index, stops.panel[row]
        where = f"{visits.path_arcsec[index] / 3600:.2f} degrees of its path"
        passages.append(
            Passage(
                name=f"visit {number}" + (f" {panel}" if panel else ""),
                purpose=f"{setting.event.spec.body} at {where}, {visits.altitude_deg[index]:.0f} degrees up"
                if stops.holds_target[row]
                else f"the stars beside the track, with {setting.event.spec.body} at {where}",
                visit=number,
                panel=panel,
                holds_target=bool(stops.holds_target[row]),
                flipped=bool(turned[index]),
                stars_expected=int(exposures.stars[row]),
                reserve_utc=[
                    next_whole(float(campaign.nights.tt_s[night]), 60.0)[0]
                    for night in campaign.reserves[index]
                ]
                if begins
                else [],
                shots=shots,
                **(
                    prepared.ground
                    or {
                        "aim": "field",
                        "aim_ra_deg": round(float(stops.ra_deg[row]) % 360.0, 5),
                        "aim_dec_deg": round(float(stops.dec_deg[row]), 5),
                    }
                ),
            )
        )
        if tick:
            tick(row + 1, len(stops))
    return passages


def slowest_s(prepared: list[Prepared], mount: str) -> np.ndarray:
    """Return how long the slowest camera on a mount needs at each pointing."""
    return np.max([each.busy_s for each in prepared if each.setting.rig.mount.name == mount], axis=0)


def longest_visit_s(prepared: list[Prepared]) -> float:
    """Return how long the longest visit of any camera lasts, those on one mount waiting for each other."""
    lengths = []
    for each in prepared:
        busy_s = slowest_s(prepared, each.setting.rig.mount.name)
        lengths.append(np.bincount(each.stops.visit, busy_s + each.stops.slew_s).max())
    return float(max(lengths))


def _lead_s(setting: Setting, visits: Nights, stops: Stops, busy_s: np.ndarray) -> np.ndarray:
    """Return how long before its best moment each visit begins: a long one has it in its middle.

    A moment that is fixed (sidereal time, solar depression) is always the beginning.
    """
    total_s = np.bincount(stops.visit, busy_s + stops.slew_s, len(visits))
    centred = (visit_rule(setting)[0] == "highest") & (total_s > LONG_VISIT_S)
    return np.where(centred, total_s / 2, 0.0)


def _turned(rig: Rig, hour_angle_deg: np.ndarray) -> np.ndarray:
    """Return at which visits the mount stands turned over against the first; near the meridian it stays as it was."""
    if rig.mount.kind != "equatorial" or not rig.mount.meridian_flip:
        return np.zeros(len(hour_angle_deg), bool)
    sure = np.abs(hour_angle_deg) > rig.mount.meridian_limit_deg
    last_sure = np.maximum.accumulate(np.where(sure, np.arange(len(sure)), -1))
    west = np.where(last_sure >= 0, hour_angle_deg[np.maximum(last_sure, 0)] > 0, hour_angle_deg[0] > 0)
    return west != west[0]


def _stops(setting: Setting, visits: Nights, field: Field) -> tuple[Stops, dict[str, Any] | None]:
    """Return where the camera points at each visit, and the one direction of a tripod, if it is one."""
    count = len(visits)
    each = np.arange(count)
    if setting.wish.mosaic is not None:
        return _mosaic_stops(setting, visits, field), None
    ground = None
    ra_deg, dec_deg = visits.disc.ra_deg, visits.disc.dec_deg
    off_axis_deg = np.zeros(count)
    if setting.rig.mount.kind == "fixed":
        # a tripod frames the arc over the ground: azimuth runs the other way round than right ascension
        level = Field(
            field.half_width_arcsec, field.half_height_arcsec, setting.rig.camera_angle_deg, field.parity
        )
        azimuth, altitude = fullest_aim(level, -visits.azimuth_deg, visits.altitude_deg)
        ground = {
            "aim": "ground",
            "aim_altitude_deg": round(altitude, 3),
            "aim_azimuth_deg": round(-azimuth % 360.0, 3),
        }
        off_axis_deg = _apart_deg(azimuth, altitude, -visits.azimuth_deg, visits.altitude_deg)
    else:
        aims = frame_track(field, ra_deg, dec_deg)
        ra_deg, dec_deg = aims.ra_deg, aims.dec_deg
        off_axis_deg = _apart_deg(ra_deg, dec_deg, visits.disc.ra_deg, visits.disc.dec_deg)
    alone = np.ones(count, bool)
    return Stops(each, (None,) * count, ra_deg, dec_deg, np.zeros(count), alone, alone, off_axis_deg), ground


def _apart_deg(
    a_deg: np.ndarray | float, b_deg: np.ndarray | float, c_deg: np.ndarray, d_deg: np.ndarray
) -> np.ndarray:
    """Return the angles between directions (a, b) and (c, d), each a longitude and a latitude."""
    from planner.sky.places import separation_arcsec, unit_vector

    first, second = unit_vector(np.asarray(a_deg), np.asarray(b_deg)), unit_vector(c_deg, d_deg)
    return separation_arcsec(first.reshape(3, -1), second) / 3600


def _mosaic_stops(setting: Setting, visits: Nights, field: Field) -> Stops:
    mount, wish = setting.rig.mount, setting.wish
    if mount.kind != "equatorial":
        raise InputError(
            f"wish.mosaic: found a mount that is {mount.kind}; allowed is equatorial, which holds the camera's angle "
            "from panel to panel"
        )
    grid = None if wish.mosaic == "track" else wish.mosaic
    track = setting.geometry(np.linspace(setting.event.start_tt_s, setting.event.end_tt_s, 400))
    disc = track.discs[track.target]
    used = (disc.ra_deg, disc.dec_deg)
    if grid is None and setting.family.name == "apparition-arc":
        # far from the Sun's glare the planet is never seen: the visits alone say what must fit
        used = (visits.disc.ra_deg, visits.disc.dec_deg)
    panels = panels_over(field, *used, grid, wish.mosaic_overlap)
    orders, slews, target, holds = [], [], [], []
    for ra, dec in zip(visits.disc.ra_deg, visits.disc.dec_deg, strict=True):
        first = panels.holding(field, float(ra), float(dec))
        order, slewed_deg = panels.order_from(first)
        orders.append(order)
        slews.append(np.where(slewed_deg > 0, slewed_deg / mount.slew_deg_s + mount.settle_s, 0.0))
        inside = panels.holds(field, float(ra), float(dec))[order]
        holds.append(inside)
        target.append((np.arange(len(order)) == 0) & inside)
    order = np.concatenate(orders)
    return Stops(
        np.repeat(np.arange(len(visits)), len(panels)),
        tuple(panels.names[each] for each in order),
        panels.ra_deg[order],
        panels.dec_deg[order],
        np.concatenate(slews),
        np.concatenate(target),
        np.concatenate(holds),
        _apart_deg(
            panels.ra_deg[order],
            panels.dec_deg[order],
            np.repeat(visits.disc.ra_deg, len(panels)),
            np.repeat(visits.disc.dec_deg, len(panels)),
        ),
    )


def rig_at_angle(rig: Rig, camera_angle_deg: float) -> Rig:
    """Return the rig with its camera turned."""
    return rig.model_copy(update={"camera_angle_deg": round(camera_angle_deg, 1)})
