"""Stars that share their light with a neighbour: fitted together, and told apart where one maximum holds two.

Two Gaussians as wide as the frame's stars, Gauss-Newton with the noise of each pixel as weight: the covariance is that
of both together, and grows as they merge. A single maximum is split only when two stars explain its light far better
than one, and not in frames whose stars are all of odd shape.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from imaging.stars.background import Background
from imaging.stars.centroids import Measured, doubled, stamps_of

_REACH_SIGMAS = 7.0  # a neighbour within it moves a windowed centroid by more than 0.01 px
_MERGED_SIGMAS = 4.5  # within it the two are flagged as blended
_LONGER = 1.2  # elongation over the frame's median from which one maximum may hold two stars
_SURE_CHI2 = 60.0
_BETTER = 0.4  # of the excess chi^2 of one star that may be left with two
_ONE_MAXIMUM = 12.0  # widths: two stars further apart have a maximum each
_ODD_SHARE = 0.15  # of long stars above which the frame's stars are odd, not double
_LEAST_SEPARATION_SIGMAS = 0.9
_MOST = 10_000
_ROUNDS = 12
_SETTLED = 0.01  # of its error: a step below it moves no result
_CHUNK_PIXELS = 1_500_000
_PIXEL_VARIANCE = 1 / 12


@dataclass(frozen=True)
class _Pairs:
    """n fits of two stars: light, x, y of each (n, 2, 3), their covariance (n, 6, 6), chi^2 of one and of two stars.

    `chi2_one` is NaN where it was not asked for.
    """

    values: np.ndarray
    covariance: np.ndarray
    chi2_one: np.ndarray
    chi2_two: np.ndarray
    pixels: np.ndarray


def deblend(
    data: np.ndarray,
    sky: Background,
    x_px: np.ndarray,
    y_px: np.ndarray,
    measured: Measured,
    gain_e_adu: float | None,
) -> Measured:
    """Return the measurements with close neighbours fitted together and double maxima split (rows at the end).

    `x_px`, `y_px`: the whole pixels of the maxima, row by row of `measured`.
    """
    usable = ~measured.saturated & np.isfinite(measured.x_px)
    if usable.sum() > _MOST:
        usable &= measured.snr >= np.sort(measured.snr[usable])[-_MOST]
    measured = _neighbours(data, sky, x_px, y_px, measured, gain_e_adu, usable)
    parted = _split(data, sky, measured, gain_e_adu, usable)
    if len(parted.x_px) > len(measured.x_px):  # a companion may have had a maximum of its own
        twice = doubled(parted.x_px, parted.y_px, parted.flux_adu, parted.good, parted.psf_sigma_px)
        parted = replace(parted, good=parted.good & ~twice)
    return parted


def _neighbours(
    data: np.ndarray,
    sky: Background,
    x_px: np.ndarray,
    y_px: np.ndarray,
    measured: Measured,
    gain_e_adu: float | None,
    usable: np.ndarray,
) -> Measured:
    """Fit each maximum together with its nearest neighbour, where that is near."""
    from scipy.spatial import cKDTree

    rows = np.flatnonzero(usable)
    if len(rows) < 2:
        return measured
    sigma = measured.psf_sigma_px
    distance, index = cKDTree(np.column_stack([x_px, y_px])[rows]).query(
        np.column_stack([x_px, y_px])[rows], k=2
    )
    near = distance[:, 1] < _REACH_SIGMAS * sigma
    one, other = rows[near], rows[index[near, 1]]
    mutual = np.zeros(len(measured.x_px), dtype=int) - 1
    mutual[one] = other
    keep = ~((mutual[other] == one) & (other < one))  # each pair once
    one, other = one[keep], other[keep]
    if not len(one):
        return measured
    # where a windowed centroid left its maximum for the neighbour's, the maximum is the better start
    start = np.stack([_start(measured, x_px, y_px, rows) for rows in (one, other)], axis=1)
    pairs = _fit(data, sky, start, sigma, gain_e_adu)
    moved = np.hypot(pairs.values[:, :, 1] - start[:, :, 1], pairs.values[:, :, 2] - start[:, :, 2])
    fine = _defended(pairs, sigma) & (moved < 1.5 + sigma).all(axis=1)
    out = _Columns(measured)
    for side, rows in ((0, one), (1, other)):
        own = fine & (mutual[rows] == (other if side == 0 else one))
        out.put(rows[own], pairs, own, side, (distance[:, 1] < _MERGED_SIGMAS * sigma)[np.searchsorted(
            np.flatnonzero(usable), rows[own])])  # fmt: skip
    return out.measured()


def _start(measured: Measured, x_px: np.ndarray, y_px: np.ndarray, rows: np.ndarray) -> np.ndarray:
    away = np.hypot(measured.x_px[rows] - x_px[rows], measured.y_px[rows] - y_px[rows])
    near = (away < 0.75) & measured.good[rows]
    x = np.where(near, measured.x_px[rows], x_px[rows])
    y = np.where(near, measured.y_px[rows], y_px[rows])
    return np.column_stack([np.maximum(measured.flux_adu[rows], 1e-3), x, y])


def _split(
    data: np.ndarray, sky: Background, measured: Measured, gain_e_adu: float | None, usable: np.ndarray
) -> Measured:
    """Split maxima that hold two stars: those that are long, and those with a shoulder on one side."""
    usable = usable & measured.good & ~measured.blended & ~measured.on_line & (measured.snr > 15)
    sigma = measured.psf_sigma_px
    long, halves = _long(measured, usable, sigma)
    leaning, companions = _shoulders(data, sky, measured, np.flatnonzero(usable & ~long), sigma, gain_e_adu)
    rows = np.concatenate([np.flatnonzero(long), leaning])
    if not len(rows) or len(rows) > max(3, _ODD_SHARE * usable.sum()):
        return measured
    start = np.concatenate([halves, companions])
    apart = np.hypot(start[:, 0, 1] - start[:, 1, 1], start[:, 0, 2] - start[:, 1, 2])
    near = apart < _ONE_MAXIMUM * sigma  # moments of little light run away; no maximum is that long
    rows, start = rows[near], start[near]
    if not len(rows):
        return measured
    pairs = _fit(data, sky, start, sigma, gain_e_adu, one_too=True)
    excess_one = np.maximum(pairs.chi2_one - pairs.pixels, 0)
    excess_two = np.maximum(pairs.chi2_two - pairs.pixels, 0)
    fine = _defended(pairs, sigma) & (pairs.chi2_one - pairs.chi2_two > _SURE_CHI2)
    fine &= excess_two < _BETTER * excess_one + 3 * np.sqrt(2 * pairs.pixels)
    away = np.hypot(
        pairs.values[:, :, 1] - measured.x_px[rows, None], pairs.values[:, :, 2] - measured.y_px[rows, None]
    )
    fine &= (away < 5 * sigma).all(axis=1)
    out = _Columns(measured)
    out.put(rows[fine], pairs, fine, 0, np.ones(int(fine.sum()), dtype=bool))
    return out.measured().followed_by(out.companions(rows[fine], pairs, fine))


def _long(measured: Measured, usable: np.ndarray, sigma: float) -> tuple[np.ndarray, np.ndarray]:
    """Return which stars are longer than the frame's, and where their halves would be (n, 2, 3)."""
    shape = measured.elongation
    known = usable & np.isfinite(shape)
    long = np.zeros(len(shape), dtype=bool)
    if known.sum() >= 8:
        usual = float(np.median(shape[known]))
        long = known & (shape > _LONGER * usual) & (shape - usual > 6.0 / measured.snr)
    # a pair of equal stars d apart is wider along itself by d^2 / 4
    apart = sigma * np.sqrt(np.maximum(shape[long] ** 2 - 1, 0.2))
    east, up = apart * np.cos(measured.tilt_rad[long]), apart * np.sin(measured.tilt_rad[long])
    x, y, light = measured.x_px[long], measured.y_px[long], measured.flux_adu[long] / 2
    halves = [np.column_stack([light, x + side * east, y + side * up]) for side in (-1, 1)]
    return long, np.stack(halves, axis=1)


