"""The quick-look picture of a solution: which stars were matched, which were not, and where north is."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from imaging.stars.catalogue import stars_near, vectors_of
from imaging.stars.solving import Solved
from planner.outputs import whole_file

_LONGEST_PX = 1500
_NAMED = 14
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
    missed_x, missed_y = _missed(solved, tt_s)
    axes.scatter(missed_x, missed_y, s=70, marker="s", facecolors="none", edgecolors=_MISSED, linewidths=0.9)
    unknown = _unknown(solved)[:60]
    axes.scatter(found.x_px[unknown], found.y_px[unknown], s=40, marker="x", color=_UNKNOWN, linewidths=0.8)
    _name(axes, solved)
    _compass(axes, solved)
    figure.text(
        0.015, share * 0.62, solved.path.name, color=_INK, fontsize=12, fontweight="bold", va="center"
    )
    figure.text(
        0.015,
        share * 0.25,
        f"centre {one.center_ra_deg:.5f} {one.center_dec_deg:+.5f} deg (ICRS)   {one.scale_arcsec_px:.4f} arcsec/px   "
        f"up is {one.position_angle_deg:.2f} deg east of north{', mirrored' if one.mirrored else ''}   "
        f"{len(matched.x_px)} stars, rms {one.rms_px:.2f} px",
        color=_INK,
        fontsize=9,
        va="center",
    )
    for x, color, text in (
        (0.52, _MATCHED, "o  matched"),
        (0.63, _MISSED, "\u25a1  catalogue star not matched"),
        (0.82, _UNKNOWN, "x  not in the catalogue"),
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


def _missed(solved: Solved, tt_s: float) -> tuple[np.ndarray, np.ndarray]:
    """Return places of catalogue stars brighter than nearly all matched ones that met no detection."""
    one = solved.solution
    assert one is not None
    center = vectors_of(np.array(one.center_ra_deg), np.array(one.center_dec_deg))
    radius = np.radians(np.hypot(one.width_px, one.height_px) / 2 * one.scale_arcsec_px / 3600) * 1.1
    sky = stars_near(center, radius, tt_s)
    limit = np.quantile(one.matched.magnitude, 0.6) if len(one.matched.x_px) else 0.0
    sky = sky.take(np.flatnonzero((sky.magnitude < limit) & ~np.isin(sky.index, one.matched.index)))
    if len(sky) == 0:
        return np.empty(0), np.empty(0)
    ra = np.degrees(np.arctan2(sky.vectors[:, 1], sky.vectors[:, 0]))
    x, y = one.sky_to_pixel(ra, np.degrees(np.arcsin(sky.vectors[:, 2])))
    with np.errstate(invalid="ignore"):
        inside = (x > 0) & (x < one.width_px - 1) & (y > 0) & (y < one.height_px - 1)
    if inside.any():  # the other star of a blended pair is no miss
        from scipy.spatial import cKDTree

        tree = cKDTree(np.column_stack([one.matched.x_px, one.matched.y_px]))
        inside[inside] = tree.query(np.column_stack([x[inside], y[inside]]))[0] > 8
    return x[inside][:60], y[inside][:60]


def _unknown(solved: Solved) -> np.ndarray:
    """Return detections, brightest first, that no catalogue star was matched with."""
    found, one = solved.found, solved.solution
    assert found is not None
    assert one is not None
    known = set(zip(np.round(one.matched.x_px, 3), np.round(one.matched.y_px, 3), strict=True))
    here = zip(np.round(found.x_px, 3), np.round(found.y_px, 3), strict=True)
    return np.flatnonzero([place not in known for place in here])


def _name(axes, solved: Solved) -> None:  # type: ignore[no-untyped-def]
    """Name the brightest matched stars, where names do not run into each other."""
    one = solved.solution
    assert one is not None
    order = np.argsort(one.matched.magnitude)
    names = one.matched.name
    taken: list[tuple[float, float]] = []
    for i in order[:200]:
        x, y = float(one.matched.x_px[i]), float(one.matched.y_px[i])
        if x > 0.86 * one.width_px or not names[i].startswith("HIP"):  # a source id names nothing to a reader
            continue
        if any(abs(x - a) < 0.12 * one.width_px and abs(y - b) < 0.03 * one.height_px for a, b in taken):
            continue
        taken.append((x, y))
        axes.annotate(
            names[i],
            (x, y),
            xytext=(7, 0),
            textcoords="offset points",
            color=_INK,
            fontsize=7.5,
            va="center",
        )
        if len(taken) >= _NAMED:
            break


def _compass(axes, solved: Solved) -> None:  # type: ignore[no-untyped-def]
    """Draw north and east in the lower left corner."""
    one, frame = solved.solution, solved.frame
    assert one is not None
    assert frame is not None
    size = 0.06 * one.width_px
    x0 = 0.09 * one.width_px
    y0 = (0.12 if frame.row_zero == "bottom" else 0.88) * one.height_px
    ra, dec = one.pixel_to_sky(np.array([x0]), np.array([y0]))
    step = size * one.scale_arcsec_px / 3600 / 10
    for label, d_ra, d_dec in (("N", 0.0, step), ("E", step / max(np.cos(np.radians(dec[0])), 1e-3), 0.0)):
        x, y = one.sky_to_pixel(ra + d_ra, dec + d_dec)
        way = np.array([x[0] - x0, y[0] - y0])
        way *= size / max(np.hypot(*way), 1e-9)
        axes.annotate(
            "",
            (x0 + way[0], y0 + way[1]),
            (x0, y0),
            arrowprops={"arrowstyle": "->", "color": _INK, "lw": 1.4},
        )
        axes.text(
            x0 + 1.25 * way[0], y0 + 1.25 * way[1], label, color=_INK, fontsize=10, ha="center", va="center"
        )
