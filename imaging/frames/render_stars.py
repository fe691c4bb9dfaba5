"""Drawing point sources: each star's light integrated over square pixels, many stars at once."""

from __future__ import annotations

import numpy as np
from scipy.special import erf

from imaging.frames.render_light import PointSpread


def draw_points(
    rate: np.ndarray,
    x_px: np.ndarray,
    y_px: np.ndarray,
    electrons_s: np.ndarray,
    spread: PointSpread,
    faintest_e_s: float,
    trail_px: tuple[float, float] = (0.0, 0.0),
) -> None:
    """Add points to `rate` (electrons/s/px).

    Stamps reach as far as the light stays above `faintest_e_s` a pixel. `trail_px`: motion (x, y) over the exposure;
    each point is drawn as a row of points along it.
    """
    steps = int(np.ceil(np.hypot(*trail_px) / 0.5)) + 1 if np.hypot(*trail_px) > 0.1 else 1
    along = (np.arange(steps) + 0.5) / steps - 0.5
    x_all = (x_px[:, None] + along * trail_px[0]).ravel()
    y_all = (y_px[:, None] + along * trail_px[1]).ravel()
    light_all = np.repeat(electrons_s / steps, steps)
    for weight, sigma in zip(spread.weight, spread.sigma_px, strict=True):
        peak = light_all * weight / (2 * np.pi * max(sigma, 0.3) ** 2)
        reach = np.maximum(sigma * np.sqrt(2 * np.log(np.maximum(peak / faintest_e_s, 1.0001))), 1.0)
        half = np.ceil(np.minimum(reach, 400.0)).astype(int) + 1
        # groups of equal stamp size, rounded up in steps of a fifth
        group = np.ceil(np.log(half) / np.log(1.2)).astype(int)
        for one in np.unique(group):
            size = int(np.ceil(1.2**one))
            chosen = np.nonzero(group == one)[0]
            portion = max(1, int(4e6 / (2 * size + 1) ** 2))
            for start in range(0, chosen.size, portion):
                part = chosen[start : start + portion]
                _stamp(rate, x_all[part], y_all[part], light_all[part] * weight, float(sigma), size)


def _stamp(
    rate: np.ndarray, x_px: np.ndarray, y_px: np.ndarray, light: np.ndarray, sigma: float, half: int
) -> None:
    rows, columns = rate.shape
    offset = np.arange(-half, half + 1)
    x_mid, y_mid = np.rint(x_px).astype(int), np.rint(y_px).astype(int)

    def share(fraction: np.ndarray) -> np.ndarray:
        edge = (np.arange(-half, half + 2) - 0.5 - fraction[:, None]) / (np.sqrt(2) * sigma)
        return 0.5 * np.diff(erf(edge), axis=1)

    stamp = share(y_px - y_mid)[:, :, None] * share(x_px - x_mid)[:, None, :] * light[:, None, None]
    y = y_mid[:, None] + offset
    x = x_mid[:, None] + offset
    inside = ((y >= 0) & (y < rows))[:, :, None] & ((x >= 0) & (x < columns))[:, None, :]
    flat = np.clip(y, 0, rows - 1)[:, :, None] * columns + np.clip(x, 0, columns - 1)[:, None, :]
    np.add.at(rate.reshape(-1), flat[inside], stamp[inside].astype(rate.dtype))
