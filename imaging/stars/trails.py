"""Stars of a camera that did not follow the sky: found and measured along their trails.

A trail is a line of even light, as wide as a star. Its middle is where the star stood at mid-exposure: the trail of a
turning sky bends, which moves the middle of a straight line fitted to it by length^2 / (24 x distance from the pole)
towards the pole. How the directions of the frame's trails change along a trail tells the bend, and it is taken off.
The filter is matched to the trail (Turin 1960), the fit is a Gauss-Newton fit of the profile with each pixel's noise
as weight, which reaches the Cramer-Rao bound: along the trail its two ends alone tell the place.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.stars.background import Background
from imaging.stars.trailfit import LONGEST_PX, placed, profile, shaped

SHORTEST_PX = 1.5  # below it a trail is a lengthened star, and windowed centroids reach the bound
_TILE_PX = 512
_SMALLEST_TILE_PX = 64
_STRIP_ROWS = 1024
_MOST_SHAPED = 200  # trails from which shape and direction are learned
_SHAPED_PIXELS = 600_000  # and the pixels of their stamps together: what the fit may cost
_ELONGATED = 1.35
_GOES_ON = 0.4  # of a trail's brightness beyond it on both sides, from which it is part of something longer


@dataclass(frozen=True)
class TrailField:
    """How trails lie over the frame, and how wide they are (`sigma_px`, Gaussian).

    The tensor (length^2 / 12) of direction is a polynomial of the place: exactly quadratic where a flat picture of the
    sky turns about a pole, which may lie in the frame. `coefficients`: (terms, 3) of xx, xy, yy in px^2.
    """

    coefficients: np.ndarray
    center_px: tuple[float, float]
    unit_px: float
    sigma_px: float

    def at(self, x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return length in px and angle in radians (from +x towards +y, -pi/2 to pi/2) of trails at these places."""
        terms = _terms(x_px, y_px, self.center_px, self.unit_px, len(self.coefficients))
        xx, xy, yy = (terms @ self.coefficients).T
        large = (xx + yy) / 2 + np.hypot((xx - yy) / 2, xy)
        return np.sqrt(12 * np.maximum(large, 0.0)), 0.5 * np.arctan2(2 * xy, xx - yy)

    def bend(self, x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return by how much (x, y) the even light of a bent trail lies off its middle: curvature x length^2 / 24."""
        length, angle = self.at(x_px, y_px)
        length = np.minimum(length, LONGEST_PX)
        c, s = np.cos(angle), np.sin(angle)
        half = np.maximum(length / 2, 1.0)
        ahead, behind = (self.at(x_px + side * half * c, y_px + side * half * s)[1] for side in (1, -1))
        turned = (ahead - behind + np.pi / 2) % np.pi - np.pi / 2  # a direction has no sign
        off = turned / (2 * half) * length**2 / 24
        return -off * s, off * c


@dataclass(frozen=True)
class Trails:
    """n trails, in no order: middle, light, their covariance (n, 3, 3) of light, x, y; length and angle; quality."""

    x_px: np.ndarray
    y_px: np.ndarray
    flux_adu: np.ndarray
    covariance: np.ndarray
    snr: np.ndarray
    length_px: np.ndarray
    angle_rad: np.ndarray
    saturated: np.ndarray
    good: np.ndarray


def looks_trailed(elongation: np.ndarray, clear: np.ndarray) -> bool:
    """Say whether most of the clear stars of a frame are long; one that is a line all through the window is NaN."""
    if clear.sum() < 5:
        return False
    long = ~(elongation[clear] < _ELONGATED)
    return bool(long.mean() > 0.5)


def trail_field(
    data: np.ndarray, sky: Background, saturation_adu: float | None, gain_e_adu: float | None
) -> TrailField | None:
    """Return how the trails of a frame lie, or None when what is long in it does not lie as trails do."""
    blobs = _blobs(data, sky)
    if len(blobs) < 5:
        return None
    x, y, xx, xy, yy = blobs[:, :5].T
    half, root = (xx + yy) / 2, np.hypot((xx - yy) / 2, xy)
    narrow = float(np.median(np.maximum(half - root, 0.1)))
    field = _fitted(x, y, np.column_stack([xx - narrow, xy, yy - narrow]), data.shape, np.sqrt(narrow))
    if field is None:
        return None
    # the blobs only start the fit of each trail's own length, direction and width
    length, angle = field.at(x, y)
    length = np.clip(np.where(length > 0.5, length, 0.5), 0.5, LONGEST_PX)
    start = np.column_stack([blobs[:, 5], x, y, length, angle, np.full(len(x), field.sigma_px)])
    stamp = (float(np.median(length)) + 10 * field.sigma_px + 4) ** 2
    start = start[: max(25, int(_SHAPED_PIXELS / stamp))]
    own, fine = shaped(data, sky, start, saturation_adu, gain_e_adu)
    if fine.sum() < 5:
        return None
    own = own[fine]
    sigma = float(np.median(own[:, 5]))
    square = own[:, 3] ** 2 / 12
    c, s = np.cos(own[:, 4]), np.sin(own[:, 4])
    tensor = np.column_stack([square * c * c, square * c * s, square * s * s])
    field = _fitted(own[:, 1], own[:, 2], tensor, data.shape, sigma)
    if field is None:
        return None
    there, _ = field.at(own[:, 1], own[:, 2])
    return field if np.median(there) > SHORTEST_PX else None


def measure_trails(
    data: np.ndarray,
    sky: Background,
    field: TrailField,
    threshold: float,
    saturation_adu: float | None,
    gain_e_adu: float | None,
    most: int,
) -> Trails:
    """Return the trails of a frame: maxima of the matched filter above `threshold` sigmas, each fitted."""
    x, y, snr = _maxima(data, sky, field, threshold)
    order = np.argsort(-snr, kind="stable")[:most]
    x, y, snr = x[order], y[order], snr[order]
    length, angle = field.at(x, y)
    length = np.clip(length, 0.3, LONGEST_PX)
    sigma = np.full(len(x), field.sigma_px)
    values, covariance, saturated = placed(
        data, sky, np.column_stack([np.zeros(len(x)), x, y, length, angle, sigma]), saturation_adu, gain_e_adu
    )
    away = np.hypot(values[:, 1] - x, values[:, 2] - y)
    good = (
        np.isfinite(values).all(axis=1) & (values[:, 0] > 0) & (away < 2 + 1.5 * field.sigma_px + length / 3)
    )
    good &= values[:, 0] > 0.5 * threshold * np.sqrt(np.maximum(covariance[:, 0, 0], 1e-30))
    # a trail that runs out of the frame has lost an end, and with it its middle
    height, width = data.shape
    reach_x = np.abs(np.cos(angle)) * length / 2 + field.sigma_px
    reach_y = np.abs(np.sin(angle)) * length / 2 + field.sigma_px
    good &= (values[:, 1] > reach_x) & (values[:, 1] < width - 1 - reach_x)
    good &= (values[:, 2] > reach_y) & (values[:, 2] < height - 1 - reach_y)
    good &= ~_goes_on(data, sky, values, length, angle, field.sigma_px)
    good &= ~_doubled(values, length, angle, good, field.sigma_px)
    off_x, off_y = field.bend(values[:, 1], values[:, 2])
    return Trails(
        values[:, 1] - off_x, values[:, 2] - off_y, values[:, 0], covariance, snr, length, angle, saturated, good
    )  # fmt: skip


def _goes_on(
    data: np.ndarray, sky: Background, values: np.ndarray, length: np.ndarray, angle: np.ndarray, sigma: float
) -> np.ndarray:
    """Say which are part of something longer, such as a satellite's trail: as bright beyond both ends or both sides."""
    height, width = data.shape
    bright = np.abs(values[:, 0]) / (np.maximum(length, 2 * sigma) * np.sqrt(2 * np.pi) * sigma)
    gy = np.clip((values[:, 2] / height * sky.grid.shape[0]).astype(int), 0, sky.grid.shape[0] - 1)
    gx = np.clip((values[:, 1] / width * sky.grid.shape[1]).astype(int), 0, sky.grid.shape[1] - 1)
    level = sky.grid[gy, gx]
    steps = np.arange(0.0, 3.5)

    def light(turn: np.ndarray, start: np.ndarray, sign: int) -> np.ndarray:
        """Return the mean light over the level along a ray that begins at `start`."""
        far = sign * (start[:, None] + steps * sigma)
        x = np.rint(values[:, 1, None] + far * np.cos(turn)[:, None])
        y = np.rint(values[:, 2, None] + far * np.sin(turn)[:, None])
        inside = (x >= 0) & (x < width) & (y >= 0) & (y < height)
        x, y = np.clip(x, 0, width - 1).astype(int), np.clip(y, 0, height - 1).astype(int)
        return np.where(inside, np.nan_to_num(data[y, x] - level[:, None]), 0.0).mean(axis=1)

    def both(turn: np.ndarray, start: np.ndarray) -> np.ndarray:
        return np.minimum(light(turn, start, 1), light(turn, start, -1)) > _GOES_ON * bright

    ends = length / 2 + 3.5 * sigma
    goes_on = both(angle, ends)
    for away in np.radians(np.arange(7.5, 180, 7.5)):  # from where such a ray has left the trail itself
        goes_on |= both(angle + away, np.minimum(ends, 3.5 * sigma / np.sin(away)))
    return goes_on


def _doubled(
    values: np.ndarray, length: np.ndarray, angle: np.ndarray, good: np.ndarray, sigma: float
) -> np.ndarray:
    """Say which lie on a brighter trail of their own line: several maxima on one ragged or saturated trail."""
    from scipy.spatial import cKDTree

    double = np.zeros(len(values), dtype=bool)
    index = np.flatnonzero(good)
    if len(index) < 2:
        return double
    reach = float(length[index].max()) / 2 + 2 * sigma
    pairs = cKDTree(values[index, 1:3]).query_pairs(reach, output_type="ndarray")
    first, second = index[pairs[:, 0]], index[pairs[:, 1]]
    dx, dy = values[first, 1] - values[second, 1], values[first, 2] - values[second, 2]
    along = np.abs(dx * np.cos(angle[first]) + dy * np.sin(angle[first]))
    across = np.abs(-dx * np.sin(angle[first]) + dy * np.cos(angle[first]))
    light_1, light_2 = values[first, 0], values[second, 0]
    same = (across < 1.2 * sigma) & (along < 1.2 * sigma)
    # a fragment: far fainter, on the line of the other
    same |= (across < 2 * sigma) & (along < length[first] / 2) & (
        np.minimum(light_1, light_2) < 0.1 * np.maximum(light_1, light_2)
    )  # fmt: skip
    double[np.where(light_1 >= light_2, second, first)[same]] = True
    return double


def _blobs(data: np.ndarray, sky: Background) -> np.ndarray:
    """Return (x, y, xx, xy, yy, light) of connected bright pixels: the most luminous that no edge cuts."""
    import cv2

    height, width = data.shape
    found = []
    for top in range(0, height, _STRIP_ROWS):
        bottom = min(height, top + _STRIP_ROWS)
        strip = np.nan_to_num(data[top:bottom] - sky.level(top, bottom)).astype(np.float32)
        sigma = sky.level(top, bottom, sky.sigma_grid)
        smooth = cv2.GaussianBlur(strip, (0, 0), 1.0)
        mask = (smooth > 2.0 * sigma).astype(np.uint8)
        count, labels, stats, _ = cv2.connectedComponentsWithStats(mask, connectivity=8)
        left, low, wide, tall, area = stats.T
        whole = (left > 0) & (low > 0) & (left + wide < width) & (low + tall < bottom - top)
        whole &= (area >= 9) & (area < 0.05 * strip.size) & (np.maximum(wide, tall) < LONGEST_PX * 1.5)
        whole[0] = False
        rows, columns = np.nonzero(mask)
        label = labels[rows, columns]
        keep = whole[label]
        rows, columns, label = rows[keep], columns[keep], label[keep]
        value = np.maximum(strip[rows, columns], 0.0).astype(float)

        def total(weight: np.ndarray, label=label, count=count) -> np.ndarray:  # type: ignore[no-untyped-def]
            return np.bincount(label, weight, count)

        light = total(value)
        use = np.flatnonzero(whole & (light > 0))
        x, y = (total(value * place)[use] / light[use] for place in (columns, rows))
        xx = total(value * columns.astype(float) ** 2)[use] / light[use] - x * x
        yy = total(value * rows.astype(float) ** 2)[use] / light[use] - y * y
        xy = total(value * columns.astype(float) * rows)[use] / light[use] - x * y
        found.append(np.column_stack([x, y + top, xx, xy, yy, light[use]]))
    blobs = np.concatenate(found)
    # the few brightest are saturated or no stars at all; the faint ones show only part of their length
    order = np.argsort(-blobs[:, 5])[:_MOST_SHAPED]
    return blobs[order]


def _terms(
    x_px: np.ndarray, y_px: np.ndarray, center: tuple[float, float], unit: float, count: int
) -> np.ndarray:
    x, y = (np.asarray(x_px, float) - center[0]) / unit, (np.asarray(y_px, float) - center[1]) / unit
    return np.stack([np.ones_like(x), x, y, x * x, x * y, y * y][:count], axis=-1)


def _fitted(
    x: np.ndarray, y: np.ndarray, tensor: np.ndarray, shape: tuple[int, int], sigma: float
) -> TrailField | None:
    """Return the field through the tensors of trails, outliers left out; None when most are outliers."""
    height, width = shape
    center, unit = ((width - 1) / 2, (height - 1) / 2), float(np.hypot(width, height) / 2)
    count = 6 if len(x) >= 40 else 3 if len(x) >= 15 else 1
    terms = _terms(x, y, center, unit, count)
    middle = np.median(tensor, axis=0)
    scale = max(float(np.hypot(middle[0] - middle[2], 2 * middle[1])), 0.1)
    weight = np.ones(len(x))
    coefficients = np.zeros((count, 3))
    coefficients[0] = middle
    for turn in range(12):
        away = np.linalg.norm(tensor - terms @ coefficients, axis=1)
        spread = max(1.4826 * float(np.median(away)), 0.02 * scale)
        weight = 1 / (1 + (away / spread) ** 2) ** 2
        if turn == 0 and count > 1:  # the middle is no guide where trails turn: begin with all
            weight = np.where(away < 4 * spread, 1.0, 0.1)
        root = np.sqrt(weight)[:, None]
        coefficients = np.linalg.lstsq(terms * root, tensor * root, rcond=None)[0]
    field = TrailField(coefficients, center, unit, sigma)
    away = np.linalg.norm(tensor - terms @ coefficients, axis=1)
    size = np.maximum(np.linalg.norm(terms @ coefficients, axis=1), 0.2)
    return field if (away < 0.5 * size + 0.3 * sigma**2).mean() > 0.5 else None


def _maxima(
    data: np.ndarray, sky: Background, field: TrailField, threshold: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return (x, y, snr) of the maxima of the frame filtered with the trail of each part of it."""
    import cv2

    height, width = data.shape
    square = np.ones((3, 3), dtype=np.uint8)
    side = _tile_px(field, width, height)
    found = [np.empty((0, 3))]
    for top in range(0, height, side):
        for left in range(0, width, side):
            length, angle = field.at(
                np.array([min(left + side / 2, width - 1)]), np.array([min(top + side / 2, height - 1)])
            )
            long = float(np.clip(length[0], 0.3, LONGEST_PX))
            radius = int(np.ceil(long / 2 + 3 * field.sigma_px)) + 1
            reach = np.arange(-radius, radius + 1.0)
            one = np.array([[1.0, 0.0, 0.0, long, float(angle[0]), field.sigma_px]])
            kernel = profile(reach, one, 3)[0][0].astype(np.float32)
            first, last = max(0, top - radius - 2), min(height, top + side + radius + 2)
            start, stop = max(0, left - radius - 2), min(width, left + side + radius + 2)
            tile = (data[first:last, start:stop] - sky.level(first, last)[:, start:stop]).astype(np.float32)
            sigma = sky.level(first, last, sky.sigma_grid)[:, start:stop]
            tile[~np.isfinite(tile)] = 0.0
            smooth = cv2.filter2D(tile, -1, kernel, borderType=cv2.BORDER_REFLECT_101) / sigma
            low, middle = np.quantile(smooth[::3, ::3], [0.1587, 0.5])
            noise = max(float(middle - low), 0.8 * float(np.sqrt((kernel**2).sum())))
            peak = (smooth >= cv2.dilate(smooth, square)) & (smooth > threshold * noise)
            y, x = np.nonzero(peak)
            snr = smooth[y, x] / noise
            y, x = y + first, x + start
            keep = (y >= top) & (y < top + side) & (x >= left) & (x < left + side)
            found.append(np.column_stack([x, y, snr])[keep])
    x, y, snr = np.concatenate(found).T
    own = ~_slopes(x, y, snr, field, threshold)
    return x[own], y[own], snr[own]


def _tile_px(field: TrailField, width: int, height: int) -> int:
    """Return the side of tiles over which the ends of a trail move by less than half its width."""
    x, y = np.meshgrid(np.linspace(0, width - 1, 9), np.linspace(0, height - 1, 9))
    length, angle = field.at(x.ravel(), y.ravel())
    step = max(width, height) / 8
    tensor = np.stack([length * np.cos(2 * angle), length * np.sin(2 * angle)]).reshape(2, 9, 9)
    change = max(float(np.abs(np.diff(tensor, axis=axis)).max()) for axis in (1, 2)) / step
    side = field.sigma_px / max(change / 2, 1e-9)
    return int(np.clip(side, _SMALLEST_TILE_PX, _TILE_PX))


def _slopes(x: np.ndarray, y: np.ndarray, snr: np.ndarray, field: TrailField, threshold: float) -> np.ndarray:
    """Say which maxima are ripples on the slope of a stronger one: the filter answers a trail with a triangle."""
    from scipy.spatial import cKDTree

    ripple = np.zeros(len(x), dtype=bool)
    if len(x) < 2:
        return ripple
    length, angle = field.at(x, y)
    length = np.clip(length, 0.3, LONGEST_PX)
    reach = float(length.max()) + 3 * field.sigma_px
    pairs = cKDTree(np.column_stack([x, y])).query_pairs(reach, output_type="ndarray")
    swap = snr[pairs[:, 0]] < snr[pairs[:, 1]]
    pairs[swap] = pairs[swap][:, ::-1]
    strong, weak = pairs.T
    dx, dy = x[weak] - x[strong], y[weak] - y[strong]
    c, s = np.cos(angle[strong]), np.sin(angle[strong])
    along, across = np.abs(dx * c + dy * s), np.abs(dy * c - dx * s)
    wide = 4.0 * field.sigma_px  # the corners of the triangle are as round as the filtered star is wide
    triangle = np.maximum(1 - np.maximum(along - wide, 0) / length[strong], 0)
    triangle *= np.exp(-0.25 * (np.maximum(across - 1, 0) / field.sigma_px) ** 2)
    ripple[weak[snr[weak] < 1.15 * snr[strong] * triangle + 0.6 * threshold]] = True
    return ripple
