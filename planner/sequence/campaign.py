"""The passages of a campaign: one a visit, framed together, exposed for a plate solution and for the planet."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from datetime import timedelta
from math import ceil

import numpy as np

from planner.sequence import exposure, radiometry
from planner.sequence.framing import Field, Framing, best_angle_deg, field_of, frame_track, fullest_aim
from planner.sequence.models import Passage, Rig, Shot
from planner.sequence.motion import hour_angle_deg, motion_at_rates
from planner.sequence.nights import Nights, reserve_nights, spread_evenly, usable_nights, wanted_visits
from planner.sequence.passages import next_whole
from planner.sequence.recipes import tracking_of
from planner.sequence.setting import Setting
from planner.sequence.starfield import StarFrames, star_frames

_HALF_STEP_S = 60.0


@dataclass(frozen=True)
class Campaign:
    """Visits chosen for all cameras together: the nights, the reserves of each, and what was taken before."""

    nights: Nights
    chosen: np.ndarray
    reserves: list[np.ndarray]
    done: tuple[Passage, ...] = ()


def choose_campaign(
    setting: Setting, done: tuple[Passage, ...] = (), after_tt_s: float | None = None
) -> Campaign:
    """Return the visits of a campaign; what was taken is kept and the rest of the path is spread anew."""
    from planner.sky.timescale import tt_s_from_datetime

    if not done and after_tt_s is None:
        nights = usable_nights(setting)
        chosen = spread_evenly(
            nights.path_arcsec, wanted_visits(setting, nights), moonlight_mag=nights.moonlight_mag
        )
        return Campaign(nights, chosen, reserve_nights(nights, chosen, setting.wish.reserves))
    every = usable_nights(setting)
    taken = [float(tt_s_from_datetime(passage.shots[0].start_utc)) for passage in done]
    after = max([*taken, after_tt_s if after_tt_s is not None else -np.inf])
    nights = usable_nights(setting, after)
    taken_path = float(np.interp(max(taken), every.tt_s, every.path_arcsec)) if taken else None
    left = max(1, wanted_visits(setting, every) - len(done))
    chosen = spread_evenly(nights.path_arcsec, left, taken_path, nights.moonlight_mag)
    return Campaign(nights, chosen, reserve_nights(nights, chosen, setting.wish.reserves), done)


def best_camera_angle_deg(setting: Setting, campaign: Campaign) -> float:
    """Return the camera angle at which the track of the visits has most room."""
    disc = campaign.nights.rows(campaign.chosen).disc
    return best_angle_deg(setting.rig, disc.ra_deg, disc.dec_deg)


def campaign_passages(
    setting: Setting, campaign: Campaign, tick: Callable[[int, int], None] | None = None
) -> list[Passage]:
    """Return one passage a visit: star frames that also hold the planet, and others where no exposure does both."""
    visits = campaign.nights.rows(campaign.chosen)
    narrowest = min((setting.rig, *setting.mount_mates), key=lambda rig: field_of(rig).radius_deg)
    angle = setting.rig.camera_angle_deg if narrowest is not setting.rig else None
    aims, ground = _aims(setting, visits, field_of(narrowest, angle))
    exposures = _exposures(setting, visits, aims)
    hour_angle = hour_angle_deg(setting.observer, visits.disc.ra_deg, visits.disc.dec_deg, visits.tt_s)
    turned = _turned(setting.rig, hour_angle)
    first = len(campaign.done) + 1
    passages = list(campaign.done)
    for index in range(len(visits)):
        number = first + index
        shots = _visit_shots(setting, visits, exposures, index)
        passages.append(
            Passage(
                name=f"visit {number}",
                purpose=f"{setting.event.spec.body} at {visits.path_arcsec[index] / 3600:.2f} degrees of its path, "
                f"{visits.altitude_deg[index]:.0f} degrees up",
                visit=number,
                flipped=bool(turned[index]),
                stars_expected=int(exposures.frames.stars[index]),
                reserve_utc=[
                    next_whole(float(campaign.nights.tt_s[row]), 60.0)[0] for row in campaign.reserves[index]
                ],
                shots=shots,
                **(ground or _field_aim(aims, index)),
            )
        )
        if tick:
            tick(index + 1, len(visits))
    return passages


def _turned(rig: Rig, hour_angle_deg: np.ndarray) -> np.ndarray:
    """Return at which visits the mount stands turned over against the first; near the meridian it stays as it was."""
    if rig.mount.kind != "equatorial" or not rig.mount.meridian_flip:
        return np.zeros(len(hour_angle_deg), bool)
    sure = np.abs(hour_angle_deg) > rig.mount.meridian_limit_deg
    last_sure = np.maximum.accumulate(np.where(sure, np.arange(len(sure)), -1))
    west = np.where(last_sure >= 0, hour_angle_deg[np.maximum(last_sure, 0)] > 0, hour_angle_deg[0] > 0)
    return west != west[0]


def _field_aim(aims: Framing, index: int) -> dict:  # type: ignore[type-arg]
    return {
        "aim": "field",
        "aim_ra_deg": round(float(aims.ra_deg[index]) % 360.0, 5),
        "aim_dec_deg": round(float(aims.dec_deg[index]), 5),
    }


def _aims(setting: Setting, visits: Nights, field: Field) -> tuple[Framing, dict | None]:  # type: ignore[type-arg]
    """Return where the camera points among the stars at each visit, and the one direction of a tripod, if it is one."""
    if setting.rig.mount.kind != "fixed":
        return frame_track(field, visits.disc.ra_deg, visits.disc.dec_deg), None
    # a tripod frames the arc over the ground: azimuth runs the other way round than right ascension
    level = Field(
        field.half_width_arcsec, field.half_height_arcsec, setting.rig.camera_angle_deg, field.parity
    )
    azimuth, altitude = fullest_aim(level, -visits.azimuth_deg, visits.altitude_deg)
    where = {
        "aim": "ground",
        "aim_altitude_deg": round(altitude, 3),
        "aim_azimuth_deg": round(-azimuth % 360.0, 3),
    }
    return Framing(visits.disc.ra_deg, visits.disc.dec_deg, True), where


@dataclass(frozen=True)
class _Exposures:
    """What is exposed at n visits: the star frames, the planet alone (NaN where not needed), rates; (n,) arrays."""

    frames: StarFrames
    planet_s: np.ndarray
    peak_e_s: np.ndarray
    trail_px_s: np.ndarray
    gain: float


def _exposures(setting: Setting, visits: Nights, aims: Framing) -> _Exposures:
    gain = setting.gain_for_faint()
    disc = visits.disc
    peak = exposure.peak_rate_e_s(
        setting.rig, setting.site, setting.through, disc.name, disc, visits.altitude_deg
    )
    trail = _trail_px_s(setting, visits)
    frames = star_frames(setting, setting.geometry(visits.tt_s), aims.ra_deg, aims.dec_deg, peak, trail, gain)
    planet_s = exposure.wanted_exposure_s(setting.rig, peak, setting.wish.well_fraction, gain)
    needed = frames.clips_too_much | (setting.wish.planet_frames > 0)
    return _Exposures(frames, np.where(needed, planet_s, np.nan), peak, trail, gain)


def _trail_px_s(setting: Setting, visits: Nights) -> np.ndarray:
    """Return how fast stars and planet trail in the frame, pixels a second at the corner."""
    from planner.sky.places import offsets_arcsec

    before, after = (
        setting.geometry(visits.tt_s + step_s).discs[visits.disc.name]
        for step_s in (-_HALF_STEP_S, _HALF_STEP_S)
    )
    east, north = offsets_arcsec(before.ra_deg, before.dec_deg, after.ra_deg, after.dec_deg)
    rates = (east / (2 * _HALF_STEP_S), north / (2 * _HALF_STEP_S))
    place = (visits.disc.ra_deg, visits.disc.dec_deg)
    tracking = tracking_of(setting, "field")
    moving = motion_at_rates(setting.rig, setting.observer, tracking, place, rates, visits.tt_s)
    return moving.trail_px(setting.rig, 1.0, corner=True)


def _visit_shots(setting: Setting, visits: Nights, plan: _Exposures, row: int) -> list[Shot]:
    kinds = [
        ("stars", exposure.rounded_up(float(plan.frames.exposure_s[row])), setting.wish.frames_per_visit)
    ]
    if np.isfinite(plan.planet_s[row]):
        count = setting.wish.planet_frames or setting.wish.frames_per_visit
        kinds.append(("planet", exposure.rounded_down(float(plan.planet_s[row])), count))
    if setting.wish.deep_frames:
        kinds.append(
            ("deep", exposure.rounded_down(float(plan.frames.longest_s[row])), setting.wish.deep_frames)
        )
    shots = []
    start, _ = next_whole(float(visits.tt_s[row]), 60.0)
    saturation = radiometry.saturation_e(setting.rig, plan.gain)
    for name, exposure_s, count in kinds:
        cadence_s = ceil((exposure_s + setting.rig.sensor.readout_s) * 10 - 1e-9) / 10 + 1.0
        shots.append(
            Shot(
                name=name,
                start_utc=start,
                cadence_s=round(cadence_s, 3),
                count=count,
                exposure_s=exposure_s,
                gain=plan.gain,
                filter=setting.filter_name,
                tracking=tracking_of(setting, "field"),
                peak_of=visits.disc.name,
                peak_e=float(f"{min(exposure_s * plan.peak_e_s[row], saturation):.4g}"),
                trail_px=float(f"{exposure_s * plan.trail_px_s[row]:.2g}"),
            )
        )
        start += timedelta(seconds=ceil(cadence_s * count))
    return shots


def rig_at_angle(rig: Rig, camera_angle_deg: float) -> Rig:
    """Return the rig with its camera turned."""
    return rig.model_copy(update={"camera_angle_deg": round(camera_angle_deg, 1)})
