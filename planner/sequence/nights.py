"""Campaigns: which nights, and when in each, so that the target moves evenly along its path on the sky."""

from __future__ import annotations

from dataclasses import dataclass, fields
from math import ceil

import numpy as np

from planner.errors import InputError
from planner.events.family import Geometry
from planner.sequence.motion import hour_angle_deg
from planner.sequence.setting import Setting
from planner.sequence.skyglow import dark_nl, moonlight_nl
from planner.sky.discs import SkyDisc

DAY_S = 86400.0
STEP_S = 600.0
ARC_DEPRESSION_DEG = (
    8.0  # bright enough for a foreground, dark enough for Mercury; common practice, no source
)
_LEAST_VISITS, _MOST_VISITS = 6, 30
_SPACING_PX = 40.0
_MOONLIGHT_COST = 0.25**2 / 3
_SPACING_DIAMETERS = 3.0


@dataclass(frozen=True)
class Nights:
    """Usable nights in time order, each at its best time; arrays of shape (n,), `path_arcsec` along the sky."""

    tt_s: np.ndarray
    night: np.ndarray
    altitude_deg: np.ndarray
    azimuth_deg: np.ndarray
    sun_altitude_deg: np.ndarray
    moon_deg: np.ndarray
    moonlight_mag: np.ndarray
    path_arcsec: np.ndarray
    disc: SkyDisc

    def __len__(self) -> int:
        """Give the number of nights."""
        return len(self.tt_s)

    def rows(self, rows: np.ndarray) -> Nights:
        """Return some of the nights."""
        from planner.sequence.passages import rows_of_disc

        arrays = {f.name: getattr(self, f.name)[rows] for f in fields(self) if f.name != "disc"}
        return Nights(**arrays, disc=rows_of_disc(self.disc, rows))


def usable_nights(setting: Setting, after_tt_s: float | None = None, visit_s: float = 0.0) -> Nights:
    """Return every night of the event that the wish allows, each at its best time; raises InputError when none is.

    Best is highest, or the one moment of the fixed sidereal time or solar depression that the wish names. A visit that
    lasts `visit_s` about its highest moment must be dark and high from its beginning to its end.
    """
    from planner.sky.discs import sky_disc
    from planner.sky.photometry import airmass

    event, wish = setting.event, setting.wish
    grid_s = np.arange(event.start_tt_s, event.end_tt_s, STEP_S)
    geometry = setting.geometry(grid_s)
    path_grid = path_arcsec(geometry)
    tt_s = _candidates(setting, geometry)
    if tt_s is not grid_s:
        tt_s = tt_s[(tt_s > grid_s[0]) & (tt_s < grid_s[-1])]
        geometry = setting.geometry(tt_s) if len(tt_s) else geometry
    target = geometry.discs[geometry.target]
    moon = sky_disc("moon", setting.observer, tt_s)
    moon_deg = _apart_deg(moon, target)
    high = setting.reachable(geometry) & (airmass(geometry.altitude_deg) <= wish.most_airmass)
    dark = geometry.sun_altitude_deg < wish.darkness_deg
    when = visit_rule(setting)[0]
    if when == "solar-depression":
        dark = np.ones(len(tt_s), bool)
    away = moon_deg > wish.moon_distance_deg
    later = tt_s > (after_tt_s if after_tt_s is not None else -np.inf)
    lasting = np.ones(len(tt_s), bool)
    if when == "highest":
        lasting = _lasting(high & dark, ceil(visit_s / 2 / STEP_S))
    usable = high & dark & away & later & lasting
    if not usable.any():
        counts = {
            "high enough": high,
            "dark enough": dark,
            "far enough from the Moon": away,
            "still to come": later,
            f"followed by the {visit_s / 60:.0f} minutes that a visit takes": lasting,
        }
        failing = min(counts, key=lambda name: int((high & counts[name]).sum()))
        raise InputError(
            f"event: no night from {setting.site.name} has {geometry.target} up, the Sun below {wish.darkness_deg:g} "
            f"degrees, airmass under {wish.most_airmass:g} and the Moon {wish.moon_distance_deg:g} degrees away; "
            f"fewest moments are {failing}"
        )
    # a night runs from local noon to noon
    night = np.floor((tt_s / DAY_S) + setting.site.longitude_deg / 360.0).astype(int)
    score = np.where(usable, geometry.altitude_deg, -np.inf)
    order = np.lexsort((-score, night))
    best = order[np.concatenate([[True], np.diff(night[order]) != 0])]
    best = np.sort(best[np.isfinite(score[best])])
    path = np.interp(tt_s, grid_s, path_grid)
    return Nights(
        tt_s,
        night,
        geometry.altitude_deg,
        geometry.azimuth_deg,
        geometry.sun_altitude_deg,
        moon_deg,
        _moonlight_mag(setting, geometry, moon, moon_deg),
        path,
        target,
    ).rows(best)


def _lasting(fit: np.ndarray, steps: int) -> np.ndarray:
    """Return where a condition holds so many steps before and after as well."""
    padded = np.concatenate([np.zeros(steps, bool), fit, np.zeros(steps, bool)])
    return padded[: len(fit)] & fit & padded[2 * steps :]


