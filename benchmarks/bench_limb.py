"""Sun's limb in a 24-megapixel frame: our fit against threshold, outline and algebraic circle, in the same run.

Reference route: half-level threshold and outline by OpenCV, circle by least squares (Kasa 1976). Both are given the
frame in memory; CPU seconds, best of five; errors against what was drawn.
"""

from __future__ import annotations

import time

import cv2
import numpy as np

from imaging.discs.limb import fit_limb
from imaging.frames.render_light import PointSpread, blurred_sun

SHAPE, X, Y, RADIUS, SIGMA_PX = (4000, 6000), 3021.3, 1988.7, 1230.0, 1.5


def frame(clouds: bool) -> np.ndarray:
    """Draw the Sun in photons, with a gradient of a third across the frame when `clouds`."""
    y, x = np.mgrid[: SHAPE[0], : SHAPE[1]].astype(np.float32)
    profile = blurred_sun(RADIUS, PointSpread(np.array([1.0]), np.array([SIGMA_PX])))
    light = 20000 * profile.at(np.hypot(x - X, y - Y))
    if clouds:
        light *= 1 - 0.33 * x / SHAPE[1] - 0.1 * np.sin(y / 300) ** 2
    return np.random.default_rng(0).poisson(light + 200).astype(np.float32)


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
    for name, data in (("clean", frame(False)), ("gradient", frame(True))):
        fit = fit_limb(data, RADIUS)
        ours, other = np.hypot(fit.x_px - X, fit.y_px - Y), np.hypot(*np.subtract(reference(data), (X, Y)))
        seconds = cpu_s(lambda data=data: fit_limb(data, RADIUS)), cpu_s(lambda data=data: reference(data))
        print(f"{name:10} {'ours':10} {seconds[0]:7.3f} {ours:9.4f}")
        print(f"{name:10} {'reference':10} {seconds[1]:7.3f} {other:9.4f}")
        print(f"{name:10} {'ratio':10} {seconds[0] / seconds[1]:7.2f} {ours / other:9.4f}")


if __name__ == "__main__":
    main()
