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
    """Blur a sub-pixel picture, average it over pixels, and drop its margin."""
    import cv2

    total = np.zeros_like(fine)
    for weight, sigma in blur.parts():
        width = sigma * finer
        size = 2 * int(np.ceil(4 * width)) + 1
        kernel = cv2.getGaussianKernel(size, width, cv2.CV_64F)
        total += weight * cv2.sepFilter2D(fine, cv2.CV_64F, kernel, kernel, borderType=cv2.BORDER_REPLICATE)
    rows, columns = total.shape
    small = total.reshape(rows // finer, finer, columns // finer, finer).mean(axis=(1, 3))
    return small[margin : small.shape[0] - margin, margin : small.shape[1] - margin] if margin else small


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
    pull = np.zeros(start.size) if prior is None else 1 / np.asarray(prior, float) ** 2
    parameters, usable = start.copy(), stamp.usable
    if int(usable.sum()) < start.size + 6:
        raise NoSolutionError("too few usable pixels where the body is looked for")
    noise = np.maximum(variance(data), 1e-12)
    weight = np.where(usable, 1 / noise, 0.0)
    damping, settled, factor = 1e-3, 0, 1.0
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
            components, parameters, parts, amplitudes, model, data, weight, step, positive
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
    normal, _ = _equations(components, parameters, parts, amplitudes, model, data, weight, step, positive)
    normal[np.arange(start.size), np.arange(start.size)] += pull
    covariance = _inverse(normal)[: start.size, : start.size]
    freedom = max(int(usable.sum()) - start.size - amplitudes.size, 1)
    chi2 = float(np.sum((data - model) ** 2 * weight) / freedom)
    # a factor below 1 would say that the noise given is too large: the factor found is used both ways
    return StampFit(parameters, covariance * max(chi2, 1.0), amplitudes, model, chi2 * factor)


def _equations(  # type: ignore[no-untyped-def]
    components, parameters, parts, amplitudes, model, data, weight, step, positive
) -> tuple[np.ndarray, np.ndarray]:
    """Return the normal equations of parameters and those amplitudes that are not held at zero."""
    slopes = []
    for index in range(parameters.size):
        moved = parameters.copy()
        moved[index] += step[index]
        slopes.append((np.tensordot(amplitudes, components(moved), axes=(0, 0)) - model) / step[index])
    free = np.ones(amplitudes.size, bool)
    free[:positive] = amplitudes[:positive] > 0
    design = np.concatenate([np.array(slopes), parts[free]]).reshape(parameters.size + int(free.sum()), -1)
    heavy = design * weight.reshape(-1)
    return heavy @ design.T, heavy @ (data - model).reshape(-1)


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