def _shoulders(
    data: np.ndarray,
    sky: Background,
    measured: Measured,
    rows: np.ndarray,
    sigma: float,
    gain_e_adu: float | None,
) -> tuple[np.ndarray, np.ndarray]:
    """Return which stars have light on one side that the other side lacks, and where both stars would be (n, 2, 3).

    Wings that no Gaussian has are alike on both sides and cancel.
    """
    rows = rows[measured.snr[rows] > 30]
    radius = int(np.ceil(6.5 * sigma)) + 1
    wide = np.sqrt(sigma**2 + _PIXEL_VARIANCE)
    turn = np.arange(0, 2 * np.pi, np.pi / 8)
    ring = np.concatenate(
        [np.column_stack([r * np.cos(turn), r * np.sin(turn)]) for r in (2.6 * sigma, 3.8 * sigma)]
    )
    reach = np.arange(-radius, radius + 1.0)
    probe = _unit(reach, ring[:, 0], ring[:, 1], wide).reshape(len(ring), -1)
    found, starts = [np.empty(0, dtype=int)], [np.empty((0, 2, 3))]
    number = max(1, _CHUNK_PIXELS // len(reach) ** 2)
    for first in range(0, len(rows), number):
        here = rows[first : first + number]
        x0, y0 = np.rint(measured.x_px[here]), np.rint(measured.y_px[here])
        stamp, _, noise, _ = stamps_of(data, sky, x0, y0, radius)
        light = measured.flux_adu[here]
        model = light[:, None, None] * _unit(reach, measured.x_px[here] - x0, measured.y_px[here] - y0, wide)
        variance = noise[:, None, None] ** 2 + (model / gain_e_adu if gain_e_adu else 0.02 * model)
        rest = stamp - model
        lean = (rest - rest[:, ::-1, ::-1]).reshape(len(here), -1) @ probe.T
        error = np.sqrt((variance + variance[:, ::-1, ::-1]).reshape(len(here), -1) @ (probe**2).T)
        best = (lean / error).argmax(axis=1)
        line = np.arange(len(here))
        companion = lean[line, best] / (probe**2).sum(axis=1)[best]
        sure = (lean[line, best] > 8 * error[line, best]) & (companion > 0.05 * light)
        place = ring[best]
        second = np.column_stack(
            [companion, measured.x_px[here] + place[:, 0], measured.y_px[here] + place[:, 1]]
        )
        both = np.stack([np.column_stack([light, measured.x_px[here], measured.y_px[here]]), second], axis=1)
        found.append(here[sure])
        starts.append(both[sure])
    return np.concatenate(found), np.concatenate(starts)


def _unit(reach: np.ndarray, x: np.ndarray, y: np.ndarray, wide: float) -> np.ndarray:
    """Return Gaussians of unit light (n, s, s) at places."""
    gx, gy = (
        np.exp(-0.5 * ((reach - at[:, None]) / wide) ** 2) / (np.sqrt(2 * np.pi) * wide) for at in (x, y)
    )
    return gy[:, :, None] * gx[:, None, :]


def _defended(pairs: _Pairs, sigma: float) -> np.ndarray:
    """Say which fits are two stars: both with light beyond their errors, and apart."""
    light = pairs.values[:, :, 0]
    with np.errstate(invalid="ignore"):
        error = np.sqrt(pairs.covariance[:, [0, 3], [0, 3]])
        apart = np.hypot(
            pairs.values[:, 0, 1] - pairs.values[:, 1, 1], pairs.values[:, 0, 2] - pairs.values[:, 1, 2]
        )
        fine = np.isfinite(pairs.values).all(axis=(1, 2)) & (light > 4 * error).all(axis=1)
        fine &= (apart > _LEAST_SEPARATION_SIGMAS * sigma) & np.isfinite(error).all(axis=1)
        return fine & (light.min(axis=1) > 0.02 * light.max(axis=1))


class _Columns:
    """Columns of measurements while fits of pairs are written into them."""

    def __init__(self, measured: Measured):
        self._measured = measured
        self.x_px, self.y_px, self.flux_adu = (
            measured.x_px.copy(), measured.y_px.copy(), measured.flux_adu.copy(),
        )  # fmt: skip
        self.sigma_x_px, self.sigma_y_px = measured.sigma_x_px.copy(), measured.sigma_y_px.copy()
        self.covariance_xy_px2 = measured.covariance_xy_px2.copy()
        self.elongation, self.fwhm_px = measured.elongation.copy(), measured.fwhm_px.copy()
        self.good, self.blended = measured.good.copy(), measured.blended.copy()

    def put(self, rows: np.ndarray, pairs: _Pairs, own: np.ndarray, side: int, blended: np.ndarray) -> None:
        """Write one star of each of these pairs into these rows."""
        values, covariance = pairs.values[own, side], pairs.covariance[own]
        i = 3 * side
        self.flux_adu[rows], self.x_px[rows], self.y_px[rows] = values.T
        self.sigma_x_px[rows] = np.sqrt(covariance[:, i + 1, i + 1])
        self.sigma_y_px[rows] = np.sqrt(covariance[:, i + 2, i + 2])
        self.covariance_xy_px2[rows] = covariance[:, i + 1, i + 2]
        # the moments were of both stars together
        self.elongation[rows] = np.where(blended, np.nan, self.elongation[rows])
        self.fwhm_px[rows] = np.where(blended, np.nan, self.fwhm_px[rows])
        self.good[rows] = True
        self.blended[rows] |= blended

    def measured(self) -> Measured:
        """Return the measurements with what was written."""
        return replace(
            self._measured,
            x_px=self.x_px,
            y_px=self.y_px,
            flux_adu=self.flux_adu,
            sigma_x_px=self.sigma_x_px,
            sigma_y_px=self.sigma_y_px,
            covariance_xy_px2=self.covariance_xy_px2,
            elongation=self.elongation,
            fwhm_px=self.fwhm_px,
            good=self.good,
            blended=self.blended,
        )

    def companions(self, rows: np.ndarray, pairs: _Pairs, own: np.ndarray) -> Measured:
        """Return the second stars of these pairs as measurements of their own."""
        chosen = self.measured().take(rows)
        out = _Columns(chosen)
        out.put(np.arange(len(rows)), pairs, own, 1, np.ones(len(rows), dtype=bool))
        share = pairs.values[own, 1, 0] / np.maximum(pairs.values[own, :, 0].sum(axis=1), 1e-30)
        return replace(out.measured(), snr=chosen.snr * share)


def _fit(
    data: np.ndarray,
    sky: Background,
    start: np.ndarray,
    sigma: float,
    gain_e_adu: float | None,
    *,
    one_too: bool = False,
) -> _Pairs:
    apart = np.hypot(start[:, 0, 1] - start[:, 1, 1], start[:, 0, 2] - start[:, 1, 2])
    radius = int(np.ceil(3.5 * sigma + float(apart.max()) / 2)) + 1
    number = max(1, _CHUNK_PIXELS // (2 * radius + 1) ** 2)
    parts = [
        _fit_chunk(data, sky, start[first : first + number], radius, sigma, gain_e_adu, one_too)
        for first in range(0, len(start), number)
    ]
    return _Pairs(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def _fit_chunk(
    data: np.ndarray,
    sky: Background,
    start: np.ndarray,
    radius: int,
    sigma: float,
    gain_e_adu: float | None,
    one_too: bool,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    x0, y0 = np.rint(start[:, :, 1].mean(axis=1)), np.rint(start[:, :, 2].mean(axis=1))
    stamp, _, noise, reach = stamps_of(data, sky, x0, y0, radius)
    local = start.copy()
    local[:, :, 1] -= x0[:, None]
    local[:, :, 2] -= y0[:, None]
    # only pixels near either star: further ones hold other stars
    dx = reach[None, None, None, :] - local[:, :, 1, None, None]
    dy = reach[None, None, :, None] - local[:, :, 2, None, None]
    near = ((dx**2 + dy**2) < (3.5 * sigma + 0.5) ** 2).any(axis=1)
    two, covariance, chi2_two = _solved(stamp, noise, reach, local, near, sigma, gain_e_adu)
    two[:, :, 1] += x0[:, None]
    two[:, :, 2] += y0[:, None]
    pixels = near.sum(axis=(1, 2)).astype(float)
    if not one_too:
        return two, covariance, np.full(len(two), np.nan), chi2_two, pixels
    light = np.maximum(local[:, :, 0], 1e-9)
    middle = (local * light[:, :, None]).sum(axis=1) / light.sum(axis=1)[:, None]
    middle[:, 0] = local[:, :, 0].sum(axis=1)
    _, _, chi2_one = _solved(stamp, noise, reach, middle[:, None, :], near, sigma, gain_e_adu)
    return two, covariance, chi2_one, chi2_two, pixels


def _solved(
    stamp: np.ndarray,
    noise: np.ndarray,
    reach: np.ndarray,
    values: np.ndarray,
    near: np.ndarray,
    sigma: float,
    gain_e_adu: float | None,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return fitted light, x, y (n, k, 3) of k stars each, covariance (n, 3k, 3k) and chi^2."""
    n, k, _ = values.shape
    values = values.copy()
    size = 3 * k
    live = np.arange(n)  # the fits that still move
    for turn in range(_ROUNDS):
        scaled, scale, right, _ = _equations(
            stamp[live], noise[live], reach, values[live], near[live], sigma, gain_e_adu
        )
        damped = scaled + (0.1 * 0.3**turn + 1e-9) * np.eye(size)
        step = np.linalg.solve(damped, (right / scale)[..., None])[..., 0] / scale
        step = np.where(np.isfinite(step), step, 0.0).reshape(-1, k, 3)
        step[:, :, 1:] = np.clip(step[:, :, 1:], -0.7 * sigma, 0.7 * sigma)
        values[live] += step
        error = 1 / scale.reshape(-1, k, 3)  # of each value, the others known: the least it can be
        live = live[(np.abs(step) > _SETTLED * error).any(axis=(1, 2))]
        if not len(live):
            break
    scaled, scale, _, chi2 = _equations(stamp, noise, reach, values, near, sigma, gain_e_adu)
    with np.errstate(invalid="ignore"):
        covariance = np.linalg.inv(scaled + 1e-12 * np.eye(size)) / scale[:, :, None] / scale[:, None, :]
    return values, covariance, chi2


def _equations(
    stamp: np.ndarray,
    noise: np.ndarray,
    reach: np.ndarray,
    values: np.ndarray,
    near: np.ndarray,
    sigma: float,
    gain_e_adu: float | None,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Return the normal matrices with unit diagonal, their scales, the right sides and chi^2 at these values."""
    n, k, _ = values.shape
    wide = np.sqrt(sigma**2 + _PIXEL_VARIANCE)
    jacobian = np.empty((n, 3 * k, *stamp.shape[1:]))
    model = np.zeros_like(stamp)
    for star in range(k):
        ox, oy = reach - values[:, star, 1, None], reach - values[:, star, 2, None]
        gx = np.exp(-0.5 * (ox / wide) ** 2) / (np.sqrt(2 * np.pi) * wide)
        gy = np.exp(-0.5 * (oy / wide) ** 2) / (np.sqrt(2 * np.pi) * wide)
        light = values[:, star, 0, None]
        np.multiply(gy[:, :, None], gx[:, None, :], out=jacobian[:, 3 * star])
        np.multiply(gy[:, :, None], (light * gx * ox / wide**2)[:, None, :], out=jacobian[:, 3 * star + 1])
        np.multiply((light * gy * oy / wide**2)[:, :, None], gx[:, None, :], out=jacobian[:, 3 * star + 2])
        model += light[:, :, None] * jacobian[:, 3 * star]
    variance = noise[:, None, None] ** 2 + (np.maximum(model, 0) / gain_e_adu if gain_e_adu else 0.0)
    weight = near / variance
    rest = stamp - model
    chi2 = (weight * rest**2).sum(axis=(1, 2))
    jacobian = jacobian.reshape(n, 3 * k, -1)
    weighted = jacobian * weight.reshape(n, 1, -1)
    normal = weighted @ jacobian.transpose(0, 2, 1)
    scale = np.sqrt(np.maximum(np.einsum("naa->na", normal), 1e-30))
    right = (weighted @ rest.reshape(n, -1, 1))[..., 0]
    return normal / scale[:, :, None] / scale[:, None, :], scale, right, chi2
