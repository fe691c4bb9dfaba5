"""The Moon's limb where something passes behind it: the terrain, the target's path over it, and the contacts."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.events.catalogue import family, predicted
from planner.events.contacts import RAD_ARCSEC
from planner.events.family import Circumstances, Geometry, Instant
from planner.sky import bodies, places, timescale
from planner.sky.moonlimb import REFERENCE_RADIUS_KM, SMOOTH_LIMB_SIGMA_KM, limb_centre_km, limb_profile
from planner.sky.observer import Observer

FAMILIES = ("moon-occults-star", "moon-occults-planet")
_LEAST_HALF_S, _MOST_HALF_S = 6.0, 600.0
_SHOWN_KM = 7.0
# An occultation shallower than this is drawn whole, in one panel.
_GRAZE_ARCSEC = 6.0
_TICKS_S = (0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 30.0, 60.0, 120.0, 300.0)


@dataclass(frozen=True)
class LimbView:
    """One stretch of limb; position angles from true celestial north of date, heights in km over the smooth limb.

    `angle_deg`, `height_km`: the limb. `path_tt_s`, `path_angle_deg`, `path_height_km`: the target's centre;
    `path_radius_km`: its radius at the Moon's distance, 0 for a star. `lit`: whether the limb here is in sunlight.
    `contacts`: (name, TT seconds, 1-sigma in seconds).
    """

    title: str
    angle_deg: np.ndarray
    height_km: np.ndarray
    sigma_km: float
    path_tt_s: np.ndarray
    path_angle_deg: np.ndarray
    path_height_km: np.ndarray
    path_radius_km: float
    arcsec_km: float
    lit: bool
    contacts: tuple[tuple[str, float, float], ...]


def limb_views(circumstances: Circumstances) -> list[LimbView]:
    """Return the limb about each contact of an occultation by the Moon; one view where contacts lie close together.

    A graze, or a miss as narrow, is one view. Raises InputError for another family, or when nothing is covered.
    """
    event, observer = circumstances.event, circumstances.observer
    if event.spec.family not in FAMILIES:
        raise InputError(f"event.family: found {event.spec.family}; allowed are {', '.join(FAMILIES)}")
    contacts = [i for i in circumstances.instants if i.name not in ("closest", "best_view")]
    if abs(circumstances.facts.get("margin_arcsec", np.inf)) < _GRAZE_ARCSEC:
        return [_view(circumstances, observer, contacts or list(circumstances.instants))]
    if not contacts:
        raise InputError(f"event: found {event.title}, which does not happen here: {circumstances.reason}")
    groups: list[list[Instant]] = []
    for contact in contacts:
        same = groups and contact.name.split("_")[0] == groups[-1][-1].name.split("_")[0]
        if groups and (same or contact.tt_s - groups[-1][-1].tt_s < 2 * _LEAST_HALF_S):
            groups[-1].append(contact)
        else:
            groups.append([contact])
    return [_view(circumstances, observer, group) for group in groups]


def _view(circumstances: Circumstances, observer: Observer | None, group: list[Instant]) -> LimbView:
    event = circumstances.event
    chosen = family(event.spec.family)
    first, last = group[0].tt_s, group[-1].tt_s
    middle = (first + last) / 2.0

    def path_at(times: np.ndarray) -> tuple[np.ndarray, np.ndarray, Geometry]:
        geometry = chosen.geometry(event, observer, times)
        target = places.unit_vector(*_target(geometry))
        moon = places.direction("moon", observer, times)
        apart = places.separation_arcsec(moon.vector_km, target) / RAD_ARCSEC
        angle = places.position_angle_deg(moon.vector_km, target)
        return angle, moon.distance_km * np.sin(apart) - REFERENCE_RADIUS_KM, geometry

    _, ends, _ = path_at(np.array([middle - 2.0, middle + 2.0]))
    rate = abs(float(ends[1] - ends[0])) / 4.0
    half = np.clip(_SHOWN_KM / max(rate, 1e-9), _LEAST_HALF_S, _MOST_HALF_S) + (last - first)
    times = middle + np.linspace(-half, half, 401)
    _, height, _ = path_at(times)
    at_contact = np.interp([first, last], times, height)
    near = np.flatnonzero(height < max(_SHOWN_KM, *(2.0 * at_contact)) + 2.0)
    times = np.linspace(times[near[0]], times[near[-1]], 401)
    angle, height, geometry = path_at(times)
    moon = places.direction("moon", observer, np.array([middle]))
    turned = float(places.north_of_date_pa_deg(moon.ra_deg, moon.dec_deg, np.array([middle]))[0])
    angle = np.degrees(np.unwrap(np.radians(angle)))
    wide = max(2.5, 0.15 * float(np.ptp(angle)))
    limb_angle = np.linspace(angle.min() - wide, angle.max() + wide, 1201)
    model = event.spec.limb
    smooth = _smooth_km(observer, middle, limb_angle, event.spec.radii)
    if model is None:
        terrain, sigma = smooth, SMOOTH_LIMB_SIGMA_KM
    else:
        terrain, sigma = limb_profile(observer, middle, model, limb_angle)[1], model.sigma_km
    scale = RAD_ARCSEC / float(moon.distance_km[0])
    extra = dict(group[0].extra)
    radius = 0.0
    if geometry.target in geometry.discs:
        radius = float(np.median(geometry.discs[geometry.target].semidiameter_arcsec)) / scale
    names = " and ".join(dict.fromkeys(i.name.split("_")[0] for i in group))
    return LimbView(
        title=names,
        angle_deg=limb_angle - turned,
        height_km=terrain - smooth,
        sigma_km=sigma,
        path_tt_s=times,
        path_angle_deg=angle - turned,
        path_height_km=height - np.interp(angle, limb_angle, smooth),
        path_radius_km=radius,
        arcsec_km=scale,
        lit=extra.get("limb") == "lit",
        contacts=tuple((i.name, i.tt_s, i.sigma_s) for i in group),
    )


def _smooth_km(
    observer: Observer | None, tt_s: float, angle_deg: np.ndarray, radii: str | None
) -> np.ndarray:
    """Return the smooth limb over 1737.4 km about the centre of mass, at position angles from ICRS north."""
    moon = places.direction("moon", observer, np.array([tt_s]))
    centre = limb_centre_km(np.array([tt_s]))[:, 0]
    ra, dec = np.radians(moon.ra_deg[0]), np.radians(moon.dec_deg[0])
    east = centre @ [-np.sin(ra), np.cos(ra), 0.0]
    north = centre @ [-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)]
    angle = np.radians(angle_deg)
    radius = bodies.radii_km("moon", radii)[0]
    return radius - REFERENCE_RADIUS_KM + east * np.sin(angle) + north * np.cos(angle)


def _target(geometry: Geometry) -> tuple[np.ndarray, np.ndarray]:
    for name, ra_deg, dec_deg, _ in geometry.stars:
        if name == geometry.target:
            return ra_deg, dec_deg
    disc = geometry.discs[geometry.target]
    return disc.ra_deg, disc.dec_deg


def limb_figure(circumstances: Circumstances) -> Any:
    """Return the chart as a matplotlib figure: a panel for each contact, the sky above, the Moon below."""
    from matplotlib.figure import Figure

    views = limb_views(circumstances)
    figure = Figure(figsize=(9.0, 1.4 + 3.4 * len(views)), layout="constrained")
    for axes, view in zip(figure.subplots(len(views), squeeze=False)[:, 0], views, strict=True):
        _draw(axes, view)
    where = circumstances.observer.name if circumstances.observer else "the Earth's centre"
    figure.suptitle(f"{circumstances.event.title}, from {where}", fontsize=11, x=0.01, ha="left")
    figure.supxlabel(f"limb: {circumstances.conventions['limb']}", fontsize=8, x=0.01, ha="left")
    return figure


def _draw(axes: Any, view: LimbView) -> None:
    at_contact = np.interp([t for _, t, _ in view.contacts], view.path_tt_s, view.path_height_km)
    low = min(-4.0, float(view.height_km.min()) - 1.0, float(at_contact.min()) - 1.0)
    high = max(4.0, float(view.height_km.max()) + 1.0, float(at_contact.max()) + 1.0)
    colour = "#c9c2b0" if view.lit else "#5a5a60"
    axes.fill_between(view.angle_deg, low, view.height_km, color=colour, lw=0)
    axes.plot(view.angle_deg, view.height_km, color="black", lw=0.8)
    axes.axhline(0.0, color="black", lw=0.6, ls=(0, (6, 4)))
    axes.fill_between(
        view.angle_deg, view.height_km - view.sigma_km, view.height_km + view.sigma_km,
        color="#d08020", alpha=0.25, lw=0,
    )  # fmt: skip
    path = axes.plot(view.path_angle_deg, view.path_height_km, color="#b01020", lw=1.4)[0]
    if view.path_radius_km > 0:
        for side in (-1.0, 1.0):
            axes.plot(
                view.path_angle_deg, view.path_height_km + side * view.path_radius_km, color=path.get_color(),
                lw=0.8, ls=":",
            )  # fmt: skip
    _ticks(axes, view, low, high)
    for _, tt_s, _ in view.contacts:
        x = np.interp(tt_s, view.path_tt_s, view.path_angle_deg)
        y = np.interp(tt_s, view.path_tt_s, view.path_height_km)
        axes.plot([x], [y], "o", ms=7, mfc="none", mec="#102080", mew=1.5)
    lines = [
        f"{name.replace('_', ' ')} {timescale.utc_iso(tt_s, 1)[11:-1]} UTC, 1 sigma {sigma_s:.1f} s"
        for name, tt_s, sigma_s in view.contacts
    ]
    axes.set_title("\n".join(lines), fontsize=9, loc="left")
    axes.set_title(f"{'lit' if view.lit else 'dark'} limb", fontsize=9, loc="right")
    axes.set_xlim(view.angle_deg[0], view.angle_deg[-1])
    axes.set_ylim(low, high)
    axes.xaxis.set_major_formatter(lambda value, _: f"{value % 360.0:g}°")
    axes.set_xlabel(
        "position angle on the Moon's limb, from celestial north through east; marks: minutes and seconds UTC",
        fontsize=8,
    )
    axes.set_ylabel("km over the smooth limb", fontsize=8)
    axes.tick_params(labelsize=8)
    seen = axes.secondary_yaxis(
        "right", functions=(lambda km: km * view.arcsec_km, lambda arcsec: arcsec / view.arcsec_km)
    )
    seen.set_ylabel("arcsec", fontsize=8)
    seen.tick_params(labelsize=8)


def _ticks(axes: Any, view: LimbView, low: float, high: float) -> None:
    """Mark the path with whole times, about eight of them inside the frame."""
    from matplotlib.patheffects import withStroke

    edge = 0.05 * (high - low)
    inside = (view.path_height_km > low + edge) & (view.path_height_km < high - edge)
    if not inside.any():
        return
    span = view.path_tt_s[inside]
    step = next((s for s in _TICKS_S if (span[-1] - span[0]) / s <= 9.0), _TICKS_S[-1])
    start = timescale.datetime_from_tt_s(float(span[0]))
    into_minute = start.second + start.microsecond * 1e-6
    first = span[0] + (np.ceil(into_minute / step) * step - into_minute)
    for tt_s in np.arange(first, span[-1], step):
        x = float(np.interp(tt_s, view.path_tt_s, view.path_angle_deg))
        y = float(np.interp(tt_s, view.path_tt_s, view.path_height_km))
        axes.plot([x], [y], marker=(4, 0, 45), ms=4, color="#b01020")
        text = timescale.utc_iso(float(tt_s), 1 if step < 1 else 0)[14:-1]
        axes.annotate(
            text, (x, y), textcoords="offset points", xytext=(9, -2.5), fontsize=7.5, color="#801018",
            path_effects=[withStroke(linewidth=2.5, foreground="white")],
        )  # fmt: skip


def chart_of(spec: Any, observer: Observer | None) -> Any:
    """Return the chart of the event nearest to a spec's date."""
    chosen = family(spec.family)
    return limb_figure(predicted(chosen.nearest(spec), observer))
