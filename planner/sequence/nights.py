"""Campaigns: which nights, and when in each, so that the target moves evenly along its path on the sky."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from math import ceil

import numpy as np

from planner.errors import InputError
from planner.sequence import exposure, radiometry
from planner.sequence.framing import Framing, field_of, frame_track
from planner.sequence.models import Passage, Shot
from planner.sequence.passages import next_whole, rows_of_disc, tracking_of
from planner.sequence.setting import Setting
from planner.sky.discs import SkyDisc

DAY_S = 86400.0
STEP_S = 600.0
_LEAST_VISITS, _MOST_VISITS = 6, 30
_SPACING_PX = 40.0
# Enough stars for a plate solution with outliers to spare, each with signal for a centroid of a tenth of a pixel.
STARS_WANTED, STAR_SIGNAL_TO_NOISE = 60, 20.0
# A planet clipped so many times over can still be measured by its bloom-free outline (see imaging/discs).
SATURATION_BORNE = 200.0
_LONGEST_S = 60.0
_SKY_WELL_FRACTION = 0.2


@dataclass(frozen=True)
class Visits:
    """Chosen visits in time order: best time of each, place of the target and its altitude; arrays of shape (n,)."""

    tt_s: np.ndarray
    ra_deg: np.ndarray
    dec_deg: np.ndarray
    altitude_deg: np.ndarray
    path_arcsec: np.ndarray
    disc: SkyDisc


def choose_visits(setting: Setting) -> Visits:
    """Return visits spread evenly along the path on the sky; raises InputError when no night will do."""
    from planner.sky.places import direction, separation_arcsec

    event, wish = setting.event, setting.wish
    tt_s = np.arange(event.start_tt_s, event.end_tt_s, STEP_S)
    geometry = setting.geometry(tt_s)
    target = geometry.discs[geometry.target]
    moon = direction("moon", setting.observer, tt_s)
    body = direction(geometry.target, setting.observer, tt_s)
    path = np.concatenate(
        [[0.0], np.cumsum(separation_arcsec(body.vector_km[:, :-1], body.vector_km[:, 1:]))]
    )
    moon_deg = separation_arcsec(moon.vector_km, body.vector_km) / 3600
    usable = (
        setting.reachable(geometry)
        & (geometry.sun_altitude_deg < wish.darkness_deg)
        & (moon_deg > wish.moon_distance_deg)
    )
    if not usable.any():
        raise InputError(
            f"event: no night from {setting.site.name} has {geometry.target} above the horizon line with the Sun below "
            f"{wish.darkness_deg:g} degrees and the Moon {wish.moon_distance_deg:g} degrees away"
        )
    # a night runs from local noon to noon
    night = np.floor((tt_s / DAY_S) + setting.site.longitude_deg / 360.0).astype(int)
    score = np.where(usable, geometry.altitude_deg, -np.inf)
    order = np.lexsort((-score, night))
    best = order[np.concatenate([[True], np.diff(night[order]) != 0])]
    best = np.sort(best[np.isfinite(score[best])])
    chosen = best[spread_evenly(path[best], _wanted_visits(setting, path[best]))]
    return Visits(
        tt_s[chosen],
        target.ra_deg[chosen],
        target.dec_deg[chosen],
        geometry.altitude_deg[chosen],
        path[chosen],
        rows_of_disc(target, chosen),
    )


def spread_evenly(path_arcsec: np.ndarray, count: int) -> np.ndarray:
    """Return indices of at most `count` of these places, as even along the path as the places allow, no place twice."""
    goals = np.linspace(path_arcsec[0], path_arcsec[-1], count)
    nearest = np.abs(path_arcsec[None, :] - goals[:, None]).argmin(axis=1)
    return np.unique(nearest)


def _wanted_visits(setting: Setting, path_arcsec: np.ndarray) -> int:
    if setting.wish.visits is not None:
        return setting.wish.visits
    length_px = np.ptp(path_arcsec) / setting.scale_arcsec_px
    return int(np.clip(length_px / _SPACING_PX, _LEAST_VISITS, _MOST_VISITS))


def campaign_passages(setting: Setting, tick: Callable[[int, int], None] | None = None) -> list[Passage]:
    """Return one passage a visit, each with frames exposed for the stars that a plate solution needs."""
    visits = choose_visits(setting)
    framing = frame_track(field_of(setting.rig), visits.ra_deg, visits.dec_deg)
    exposures = _star_exposures_s(setting, visits, framing)
    passages = []
    for index in range(len(visits.tt_s)):
        start, _ = next_whole(visits.tt_s[index], 60.0)
        exposure_s = float(exposures[index])
        cadence_s = ceil((exposure_s + setting.rig.sensor.readout_s) * 10) / 10 + 1.0
        shot = Shot(
            name="stars",
            start_utc=start,
            cadence_s=round(cadence_s, 3),
            count=setting.wish.frames_per_visit,
            exposure_s=exposure_s,
            filter=setting.filter_name,
            tracking=tracking_of(setting, "field"),
        )
        passages.append(
            Passage(
                name=f"visit {index + 1}",
                purpose=f"{setting.event.spec.body} at {visits.path_arcsec[index] / 3600:.2f} degrees along its path",
                visit=index + 1,
                aim="field",
                aim_ra_deg=round(float(framing.ra_deg[index]), 5),
                aim_dec_deg=round(float(framing.dec_deg[index]), 5),
                shots=[shot],
            )
        )
        if tick:
            tick(index + 1, len(visits.tt_s))
    return passages


def _star_exposures_s(setting: Setting, visits: Visits, framing: Framing) -> np.ndarray:
    """Return the exposure at each visit: enough stars for a solution, more while the planet can still be measured."""
    if setting.wish.exposure_s is not None:
        return np.full(len(visits.tt_s), setting.wish.exposure_s)
    from planner.sky.photometry import airmass
    from planner.sky.stars import stars_in_field

    rig, site, through = setting.rig, setting.site, setting.through
    field = field_of(rig)
    mass = airmass(visits.altitude_deg)
    magnitudes = np.empty(len(visits.tt_s))
    known: dict[tuple[float, float], float] = {}
    for index, place in enumerate(zip(framing.ra_deg, framing.dec_deg, strict=True)):
        place = (round(float(place[0]), 1), round(float(place[1]), 1))
        if place not in known:
            stars = stars_in_field(*place, field.radius_deg, float(visits.tt_s[index]))
            inside = np.sort(stars.magnitude)
            # the field is a rectangle in the circle that was asked for
            area = 4 * field.half_width_arcsec * field.half_height_arcsec / 3600**2
            rank = int(STARS_WANTED * np.pi * field.radius_deg**2 / area)
            known[place] = float(inside[min(rank, len(inside) - 1)]) if len(inside) else 10.0
        magnitudes[index] = known[place]
    rate = radiometry.rate_e_s(through, radiometry.extinguished(magnitudes, mass, site.extinction_mag))
    fwhm_px = radiometry.psf_fwhm_arcsec(rig, site.seeing_arcsec, mass) / setting.scale_arcsec_px
    pixels = np.maximum(2.0 * fwhm_px**2, 4.0)
    sky = radiometry.sky_rate_e_s_px(through, site.sky_brightness_mag_arcsec2, setting.scale_arcsec_px)
    wanted = exposure.time_for_signal_to_noise_s(
        rate, pixels * (sky + rig.sensor.dark_e_s), pixels * rig.sensor.read_noise_e**2, STAR_SIGNAL_TO_NOISE
    )
    longest = min(_LONGEST_S, _SKY_WELL_FRACTION * radiometry.saturation_e(rig) / max(float(sky), 1e-12))
    peak = exposure.peak_rate_e_s(rig, site, through, visits.disc.name, visits.disc, visits.altitude_deg)
    bearable = SATURATION_BORNE * radiometry.saturation_e(rig) / peak
    wanted = np.maximum(wanted, np.minimum(bearable, longest))
    wanted = np.clip(wanted, rig.sensor.min_exposure_s, min(longest, rig.sensor.max_exposure_s))
    return np.array([exposure.rounded_up(float(value)) for value in wanted])
