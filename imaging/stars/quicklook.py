"""The quick-look picture of a solution: which stars were matched, which were not, and where north is."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from imaging.stars.catalogue import stars_near, vectors_of
from imaging.stars.solving import Solved
from planner.outputs import whole_file

_LONGEST_PX = 1500
_NAMED = 24
_NAME_POINTS = 7.5
_COMPASS = 0.12  # of the width: the corner that the compass takes
_MATCHED, _MISSED, _UNKNOWN, _INK = "#6ee7a0", "#ffb454", "#6aa9ff", "#f2f2f2"


def write_quicklook(solved: Solved, path: Path, tt_s: float, force: bool = False) -> None:
    """Write a PNG of a solved frame as it is looked at: matched stars ringed and named, the others marked.

    Raises OutputExistsError when the file exists and not `force`.
    """
    from matplotlib.figure import Figure

    frame, one, found = solved.frame, solved.solution, solved.found
    assert frame is not None
    assert one is not None
    assert found is not None
    height, width = frame.data.shape
    step = max(1, int(np.ceil(max(width, height) / _LONGEST_PX)))
    figure = Figure(figsize=(11, 11 * height / width + 0.9), dpi=130, facecolor="#101014")
    share = 0.9 / (11 * height / width + 0.9)
    axes = figure.add_axes((0.0, share, 1.0, 1.0 - share))
    axes.imshow(
        _stretched(_binned(frame.data, step)),
        cmap="gray",
        vmin=0,
        vmax=1,
        origin="lower" if frame.row_zero == "bottom" else "upper",
        extent=(-0.5, width - 0.5, -0.5, height - 0.5)
        if frame.row_zero == "bottom"
        else (-0.5, width - 0.5, height - 0.5, -0.5),
        interpolation="nearest",
    )
    axes.set_axis_off()
    matched = one.matched
    shown = np.argsort(matched.magnitude)[:250]
    axes.scatter(
        matched.x_px[shown], matched.y_px[shown], s=90, facecolors="none", edgecolors=_MATCHED, linewidths=0.9
    )
    missed = _missed(solved, tt_s)
    axes.scatter(
        missed.x_px, missed.y_px, s=70, marker="s", facecolors="none", edgecolors=_MISSED, linewidths=0.9
    )
    unknown = _unknown(solved, missed)[:60]
    axes.scatter(found.x_px[unknown], found.y_px[unknown], s=40, marker="x", color=_UNKNOWN, linewidths=0.8)
    marks = np.column_stack(
        [
            np.concatenate([matched.x_px[shown], missed.x_px, found.x_px[unknown]]),
            np.concatenate([matched.y_px[shown], missed.y_px, found.y_px[unknown]]),
        ]
    )
    _compass(axes, solved)
    _name(axes, solved, missed, marks)
    figure.text(
        0.015, share * 0.62, solved.path.name, color=_INK, fontsize=12, fontweight="bold", va="center"
    )
    figure.text(0.015, share * 0.25, _said(solved), color=_INK, fontsize=9, va="center")
    for x, color, text in (
        (0.56, _MATCHED, "\u25cb matched"),
        (0.655, _MISSED, "\u25a1 catalogue star not matched"),
        (0.845, _UNKNOWN, "\u00d7 not in the catalogue"),
    ):
        figure.text(x, share * 0.62, text, color=color, fontsize=9, va="center")
    with whole_file(path, force) as part:
        figure.savefig(part, facecolor=figure.get_facecolor())


def _binned(data: np.ndarray, step: int) -> np.ndarray:
    rows, columns = data.shape[0] // step * step, data.shape[1] // step * step
    blocks = data[:rows, :columns].reshape(rows // step, step, columns // step, step)
    return np.nan_to_num(
        blocks.max(axis=(1, 3))
    )  # the maximum keeps stars visible where a mean would lose them


def _stretched(data: np.ndarray) -> np.ndarray:
    low, high = np.quantile(data, [0.3, 0.9995])
    scaled = np.clip((data - low) / max(high - low, 1e-9), 0, None)
    return np.clip(np.arcsinh(12 * scaled) / np.arcsinh(12), 0, 1)


@dataclass(frozen=True)
class _Missed:
    """Bright catalogue stars that met no detection: places and rows of the star list."""

    x_px: np.ndarray
    y_px: np.ndarray
    magnitude: np.ndarray
    index: np.ndarray


def _said(solved: Solved) -> str:
    """Return the line under the picture: centre, scale, field, orientation, how many stars, and when."""
    one, frame = solved.solution, solved.frame
    assert one is not None
    assert frame is not None
    sides = [
        2 * np.degrees(np.arctan(np.radians(n * one.scale_arcsec_px / 7200)))
        for n in (one.width_px, one.height_px)
    ]
    pieces = [
        f"centre {one.center_ra_deg:.5f} {one.center_dec_deg:+.5f} deg (ICRS)",
        f"{one.scale_arcsec_px:.4f} arcsec/px",
        f"field {sides[0]:.3g} x {sides[1]:.3g} deg",
        f"up is {one.position_angle_deg:.2f} deg east of north{', mirrored' if one.mirrored else ''}",
        f"{len(one.matched.x_px)} stars, rms {one.rms_px:.2f} px",
    ]
    if frame.time is not None:
        from planner.sky.timescale import utc_iso

        pieces.append(utc_iso(frame.time.middle_tt_s, 0))
    return "   ".join(pieces)


def _missed(solved: Solved, tt_s: float) -> _Missed:
    """Return catalogue stars brighter than nearly all matched ones that met no detection."""
    one = solved.solution
    assert one is not None
    center = vectors_of(np.array(one.center_ra_deg), np.array(one.center_dec_deg))
    radius = np.radians(np.hypot(one.width_px, one.height_px) / 2 * one.scale_arcsec_px / 3600) * 1.1
    sky = stars_near(center, radius, tt_s)
    limit = np.quantile(one.matched.magnitude, 0.6) if len(one.matched.x_px) else 0.0
    sky = sky.take(np.flatnonzero((sky.magnitude < limit) & ~np.isin(sky.index, one.matched.index)))
    if len(sky) == 0:
        return _Missed(np.empty(0), np.empty(0), np.empty(0), np.empty(0, int))
    ra = np.degrees(np.arctan2(sky.vectors[:, 1], sky.vectors[:, 0]))
    x, y = one.sky_to_pixel(ra, np.degrees(np.arcsin(sky.vectors[:, 2])))
    edge = 0.006 * one.width_px  # a mark cut by the edge tells nothing
    with np.errstate(invalid="ignore"):
        inside = (x > edge) & (x < one.width_px - 1 - edge) & (y > edge) & (y < one.height_px - 1 - edge)
    if inside.any():  # the other star of a blended pair is no miss
        from scipy.spatial import cKDTree

        tree = cKDTree(np.column_stack([one.matched.x_px, one.matched.y_px]))
        inside[inside] = tree.query(np.column_stack([x[inside], y[inside]]))[0] > 8
    chosen = np.flatnonzero(inside)[:60]
    return _Missed(x[chosen], y[chosen], sky.magnitude[chosen], sky.index[chosen])


def _unknown(solved: Solved, missed: _Missed) -> np.ndarray:
    """Return detections, brightest first, that no catalogue star was matched with, nor stands about."""
    found, one = solved.found, solved.solution
    assert found is not None
    assert one is not None
    known = set(zip(np.round(one.matched.x_px, 3), np.round(one.matched.y_px, 3), strict=True))
    here = zip(np.round(found.x_px, 3), np.round(found.y_px, 3), strict=True)
    strange = np.array([place not in known for place in here], dtype=bool)
    if len(missed.x_px) and strange.any():  # a burnt-out star lies beside its place: it is in the catalogue
        from scipy.spatial import cKDTree

        tree = cKDTree(np.column_stack([missed.x_px, missed.y_px]))
        strange &= tree.query(np.column_stack([found.x_px, found.y_px]))[0] > 0.008 * one.width_px
    return np.flatnonzero(strange)


def _name(axes, solved: Solved, missed: _Missed, marks: np.ndarray) -> None:  # type: ignore[no-untyped-def]
    """Name the brightest stars, matched or not, beside their marks, where a name covers neither mark nor name."""
    from matplotlib.patheffects import withStroke

    from planner.sky.stars import PROPER_NAMES, star_names

    one = solved.solution
    assert one is not None
    x = np.concatenate([one.matched.x_px, missed.x_px])
    y = np.concatenate([one.matched.y_px, missed.y_px])
    magnitude = np.concatenate([one.matched.magnitude, missed.magnitude])
    order = np.argsort(magnitude)[:300]
    names = star_names(np.concatenate([one.matched.index, missed.index]).astype(int)[order])
    # sizes on the picture of 11 inches across, in pixels of the frame
    em = one.width_px / (11 * 72) * _NAME_POINTS
    ring = one.width_px / (11 * 72) * 6.0
    taken: list[tuple[float, float, float, float]] = []
    upward = 1.0 if solved.frame is not None and solved.frame.row_zero == "bottom" else -1.0
    for rank, name in zip(order, names, strict=True):
        number = int(name.removeprefix("HIP ")) if name.startswith("HIP ") else 0
        text = PROPER_NAMES.get(number, name)
        if not number:  # a source id names nothing to a reader
            continue
        wide, tall = 0.62 * em * len(text), 1.2 * em
        for right, up in ((1, 0), (-1, 0), (1, 1), (1, -1), (-1, 1), (-1, -1)):
            left = x[rank] + ring if right > 0 else x[rank] - ring - wide
            middle = y[rank] + upward * up * 0.9 * em
            box = (left, middle - tall / 2, left + wide, middle + tall / 2)
            if _free(box, marks, (x[rank], y[rank]), ring, taken, one.width_px, one.height_px, upward):
                taken.append(box)
                color = _INK if rank < len(one.matched.x_px) else _MISSED
                axes.text(
                    left, middle, text, color=color, fontsize=_NAME_POINTS, va="center", ha="left",
                    path_effects=[withStroke(linewidth=2.0, foreground="#101014")],
                )  # fmt: skip
                break
        if len(taken) >= _NAMED:
            break


def _free(
    box: tuple[float, float, float, float],
    marks: np.ndarray,
    own: tuple[float, float],
    ring: float,
    taken: list[tuple[float, float, float, float]],
    width: int,
    height: int,
    upward: float,
) -> bool:
    """Say whether a name fits here: within the frame, off the compass, over no other star's mark and no other name."""
    left, low, right, high = box
    if left < 0.01 * width or right > 0.99 * width or low < 0.01 * height or high > 0.99 * height:
        return False
    from_bottom = low if upward > 0 else height - high
    if left < _COMPASS * width and from_bottom < _COMPASS * width:
        return False
    over = (marks[:, 0] > left - 1.6 * ring) & (marks[:, 0] < right + 1.6 * ring)
    over &= (marks[:, 1] > low - 0.5 * ring) & (marks[:, 1] < high + 0.5 * ring)
    over &= np.hypot(marks[:, 0] - own[0], marks[:, 1] - own[1]) > ring
    if over.any():
        return False
    pad = 0.4 * (high - low)
    return all(left > r + pad or right < a - pad or low > h + pad or high < b - pad for a, b, r, h in taken)


