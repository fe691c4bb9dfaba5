"""What the frame will look like: field, stars, track with time ticks, discs, north and zenith, the frame upright."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import datetime, timedelta
from typing import Any

import numpy as np

from planner.sequence.framing import Field, field_of
from planner.sequence.models import Passage
from planner.sequence.outlook import Outlook

_STARS_SHOWN = 500
_NAMES_SHOWN = 6
_WIDTH_IN = 7.0
_BOX = {"facecolor": "white", "edgecolor": "none", "pad": 0.6, "alpha": 0.8}
# Corners that arrows and the scale bar may have; the bar stands at the bottom.
_UPPER, _LOWER = ((-1, 1), (1, 1)), ((-1, -1), (1, -1))


@dataclass
class _View:
    """The stretch of sky that is drawn, in arcminutes right and up of the middle of a frame."""

    frame: Field
    ra_deg: float
    dec_deg: float
    left: float
    right: float
    bottom: float
    top: float
    taken: list[tuple[float, float, float, float]] = field(default_factory=list)
    corners: dict[str, tuple[int, int]] = field(default_factory=dict)
    enlarged: float = 1.0  # how much larger labels are than in a picture seven inches wide

    @property
    def width(self) -> float:
        """Width in arcminutes."""
        return self.right - self.left

    @property
    def height(self) -> float:
        """Height in arcminutes."""
        return self.top - self.bottom

    def at(self, x: float, y: float) -> tuple[float, float]:
        """Return a place given from -1 to 1 across the view."""
        return (self.left + self.right + x * self.width) / 2, (self.bottom + self.top + y * self.height) / 2

    @property
    def arrow(self) -> float:
        """Length of an arrow in arcminutes."""
        return 0.10 * min(self.width, self.height)

    def corner_middle(self, corner: tuple[int, int]) -> tuple[float, float]:
        """Return where an arrow in a corner begins, so that it and its name stay in the view."""
        x, y = self.at(*corner)
        return x - corner[0] * 2.1 * self.arrow, y - corner[1] * 1.8 * self.arrow

    def project(self, ra_deg: Any, dec_deg: Any) -> tuple[np.ndarray, np.ndarray]:
        """Return (right, up) in arcminutes of directions."""
        from planner.sky.places import offsets_arcsec

        offsets = offsets_arcsec(self.ra_deg, self.dec_deg, np.atleast_1d(ra_deg), np.atleast_1d(dec_deg))
        right, up = self.frame.along(*offsets)
        return right / 60, up / 60

    def holds(self, x: Any, y: Any) -> Any:
        """Return which places lie in the view."""
        return (x > self.left) & (x < self.right) & (y > self.bottom) & (y < self.top)

    def take(self, x: float, y: float, wide: float, high: float) -> None:
        """Keep labels out of a box about a place."""
        self.taken.append((x, y, wide, high))

    def write(self, axes: Any, x: float, y: float, text: str, **style: Any) -> None:
        """Write beside a point where there is room, or not at all."""
        if not self.holds(x, y):
            return
        wide, high = 0.0115 * self.width * len(text) * self.enlarged, 0.034 * self.height * self.enlarged
        gap_x, gap_y = 0.010 * self.width, 0.012 * self.height
        for side, level in ((1, 1), (-1, -1), (1, -1), (-1, 1)):
            middle_x, middle_y = x + side * (gap_x + wide / 2), y + level * (gap_y + high / 2)
            inside = (
                self.left < middle_x - wide / 2
                and middle_x + wide / 2 < self.right
                and self.bottom < middle_y - high / 2
                and middle_y + high / 2 < self.top
            )
            free = all(
                abs(middle_x - a) > (wide + w) / 2 or abs(middle_y - b) > (high + h) / 2
                for a, b, w, h in self.taken
            )
            if inside and free:
                axes.text(
                    x + side * gap_x, y + level * gap_y, text, ha="left" if side > 0 else "right",
                    va="bottom" if level > 0 else "top", bbox=_BOX, **style,
                )  # fmt: skip
                self.take(middle_x, middle_y, wide, high)
                return


def draw_finder(axes: Any, outlook: Outlook, passage: Passage | None = None) -> None:
    """Draw what the camera sees in a passage, the frame upright, on matplotlib axes.

    Default: the passage with most frames; of a campaign the middle visit, with the whole track about its frame.
    """
    plan = outlook.plan
    if passage is None:
        passages = [visit[0] for visit in plan.visits()] or plan.passages
        waiting = [each for each in passages if not each.flipped] or passages
        passage = (
            waiting[len(waiting) // 2]
            if outlook.campaign
            else max(waiting, key=lambda each: sum(shot.count for shot in each.shots))
        )
    row = int(np.flatnonzero(outlook.frames.passage == plan.passages.index(passage))[0])
    view = _view(outlook, row)
    inches = axes.get_position().width * axes.figure.get_figwidth()
    view.enlarged = float(np.clip(_WIDTH_IN / inches, 1.0, 2.5))
    axes.set_anchor("NW")
    _draw_panels(axes, outlook, view, passage)
    _draw_discs(axes, outlook, view, row)
    _draw_pair(axes, outlook, view, row)
    _draw_track(axes, outlook, view, row)
    if outlook.family.reference != "sun":
        _draw_stars(axes, view, float(outlook.frames.start_tt_s[row]))
    _draw_directions(axes, outlook, view, row)
    _frame_axes(axes, view)
    turns = not outlook.campaign and not passage.flipped and any(each.flipped for each in plan.passages)
    what = "panel" if passage.panel else "frame"
    axes.set_title(
        f"{passage.name}: the {what} as it looks, {2 * view.frame.half_width_arcsec / 3600:.3g} x "
        f"{2 * view.frame.half_height_arcsec / 3600:.3g} degrees"
        + ("; after the flip it is upside down" if turns else ""),
        fontsize=9,
        loc="left",
    )


def _view(outlook: Outlook, row: int) -> _View:
    frames = outlook.frames
    frame = field_of(outlook.plan.rig, float(frames.rotation_deg[row]))
    wide, high = frame.half_width_arcsec / 60, frame.half_height_arcsec / 60
    view = _View(frame, float(frames.ra_deg[row]), float(frames.dec_deg[row]), -wide, wide, -high, high)
    if outlook.campaign and outlook.plan.rig.mount.kind != "fixed":
        x, y = _path(outlook, view, _track_times(outlook))
        view.left, view.right = min(-wide, x.min() - 0.1 * wide), max(wide, x.max() + 0.1 * wide)
        view.bottom, view.top = min(-high, y.min() - 0.1 * high), max(high, y.max() + 0.1 * high)
        passage = outlook.plan.passages[int(frames.passage[row])]
        for _, x, y in _panel_corners(outlook, view, passage):
            view.left, view.right = min(view.left, x.min()), max(view.right, x.max())
            view.bottom, view.top = min(view.bottom, y.min()), max(view.top, y.max())
    _share_corners(outlook, view)
    return view


def _share_corners(outlook: Outlook, view: _View) -> None:
    """Give the emptiest corners to the scale bar (a lower one), to north and east, and to the zenith."""
    x, y = _path(outlook, view, _track_times(outlook))

    def crowd(corner: tuple[int, int]) -> int:
        middle, half = view.corner_middle(corner), 1.9 * view.arrow
        return int(((np.abs(x - middle[0]) < half) & (np.abs(y - middle[1]) < half)).sum())

    left = [*_UPPER, *_LOWER]
    for what, choice in (("scale", _LOWER), ("north", left), ("zenith", left)):
        corner = min((each for each in choice if each in left), key=crowd)
        left.remove(corner)
        view.corners[what] = corner
        high = 0.12 * view.height if what == "scale" else 3.6 * view.arrow
        wide = 0.22 * view.width if what == "scale" else 3.6 * view.arrow
        edge = view.at(*corner)
        view.take(edge[0] - corner[0] * wide / 2, edge[1] - corner[1] * high / 2, wide, high)


def _panel_corners(
    outlook: Outlook, view: _View, passage: Passage
) -> list[tuple[Passage, np.ndarray, np.ndarray]]:
    """Return the panels of a passage's visit with the corners of each in the view, from top left clockwise."""
    from planner.sky.places import radec_from_offsets

    if passage.panel is None:
        return []
    wide, high = view.frame.half_width_arcsec, view.frame.half_height_arcsec
    corners = view.frame.on_sky(wide * np.array([-1, 1, 1, -1]), high * np.array([1, 1, -1, -1]))
    panels = [each for each in outlook.plan.passages if each.visit == passage.visit]
    return [
        (each, *view.project(*radec_from_offsets(each.aim_ra_deg or 0.0, each.aim_dec_deg or 0.0, *corners)))
        for each in panels
    ]


