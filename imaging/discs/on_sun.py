"""A planet in front of the Sun: Sun and planet are modelled together, so that the limb pulls at nothing."""

from __future__ import annotations

import numpy as np

from imaging.discs.among_stars import COARSE_PX
from imaging.discs.edge import Blur
from imaging.discs.limb import LimbFit
from imaging.discs.stamp import DiscPlace, Stamp, blurred, coverage, fit_stamp, sub_pixels
from planner.errors import NoSolutionError


def planet_on_sun(
    data: np.ndarray,
    x_px: float,
    y_px: float,
    radius_px: float,
    sun: LimbFit,
    search_px: float = 20.0,
    radius_free: bool = False,
    saturation: float | None = None,
) -> DiscPlace:
    """Place a dark planet on the Sun's disc.

    `x_px`, `y_px`: where it is looked for, to within `search_px`. `radius_px`: the expected radius; fitted when
    `radius_free`. `sun`: the limb fit of the same frame, which gives limb and blur. Within 1.5 of the Cramér-
    Rao bound and unbiased to 0.06" down to a gap of 1" to the limb; the error stated includes what seeing
    moves, as the limb shows it. Raises NoSolutionError when no dark disc of this size is there.
    """
    blur = sun.blur
    reach = radius_px + 5 * blur.sigma_px + 3
    x0, y0, depth, noise = _search(data, x_px, y_px, radius_px, sun, search_px, reach, saturation)
    if depth < 6 * noise:
        raise NoSolutionError(
            f"no dark disc of {radius_px:.1f} px in radius within {search_px:.0f} px of where the planet is expected"
        )
    stamp = Stamp.cut(data, x0, y0, reach, saturation)
    if stamp.usable.mean() < 0.6:
        raise NoSolutionError("the Sun is saturated where the planet is")
    scene = _Scene(stamp, radius_px, sun, finer=sub_pixels(radius_px, blur.sigma_px))
    near_limb = scene.holds_limb()
    # x, y, log blur, log radius, local limb
    start = np.array([x0, y0, np.log(blur.sigma_px), 0.0, 0.0])
    step = np.array([0.02, 0.02, 0.01, 0.005, 0.02])
    radius_prior = np.inf if radius_free else 1e-5
    prior = np.array([np.inf, np.inf, 0.15, radius_prior, 1.0 if near_limb else 1e-6])
    fit = fit_stamp(
        stamp,
        scene.components,
        start,
        step,
        lambda model: np.maximum(model, 0.005 * model.max()),
        prior=prior,
        limit=np.array([reach, reach, 1.2, 0.5, 3.0]),
    )
    depth, depth_sigma = _depth(stamp, scene, fit.parameters)
    if depth < 5 * depth_sigma or depth < 0.3:
        raise NoSolutionError(
            f"what is dark there has {depth:.2f} of a planet's depth: a spot or a cloud, not a planet"
        )
    notes: tuple[str, ...] = ()
    if depth < 0.8:
        notes = (f"the planet is {depth:.2f} as dark as a black disc: haze, stray light or a spot",)
    x, y = float(fit.parameters[0]), float(fit.parameters[1])
    # few pixels hold a disc this small, and what the blur's shape is not known to then shows (measured on drawn frames)
    coarse = COARSE_PX * float(np.clip(2.5 - radius_px, 0, 1))
    covariance = fit.covariance[:2, :2] + np.eye(2) * (moved_by_seeing(radius_px, sun) ** 2 + coarse**2)
    radius = radius_px * float(np.exp(fit.parameters[3]))
    return DiscPlace(
        x,
        y,
        covariance,
        radius,
        float(radius * np.sqrt(fit.covariance[3, 3])) if radius_free else 0.0,
        Blur(float(np.exp(fit.parameters[2])), blur.wing),
        x,
        y,
        float(depth),
        fit.chi2,
        "sun-and-planet model",
        int(stamp.clipped.sum()),
        notes,
    )