def _apart_deg(a: SkyDisc, b: SkyDisc) -> np.ndarray:
    from planner.sky.places import separation_arcsec, unit_vector

    return separation_arcsec(unit_vector(a.ra_deg, a.dec_deg), unit_vector(b.ra_deg, b.dec_deg)) / 3600


def _moonlight_mag(setting: Setting, geometry: Geometry, moon: SkyDisc, moon_deg: np.ndarray) -> np.ndarray:
    """Return by how many magnitudes the Moon brightens the dark sky at the target."""
    from planner.sky.places import altaz

    up, _ = altaz((moon.ra_deg, moon.dec_deg), setting.observer, geometry.tt_s)
    extinction = setting.site.extinction_mag
    light = moonlight_nl(geometry.altitude_deg, up, moon_deg, moon.phase_angle_deg, extinction)
    dark = dark_nl(setting.site.sky_brightness_mag_arcsec2, geometry.altitude_deg, extinction)
    return 2.5 * np.log10(1 + light / dark)


def visit_rule(setting: Setting) -> tuple[str, float]:
    """Return when in the night a visit is made, and the solar depression where that decides it."""
    wish = setting.wish
    if wish.visit_when is None and setting.family.name == "apparition-arc":
        return "solar-depression", ARC_DEPRESSION_DEG
    return wish.visit_when or "highest", wish.solar_depression_deg or 0.0


def path_arcsec(geometry: Geometry) -> np.ndarray:
    """Return the length of the target's path on the sky up to each time."""
    from planner.sky.places import separation_arcsec, unit_vector

    target = geometry.discs[geometry.target]
    place = unit_vector(target.ra_deg, target.dec_deg)
    return np.concatenate([[0.0], np.cumsum(separation_arcsec(place[:, :-1], place[:, 1:]))])


def _candidates(setting: Setting, geometry: Geometry) -> np.ndarray:
    """Return the times among which each night's best is looked for."""
    wish = setting.wish
    when, depression_deg = visit_rule(setting)
    if when == "sidereal-time":
        zero = np.zeros(len(geometry.tt_s))
        turn = np.unwrap(np.radians(hour_angle_deg(setting.observer, zero, zero, geometry.tt_s)))
        wanted = np.radians(15.0 * wish.sidereal_time_h)  # type: ignore[operator]
        turns = np.arange(np.ceil((turn[0] - wanted) / (2 * np.pi)), (turn[-1] - wanted) / (2 * np.pi) + 1)
        return np.interp(wanted + 2 * np.pi * turns, turn, geometry.tt_s)
    if when == "solar-depression":
        above = geometry.sun_altitude_deg + depression_deg
        falls = np.flatnonzero((above[:-1] > 0) & (above[1:] <= 0))
        rises = np.flatnonzero((above[:-1] <= 0) & (above[1:] > 0))
        chosen = {"evening": falls, "morning": rises, "either": np.sort(np.concatenate([falls, rises]))}[
            wish.twilight
        ]
        part = above[chosen] / (above[chosen] - above[chosen + 1])
        return geometry.tt_s[chosen] + part * STEP_S
    return geometry.tt_s


def wanted_visits(setting: Setting, nights: Nights) -> int:
    """Return how many visits: as asked, else as many as stand clearly apart in the picture."""
    if setting.wish.visits is not None:
        return setting.wish.visits
    apart = max(
        _SPACING_PX * setting.scale_arcsec_px,
        2 * _SPACING_DIAMETERS * float(np.median(nights.disc.semidiameter_arcsec)),
    )
    return int(np.clip(np.ptp(nights.path_arcsec) / apart, _LEAST_VISITS, _MOST_VISITS))


def spread_evenly(
    path: np.ndarray, count: int, taken_path: float | None = None, moonlight_mag: np.ndarray | None = None
) -> np.ndarray:
    """Return indices of at most `count` places, as even along the path as they allow, none twice.

    With `taken_path` (where the last visit taken lies) the first of them keeps the same distance from it. Moonlight is
    avoided as far as that costs little: three magnitudes of it are worth a quarter of the distance between visits.
    """
    if taken_path is None:
        goals = np.linspace(path[0], path[-1], count)
    else:
        goals = np.linspace(min(taken_path, path[-1]), path[-1], count + 1)[1:]
    spacing = max(abs(path[-1] - goals[0]) / max(count - 1, 1), 1e-9)
    cost = ((path[None, :] - goals[:, None]) / spacing) ** 2
    if moonlight_mag is not None:
        cost = cost + _MOONLIGHT_COST * moonlight_mag[None, :]
    return np.unique(cost.argmin(axis=1))


def reserve_nights(nights: Nights, chosen: np.ndarray, count: int) -> list[np.ndarray]:
    """Return for each chosen night the others to fall back on: before the next visit, nearest on the path first."""
    reserves = []
    for position, index in enumerate(chosen):
        end = chosen[position + 1] if position + 1 < len(chosen) else len(nights)
        between = np.arange(index + 1, end)
        near = np.argsort(np.abs(nights.path_arcsec[between] - nights.path_arcsec[index]), kind="stable")
        reserves.append(between[near][:count])
    return reserves