def _draw_panels(axes: Any, outlook: Outlook, view: _View, passage: Passage) -> None:
    """Draw the outlines of a mosaic's panels, each with its name low in it, away from the scale bar."""
    for each, x, y in _panel_corners(outlook, view, passage):
        axes.plot([*x, x[0]], [*y, y[0]], color="0.35", lw=0.9, zorder=7)
        low = 2 if view.corners["scale"][0] < 0 else 3
        place = float(0.55 * x[low] + 0.45 * x.mean()), float(0.55 * y[low] + 0.45 * y.mean())
        view.take(*place, 0.035 * view.width * view.enlarged, 0.06 * view.height * view.enlarged)
        axes.text(
            *place, each.panel, fontsize=9, ha="center",
            va="center", color="0.25", bbox=_BOX,
            zorder=7, weight="bold" if each is passage else "normal",
        )  # fmt: skip


def _frame_axes(axes: Any, view: _View) -> None:
    from matplotlib.patches import Rectangle

    wide, high = view.frame.half_width_arcsec / 60, view.frame.half_height_arcsec / 60
    axes.add_patch(Rectangle((-wide, -high), 2 * wide, 2 * high, fill=False, ec="black", lw=1.8, zorder=8))
    axes.set_xlim(view.left - 0.01 * view.width, view.right + 0.01 * view.width)
    axes.set_ylim(view.bottom - 0.01 * view.height, view.top + 0.01 * view.height)
    axes.set_aspect("equal")
    axes.set_xticks([])
    axes.set_yticks([])
    for spine in axes.spines.values():
        spine.set_color("0.7")
    length = _round_length(view.width / 5)
    x, y = view.at(0.95 * view.corners["scale"][0], -0.94)
    if view.corners["scale"][0] > 0:
        x -= length
    axes.plot([x, x + length], [y, y], color="black", lw=2.5, zorder=9)
    text = f"{length:g} arcmin" if length < 60 else f"{length / 60:g} degrees"
    axes.text(x, y + 0.012 * view.height, text, fontsize=8, va="bottom", zorder=9, bbox=_BOX)