def moved_by_seeing(radius_px: float, sun: LimbFit) -> float:
    """Return the rms (px, one coordinate) by which seeing moves a small disc, from how it moves the Sun's limb.

    The centre follows the displacements m of the disc's own outline, alike over the correlation length L as
    exp(-(d/L)^2): m^2 / pi times the integral of cos^2 a exp(-(2 R sin(a/2) / L)^2) over a turn.
    """
    if sun.motion_px <= 0:
        return 0.0
    angle = np.linspace(-np.pi, np.pi, 361)[:-1]
    chord = 2 * radius_px * np.sin(angle / 2) / max(sun.correlation_px, 1e-6)
    return float(sun.motion_px * np.sqrt(2 * np.mean(np.cos(angle) ** 2 * np.exp(-(chord**2)))))


class _Scene:
    """The Sun's surface about a planet as linear components: mu^0, mu^1, mu^2, a tilt along the limb, and the sky."""

    def __init__(self, stamp: Stamp, radius_px: float, sun: LimbFit, finer: int):
        self.radius_px, self.sun, self.finer = radius_px, sun, finer
        self.margin = (
            int(np.ceil(4 * 2.2 * sun.blur.sigma_px if sun.blur.wing > 0 else 4 * sun.blur.sigma_px)) + 1
        )
        self.margin = min(self.margin, 40)
        self.x, self.y = stamp.grid(finer, self.margin)
        dx, dy = self.x - sun.x_px, self.y - sun.y_px
        ratio = sun.outline.ratio(np.arctan2(dy, dx))
        self.sun_distance = np.hypot(dx, dy) / ratio
        middle = np.arctan2(float(np.mean(self.y)) - sun.y_px, float(np.mean(self.x)) - sun.x_px)
        self.tangent = (-dx * np.sin(middle) + dy * np.cos(middle)) / (10 * radius_px)
        self.small_shape = stamp.data.shape
        self._known: tuple[float, np.ndarray, np.ndarray] | None = None

    def holds_limb(self) -> bool:
        """Say whether the limb, or its blur, is in the stamp."""
        return bool(self.sun_distance.max() > self.sun.radius_px - 2 * self.sun.blur.sigma_px)

    def _surface(self, limb_shift: float) -> tuple[np.ndarray, np.ndarray]:
        if self._known is not None and self._known[0] == limb_shift:
            return self._known[1:]
        radius = self.sun.radius_px + limb_shift
        mu = np.sqrt(np.clip(1 - (self.sun_distance / radius) ** 2, 0, 1))
        self._known = limb_shift, coverage(self.sun_distance - radius, self.finer), mu
        return self._known[1:]

    def components(self, parameters: np.ndarray) -> np.ndarray:
        """Return the components (5, rows, columns) with the planet in front."""
        x, y, log_sigma, log_radius, limb_shift = parameters
        inside, mu = self._surface(limb_shift)
        radius = self.radius_px * np.exp(log_radius)
        seen = inside * (1 - coverage(np.hypot(self.x - x, self.y - y) - radius, self.finer))
        return self._stack(seen, mu, log_sigma)

    def without_planet(self, parameters: np.ndarray) -> np.ndarray:
        """Return the components of the bare Sun."""
        inside, mu = self._surface(parameters[4])
        return self._stack(inside, mu, parameters[2])

    def _stack(self, seen: np.ndarray, mu: np.ndarray, log_sigma: float) -> np.ndarray:
        blur = Blur(float(np.exp(log_sigma)), self.sun.blur.wing)
        layers = np.array([seen, seen * mu, seen * mu * mu, seen * self.tangent])
        parts = blurred(layers, blur, self.finer, self.margin)
        return np.concatenate([parts, np.ones((1, *self.small_shape))]) if self.holds_limb() else parts


