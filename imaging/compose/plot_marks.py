"""Words and stars on a path plot, each where it covers nothing."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from imaging.compose.labels import Crowd
from imaging.compose.palette import Palette
from imaging.compose.pathdata import PathData
from imaging.compose.plane import sky_to_plane

STAR_LABELS = 9
MOST_STARS = 220


def arcsec_a_point(axes: Any) -> float:
    """Return how many arcseconds a printer's point is."""
    box = axes.get_window_extent()
    low, high = axes.get_xlim()
    return (high - low) / box.width * axes.figure.dpi / 72


def crowd_of(axes: Any, data: PathData) -> Crowd:
    """Return what lies on the sheet already: the lines and the measured places."""
    box = axes.get_window_extent()
    kept = [_dense(data.line), data.points]
    if data.passing is not None:
        kept.append(_dense(data.passing.line))
    if data.second is not None:
        kept += [_dense(data.second.line), data.second.points]
    points = axes.transData.transform(np.concatenate(kept, axis=1).T).T
    dots = axes.transData.transform(data.points.T)[:, :, None] if data.points.size else np.zeros((0, 2, 1))
    wide = 3.0 * axes.figure.dpi / 72 * np.array([[1, -1, 0, 0], [0, 0, 1, -1]])
    points = np.concatenate([points, (dots + wide).swapaxes(0, 1).reshape(2, -1)], axis=1)
    return Crowd((box.x0 + 2, box.y0 + 2, box.x1 - 2, box.y1 - 2), points, [])


def _dense(line: np.ndarray) -> np.ndarray:
    """Return about 240 points along a line, whatever it was drawn from."""
    place = np.linspace(0, line.shape[1] - 1, 240)
    return np.stack([np.interp(place, np.arange(line.shape[1]), axis) for axis in line])


def _write(
    figure: Any,
    axes: Any,
    crowd: Crowd,
    at: tuple[float, float],
    text: str,
    toward: tuple[float, float],
    colour: str,
    size: float,
    gap: float = 7,
    optional: bool = False,
    leader: bool = False,
    paper: str | None = None,
) -> None:
    """Write a label where it covers nothing; `gap` in points. `paper`: colour of a ground behind it."""
    ground = None if paper is None else {"facecolor": paper, "edgecolor": "none", "pad": 0.6, "alpha": 0.8}
    label = axes.text(
        0, 0, text, fontsize=size, color=colour, ha="center", va="center", zorder=6, bbox=ground
    )
    box = label.get_window_extent(figure.canvas.get_renderer())
    dots = figure.dpi / 72
    spot = axes.transData.transform(at)
    place = crowd.place(
        tuple(spot), (box.width + 5 * dots, box.height + 3 * dots), toward, gap * dots, optional
    )
    if place is None:
        label.remove()
        return
    label.set_position(tuple(axes.transData.inverted().transform(place)))
    if leader and np.hypot(*(np.array(place) - spot)) > 26 * dots + box.width / 2:
        end = axes.transData.inverted().transform(place)
        axes.plot([at[0], end[0]], [at[1], end[1]], color=colour, linewidth=0.4, zorder=2.5)


def write_tick_labels(figure: Any, axes: Any, data: PathData, palette: Palette, crowd: Crowd) -> None:
    """Write the instants beside their ticks."""
    middle = data.line.mean(axis=1)
    for tick in data.ticks:
        across = np.array([-tick.along[1], tick.along[0]])
        outward = np.array([tick.right_arcsec, tick.up_arcsec]) - (0 if data.on_disc else middle)
        if across @ outward < 0:
            across = -across
        _write(
            figure, axes, crowd, (tick.right_arcsec, tick.up_arcsec), tick.label, tuple(across),
            palette.ink, 8.5, gap=8, leader=True, paper=None if data.on_disc else palette.paper,
        )  # fmt: skip


def write_limb_angles(figure: Any, axes: Any, data: PathData, palette: Palette, crowd: Crowd) -> None:
    """Write position angles outside the disc, where there is room."""
    for pa in range(0, 360, 30):
        x, y = at_pa(data, pa, data.disc_radius_arcsec)
        out = at_pa(data, pa, 1.0)
        _write(figure, axes, crowd, (x, y), f"{pa}°", out, palette.quiet, 7.5, gap=5, optional=True)


def at_pa(data: PathData, pa_deg: float, reach: float) -> tuple[float, float]:
    """Return the point at a position angle from celestial north of date."""
    angle = np.radians(pa_deg + data.north_of_date_pa_deg - data.up_pa_deg)
    return float(-np.sin(angle) * reach), float(np.cos(angle) * reach)


@dataclass(frozen=True)
class StarPlaces:
    """Stars of a view, brightest first: places (right, up) in arcseconds, magnitudes, names."""

    right_arcsec: np.ndarray
    up_arcsec: np.ndarray
    magnitude: np.ndarray
    name: np.ndarray

    @property
    def faintest(self) -> float:
        """Magnitude of the faintest star."""
        return float(self.magnitude.max())

    def write_names(self, figure: Any, axes: Any, palette: Palette, crowd: Crowd) -> None:
        """Write the names of the brightest where there is room."""
        from planner.sky.stars import NAMED

        names = {f"HIP {number}": name.title() for name, number in NAMED.items()}
        for x, y, name in zip(
            self.right_arcsec[:STAR_LABELS],
            self.up_arcsec[:STAR_LABELS],
            self.name[:STAR_LABELS],
            strict=True,
        ):
            _write(
                figure, axes, crowd, (x, y), names.get(name, name), (1.0, 0.0), palette.quiet, 7.5, gap=5,
                optional=True, paper=palette.paper,
            )  # fmt: skip


def star_places(data: PathData, view: tuple[float, float, float, float]) -> StarPlaces | None:
    """Return the catalogue stars of a view to the limit asked for, else the brightest; None when there are none."""
    from planner.sky.stars import stars_in_field

    corners = np.hypot([view[0], view[0], view[1], view[1]], [view[2], view[3], view[2], view[3]])
    field = stars_in_field(*data.anchor_deg, float(corners.max()) / 3600.0, data.middle_tt_s)
    x, y = data.canvas.from_plane(*sky_to_plane(*data.anchor_deg, field.ra_deg, field.dec_deg))
    inside = np.flatnonzero((x > view[0]) & (x < view[1]) & (y > view[2]) & (y < view[3]))
    inside = inside[np.argsort(field.magnitude[inside], kind="stable")]
    if data.star_limit is None:
        inside = inside[:MOST_STARS]
    else:
        inside = inside[field.magnitude[inside] <= data.star_limit]
    if not inside.size:
        return None
    return StarPlaces(x[inside], y[inside], field.magnitude[inside], np.asarray(field.name)[inside])


def draw_stars(axes: Any, stars: StarPlaces, palette: Palette, crowd: Crowd) -> None:
    """Draw the stars that lie under no ornament, and keep labels off the bright ones."""
    places = axes.transData.transform(np.column_stack([stars.right_arcsec, stars.up_arcsec])).T
    free = np.ones(len(stars.magnitude), bool)
    for left, low, right, high in crowd.boxes:
        free &= ~((places[0] > left) & (places[0] < right) & (places[1] > low) & (places[1] < high))
    size = 1.5 + 2.6 * np.clip(stars.faintest - stars.magnitude, 0, 9) ** 1.35
    axes.scatter(
        stars.right_arcsec[free], stars.up_arcsec[free], s=size[free], color=palette.star, linewidths=0, zorder=2,
        alpha=0.85,
    )  # fmt: skip
    crowd.points = np.concatenate([crowd.points, places[:, free]], axis=1)