def _round_length(arcmin: float) -> float:
    """Return a round length no longer than this, in arcminutes; whole degrees above one."""
    unit = 60.0 if arcmin >= 60 else 1.0
    value = arcmin / unit
    power = 10 ** np.floor(np.log10(value))
    return float(next(step * power for step in (5, 2, 1) if step * power <= value) * unit)


def _draw_stars(axes: Any, view: _View, tt_s: float) -> None:
    from planner.sky.stars import stars_in_field

    corners = [view.at(x, y) for x in (-1, 1) for y in (-1, 1)]
    radius_deg = max(np.hypot(x, y) for x, y in corners) / 60
    stars = stars_in_field(view.ra_deg % 360.0, view.dec_deg, radius_deg, tt_s)
    x, y = view.project(stars.ra_deg, stars.dec_deg)
    chosen = np.flatnonzero(view.holds(x, y))[:_STARS_SHOWN]
    if not len(chosen):
        return
    brightness = np.clip(float(stars.magnitude[chosen].max()) - stars.magnitude[chosen], 0, 9)
    axes.scatter(x[chosen], y[chosen], s=2.5 + 2.2 * brightness**1.6, color="black", lw=0, zorder=2)
    for row in chosen[:_NAMES_SHOWN]:
        name = str(stars.name[row])
        if name.startswith("HIP"):
            view.write(axes, float(x[row]), float(y[row]), name, fontsize=6.5, color="0.25", zorder=3)


def _draw_discs(axes: Any, outlook: Outlook, view: _View, row: int) -> None:
    """Draw the discs that are large enough to be seen as such, the Moon with its phase."""
    from matplotlib.patches import Circle

    sky = outlook.geometry(outlook.frames.middle_tt_s[row : row + 1])
    for name, disc in sky.discs.items():
        radius = float(disc.semidiameter_arcsec[0]) / 60
        if (name == sky.target and sky.reference != "stars") or radius < view.width / 400:
            continue
        x, y = (float(each[0]) for each in view.project(disc.ra_deg, disc.dec_deg))
        axes.add_patch(Circle((x, y), radius, facecolor="0.93", edgecolor="black", lw=1.0, zorder=1))
        if name != "sun":
            _draw_phase(axes, view.frame, disc, x, y, radius)


