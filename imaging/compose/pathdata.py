"""What a path plot shows, as arrays in the plane of the plot: predicted line, measured points, ticks, stars, grid.

The plane is that of a `Canvas`: `right` and `up` in arcseconds from the anchor, turned to the chosen orientation.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, tzinfo

import numpy as np

from imaging.compose.canvas import Canvas
from imaging.compose.choices import Choices
from imaging.compose.material import Material, Registered
from imaging.compose.orientation import up_pa_deg
from imaging.compose.passing import LightCurve, Passing, light_curve_of, passing_of
from imaging.compose.plane import ARCSEC_PER_RADIAN
from imaging.track.path import target_place
from planner.errors import InputError
from planner.events.family import Geometry
from planner.sky.places import north_of_date_pa_deg
from planner.sky.timescale import datetime_from_tt_s

PATH_POINTS = 721
STANDS_STILL_ARCSEC = 2.0
WIDEST_ARCSEC = float(np.tan(np.radians(60.0)) * ARCSEC_PER_RADIAN)
# Steps of time ticks in seconds, or days for campaigns: round to who reads a clock or a calendar
_STEPS_S = (10, 30, 60, 120, 300, 600, 900, 1800, 3600, 7200, 10800, 21600, 43200)
_STEPS_DAYS = (1, 2, 5, 10, 15, 30, 60, 90)
MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")


@dataclass(frozen=True)
class TimeTick:
    """A tick on the predicted line: where, which way the line runs (unit vector), what it says."""

    right_arcsec: float
    up_arcsec: float
    along: tuple[float, float]
    label: str


@dataclass(frozen=True)
class Residuals:
    """Measured minus predicted place in arcseconds, along the motion and across it (to its left), n frames."""

    tt_s: np.ndarray
    along_arcsec: np.ndarray
    across_arcsec: np.ndarray
    sigma_along_arcsec: np.ndarray
    sigma_across_arcsec: np.ndarray


@dataclass(frozen=True)
class SecondPath:
    """The same target from another site: its name, predicted path (2, m), measured places (2, n), their 1-sigma."""

    site: str
    line: np.ndarray
    points: np.ndarray
    point_sigma: np.ndarray


@dataclass(frozen=True)
class PathData:
    """Everything a path plot draws.

    `line`: predicted path (2, m), right and up in arcsec. `points`, `sigma`: measured places (2, n) and their 1-sigma.
    `disc_radius_arcsec`: of the reference disc about the origin, NaN among stars.
    `anchor_deg`: ICRS direction of the origin (of the disc, at the middle of the path); where `horizontal`, minus its
    azimuth and its altitude. `passing`: what passes before a star that is the target; `ticks` are then on its path.
    """

    title: str
    site: str
    body: str
    on_disc: str | None
    canvas: Canvas
    anchor_deg: tuple[float, float]
    middle_tt_s: float
    line: np.ndarray
    line_tt_s: np.ndarray
    points: np.ndarray
    point_sigma: np.ndarray
    residuals: Residuals
    ticks: tuple[TimeTick, ...]
    zone: tzinfo
    zone_label: str
    disc_radius_arcsec: float
    target_radius_arcsec: float
    up_pa_deg: float
    zenith_pa_deg: float
    north_of_date_pa_deg: float
    phase_angle_deg: float
    bright_limb_pa_deg: float
    campaign: bool
    horizontal: bool = False
    second: SecondPath | None = None
    star_limit: float | None = None
    passing: Passing | None = None
    light: LightCurve | None = None

    @property
    def too_wide(self) -> bool:
        """True for a path that no tangent plane holds: over 60 degrees from its middle."""
        return not np.hypot(*self.line).max(initial=0.0) < WIDEST_ARCSEC


def path_data(
    material: Material,
    choices: Choices,
    zone: tzinfo = UTC,
    zone_label: str = "UTC",
    other: Material | None = None,
) -> PathData:
    """Return the path plot's data for the whole span of the frames and a little beyond.

    `other`: the same event from a second site, drawn beside. Raises InputError when the grid asked for does not suit.
    """
    frames = material.frames
    first, last = frames[0].tt_s, frames[-1].tt_s
    span = max(last - first, 60.0)
    tt_s = np.linspace(first - 0.03 * span, last + 0.03 * span, PATH_POINTS)
    geometry = material.geometry_at(tt_s)
    middle = float(0.5 * (first + last))
    on_disc = _disc_of(material, choices)
    anchors = _anchors(geometry, on_disc, frames)
    middle_anchor = (float(anchors[0][PATH_POINTS // 2]), float(anchors[1][PATH_POINTS // 2]))
    up = up_pa_deg(material, choices.orientation, middle_anchor, middle, on_disc is not None)
    canvas = Canvas(1, 1, 1.0, 0.0, 0.0, up)
    ra, dec, semidiameter = target_place(geometry)
    line = np.array(
        [_plane(canvas, a, d, r, e) for a, d, r, e in zip(*anchors, ra, dec, strict=True)], float
    ).T
    measured = [frame for frame in frames if frame.measured]
    points = np.array([_of_frame(canvas, f, on_disc, middle_anchor) for f in measured]).reshape(-1, 2).T
    disc = geometry.discs.get(on_disc or "")
    passing = passing_of(material, canvas, middle_anchor) if on_disc is None else None
    campaign = last - first > 5 * 86400.0
    if passing is None:
        ticks = time_ticks(tt_s, line, zone, campaign)
    else:
        ticks = time_ticks(passing.tt_s, passing.line, zone, False, still_arcsec=0.0)
    data = PathData(
        title=material.plan.title,
        site=_site_line(material),
        body=material.target,
        on_disc=on_disc,
        canvas=canvas,
        anchor_deg=middle_anchor,
        middle_tt_s=middle,
        line=line,
        line_tt_s=tt_s,
        points=points,
        point_sigma=np.array([frame.sigma_arcsec for frame in measured]),
        residuals=_residuals(canvas, measured, on_disc, middle_anchor, tt_s, line),
        ticks=ticks,
        zone=zone,
        zone_label=zone_label,
        disc_radius_arcsec=float(disc.semidiameter_arcsec[PATH_POINTS // 2]) if disc is not None else np.nan,
        target_radius_arcsec=float(semidiameter[PATH_POINTS // 2]),
        up_pa_deg=up,
        zenith_pa_deg=float(geometry.zenith_pa_deg[PATH_POINTS // 2]),
        north_of_date_pa_deg=_north_of_date(middle_anchor, middle),
        phase_angle_deg=float(disc.phase_angle_deg[PATH_POINTS // 2]) if on_disc == "moon" and disc else 0.0,
        bright_limb_pa_deg=float(disc.bright_limb_pa_deg[PATH_POINTS // 2]) if disc else 0.0,
        campaign=campaign,
        second=None if other is None else _second(other, canvas, on_disc, middle_anchor),
        star_limit=choices.star_limit,
        passing=passing,
        light=light_curve_of(material),
    )
    _require_grid(choices.grid, data)
    if choices.grid == "altaz" or data.too_wide:
        from imaging.compose.horizontal import over_horizon

        return over_horizon(data, material)
    return data


def _require_grid(grid: str, data: PathData) -> None:
    suits: tuple[str, ...] = ("auto", "disc" if data.on_disc else "radec", "altaz")
    if data.too_wide:
        suits = ("auto", "altaz")  # no tangent plane holds it
    if grid not in suits:
        raise InputError(f"--grid: found {grid!r}; this path can be drawn with {', '.join(suits)}")


def _second(
    other: Material, canvas: Canvas, on_disc: str | None, anchor_deg: tuple[float, float]
) -> SecondPath:
    """Return the path of another site in the same plane."""
    first, last = other.frames[0].tt_s, other.frames[-1].tt_s
    geometry = other.geometry_at(np.linspace(first, last, PATH_POINTS))
    ra, dec, _ = target_place(geometry)
    anchors = (
        (geometry.discs[on_disc].ra_deg, geometry.discs[on_disc].dec_deg)
        if on_disc is not None
        else tuple(np.full(ra.shape, value) for value in anchor_deg)
    )
    places = [_plane(canvas, a, d, r, e) for a, d, r, e in zip(*anchors, ra, dec, strict=True)]
    measured = [frame for frame in other.frames if frame.measured]
    points = np.array([_of_frame(canvas, f, on_disc, anchor_deg) for f in measured]).reshape(-1, 2).T
    sigma = np.array([frame.sigma_arcsec for frame in measured])
    return SecondPath(other.plan.site.name, np.array(places, float).T, points, sigma)


def _north_of_date(anchor_deg: tuple[float, float], tt_s: float) -> float:
    ra_deg, dec_deg = (np.array([angle]) for angle in anchor_deg)
    return float(north_of_date_pa_deg(ra_deg, dec_deg, np.array([tt_s]))[0])


def _disc_of(material: Material, choices: Choices) -> str | None:
    wanted = material.reference if choices.registration == "auto" else choices.registration
    return wanted if wanted in ("sun", "moon") else None


def _anchors(
    geometry: Geometry, on_disc: str | None, frames: tuple[Registered, ...]
) -> tuple[np.ndarray, np.ndarray]:
    if on_disc is not None:
        return geometry.discs[on_disc].ra_deg, geometry.discs[on_disc].dec_deg
    from imaging.track.path import unit_vectors

    ra, dec, _ = target_place(geometry)
    mean = unit_vectors(ra, dec).mean(axis=0)
    here = np.degrees(np.arctan2(mean[1], mean[0])) % 360.0
    height = np.degrees(np.arctan2(mean[2], np.hypot(mean[0], mean[1])))
    return np.full(ra.shape, here), np.full(ra.shape, height)


def _plane(canvas: Canvas, anchor_ra: float, anchor_dec: float, ra: float, dec: float) -> tuple[float, float]:
    right, up = canvas.from_sky(anchor_ra, anchor_dec, ra, dec)
    return float(right), float(up)


def _of_frame(
    canvas: Canvas,
    frame: Registered,
    on_disc: str | None,
    anchor: tuple[float, float],
    predicted: bool = False,
) -> tuple[float, float]:
    if on_disc is not None:
        anchor = frame.reference_ra_deg, frame.reference_dec_deg
    if predicted:
        return _plane(canvas, *anchor, frame.predicted_ra_deg, frame.predicted_dec_deg)
    return _plane(canvas, *anchor, frame.target_ra_deg, frame.target_dec_deg)


def _residuals(
    canvas: Canvas,
    measured: list[Registered],
    on_disc: str | None,
    anchor: tuple[float, float],
    tt_s: np.ndarray,
    line: np.ndarray,
) -> Residuals:
    times = np.array([frame.tt_s for frame in measured])
    apart = np.array(
        [
            np.subtract(
                _of_frame(canvas, frame, on_disc, anchor), _of_frame(canvas, frame, on_disc, anchor, True)
            )
            for frame in measured
        ]
    ).reshape(-1, 2)
    slope = np.stack([np.interp(times, tt_s, np.gradient(axis, tt_s)) for axis in line], axis=1)
    length = np.hypot(slope[:, 0], slope[:, 1])
    unit = slope / np.where(length > 0, length, 1.0)[:, None]
    return Residuals(
        times,
        (apart * unit).sum(axis=1),
        unit[:, 0] * apart[:, 1] - unit[:, 1] * apart[:, 0],
        np.array([frame.sigma_along_arcsec for frame in measured]),
        np.array([frame.sigma_across_arcsec for frame in measured]),
    )


def _site_line(material: Material) -> str:
    site = material.plan.site
    north = f"{abs(site.latitude_deg):.2f}° {'N' if site.latitude_deg >= 0 else 'S'}"
    longitude = (site.longitude_deg + 180.0) % 360.0 - 180.0
    east = f"{abs(longitude):.2f}° {'E' if longitude >= 0 else 'W'}"
    return f"{site.name}, {north} {east}, {site.height_m:.0f} m"


def time_ticks(
    tt_s: np.ndarray,
    line: np.ndarray,
    zone: tzinfo,
    campaign: bool,
    still_arcsec: float = STANDS_STILL_ARCSEC,
) -> tuple[TimeTick, ...]:
    """Return about ten ticks at round instants of the zone; none along a path that is a point."""
    if np.ptp(line, axis=1).max() < still_arcsec:
        return ()
    start: datetime = datetime_from_tt_s(float(tt_s[0])).astimezone(zone)  # type: ignore[union-attr]
    span = float(tt_s[-1] - tt_s[0])
    if campaign:
        step = timedelta(days=next((d for d in _STEPS_DAYS if span / 86400 / d <= 13), _STEPS_DAYS[-1]))
        moment = start.replace(hour=0, minute=0, second=0, microsecond=0) + timedelta(days=1)
        days = step.days
        if days >= 5:  # calendar days 1, 6, 11 ... or 1, 11, 21: what people count in
            moments = _calendar_days(moment, span, days)
        else:
            moments = [moment + step * k for k in range(int(span / step.total_seconds()) + 1)]
    else:
        step_s = next((s for s in _STEPS_S if span / s <= 13), _STEPS_S[-1])
        midnight = start.replace(hour=0, minute=0, second=0, microsecond=0)
        count = int((start - midnight).total_seconds() // step_s) + 1
        moments = [midnight + timedelta(seconds=step_s * (count + k)) for k in range(int(span / step_s) + 1)]
    ticks = []
    slopes = [np.gradient(axis, tt_s) for axis in line]
    previous: datetime | None = None
    for moment in moments:
        at = float(tt_s[0]) + (moment - start).total_seconds()
        if not tt_s[0] <= at <= tt_s[-1]:
            continue
        right, up = (float(np.interp(at, tt_s, axis)) for axis in line)
        run = np.array([np.interp(at, tt_s, slope) for slope in slopes])
        run /= np.hypot(*run) or 1.0
        ticks.append(TimeTick(right, up, (float(run[0]), float(run[1])), _label(moment, previous, campaign)))
        previous = moment
    return tuple(ticks)


def _calendar_days(moment: datetime, span_s: float, days: int) -> list[datetime]:
    wanted = {5: (1, 6, 11, 16, 21, 26), 10: (1, 11, 21), 15: (1, 16)}.get(days, (1,))
    all_days = [moment + timedelta(days=k) for k in range(int(span_s / 86400) + 1)]
    kept = [day for day in all_days if day.day in wanted]
    return kept if days < 60 else kept[:: days // 30]


def _label(moment: datetime, previous: datetime | None, campaign: bool) -> str:
    if campaign:
        label = f"{moment.day} {MONTHS[moment.month - 1]}"
        return label if previous is not None and previous.year == moment.year else f"{label} {moment.year}"
    label = f"{moment:%H:%M}" if moment.second == 0 else f"{moment:%H:%M:%S}"
    if previous is not None and previous.date() != moment.date():
        return f"{label} ({moment.day} {MONTHS[moment.month - 1]})"
    return label
