"""Sun's limb, and a planet before it, in a 24-megapixel frame: our fits against plain routes, in the same run.

Reference routes: half-level threshold and outline by OpenCV, circle by least squares (Kasa 1976); for the planet, limb
and planet together, the same and then the centroid of what is darker than half of its surroundings. All are given the
frame in memory; CPU seconds, best of five; errors against what was drawn.
"""

from __future__ import annotations

import time

import cv2
import numpy as np

from imaging.discs.limb import fit_limb
from imaging.discs.planet import planet_on_sun
from imaging.frames.render_light import PointSpread, blurred_sun, limb_darkening

SHAPE, X, Y, RADIUS, SIGMA_PX = (4000, 6000), 3021.3, 1988.7, 1230.0, 1.5


def expected(clouds: bool) -> np.ndarray:
    """Draw the Sun, with a gradient of a third across the frame when `clouds`."""
    y, x = np.mgrid[: SHAPE[0], : SHAPE[1]].astype(np.float32)
    profile = blurred_sun(RADIUS, PointSpread(np.array([1.0]), np.array([SIGMA_PX])))
    light = 20000 * profile.at(np.hypot(x - X, y - Y))
    if clouds:
        light *= 1 - 0.33 * x / SHAPE[1] - 0.1 * np.sin(y / 300) ** 2
    return light


def recorded(light: np.ndarray) -> np.ndarray:
    """Return the frame in photons, with a sky."""
    return np.random.default_rng(0).poisson(np.maximum(light, 0) + 200).astype(np.float32)


def hide(light: np.ndarray, radius: float, gap: float) -> tuple[float, float]:
    """Take away the light that a black disc hides, `gap` px inside the limb; returns its place."""
    x, y = X + (RADIUS - radius - gap) * 0.8, Y + (RADIUS - radius - gap) * 0.6
    half, finer = int(radius + 12), 15
    x0, y0 = round(x), round(y)
    line = (np.arange((2 * half + 1) * finer) + 0.5) / finer - 0.5 - half
    hidden = np.hypot(line[None, :] - (x - x0), line[:, None] - (y - y0)) < radius
    sun = np.hypot(line[None, :] + x0 - X, line[:, None] + y0 - Y) / RADIUS
    lost = np.where(hidden & (sun < 1), 20000 * limb_darkening(np.sqrt(np.clip(1 - sun**2, 0, 1))), 0.0)
    lost = cv2.GaussianBlur(lost, (0, 0), SIGMA_PX * finer)
    lost = lost.reshape(2 * half + 1, finer, 2 * half + 1, finer).mean(axis=(1, 3))
    light[y0 - half : y0 + half + 1, x0 - half : x0 + half + 1] -= lost.astype(np.float32)
    return x, y


def reference_planet(data: np.ndarray, x: float, y: float, radius: float) -> tuple[float, float]:
    """Centroid of the pixels about a place that are darker than half of the usual brightness there."""
    reference(data)
    half = int(2 * radius + 8)
    low_x, low_y = round(x) - half, round(y) - half
    part = data[low_y : low_y + 2 * half + 1, low_x : low_x + 2 * half + 1]
    dark = part < 0.5 * np.median(part)
    rows, columns = np.nonzero(dark)
    return low_x + float(columns.mean()), low_y + float(rows.mean())


def reference(data: np.ndarray) -> tuple[float, float]:
    """Threshold at half, outline, circle by linear least squares."""
    level = 0.5 * (float(np.median(data[::16, ::16])) + float(np.quantile(data[::16, ::16], 0.99)))
    outlines, _ = cv2.findContours((data > level).astype(np.uint8), cv2.RETR_EXTERNAL, cv2.CHAIN_APPROX_NONE)
    x, y = max(outlines, key=len)[:, 0, :].astype(float).T
    design = np.stack([x, y, np.ones_like(x)], axis=1)
    a, b, _ = np.linalg.lstsq(design, x**2 + y**2, rcond=None)[0]
    return a / 2, b / 2


def cpu_s(run) -> float:  # type: ignore[no-untyped-def]
    """Best of five."""
    best = np.inf
    for _ in range(5):
        start = time.process_time()
        run()
        best = min(best, time.process_time() - start)
    return best


def main() -> None:
    """Print CPU seconds and errors of both routes."""
    print(f"{'frame':10} {'route':10} {'CPU s':>7} {'error px':>9}")
    for name, data in (("clean", recorded(expected(False))), ("gradient", recorded(expected(True)))):
        fit = fit_limb(data, RADIUS)
        ours, other = np.hypot(fit.x_px - X, fit.y_px - Y), np.hypot(*np.subtract(reference(data), (X, Y)))
        seconds = cpu_s(lambda data=data: fit_limb(data, RADIUS)), cpu_s(lambda data=data: reference(data))
        print(f"{name:10} {'ours':10} {seconds[0]:7.3f} {ours:9.4f}")
        print(f"{name:10} {'reference':10} {seconds[1]:7.3f} {other:9.4f}")
        print(f"{name:10} {'ratio':10} {seconds[0] / seconds[1]:7.2f} {ours / other:9.4f}")
    for radius in (8.0, 38.0):
        light = expected(False)
        x, y = hide(light, radius, 30.0)
        data = recorded(light)

        def ours(data: np.ndarray = data, x: float = x, y: float = y, radius: float = radius):  # type: ignore[no-untyped-def]
            return planet_on_sun(data, x + 3, y - 4, radius, fit_limb(data, RADIUS), 20.0)

        def plain(
            data: np.ndarray = data, x: float = x, y: float = y, radius: float = radius
        ) -> tuple[float, float]:
            return reference_planet(data, x, y, radius)

        place = ours()
        errors = np.hypot(place.x_px - x, place.y_px - y), np.hypot(*np.subtract(plain(), (x, y)))
        seconds = cpu_s(ours), cpu_s(plain)
        print(f"{f'R={radius:.0f}':10} {'ours':10} {seconds[0]:7.3f} {errors[0]:9.4f}")
        print(f"{f'R={radius:.0f}':10} {'reference':10} {seconds[1]:7.3f} {errors[1]:9.4f}")
        print(
            f"{f'R={radius:.0f}':10} {'ratio':10} {seconds[0] / seconds[1]:7.2f} {errors[0] / errors[1]:9.4f}"
        )


if __name__ == "__main__":
    main()