def _compass(axes, solved: Solved) -> None:  # type: ignore[no-untyped-def]
    """Draw north and east, as they lie in the middle of the frame, in the lower left corner."""
    from matplotlib.patches import Circle

    one, frame = solved.solution, solved.frame
    assert one is not None
    assert frame is not None
    size = 0.034 * one.width_px
    x0 = 1.75 * size
    y0 = x0 if frame.row_zero == "bottom" else one.height_px - x0
    axes.add_patch(Circle((x0, y0), 1.6 * size, color="#101014", alpha=0.6, lw=0))
    middle_x, middle_y = (one.width_px - 1) / 2, (one.height_px - 1) / 2
    ra, dec = one.pixel_to_sky(np.array([middle_x]), np.array([middle_y]))
    step = size * one.scale_arcsec_px / 3600 / 10
    for label, d_ra, d_dec in (("N", 0.0, step), ("E", step / max(np.cos(np.radians(dec[0])), 1e-3), 0.0)):
        x, y = one.sky_to_pixel(ra + d_ra, dec + d_dec)
        way = np.array([x[0] - middle_x, y[0] - middle_y])
        way *= size / max(np.hypot(*way), 1e-9)
        axes.annotate(
            "",
            (x0 + way[0], y0 + way[1]),
            (x0, y0),
            arrowprops={"arrowstyle": "->", "color": _INK, "lw": 1.4, "shrinkA": 0, "shrinkB": 0},
        )
        axes.text(
            x0 + 1.3 * way[0], y0 + 1.3 * way[1], label, color=_INK, fontsize=10, ha="center", va="center"
        )