def _draw_pair(axes: Any, outlook: Outlook, view: _View, row: int) -> None:
    """Mark the other planet of a meeting, and name both."""
    sky = outlook.geometry(outlook.frames.middle_tt_s[row : row + 1])
    if sky.reference != "stars" or len(sky.discs) < 2:
        return
    for name, disc in sky.discs.items():
        x, y = (float(each[0]) for each in view.project(disc.ra_deg, disc.dec_deg))
        if name != sky.target and view.holds(x, y):
            axes.plot(x, y, "o", ms=5.5, mfc="black", mec="white", mew=0.8, zorder=6)
        view.take(x, y, 0.012 * view.width, 0.016 * view.height)
        view.write(axes, x, y, name.capitalize(), fontsize=8.5, weight="bold", zorder=7)


def _draw_phase(axes: Any, frame: Field, disc: Any, x: float, y: float, radius: float) -> None:
    """Darken the part that the Sun does not reach: half the limb and half the ellipse of the terminator."""
    from matplotlib.patches import Polygon

    phase = np.radians(float(disc.phase_angle_deg[0]))
    angle = np.linspace(-np.pi / 2, np.pi / 2, 60)
    limb = np.stack([-np.cos(angle), np.sin(angle)])
    terminator = np.stack([-np.cos(phase) * np.cos(angle[::-1]), np.sin(angle[::-1])])
    toward_limb, across = np.concatenate([limb, terminator], axis=1) * radius
    pa = np.radians(float(disc.bright_limb_pa_deg[0]))
    right, up = frame.along(
        toward_limb * np.sin(pa) - across * np.cos(pa), toward_limb * np.cos(pa) + across * np.sin(pa)
    )
    axes.add_patch(
        Polygon(
            np.stack([right + x, up + y], axis=1), closed=True, facecolor="0.72", edgecolor="none", zorder=1
        )
    )


def _track_times(outlook: Outlook) -> np.ndarray:
    from planner.sky.timescale import tt_s_from_datetime

    first = float(tt_s_from_datetime(outlook.first_utc))
    last = float(tt_s_from_datetime(outlook.last_utc))
    if outlook.campaign and outlook.plan.rig.mount.kind == "fixed":
        # between visits the sky turns over the ground: only their places make an arc
        return np.asarray(
            tt_s_from_datetime([passage.shots[0].start_utc for passage in outlook.plan.passages])
        )
    if outlook.campaign and outlook.family.name != "apparition-arc":
        # an apparition's rest is spent by day, far from what is shot
        first, last = min(first, outlook.event.start_tt_s), max(last, outlook.event.end_tt_s)
    return np.linspace(first, last, 400)


def _draw_track(axes: Any, outlook: Outlook, view: _View, row: int) -> None:
    """Draw the target's path against what the frame follows, with its places at round times or at the visits."""
    from planner.sky.timescale import tt_s_from_datetime

    tt_s = _track_times(outlook)
    axes.plot(*_path(outlook, view, tt_s), color="black", lw=1.2, ls=(0, (6, 2)), zorder=4)
    if outlook.campaign:
        firsts = [visit[0] for visit in outlook.plan.visits()]
        moments = [min(shot.start_utc for shot in passage.shots) for passage in firsts]
        texts, style = [f"{moment:%d %b}" for moment in moments], {"marker": "o", "ms": 4.5, "mfc": "white"}
    else:
        moments = _round_moments(outlook, (tt_s[-1] - tt_s[0]) / 7)
        texts, style = [f"{moment:%H:%M}" for moment in moments], {"marker": "|", "ms": 9}
    if moments:
        x, y = _path(outlook, view, np.asarray(tt_s_from_datetime(moments), float))
        axes.plot(x, y, ls="none", mec="black", zorder=5, **style)
        for px, py in zip(x, y, strict=True):
            view.take(float(px), float(py), 0.012 * view.width, 0.016 * view.height)
        for px, py, text in zip(x, y, texts, strict=True):
            view.write(axes, float(px), float(py), text, fontsize=7, zorder=7)
    x, y = _path(outlook, view, outlook.frames.middle_tt_s[row : row + 1])
    axes.plot(x, y, "o", ms=5.5, mfc="black", mec="white", mew=0.8, zorder=6)


