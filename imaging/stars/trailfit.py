"""The profile of a trail (a line of even light, as wide as a star) and its fit, many trails at once.

Gauss-Newton with the noise of each pixel as weight: along the trail its two ends alone tell the place.
"""

from __future__ import annotations

import numpy as np

from imaging.stars.background import Background
from imaging.stars.centroids import stamps_of

LONGEST_PX = 250.0
_PIXEL_VARIANCE = 1 / 12  # of a pixel's own width
_CHUNK_PIXELS = 400_000  # worked on together: bounds the memory


def shaped(
    data: np.ndarray,
    sky: Background,
    start: np.ndarray,
    saturation_adu: float | None,
    gain_e_adu: float | None,
) -> tuple[np.ndarray, np.ndarray]:
    """Return light, place, length, angle and width (n, 6) of trails, all fitted, and which are to be believed."""
    values, _, saturated, worth = _fit(data, sky, start, saturation_adu, gain_e_adu, 6, 14)
    moved = np.hypot(values[:, 1] - start[:, 1], values[:, 2] - start[:, 2])
    fine = np.isfinite(values).all(axis=1) & ~saturated & (moved < 3 + start[:, 3] / 3) & (worth > 30)
    fine &= (values[:, 5] > 0.4) & (values[:, 5] < 8) & (values[:, 3] > 0) & (values[:, 3] < LONGEST_PX)
    return values, fine


