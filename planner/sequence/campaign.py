"""The passages of a campaign: one a visit, framed together, exposed for a plate solution and for the planet."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from datetime import timedelta
from math import ceil

import numpy as np

from planner.sequence import exposure, radiometry
from planner.sequence.framing import Field, Framing, best_angle_deg, field_of, frame_track
from planner.sequence.models import Passage, Rig, Shot
from planner.sequence.motion import hour_angle_deg, motion
from planner.sequence.nights import Nights, reserve_nights, spread_evenly, usable_nights, wanted_visits
from planner.sequence.passages import next_whole
from planner.sequence.recipes import tracking_of
from planner.sequence.setting import Setting

# Enough stars for a plate solution with outliers to spare, each with signal for a centroid of a tenth of a pixel.
STARS_WANTED, STAR_SIGNAL_TO_NOISE = 60, 20.0
SOLVABLE_SIGNAL_TO_NOISE = 10.0
# A planet clipped so many times over can still be measured by its outline (see imaging/discs).
SATURATION_BORNE = 200.0
_LONGEST_S = 60.0
_SKY_WELL_FRACTION = 0.2


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
        chosen = spread_evenly(nights.path_arcsec, wanted_visits(setting, nights))
        return Campaign(nights, chosen, reserve_nights(nights, chosen, setting.wish.reserves))
    every = usable_nights(setting)
    taken = [float(tt_s_from_datetime(passage.shots[0].start_utc)) for passage in done]
    after = max([*taken, after_tt_s if after_tt_s is not None else -np.inf])
    nights = usable_nights(setting, after)
    taken_path = float(np.interp(max(taken), every.tt_s, every.path_arcsec)) if taken else None
    left = max(1, wanted_visits(setting, every) - len(done))
    chosen = spread_evenly(nights.path_arcsec, left, taken_path)
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
    plan = _star_plan(setting, visits, aims)
    hour_angle = hour_angle_deg(setting.observer, visits.disc.ra_deg, visits.disc.dec_deg, visits.tt_s)
    turned = (hour_angle >= 0) != (hour_angle[0] >= 0)
    if setting.rig.mount.kind != "equatorial" or not setting.rig.mount.meridian_flip:
        turned = np.zeros(len(visits), bool)
    first = len(campaign.done) + 1
    passages = list(campaign.done)
    for index in range(len(visits)):
        number = first + index
        shots = _visit_shots(setting, visits, plan, index)
        passages.append(
            Passage(
                name=f"visit {number}",
                purpose=f"{setting.event.spec.body} at {visits.path_arcsec[index] / 3600:.2f} degrees of its path, "
                f"{visits.altitude_deg[index]:.0f} degrees up",
                visit=number,
                flipped=bool(turned[index]),
                stars_expected=int(plan.stars[index]),
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
    ground = frame_track(level, -visits.azimuth_deg, visits.altitude_deg)
    middle = int(np.argmin(np.abs(visits.altitude_deg - np.median(visits.altitude_deg))))
    where = {
        "aim": "ground",
        "aim_altitude_deg": round(float(ground.dec_deg[middle]), 3),
        "aim_azimuth_deg": round(float(-ground.ra_deg[middle]) % 360.0, 3),
    }
    return Framing(visits.disc.ra_deg, visits.disc.dec_deg, ground.whole), where


@dataclass(frozen=True)
class _StarPlan:
    """Exposures at n visits: for stars, for the planet alone (NaN where the star frames do), for depth; (n,) arrays."""

    stars_s: np.ndarray
    planet_s: np.ndarray
    deep_s: np.ndarray
    stars: np.ndarray
    peak_e_s: np.ndarray
    trail_px_s: np.ndarray
    gain: float


def _star_plan(setting: Setting, visits: Nights, aims: Framing) -> _StarPlan:
    from planner.sky.photometry import airmass

    rig, site, through, wish = setting.rig, setting.site, setting.through, setting.wish
    count = len(visits)
    gain = setting.gain_for_faint()
    saturation = radiometry.saturation_e(rig, gain)
    mass = airmass(visits.altitude_deg)
    sky_mag = setting.sky_mag_arcsec2(setting.geometry(visits.tt_s))
    sky = radiometry.sky_rate_e_s_px(through, sky_mag, setting.scale_arcsec_px)
    fwhm_px = radiometry.psf_fwhm_arcsec(rig, site.seeing_arcsec, mass) / setting.scale_arcsec_px
    pixels = np.maximum(2.0 * fwhm_px**2, 4.0)
    noise2 = pixels * radiometry.at_gain(rig, gain).read_noise_e ** 2
    background = pixels * (sky + rig.sensor.dark_e_s)
    fields = [_field_stars(setting, aims, index, float(visits.tt_s[index])) for index in range(count)]

    def star_rate(magnitude: np.ndarray, row: int) -> np.ndarray:
        return radiometry.rate_e_s(
            through, radiometry.extinguished(magnitude, mass[row], site.extinction_mag)
        )

    enough_s = np.empty(count)
    for row, magnitudes in enumerate(fields):
        faintest = magnitudes[min(STARS_WANTED, len(magnitudes)) - 1] if len(magnitudes) else 10.0
        enough_s[row] = exposure.time_for_signal_to_noise_s(
            star_rate(faintest, row), background[row], noise2[row], STAR_SIGNAL_TO_NOISE
        )
    peak = exposure.peak_rate_e_s(rig, site, through, visits.disc.name, visits.disc, visits.altitude_deg)
    per_second = np.maximum(_trail_px_s(setting, visits), 1e-12)
    sensor = rig.sensor
    longest = np.minimum.reduce(
        [
            np.full(count, min(_LONGEST_S, sensor.max_exposure_s)),
            _SKY_WELL_FRACTION * saturation / np.maximum(sky, 1e-12),
            np.maximum(wish.trail_px / per_second, sensor.min_exposure_s),
        ]
    )
    bearable = SATURATION_BORNE * saturation / peak
    stars_s = np.clip(np.maximum(enough_s, np.minimum(bearable, longest)), sensor.min_exposure_s, longest)
    if wish.exposure_s is not None:
        stars_s = np.full(count, wish.exposure_s)
    stars_s = np.array([exposure.rounded_up(value) for value in np.maximum(stars_s, sensor.min_exposure_s)])
    planet_s = exposure.wanted_exposure_s(rig, peak, wish.well_fraction, gain)
    needed = (stars_s > bearable * 1.2) | (wish.planet_frames > 0)
    planet_s = np.where(needed, planet_s, np.nan)
    solvable = np.array(
        [
            (
                radiometry.signal_to_noise(
                    star_rate(magnitudes, row) * stars_s[row],
                    sky[row] * stars_s[row],
                    sensor.dark_e_s * stars_s[row],
                    float(np.sqrt(noise2[row] / pixels[row])),
                    pixels[row],
                )
                >= SOLVABLE_SIGNAL_TO_NOISE
            ).sum()
            for row, magnitudes in enumerate(fields)
        ]
    )
    return _StarPlan(stars_s, planet_s, longest, solvable, peak, per_second, gain)


def _field_stars(setting: Setting, aims: Framing, row: int, tt_s: float) -> np.ndarray:
    """Return the magnitudes of the catalogue stars in the frame, brightest first."""
    from planner.sky.places import offsets_arcsec
    from planner.sky.stars import stars_in_field

    field = field_of(setting.rig)
    ra_deg, dec_deg = float(aims.ra_deg[row]) % 360.0, float(aims.dec_deg[row])
    stars = stars_in_field(ra_deg, dec_deg, field.radius_deg, tt_s)
    right, up = field.along(*offsets_arcsec(ra_deg, dec_deg, stars.ra_deg, stars.dec_deg))
    inside = (np.abs(right) < field.half_width_arcsec) & (np.abs(up) < field.half_height_arcsec)
    return np.sort(stars.magnitude[inside])


def _trail_px_s(setting: Setting, visits: Nights) -> np.ndarray:
    """Return how fast stars and planet trail in the frame, pixels a second at the corner."""
    rate = np.empty(len(visits))
    tracking = tracking_of(setting, "field")
    for row, tt_s in enumerate(visits.tt_s):
        times = tt_s + np.array([-60.0, 0.0, 60.0])
        geometry = setting.geometry(times)
        disc = geometry.discs[geometry.target]
        moving = motion(setting.rig, setting.observer, tracking, disc.ra_deg, disc.dec_deg, times)
        rate[row] = moving.trail_px(setting.rig, 1.0, corner=True)[1]
    return rate


def _visit_shots(setting: Setting, visits: Nights, plan: _StarPlan, row: int) -> list[Shot]:
    kinds = [("stars", float(plan.stars_s[row]), setting.wish.frames_per_visit)]
    if np.isfinite(plan.planet_s[row]):
        count = setting.wish.planet_frames or setting.wish.frames_per_visit
        kinds.append(("planet", exposure.rounded_down(float(plan.planet_s[row])), count))
    if setting.wish.deep_frames:
        kinds.append(("deep", exposure.rounded_down(float(plan.deep_s[row])), setting.wish.deep_frames))
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