def _round_moments(outlook: Outlook, apart_s: float) -> list[datetime]:
    """Return whole multiples of a round step of UTC within the plan."""
    step_s = next((step for step in (60, 300, 600, 900, 1800, 3600, 7200, 10800) if step >= apart_s), 21600)
    day = outlook.first_utc.replace(hour=0, minute=0, second=0, microsecond=0)
    first = int(np.ceil((outlook.first_utc - day).total_seconds() / step_s))
    last = int(np.floor((outlook.last_utc - day).total_seconds() / step_s))
    return [day + timedelta(seconds=step_s * count) for count in range(first, last + 1)]


def _path(outlook: Outlook, view: _View, tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return (right, up) in arcminutes of the target: against the reference disc where the frame follows that."""
    from planner.sequence.recipes import place_of
    from planner.sky.places import offsets_arcsec

    sky = outlook.geometry(tt_s)
    ra_deg, dec_deg = place_of(sky, sky.target)
    followed = {passage.aim for passage in outlook.plan.passages}
    if sky.reference in sky.discs and sky.reference in followed:
        disc = sky.discs[sky.reference]
        right, up = view.frame.along(*offsets_arcsec(disc.ra_deg, disc.dec_deg, ra_deg, dec_deg))
        return right / 60, up / 60
    if outlook.plan.rig.mount.kind == "fixed":
        return _over_ground(outlook, view, ra_deg, dec_deg, tt_s)
    return view.project(ra_deg, dec_deg)


def _over_ground(
    outlook: Outlook, view: _View, ra_deg: np.ndarray, dec_deg: np.ndarray, tt_s: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Return the path over a tripod's fixed frame."""
    from planner.sky.places import altaz, offsets_arcsec

    altitude, azimuth = altaz((ra_deg, dec_deg), outlook.observer, tt_s)
    aim = outlook.plan.passages[0]
    level = field_of(outlook.plan.rig)
    offsets = offsets_arcsec(-(aim.aim_azimuth_deg or 0.0), aim.aim_altitude_deg or 0.0, -azimuth, altitude)
    right, up = level.along(*offsets)
    return right / 60, up / 60


def _draw_directions(axes: Any, outlook: Outlook, view: _View, row: int) -> None:
    """Draw arrows to celestial north and east and to the zenith, in corners that are free."""
    from matplotlib.patches import Circle

    length = view.arrow
    origins = {what: view.corner_middle(view.corners[what]) for what in ("north", "zenith")}
    for origin in origins.values():
        # stars behind an arrow and its name are taken away, tracks and frames are not
        axes.add_patch(Circle(origin, 1.7 * length, color="white", alpha=0.9, lw=0, zorder=3.5))
    sky = outlook.geometry(outlook.frames.middle_tt_s[row : row + 1])
    for label, angle in (("N", 0.0), ("E", np.pi / 2)):
        _arrow(axes, view.frame, origins["north"], length, angle, label, "-")
    zenith = np.radians(float(sky.zenith_pa_deg[0]))
    if np.isfinite(zenith):
        _arrow(axes, view.frame, origins["zenith"], length, zenith, "zenith", ":")


def _arrow(
    axes: Any, frame: Field, origin: tuple[float, float], length: float, pa_rad: float, label: str, style: str
) -> None:
    right, up = (
        float(each[0]) for each in frame.along(np.array([np.sin(pa_rad)]), np.array([np.cos(pa_rad)]))
    )
    tip = (origin[0] + length * right, origin[1] + length * up)
    axes.annotate("", tip, origin, arrowprops={"arrowstyle": "->", "lw": 1.4, "ls": style}, zorder=9)
    end = (origin[0] + 1.28 * length * right, origin[1] + 1.28 * length * up)
    axes.text(*end, label, fontsize=8.5, ha="center", va="center", zorder=9, bbox=_BOX)


def finder_figure(outlook: Outlook, passage: Passage | None = None, width_in: float = _WIDTH_IN) -> Any:
    """Return the finder as a matplotlib figure."""
    from matplotlib.figure import Figure

    figure = Figure(layout="constrained")
    axes = figure.add_subplot()
    draw_finder(axes, outlook, passage)
    # what is drawn of a campaign is wider or higher than the frame
    wide, high = np.ptp(axes.get_xlim()), np.ptp(axes.get_ylim())
    figure.set_size_inches(width_in, float(np.clip(width_in * high / wide, 2.0, 9.0)) + 0.5)
    return figure
