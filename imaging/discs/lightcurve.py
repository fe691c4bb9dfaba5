"""The instant at which a star goes out or comes back: a step, or a diffraction pattern, in its light curve.

A frame is an interval: it holds the mean of the star's light while it was exposed, and nothing of the dead time
after.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from planner.errors import NoSolutionError

Kind = Literal["disappearance", "reappearance"]
# Fewer frames than this on a side do not tell a star from a spark.
_LEAST_FRAMES = 3
# Chance of noise alone below which an event is claimed: 1 in 100,000 curves.
FALSE_ALARM_LOG10 = -5.0
_STEPS_A_FRAME = 20


@dataclass(frozen=True)
class LightCurve:
    """Frames of a star; arrays of shape (n,) in time order. `start_s`: beginnings of exposures, any origin."""

    start_s: np.ndarray
    exposure_s: np.ndarray
    flux: np.ndarray

    @classmethod
    def of_rows(
        cls,
        start_s: np.ndarray,
        exposure_s: np.ndarray,
        flux: np.ndarray,
        row: np.ndarray,
        rows: int,
        rolling_readout_s: float,
    ) -> LightCurve:
        """Build from a rolling shutter: row `row` of `rows` begins later than the frame by its part of the readout."""
        return cls(
            np.asarray(start_s) + rolling_readout_s * np.asarray(row) / max(rows - 1, 1),
            np.asarray(exposure_s, float),
            np.asarray(flux, float),
        )


@dataclass(frozen=True)
class EventFit:
    """An event in a light curve: its instant on the curve's own time axis and the 1-sigma.

    `level_with`, `level_without`: flux with and without the star. `signal_to_noise`: of the star in one frame.
    `false_alarm_log10`: chance that noise alone shows as much anywhere in the curve. `bound_s`: the Cramér-Rao bound of
    an instant well inside an exposure, exposure over signal-to-noise; over all phases the best is 1.27 of it.
    `in_dead_time`: the instant falls between two exposures, and is known no
    better than that.
    """

    kind: Kind
    time_s: float
    sigma_s: float
    level_with: float
    level_without: float
    signal_to_noise: float
    false_alarm_log10: float
    bound_s: float
    in_dead_time: bool


def aperture_flux(
    frames: np.ndarray,
    x_px: float,
    y_px: float,
    radius_px: float,
    comparison_px: tuple[float, float] | None = None,
) -> np.ndarray:
    """Return a star's flux in each of `frames` (n, rows, columns), sky taken off, divided by a comparison star's.

    The sky is the median of a ring of 2 to 3.5 radii. The quotient is scaled to keep the star's own mean. Raises
    NoSolutionError when an aperture leaves the frame.
    """

    def one(x: float, y: float) -> np.ndarray:
        reach = int(np.ceil(3.5 * radius_px))
        column, row = round(x), round(y)
        if min(column, row) < reach or column + reach >= frames.shape[2] or row + reach >= frames.shape[1]:
            raise NoSolutionError("the star's aperture or its sky ring leaves the frame")
        part = frames[:, row - reach : row + reach + 1, column - reach : column + reach + 1].astype(float)
        v, u = np.mgrid[-reach : reach + 1, -reach : reach + 1]
        away = np.hypot(u - (x - column), v - (y - row))
        inside = np.clip(radius_px + 0.5 - away, 0, 1)
        sky = np.median(part[:, (away > 2 * radius_px) & (away < 3.5 * radius_px)], axis=1)
        return np.tensordot(part, inside, axes=([1, 2], [0, 1])) - sky * inside.sum()

    flux = one(x_px, y_px)
    if comparison_px is None:
        return flux
    other = one(*comparison_px)
    if np.median(other) <= 0:
        raise NoSolutionError("the comparison star is not there")
    return flux * np.median(other) / np.maximum(other, 0.05 * np.median(other))


def fit_step(
    curve: LightCurve, kind: Kind | None = None, window_s: tuple[float, float] | None = None
) -> EventFit:
    """Fit one sudden disappearance or reappearance by maximum likelihood with exposures integrated.

    `kind`: None takes whichever the curve shows. `window_s`: where the event may be. Levels are free; the
    likelihood is profiled over them on a grid of a twentieth of a frame, and instant and error are the mean and
    the spread of what it leaves, which holds for a step, where the usual expansion about the peak does not. The
    noise is that of the curve. Raises NoSolutionError when noise would show as much in more than one curve of
    100,000.
    """
    start, exposure, flux = (np.asarray(a, float) for a in (curve.start_s, curve.exposure_s, curve.flux))
    if flux.size < 2 * _LEAST_FRAMES + 2:
        raise NoSolutionError(f"{flux.size} frames are too few for a light curve: 8 at least")
    times = _grid(start, exposure, window_s)
    # the part of each exposure before the instant, (times, frames): with the star for a disappearance
    before = np.clip((times[:, None] - start[None, :]) / exposure[None, :], 0.0, 1.0)
    return _fitted(curve, times, before, kind, expected=None)


def fit_fresnel(
    curve: LightCurve,
    kind: Kind,
    speed_m_s: float,
    distance_m: float,
    wavelength_nm: float = 550.0,
    bandwidth_nm: float = 100.0,
    star_diameter_mas: float = 0.0,
    window_s: tuple[float, float] | None = None,
) -> EventFit:
    """Fit the diffraction pattern of a straight edge: `speed_m_s` across the limb, at `distance_m` (the Moon's).

    For frames shorter than about 10 ms, which show the fringes; the instant is that of the geometric shadow's edge.
    """
    start, exposure = np.asarray(curve.start_s, float), np.asarray(curve.exposure_s, float)
    times = _grid(start, exposure, window_s)
    span = float(max(start[-1] + exposure[-1] - times[0], times[-1] - start[0]))
    away = np.linspace(-span, span, max(int(2 * span / 2e-4), 2001))
    light = straight_edge(speed_m_s * away, distance_m, wavelength_nm, bandwidth_nm, star_diameter_mas)
    total = np.concatenate([[0.0], np.cumsum(0.5 * (light[1:] + light[:-1]) * np.diff(away))])
    sign = -1.0 if kind == "disappearance" else 1.0
    edges = [sign * (start[None, :] + part * exposure[None, :] - times[:, None]) for part in (0, 1)]
    first, last = (np.interp(edge, away, total) for edge in edges)
    mean = np.abs(last - first) / exposure[None, :]
    return _fitted(curve, times, mean, "disappearance", expected=kind)


def straight_edge(
    offset_m: np.ndarray,
    distance_m: float,
    wavelength_nm: float = 550.0,
    bandwidth_nm: float = 0.0,
    star_diameter_mas: float = 0.0,
) -> np.ndarray:
    """Return the intensity behind a straight edge over the undisturbed one; `offset_m` counts into the light.

    Fresnel integrals C and S at v = offset sqrt(2 / (wavelength distance)): ((1/2 + C)^2 + (1/2 + S)^2) / 2
    (Born & Wolf, Principles of Optics, section 8.7). Averaged over a flat band and over a uniform stellar disc.
    """
    from scipy.special import fresnel

    bands = (
        np.linspace(-0.5, 0.5, 9) * bandwidth_nm + wavelength_nm
        if bandwidth_nm > 0
        else np.array([wavelength_nm])
    )
    half = 0.5 * np.radians(star_diameter_mas / 3.6e6) * distance_m
    strips = (np.arange(15) + 0.5) / 15 * 2 - 1 if half > 0 else np.array([0.0])
    weight = np.sqrt(1 - strips**2)
    weight /= weight.sum()
    offset_m = np.asarray(offset_m, float)
    out = np.zeros_like(offset_m)
    for band in bands:
        for strip, share in zip(strips, weight, strict=True):
            s, c = fresnel((offset_m + strip * half) * np.sqrt(2 / (band * 1e-9 * distance_m)))
            out += share * 0.5 * ((0.5 + c) ** 2 + (0.5 + s) ** 2) / bands.size
    return out


def _grid(start: np.ndarray, exposure: np.ndarray, window_s: tuple[float, float] | None) -> np.ndarray:
    """Return trial instants that leave the least number of frames on each side."""
    low, high = start[_LEAST_FRAMES], start[-_LEAST_FRAMES - 1] + exposure[-_LEAST_FRAMES - 1]
    if window_s is not None:
        low, high = max(low, window_s[0]), min(high, window_s[1])
    if high <= low:
        raise NoSolutionError("the curve has too few frames in the time where the event may be")
    cadence = float(np.median(np.diff(start)))
    count = int(np.clip((high - low) / cadence * _STEPS_A_FRAME, 40, 200_000))
    return np.linspace(low, high, count + 1)


def _fitted(
    curve: LightCurve, times: np.ndarray, shape: np.ndarray, kind: Kind | None, expected: Kind | None
) -> EventFit:
    """Profile the likelihood of `flux = a + b shape(time)` over the trial instants."""
    flux = np.asarray(curve.flux, float)
    count = flux.size
    good = np.isfinite(flux)
    if not good.all():
        flux, shape = flux[good], shape[:, good]
        count = flux.size
    centred = flux - flux.mean()
    part = shape - shape.mean(axis=1, keepdims=True)
    power = np.sum(part**2, axis=1)
    slope = (part @ centred) / np.maximum(power, 1e-12)
    gain = slope**2 * power
    # positive slope: more light before the instant
    if kind == "disappearance":
        gain = np.where(slope > 0, gain, 0.0)
    elif kind == "reappearance":
        gain = np.where(slope < 0, gain, 0.0)
    total = float(centred @ centred)
    best = int(np.argmax(gain))
    if total <= 0 or gain[best] <= 0:
        raise NoSolutionError("the light curve shows no event of this kind")
    left = centred - slope[best] * part[best]
    variance = float(left @ left) / max(count - 3, 1)
    alike = float(np.sum(left[1:] * left[:-1]) / max(np.sum(left**2), 1e-30))
    # noise that neighbours share (scintillation, clouds) counts fewer frames
    shared = (1 + alike) / (1 - alike) if alike > 2 / np.sqrt(count) else 1.0
    log10 = _false_alarm(float(gain[best]) / total, count / shared, count)
    if log10 > FALSE_ALARM_LOG10:
        raise NoSolutionError(
            f"no event: noise alone shows as much in one curve of {10 ** min(-log10, 12):.0f}"
        )
    log_likelihood = (gain - gain[best]) / (2 * variance * shared)
    chance = np.exp(log_likelihood)
    chance /= chance.sum()
    time = float(chance @ times)
    spread = float(np.sqrt(chance @ (times - time) ** 2 + (times[1] - times[0]) ** 2 / 12))
    level_high, level_low = _levels(flux, slope[best], shape[best])
    noise = float(np.sqrt(variance))
    signal = abs(float(slope[best])) / noise
    starts, exposures = np.asarray(curve.start_s, float), np.asarray(curve.exposure_s, float)
    inside = (starts <= time) & (time <= starts + exposures)
    found: Kind = expected or ("disappearance" if slope[best] > 0 else "reappearance")
    return EventFit(
        found, time, spread, level_high, level_low, signal, log10,
        float(np.median(exposures)) / signal, not inside.any(),
    )  # fmt: skip


def _levels(flux: np.ndarray, slope: float, shape: np.ndarray) -> tuple[float, float]:
    base = float(flux.mean() - slope * shape.mean())
    return max(base, base + slope), min(base, base + slope)


def _false_alarm(explained: float, effective: float, count: int) -> float:
    """Return log10 of the chance that noise explains so much of the variance at any instant of the curve.

    At one instant the explained part follows a beta law with (1/2, (n - 2)/2); instants a frame apart count as
    independent trials, twice over, which is on the safe side.
    """
    from scipy.special import betainc, betaln

    a, b = 0.5, max(effective - 2, 1) / 2
    chance = float(betainc(b, a, 1 - explained))
    if chance > 1e-280:
        single = np.log10(chance)
    else:
        # leading term of the incomplete beta function
        single = (b * np.log(max(1 - explained, 1e-300)) - np.log(b) - betaln(a, b)) / np.log(10)
    return float(min(single + np.log10(2 * count), 0.0))
