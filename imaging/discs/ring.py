"""The pixels about a limb, sorted into sectors, and where the brightness falls in each."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.discs.outline import Outline
from imaging.discs.stamp import NEARLY_FULL
from planner.errors import NoSolutionError

Circles = tuple[tuple[float, float, float], ...]


@dataclass(frozen=True)
class Lit:
    """Which part of the limb may be used: polar angle of its middle (None: all of it) and how far to each side."""

    angle_deg: float | None = None
    half_deg: float = 180.0

    def holds(self, angle_rad: np.ndarray) -> np.ndarray:
        """Say which polar angles are in it."""
        if self.angle_deg is None:
            return np.ones(angle_rad.size, bool)
        away = np.abs((np.degrees(angle_rad) - self.angle_deg + 180) % 360 - 180)
        return away <= self.half_deg


@dataclass(frozen=True)
class Ring:
    """Pixels about a limb: places, values, and which are saturated."""

    x: np.ndarray
    y: np.ndarray
    value: np.ndarray
    clipped: np.ndarray

    def polar(self, x: float, y: float, radius: float, outline: Outline) -> tuple[np.ndarray, np.ndarray]:
        """Return (offset outward from the limb in unrefracted px, polar angle) about a centre."""
        dx, dy = self.x - x, self.y - y
        angle = np.arctan2(dy, dx)
        distance = np.sqrt(dx * dx + dy * dy)
        if outline.observer is not None:
            table = np.linspace(-np.pi, np.pi, 721)
            distance /= np.interp(angle, table, outline.ratio(table))
        return distance - radius, angle


@dataclass(frozen=True)
class Sectors:
    """The limb in each sector: its displacement outward (px), the error, the contrast, whether it is to be used.

    `wave_variance`: of what clouds may still move the limb by in each slow wave along it (px^2), beyond the errors.
    """

    angle: np.ndarray
    shift: np.ndarray
    sigma: np.ndarray
    contrast: np.ndarray
    level: np.ndarray
    good: np.ndarray
    wave_variance: float = 0.0


def slow_waves(angle: np.ndarray) -> np.ndarray:
    """Return cosines and sines (n, 8) of one to four waves a turn, in which clouds bend the brightness at a limb."""
    return np.concatenate([[np.cos(m * angle), np.sin(m * angle)] for m in range(1, 5)]).T


@dataclass(frozen=True)
class Template:
    """A mean limb profile, 0 outside and 1 inside, at offsets (px) from the limb, with its error.

    `raw` is the profile as it was averaged, `value` the same a little smoothed.
    `slope` is its derivative; `inner` a second shape, the part of the surface that changes with the angle of view.
    """

    offset: np.ndarray
    raw: np.ndarray
    value: np.ndarray
    sigma: np.ndarray
    slope: np.ndarray
    inner: np.ndarray | None

    def at(self, offset: np.ndarray) -> np.ndarray:
        """Return the profile at these offsets."""
        return np.interp(offset, self.offset, self.value)


def collect(
    data: np.ndarray,
    x: float,
    y: float,
    radius: float,
    width: float,
    outline: Outline,
    saturation: float | None,
    avoid: Circles,
    most: int | None = None,
) -> Ring:
    """Collect the pixels within `width` of the limb, thinned evenly to about `most`."""
    rows, columns = data.shape
    squeeze = float(np.min(outline.ratio(np.linspace(-np.pi, np.pi, 73))))
    stretch = float(np.max(outline.ratio(np.linspace(-np.pi, np.pi, 73))))
    outer, inner = radius * max(stretch, 1.0) + width, max(radius * squeeze - width, 0.0)
    line = np.arange(max(0, int(np.ceil(y - outer))), min(rows, int(np.floor(y + outer)) + 1))
    if line.size == 0:
        raise NoSolutionError("the disc lies outside the frame")
    far = np.sqrt(np.maximum(outer**2 - (line - y) ** 2, 0))
    near = np.sqrt(np.maximum(inner**2 - (line - y) ** 2, 0))
    # left piece; where the line misses the inner circle it runs all the way across and there is no right piece
    both = near > 0
    pieces = [
        (line, x - far, np.where(both, x - near, x + far)),
        (line[both], (x + near)[both], (x + far)[both]),
    ]
    rows_of, columns_of = [], []
    for lines, low, high in pieces:
        start = np.clip(np.ceil(low), 0, columns).astype(np.int64)
        count = np.maximum(np.clip(np.floor(high) + 1, 0, columns).astype(np.int64) - start, 0)
        rows_of.append(np.repeat(lines, count))
        first = np.cumsum(count) - count
        columns_of.append(np.arange(count.sum()) - np.repeat(first - start, count))
    row, column = np.concatenate(rows_of), np.concatenate(columns_of)
    if most is not None and row.size > 1.5 * most:
        # prime strides, so that no direction is favoured
        strides = (2, 3, 5, 7, 11, 13, 17, 23, 31, 43, 61, 97, 197)
        stride = next((n for n in strides if row.size / n < 1.5 * most), strides[-1])
        row, column = row[::stride], column[::stride]
    value = data[row, column]
    keep = np.isfinite(value)
    for ax, ay, ar in avoid:
        keep &= (column - ax) ** 2 + (row - ay) ** 2 > ar**2
    row, column, value = row[keep], column[keep], value[keep].astype(float)
    clipped = value >= NEARLY_FULL * saturation if saturation is not None else np.zeros(value.size, bool)
    if value.size < 200:
        raise NoSolutionError("the disc's limb lies outside the frame")
    return Ring(column.astype(float), row.astype(float), value, clipped)


def sector_of(angle: np.ndarray, count: int) -> np.ndarray:
    """Return the number of the sector that each polar angle (radians) is in."""
    return np.minimum(((angle + np.pi) * (count / (2 * np.pi))).astype(int), count - 1)


def middles(count: int) -> np.ndarray:
    """Return the polar angles (radians) of the middles of all sectors."""
    return (np.arange(count) + 0.5) * 2 * np.pi / count - np.pi


def crossings(
    ring: Ring,
    x: float,
    y: float,
    radius: float,
    width: float,
    outline: Outline,
    lit: Lit,
) -> tuple[Sectors, float]:
    """Find the steepest fall of brightness in each sector, to half a pixel; also the typical sigma of the fall."""
    offset, angle = ring.polar(x, y, radius, outline)
    count = int(np.clip(2 * np.pi * radius / 6, 24, 360))
    step = max(1.0, width / 40)
    bins = int(2 * width / step)
    inside = np.abs(offset) < width
    cell = sector_of(angle[inside], count) * bins + np.clip(
        ((offset[inside] + width) / step).astype(int), 0, bins - 1
    )
    number = np.bincount(cell, minlength=count * bins).reshape(count, bins)
    total = np.bincount(cell, ring.value[inside], count * bins).reshape(count, bins)
    with np.errstate(invalid="ignore"):
        profile = total / np.where(number > 0, number, np.nan)
    from scipy.ndimage import gaussian_filter1d

    third = bins // 3
    full = np.isfinite(profile).mean(axis=1) > 0.9
    filled = _filled(profile)
    smooth = gaussian_filter1d(filled, 1.0, axis=1, mode="nearest")
    fall = -np.diff(smooth, axis=1)
    peak = np.argmax(fall, axis=1)
    high = np.median(filled[:, :third], axis=1)
    low = np.median(filled[:, -third:], axis=1)
    contrast = high - low
    noise = 1.48 * np.median(np.abs(np.diff(filled, axis=1)), axis=1) / np.sqrt(2)
    size = np.quantile(contrast[full], 0.9) if full.any() else 0.0
    inner = (peak > 1) & (peak < fall.shape[1] - 2)
    good = full & inner & (contrast > 0.15 * size) & (contrast > 4 * noise) & lit.holds(middles(count))
    if good.sum() < max(6, 0.05 * count):
        raise NoSolutionError("no limb falls off clearly where the disc should end: clouds, or no disc")
    row = np.arange(count)
    p = np.clip(peak, 1, fall.shape[1] - 2)
    left, mid, right = fall[row, p - 1], fall[row, p], fall[row, p + 1]
    bend = left - 2 * mid + right
    fine = np.where(np.abs(bend) > 1e-12, 0.5 * (left - right) / np.where(np.abs(bend) > 1e-12, bend, 1), 0.0)
    shift = (p + np.clip(fine, -1, 1) + 1) * step - width
    # a Gaussian fall of height h has its steepest slope h / (sqrt(2 pi) sigma)
    sigma = contrast * step / np.sqrt(2 * np.pi) / np.maximum(mid, 1e-12)
    blur = float(np.clip(np.median(sigma[good]), 0.4, width / 3))
    return (
        Sectors(middles(count), shift, np.full(count, 0.3 * step), contrast, low, good),
        blur,
    )


def _filled(profile: np.ndarray) -> np.ndarray:
    """Return rows with their gaps closed by the nearest value to the left."""
    index = np.where(np.isfinite(profile), np.arange(profile.shape[1]), 0)
    np.maximum.accumulate(index, axis=1, out=index)
    return np.nan_to_num(profile[np.arange(profile.shape[0])[:, None], index])
