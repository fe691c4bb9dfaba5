"""A small piece of a frame, modelled on sub-pixels: blurred discs, and least squares with linear amplitudes."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from imaging.discs.edge import Blur
from planner.errors import NoSolutionError

# Read noise leaves half of the saturated pixels below the stated level: this much of it counts as saturated.
NEARLY_FULL = 0.985


@dataclass(frozen=True)
class DiscPlace:
    """A disc or point placed in a frame. Pixels are 0-based; `covariance` (px^2) is of the centre of figure (x, y).

    `light_x_px`, `light_y_px`: centre of light, the same for a body that is evenly lit. `contrast`: depth below
    the Sun (1 is black) or height over the noise for a bright body. `chi2`: of the fit, by degree of freedom,
    in units of the noise the stamp itself shows. `notes`: what was assumed or is doubtful.
    """

    x_px: float
    y_px: float
    covariance: np.ndarray
    radius_px: float
    radius_sigma_px: float
    blur: Blur
    light_x_px: float
    light_y_px: float
    contrast: float
    chi2: float
    method: str
    saturated_px: int = 0
    notes: tuple[str, ...] = ()

    @property
    def sigma_px(self) -> tuple[float, float]:
        """1-sigma of x and y."""
        return float(np.sqrt(self.covariance[0, 0])), float(np.sqrt(self.covariance[1, 1]))


@dataclass(frozen=True)
class Stamp:
    """Pixels about a place: `data` (rows, columns), where its first pixel is in the frame, what is usable."""

    data: np.ndarray
    x_low: int
    y_low: int
    usable: np.ndarray
    clipped: np.ndarray

    @classmethod
    def cut(
        cls, frame: np.ndarray, x_px: float, y_px: float, half_px: float, saturation: float | None = None
    ) -> Stamp:
        """Cut a square about a place out of a frame; raises NoSolutionError when most of it is beyond the edge."""
        half = int(np.ceil(half_px))
        if not (np.isfinite(x_px) and np.isfinite(y_px)):
            raise NoSolutionError("the place looked at is not in the frame")
        x_mid, y_mid = round(x_px), round(y_px)
        x_low, y_low = max(x_mid - half, 0), max(y_mid - half, 0)
        x_high, y_high = min(x_mid + half + 1, frame.shape[1]), min(y_mid + half + 1, frame.shape[0])
        if x_high - x_low < half + 1 or y_high - y_low < half + 1:
            raise NoSolutionError("the place looked at is at or beyond the frame's edge")
        data = np.asarray(frame[y_low:y_high, x_low:x_high], float)
        usable = np.isfinite(data)
        clipped = (data >= NEARLY_FULL * saturation) if saturation is not None else np.zeros(data.shape, bool)
        return cls(np.where(usable, data, 0.0), x_low, y_low, usable & ~clipped, clipped)

    def part(self, x_px: float, y_px: float, half_px: float) -> Stamp:
        """Return the piece of this stamp about a place of the frame, as far as it reaches."""
        half = int(np.ceil(half_px))
        column, row = round(x_px) - self.x_low, round(y_px) - self.y_low
        low_x, low_y = max(column - half, 0), max(row - half, 0)
        part = slice(low_y, max(row + half + 1, 0)), slice(low_x, max(column + half + 1, 0))
        return Stamp(
            self.data[part], self.x_low + low_x, self.y_low + low_y, self.usable[part], self.clipped[part]
        )

    def grid(self, finer: int = 1, margin: int = 0) -> tuple[np.ndarray, np.ndarray]:
        """Return (x, y) of sub-pixel middles as a row and a column, with `margin` whole pixels around."""
        rows, columns = self.data.shape

        def line(low: int, count: int) -> np.ndarray:
            total = (count + 2 * margin) * finer
            return low - margin - 0.5 + (np.arange(total) + 0.5) / finer

        return line(self.x_low, columns)[None, :], line(self.y_low, rows)[:, None]


def coverage(distance_px: np.ndarray, finer: int) -> np.ndarray:
    """Return the part of a sub-pixel inside an outline, from its signed distance (negative inside)."""
    return np.clip(0.5 - distance_px * finer, 0.0, 1.0)


def blurred(fine: np.ndarray, blur: Blur, finer: int, margin: int) -> np.ndarray:
    """Blur sub-pixel pictures (..., rows, columns), average them over pixels, and drop their margin.

    A round Gaussian is one across columns after one across rows, and pixels need no more of it than their own mean: two
    products with banded matrices. Beyond the picture its edge goes on.
    """
    from scipy.sparse import csr_array

    rows, columns = fine.shape[-2:]
    layers = fine.reshape(-1, rows, columns)
    # single precision: a ten-millionth of the light, and half of the time
    by_rows = np.ascontiguousarray(layers.transpose(1, 0, 2), np.float32).reshape(rows, -1)
    total: np.ndarray | float = 0.0
    for weight, sigma in blur.parts():
        # sparse: most of a matrix is zero, and threads would cost more than they give
        down = csr_array(_smearing(rows, sigma * finer, finer, margin))
        across = down if columns == rows else csr_array(_smearing(columns, sigma * finer, finer, margin))
        half = (down @ by_rows).reshape(-1, len(layers), columns)
        by_columns = np.ascontiguousarray(half.transpose(2, 0, 1)).reshape(columns, -1)
        total = total + np.float32(weight) * (across @ by_columns)
    out = np.asarray(total, float).reshape(columns // finer - 2 * margin, -1, len(layers)).transpose(2, 1, 0)
    return np.ascontiguousarray(out).reshape(*fine.shape[:-2], *out.shape[-2:])


def _smearing(size: int, width: float, finer: int, margin: int) -> np.ndarray:
    """Return the matrix (pixels, sub-pixels) of a Gaussian in one direction and the mean over a pixel."""
    half = int(np.ceil(4 * width))
    line = np.arange(-half, half + 1)
    kernel = np.exp(-(line**2) / (2 * width**2))
    kernel = np.convolve(kernel / kernel.sum(), np.full(finer, 1 / finer))
    # what lies left of each sub-pixel, all that is beyond an end going to the last one
    before = np.concatenate([[0.0], np.cumsum(kernel)])
    first = (np.arange(size // finer - 2 * margin) + margin) * finer - half
    upto = before[np.clip(np.arange(1, size)[None, :] - first[:, None], 0, kernel.size)]
    ends = np.zeros((first.size, 1)), np.ones((first.size, 1))
    return np.diff(np.concatenate([ends[0], upto, ends[1]], axis=1), axis=1).astype(np.float32)


def sub_pixels(radius_px: float, sigma_px: float) -> int:
    """Return how many sub-pixels a side sample a disc of this radius and blur."""
    return int(np.clip(np.ceil(2.5 / max(min(radius_px, sigma_px), 0.2)), 2, 8))


@dataclass(frozen=True)
class StampFit:
    """Parameters that fit a stamp, their covariance (linear amplitudes marginalised), amplitudes, model, chi^2."""

    parameters: np.ndarray
    covariance: np.ndarray
    amplitudes: np.ndarray
    model: np.ndarray
    chi2: float


def fit_stamp(
    stamp: Stamp,
    components: Callable[[np.ndarray], np.ndarray],
    start: np.ndarray,
    step: np.ndarray,
    variance: Callable[[np.ndarray], np.ndarray],
    prior: np.ndarray | None = None,
    limit: np.ndarray | None = None,
    robust: float = 6.0,
    positive: int = 0,
    core: np.ndarray | None = None,
) -> StampFit:
    """Fit data = sum amplitude_k component_k(parameters) by variable projection and damped Gauss-Newton steps.

    `components(parameters)` gives (k, rows, columns); the first `positive` amplitudes are held at 0 or above.
    `step`: for derivatives, of the size of a hundredth of a pixel. `variance(model)`: up to a factor, which the
    residuals set. `prior`: 1-sigma of each parameter about `start` (inf is free). `limit`: how far each may go from
    `start`. Pixels off by more than `robust` sigma are left out once the fit is near, but none of the `core`.
    Raises NoSolutionError when a parameter runs away.
    """
    start, step = np.asarray(start, float), np.asarray(step, float)
    data = stamp.data
    # a prior this narrow says that a parameter is known: nothing is spent on its derivative
    held = np.zeros(start.size, bool) if prior is None else np.asarray(prior, float) < 0.01 * step
    pull = np.zeros(start.size) if prior is None else 1 / np.asarray(prior, float) ** 2
    parameters, usable = start.copy(), stamp.usable
    if int(usable.sum()) < start.size + 6:
        raise NoSolutionError("too few usable pixels where the body is looked for")
    noise = np.maximum(variance(data), 1e-12)
    weight = np.where(usable, 1 / noise, 0.0)
    damping, settled, factor = 1e-3, 0, 1.0
    slopes = _Slopes(components, step, held)
    parts = components(parameters)
    amplitudes = _amplitudes(parts, data, weight, positive)
    model = np.tensordot(amplitudes, parts, axes=(0, 0))
    for turn in range(30):
        # until the fit is near, a bright pixel that the model misses must not get a faint pixel's weight
        noise = np.maximum(variance(model if settled >= 1 else np.maximum(model, data)), 1e-12)
        square = (data - model) ** 2 / noise
        factor = _factor(square[usable])
        if settled >= 1:
            near = square < robust**2 * factor
            usable = stamp.usable & (near if core is None else near | core)
        weight = np.where(usable, 1 / (noise * factor), 0.0)
        amplitudes = _amplitudes(parts, data, weight, positive)
        model = np.tensordot(amplitudes, parts, axes=(0, 0))
        cost = _cost(data - model, weight, parameters - start, pull)
        normal, right = _equations(
            slopes.at(parameters, parts), parts, amplitudes, data - model, weight, positive
        )
        diagonal = np.arange(start.size)
        normal[diagonal, diagonal] += pull
        right[: start.size] -= pull * (parameters - start)
        accepted = False
        for _ in range(8):
            damped = normal.copy()
            damped[diagonal, diagonal] *= 1 + damping
            change = np.clip((_inverse(damped) @ right)[: start.size], -150 * step, 150 * step)
            tried = parameters + change
            new_parts = components(tried)
            new_amplitudes = _amplitudes(new_parts, data, weight, positive)
            new_model = np.tensordot(new_amplitudes, new_parts, axes=(0, 0))
            if _cost(data - new_model, weight, tried - start, pull) <= cost * (1 + 1e-9):
                accepted = True
                break
            if (np.abs(change) < 0.03 * step).all():
                break
            damping = min(damping * 10, 1e6)
        if not accepted:
            settled += 1
        else:
            damping = max(damping / 5, 1e-6)
            parameters, parts, amplitudes, model = tried, new_parts, new_amplitudes, new_model
            if limit is not None and (np.abs(parameters - start) > limit).any():
                raise NoSolutionError("the fit runs away from where the body is looked for: it is not there")
            settled = settled + 1 if (np.abs(change) < 0.03 * step).all() else min(settled, 1)
        if settled >= 3 or (turn > 12 and settled >= 2):
            break
    normal, _ = _equations(slopes.at(parameters, parts), parts, amplitudes, data - model, weight, positive)
    normal[np.arange(start.size), np.arange(start.size)] += pull
    covariance = _inverse(normal)[: start.size, : start.size]
    freedom = max(int(usable.sum()) - start.size - amplitudes.size, 1)
    chi2 = float(np.sum((data - model) ** 2 * weight) / freedom)
    # a factor below 1 would say that the noise given is too large: the factor found is used both ways
    return StampFit(parameters, covariance * max(chi2, 1.0), amplitudes, model, chi2 * factor)


class _Slopes:
    """Derivatives of components by parameters, kept while the parameters stay where they are known."""

    def __init__(self, components: Callable[[np.ndarray], np.ndarray], step: np.ndarray, held: np.ndarray):
        self.components, self.step, self.held = components, step, held
        self._place = np.full(step.size, np.inf)
        self._slopes = np.zeros(0)

    def at(self, parameters: np.ndarray, parts: np.ndarray) -> np.ndarray:
        """Return the derivatives (parameters, k, rows, columns), those of less than a step away if known."""
        if (np.abs(parameters - self._place) < self.step).all():
            return self._slopes
        self._slopes = np.zeros((parameters.size, *parts.shape))
        for index in np.flatnonzero(~self.held):
            moved = parameters.copy()
            moved[index] += self.step[index]
            self._slopes[index] = (self.components(moved) - parts) / self.step[index]
        self._place = parameters.copy()
        return self._slopes


def _equations(
    derivatives: np.ndarray,
    parts: np.ndarray,
    amplitudes: np.ndarray,
    left: np.ndarray,
    weight: np.ndarray,
    positive: int,
) -> tuple[np.ndarray, np.ndarray]:
    """Return the normal equations of parameters and those amplitudes that are not held at zero."""
    slopes = np.tensordot(derivatives, amplitudes, axes=(1, 0))
    free = np.ones(amplitudes.size, bool)
    free[:positive] = amplitudes[:positive] > 0
    design = np.concatenate([slopes, parts[free]]).reshape(len(slopes) + int(free.sum()), -1)
    heavy = design * weight.reshape(-1)
    return heavy @ design.T, heavy @ left.reshape(-1)


def _inverse(normal: np.ndarray) -> np.ndarray:
    scale = np.sqrt(np.maximum(np.diag(normal), 1e-300))
    return np.linalg.pinv(normal / np.outer(scale, scale), rcond=1e-11) / np.outer(scale, scale)


def _cost(residual: np.ndarray, weight: np.ndarray, away: np.ndarray, pull: np.ndarray) -> float:
    return float(np.sum(residual**2 * weight) + np.sum(pull * away**2))


def projected_cost(parts: np.ndarray, data: np.ndarray, weight: np.ndarray, positive: int = 0) -> float:
    """Return the weighted sum of squares that the best amplitudes of components leave."""
    model = np.tensordot(_amplitudes(parts, data, weight, positive), parts, axes=(0, 0))
    return float(np.sum((data - model) ** 2 * weight))


def _amplitudes(parts: np.ndarray, data: np.ndarray, weight: np.ndarray, positive: int) -> np.ndarray:
    flat = parts.reshape(parts.shape[0], -1)
    if positive == 0:
        heavy = flat * weight.reshape(-1)
        return _inverse(heavy @ flat.T) @ (heavy @ data.reshape(-1))
    from scipy.optimize import nnls

    root = np.sqrt(weight.reshape(-1))
    keep = root > 0
    design, target = (flat * root)[:, keep].T, (data.reshape(-1) * root)[keep]
    scale = np.sqrt(np.sum(design**2, axis=0)) + 1e-300
    design = design / scale
    # amplitudes of either sign are projected out first, the others then found at 0 or above
    basis, _ = np.linalg.qr(design[:, positive:])
    held = design[:, :positive]
    solution, _ = nnls(held - basis @ (basis.T @ held), target - basis @ (basis.T @ target), maxiter=200)
    rest, *_ = np.linalg.lstsq(design[:, positive:], target - held @ solution, rcond=None)
    return np.append(solution, rest) / scale


def _factor(squares: np.ndarray) -> float:
    """Return the scale of chi^2-distributed squares, by their median (0.455 of the mean), robustly."""
    return max(float(np.median(squares)) / 0.4549, 1e-12) if squares.size else 1.0