def _depth(stamp: Stamp, scene: _Scene, parameters: np.ndarray) -> tuple[float, float]:
    """Return how dark the planet is (1: black) and the 1-sigma, with the Sun's surface free."""
    bare = scene.without_planet(parameters)
    full = scene.components(parameters)
    weight = stamp.usable.astype(float)
    # amplitudes of the surface come from the full model; what the planet takes away then gets its own factor
    flat = full.reshape(full.shape[0], -1)
    heavy = flat * weight.reshape(-1)
    surface = np.linalg.pinv(heavy @ flat.T, rcond=1e-12) @ (heavy @ stamp.data.reshape(-1))
    hidden = np.tensordot(surface, bare - full, axes=(0, 0))
    design = np.concatenate([bare, -hidden[None]]).reshape(bare.shape[0] + 1, -1)
    heavy = design * weight.reshape(-1)
    inverse = np.linalg.pinv(heavy @ design.T, rcond=1e-12)
    solution = inverse @ (heavy @ stamp.data.reshape(-1))
    residual = (stamp.data.reshape(-1) - solution @ design) * weight.reshape(-1)
    variance = float(residual @ residual) / max(weight.sum() - design.shape[0], 1)
    return float(solution[-1]), float(np.sqrt(max(inverse[-1, -1] * variance, 0)))


def _search(
    data: np.ndarray,
    x_px: float,
    y_px: float,
    radius_px: float,
    sun: LimbFit,
    search_px: float,
    reach: float,
    saturation: float | None,
) -> tuple[float, float, float, float]:
    """Return the place that looks most like the planet, its depth there and the noise of depths."""
    import cv2

    stamp = Stamp.cut(data, x_px, y_px, search_px + reach, saturation)
    x, y = stamp.grid()
    dx, dy = x - sun.x_px, y - sun.y_px
    distance = np.hypot(dx, dy) / sun.outline.ratio(np.arctan2(dy, dx))
    scene = _Scene(stamp, radius_px, sun, finer=1)
    parts = scene.without_planet(np.array([0, 0, np.log(sun.blur.sigma_px), 0.0, 0.0]))
    weight = stamp.usable.astype(float)
    bare = np.zeros_like(stamp.data)
    for _ in range(4):
        flat = parts.reshape(parts.shape[0], -1)
        heavy = flat * weight.reshape(-1)
        bare = np.tensordot(
            np.linalg.pinv(heavy @ flat.T, rcond=1e-12) @ (heavy @ stamp.data.reshape(-1)), parts, axes=(0, 0)
        )
        residual = stamp.data - bare
        scale = 1.48 * np.median(np.abs(residual[stamp.usable])) + 1e-9
        weight = np.where(stamp.usable & (np.abs(residual) < 4 * scale), 1.0, 0.0)
    surface = np.maximum(bare, 0.05 * np.max(bare))
    missing = np.where(stamp.usable, (bare - stamp.data) / surface, 0.0)
    half = int(np.ceil(radius_px + 3 * sun.blur.sigma_px))
    line = np.arange(-half, half + 1)
    disc = np.clip(0.5 - (np.hypot(line[None, :], line[:, None]) - radius_px), 0, 1)
    kernel: np.ndarray = cv2.GaussianBlur(disc, (0, 0), max(sun.blur.sigma_px, 0.3))
    kernel /= np.sum(kernel**2)
    depth = cv2.filter2D(missing, cv2.CV_64F, kernel, borderType=cv2.BORDER_CONSTANT)
    allowed = np.hypot(x - x_px, y - y_px) <= search_px
    allowed &= distance < sun.radius_px + radius_px - 0.3 * min(radius_px, sun.blur.sigma_px)
    if not allowed.any():
        raise NoSolutionError("the planet is expected off the Sun's disc")
    row, column = np.unravel_index(np.argmax(np.where(allowed, depth, -np.inf)), depth.shape)
    # noise of depths, from pixels' noise through the filter
    noise = 1.48 * np.median(np.abs(np.diff(missing, axis=1))) / np.sqrt(2) * np.sqrt(np.sum(kernel**2))
    return float(column + stamp.x_low), float(row + stamp.y_low), float(depth[row, column]), float(noise)
