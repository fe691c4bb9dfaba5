"""Contacts with the Moon's limb as it is, mountains and valleys, in place of a smooth circle."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.events.contacts import RAD_ARCSEC, Passing
from planner.events.roots import changes_of_sign, roots_between
from planner.sky import places
from planner.sky.moonlimb import REFERENCE_RADIUS_KM, LimbModel, limb_profile
from planner.sky.observer import Observer

# Terrain rises to 8 km and falls to 5 km about the smooth limb; contacts lie within the time that this takes.
_RELIEF_KM = 9.0
_LONGEST_SEARCH_S = 1800.0
_SAMPLES = 601
# The limb is taken from one libration over the search: it changes by under 0.1 degrees, 30 m of terrain, an hour.
_WINDOW_DEG = 25.0


@dataclass(frozen=True)
class LimbCrossings:
    """When a target crosses the real limb near one smooth contact: TT seconds, in order; `into` hiding, or out."""

    tt_s: np.ndarray
    into: np.ndarray


def crossings(
    passing: Passing,
    observer: Observer | None,
    model: LimbModel,
    smooth_tt_s: float,
    edge: float,
    span_s: float | None = None,
) -> LimbCrossings:
    """Return the crossings of the real limb about a smooth contact.

    `edge`: +1 for the outside of the target's disc (first and last touch), -1 for its inside (wholly hidden), 0 for
    a star. The distance of the disc's centre from the limb is taken along the whole profile near it, so that a peak
    that reaches the disc from aside counts. `span_s` overrides how far about the contact is looked.
    """
    middle = np.array([smooth_tt_s])
    reach_s = _search_reach_s(passing, middle) if span_s is None else span_s
    times = smooth_tt_s + np.linspace(-reach_s, reach_s, _SAMPLES)
    moon = places.direction("moon", observer, middle)
    angle_deg = places.position_angle_deg(moon.vector_km, passing.far(observer, middle))[0]
    profile = _profile_arcsec(observer, model, smooth_tt_s, angle_deg)
    distance_km = float(moon.distance_km[0])

    def gap(tt_s: np.ndarray, which: np.ndarray | None = None) -> np.ndarray:
        east, north, radius = _place_arcsec(observer, passing, tt_s, distance_km)
        return _distance_from(profile, east, north) - edge * radius

    low, high = changes_of_sign(times, gap(times))
    found = np.sort(roots_between(gap, low, high, tolerance_s=1e-3))
    after = gap(found + 1e-2) if len(found) else np.empty(0)
    return LimbCrossings(found, after < 0)


def contact(
    passing: Passing,
    observer: Observer | None,
    model: LimbModel,
    smooth_tt_s: float,
    edge: float,
    ingress: bool,
) -> float:
    """Return the contact with the real limb near a smooth one, NaN where the limb does not reach the target.

    Where relief makes several: the first touch and the first moment wholly hidden on the way in, the first light and
    the last touch on the way out.
    """
    found = crossings(passing, observer, model, smooth_tt_s, edge)
    chosen = found.tt_s[found.into == ingress]
    if not len(chosen):
        return float("nan")
    last = not ingress and edge >= 0
    return float(chosen[-1] if last else chosen[0])


def _search_reach_s(passing: Passing, tt_s: np.ndarray) -> float:
    ends = passing.sight(np.concatenate([tt_s - 5.0, tt_s + 5.0]))
    rate = abs(float(np.diff(ends.separation_rad)[0])) / 10.0
    slow = _RELIEF_KM / float(ends.near_distance_km[0]) / max(rate, 1e-12)
    return float(np.clip(slow, 5.0, _LONGEST_SEARCH_S))


def _place_arcsec(observer: Observer | None, passing: Passing, tt_s: np.ndarray, distance_km: float):  # type: ignore[no-untyped-def]
    """Return the target's centre east and north of the Moon's centre of mass, and its radius toward the Moon.

    In the scale of the Moon at one distance, for which the profile is drawn.
    """
    moon, target = places.direction("moon", observer, tt_s), passing.far(observer, tt_s)
    scale = moon.distance_km / distance_km
    radius = passing.radii_rad(passing.sight(tt_s))[1] * RAD_ARCSEC
    apart = places.separation_arcsec(moon.vector_km, target) * scale
    angle = np.radians(places.position_angle_deg(moon.vector_km, target))
    return apart * np.sin(angle), apart * np.cos(angle), radius * scale


def _profile_arcsec(
    observer: Observer | None, model: LimbModel, tt_s: float, angle_deg: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    step = min(0.25, 1.0 / model.grid.pixels_per_degree)
    angles = angle_deg + np.arange(-_WINDOW_DEG, _WINDOW_DEG + step, step)
    _, height_km = limb_profile(observer, tt_s, model, angles)
    distance = float(places.direction("moon", observer, np.array([tt_s])).distance_km[0])
    radius = np.arcsin((REFERENCE_RADIUS_KM + height_km) / distance) * RAD_ARCSEC
    pa = np.radians(angles)
    return pa, radius, radius * np.sin(pa), radius * np.cos(pa)


def _distance_from(profile, east: np.ndarray, north: np.ndarray) -> np.ndarray:  # type: ignore[no-untyped-def]
    """Return the distance of points from a limb profile in arcsec, positive outside."""
    pa, radius, x, y = profile
    angle = np.arctan2(east, north)
    angle = pa[len(pa) // 2] + (angle - pa[len(pa) // 2] + np.pi) % (2 * np.pi) - np.pi
    outside = np.hypot(east, north) - np.interp(angle, pa, radius)
    # distance to each piece of the profile
    x0, y0, dx, dy = x[:-1], y[:-1], np.diff(x), np.diff(y)
    result = np.empty(len(east))
    for low in range(0, len(east), 64):
        e, n = east[low : low + 64, None], north[low : low + 64, None]
        share = np.clip(((e - x0) * dx + (n - y0) * dy) / (dx**2 + dy**2), 0.0, 1.0)
        result[low : low + 64] = np.sqrt(
            ((e - x0 - share * dx) ** 2 + (n - y0 - share * dy) ** 2).min(axis=1)
        )
    return np.sign(outside) * result