def placed(
    data: np.ndarray,
    sky: Background,
    start: np.ndarray,
    saturation_adu: float | None,
    gain_e_adu: float | None,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return light and place (first three of (n, 6)) with covariance (n, 3, 3), shape held, and what is saturated."""
    values, covariance, saturated, _ = _fit(data, sky, start, saturation_adu, gain_e_adu, 3, 8)
    return values, covariance, saturated


def _fit(
    data: np.ndarray,
    sky: Background,
    start: np.ndarray,
    saturation_adu: float | None,
    gain_e_adu: float | None,
    free: int,
    rounds: int,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Fit the first `free` of light, x, y, length, angle, width; also return light over its error."""
    values = start.astype(float).copy()
    covariance = np.full((len(start), free, free), np.nan)
    saturated = np.zeros(len(start), dtype=bool)
    by_length = np.argsort(start[:, 3], kind="stable")  # stamps of one size together
    first = 0
    while first < len(start):
        radius = int(np.ceil(start[by_length[first], 3] / 2 + 5 * start[0, 5])) + 2
        number = max(1, _CHUNK_PIXELS // (2 * radius + 1) ** 2)
        rows = by_length[first : first + number]
        radius = int(np.ceil(start[rows[-1], 3] / 2 + 5 * start[0, 5])) + 2
        values[rows], covariance[rows], saturated[rows] = _fit_chunk(
            data, sky, values[rows], radius, saturation_adu, gain_e_adu, free, rounds
        )
        first += len(rows)
    with np.errstate(invalid="ignore", divide="ignore"):
        worth = values[:, 0] / np.sqrt(covariance[:, 0, 0])
    return values, covariance, saturated, worth


def _fit_chunk(
    data: np.ndarray,
    sky: Background,
    values: np.ndarray,
    radius: int,
    saturation_adu: float | None,
    gain_e_adu: float | None,
    free: int,
    rounds: int,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    x0, y0 = np.rint(values[:, 1]), np.rint(values[:, 2])
    stamp, peak, noise, reach = stamps_of(data, sky, x0, y0, radius)
    near = _near_line(reach, values[:, 1] - x0, values[:, 2] - y0, values)
    raw = stamp + (peak - stamp.max(axis=(1, 2)))[:, None, None]
    full = near & (raw >= (np.inf if saturation_adu is None else 0.98 * saturation_adu))
    saturated = full.any(axis=(1, 2))
    near &= ~full
    values = values.copy()
    values[:, 1] -= x0
    values[:, 2] -= y0
    best = values.copy()
    damping = np.full(len(values), 1e-3 if free > 3 else 0.0)
    last = np.full(len(values), np.inf)
    normal, chi2 = np.zeros((len(values), free, free)), np.zeros(len(values))
    for turn in range(rounds):
        model, slopes = profile(reach, values, free)
        if turn == 0:  # light by linear fit at the first place
            light = (stamp * model).sum(axis=(1, 2)) / np.maximum((model * model).sum(axis=(1, 2)), 1e-30)
            values[:, 0] = np.maximum(light, 0.0)
        expected = values[:, 0, None, None] * model
        variance = noise[:, None, None] ** 2 + (np.maximum(expected, 0) / gain_e_adu if gain_e_adu else 0.0)
        weight = near / variance
        rest = stamp - expected
        chi2 = (weight * rest**2).sum(axis=(1, 2))
        cost = chi2 + np.where(near, np.log(variance), 0.0).sum(axis=(1, 2))
        better = cost <= last
        best[better], last[better] = values[better], cost[better]
        damping = np.where(better, damping * 0.3, np.maximum(damping, 1e-4) * 10)
        worse = ~better
        if worse.any() and free > 3:
            values[worse] = best[worse]
            model, slopes = profile(reach, values, free)
            expected = values[:, 0, None, None] * model
            rest = stamp - expected
        slopes = np.concatenate([model[None], slopes * values[None, :, 0, None, None]])[:free]
        normal = np.einsum("anij,bnij,nij->nab", slopes, slopes, weight, optimize=True)
        right = np.einsum("anij,nij->na", slopes, rest * weight, optimize=True)
        scale = np.sqrt(np.maximum(np.einsum("naa->na", normal), 1e-30))
        scaled = normal / scale[:, :, None] / scale[:, None, :]
        scaled += (damping[:, None, None] + 1e-10) * np.eye(free)
        step = np.linalg.solve(scaled, (right / scale)[..., None])[..., 0] / scale
        step[:, 1:3] = np.clip(step[:, 1:3], -1.5, 1.5)
        if free > 3:
            step[:, 3] = np.clip(step[:, 3], -0.3 * values[:, 3], 0.3 * values[:, 3])
            step[:, 4] = np.clip(step[:, 4], -0.2, 0.2)
            step[:, 5] = np.clip(step[:, 5], -0.3 * values[:, 5], 0.3 * values[:, 5])
        values[:, :free] += np.where(np.isfinite(step), step, 0.0)
        if free == 3 and turn > 1 and np.nanmax(np.abs(step[:, 1:])) < 1e-3:
            break
    if free > 3:
        values = best
    with np.errstate(invalid="ignore"):
        scale = np.sqrt(np.maximum(np.einsum("naa->na", normal), 1e-30))
        scaled = normal / scale[:, :, None] / scale[:, None, :] + 1e-10 * np.eye(free)
        covariance = np.linalg.inv(scaled) / scale[:, :, None] / scale[:, None, :]
        # what the profile does not explain is no noise of the sky's, but it moves the place all the same
        unexplained = chi2 / np.maximum(near.sum(axis=(1, 2)) - free, 1)
        covariance *= np.where(saturated, np.maximum(unexplained, 1.0), 1.0)[:, None, None]
    values[:, 1] += x0
    values[:, 2] += y0
    return values, covariance, saturated


def _along_across(
    reach: np.ndarray, x: np.ndarray, y: np.ndarray, angle: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    dx, dy = reach[None, None, :] - x[:, None, None], reach[None, :, None] - y[:, None, None]
    c, s = np.cos(angle)[:, None, None], np.sin(angle)[:, None, None]
    return dx * c + dy * s, dy * c - dx * s


def _near_line(reach: np.ndarray, x: np.ndarray, y: np.ndarray, values: np.ndarray) -> np.ndarray:
    """Return the pixels (n, s, s) that belong to each trail: within 4.5 widths of its line, neighbours left out."""
    u, v = _along_across(reach, x, y, values[:, 4])
    wide = 4.5 * values[:, 5, None, None] + 1
    return (np.abs(v) < wide) & (np.abs(u) < values[:, 3, None, None] / 2 + wide)


def profile(reach: np.ndarray, values: np.ndarray, free: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the profile of unit light (n, s, s), and its slopes by x, y, and if asked length, angle and width."""
    from scipy.special import erf

    u, v = _along_across(reach, values[:, 1], values[:, 2], values[:, 4])
    sigma = np.sqrt(values[:, 5, None, None] ** 2 + _PIXEL_VARIANCE)
    length = np.maximum(values[:, 3, None, None], 1e-3)
    c, s = np.cos(values[:, 4])[:, None, None], np.sin(values[:, 4])[:, None, None]
    ahead, behind = u + length / 2, u - length / 2
    root = np.sqrt(2 * np.pi) * sigma
    at_start, at_end = np.exp(-0.5 * (ahead / sigma) ** 2) / root, np.exp(-0.5 * (behind / sigma) ** 2) / root
    across = np.exp(-0.5 * (v / sigma) ** 2) / root
    along = (erf(ahead / (np.sqrt(2) * sigma)) - erf(behind / (np.sqrt(2) * sigma))) / (2 * length)
    model = across * along
    by_u, by_v = across * (at_start - at_end) / length, -v / sigma**2 * model
    slopes = [-(by_u * c - by_v * s), -(by_u * s + by_v * c)]
    if free > 3:
        by_length = across * ((at_start + at_end) / 2 - along) / length
        by_angle = by_u * v - by_v * u
        by_sigma = (v**2 / sigma**2 - 1) / sigma * model
        by_sigma = by_sigma - across * (ahead * at_start - behind * at_end) / (length * sigma)
        slopes += [by_length, by_angle, by_sigma * values[:, 5, None, None] / sigma]
    return model, np.stack(slopes)
