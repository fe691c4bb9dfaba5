"""The instant at which a star goes out or comes back: a step, or a diffraction pattern, in its light curve.

A frame is an interval: it holds the mean of the star's light while it was exposed, and nothing of the dead time
after.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from imaging.discs.diffraction import straight_edge
from planner.errors import NoSolutionError

Kind = Literal["disappearance", "reappearance"]
# Fewer frames than this on a side do not tell a star from a spark.
_LEAST_FRAMES = 3
# Chance of noise alone below which an event is claimed: 1 in 100,000 curves.
FALSE_ALARM_LOG10 = -5.0
_STEPS_A_FRAME = 20
# Frames taken about an event: more tell its levels no better than to 5 % of a frame's noise.
_NEAREST_FRAMES = 400
_LIKELY = 18.0  # instants less likely than the best by exp(-18) are not looked at more closely
_MOST_INSTANTS = 6000


@dataclass(frozen=True)
class LightCurve:
    """Frames of a star; arrays of shape (n,) in time order. `start_s`: beginnings of exposures, any origin.

    A flux that is not finite is a frame without a measurement.
    """

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

    def part(self, chosen: np.ndarray | slice) -> LightCurve:
        """Return the frames chosen."""
        return LightCurve(self.start_s[chosen], self.exposure_s[chosen], self.flux[chosen])

    def usable(self) -> LightCurve:
        """Return the frames with a measurement, as arrays of floats."""
        start, exposure, flux = (np.asarray(a, float) for a in (self.start_s, self.exposure_s, self.flux))
        good = np.isfinite(flux)
        return LightCurve(start[good], exposure[good], flux[good])


@dataclass(frozen=True)
class EventFit:
    """An event in a light curve: its instant on the curve's own time axis and the 1-sigma.

    `level_with`, `level_without`: flux with and without the star. `signal_to_noise`: of the star in one frame.
    `false_alarm_log10`: chance that noise alone shows as much anywhere in the curve. `bound_s`: the Cramér-Rao bound of
    an instant well inside an exposure, exposure over signal-to-noise; over all phases the best is 1.27 of it.
    `in_dead_time`: the instant falls between two exposures, and is known no better than that. `log_likelihood`: of the
    best instant, to compare fits of the same frames.
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
    log_likelihood: float = float("nan")

    @property
    def depth(self) -> float:
        """Part of the light that is gone while the star is hidden."""
        return 1.0 - self.level_without / self.level_with if self.level_with > 0 else float("nan")


def fit_step(
    curve: LightCurve, kind: Kind | None = None, window_s: tuple[float, float] | None = None
) -> EventFit:
    """Fit one sudden disappearance or reappearance by maximum likelihood with exposures integrated.

    `kind`: None takes whichever the curve shows. `window_s`: where the event may be. Levels are free, and so is the
    noise with and without the star; the likelihood is profiled over them on a grid of a twentieth of a frame, and
    instant and error are the mean and the spread of what it leaves, which holds for a step, where the usual expansion
    about the peak does not. Raises NoSolutionError when noise would show as much in more than one curve of 100,000.
    """

    def before(times: np.ndarray, near: LightCurve) -> np.ndarray:
        # the part of each exposure before the instant, (times, frames): with the star for a disappearance
        return np.clip((times[:, None] - near.start_s) / near.exposure_s, 0.0, 1.0)

    return _fitted(curve.usable(), before, kind, window_s, expected=None)


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
    sign = -1.0 if kind == "disappearance" else 1.0
    curve = curve.usable()
    span = float(curve.start_s[-1] + curve.exposure_s[-1] - curve.start_s[0]) if curve.flux.size else 1.0
    away = np.linspace(-span, span, int(np.clip(2 * span / 2e-4, 2001, 400_000)))
    light = straight_edge(speed_m_s * away, distance_m, wavelength_nm, bandwidth_nm, star_diameter_mas)
    total = np.concatenate([[0.0], np.cumsum(0.5 * (light[1:] + light[:-1]) * np.diff(away))])

    def mean(times: np.ndarray, near: LightCurve) -> np.ndarray:
        edges = [
            sign * (near.start_s + part * near.exposure_s - times[:, None]).ravel() for part in (0.0, 1.0)
        ]
        first, last = (np.interp(edge, away, total).reshape(times.size, -1) for edge in edges)
        return np.abs(last - first) / near.exposure_s

    return _fitted(curve, mean, "disappearance", window_s, expected=kind)


def find_events(curve: LightCurve) -> tuple[EventFit, ...]:
    """Find what a whole curve shows: a disappearance, a reappearance, or both with the star hidden between.

    Of the three, the one that noise would show least is fitted, each edge with the frames on its own side of the
    middle of the hidden time, or of the other edge where those are few. Raises NoSolutionError when there is no event.
    """
    curve = curve.usable()
    _require_frames(curve)
    steps = _coarse(curve.flux, boxes=False)
    boxes = _coarse(curve.flux, boxes=True) if curve.flux.size >= 3 * _LEAST_FRAMES else None
    # the box is taken for as much more than a step as a second edge in noise would not give
    if boxes is None or boxes.chance_log10 > steps.chance_log10 + FALSE_ALARM_LOG10:
        return (fit_step(curve),)
    count, enough = curve.flux.size, 2 * _LEAST_FRAMES + 2
    middle = (boxes.first + boxes.last) // 2
    until, since = max(middle + 1, min(enough, boxes.last)), min(middle, max(count - enough, boxes.first))
    found = []
    for part, kind in ((slice(0, until), "disappearance"), (slice(since, count), "reappearance")):
        found.append(fit_step(curve.part(part), kind))  # type: ignore[arg-type]
    return tuple(found)


@dataclass(frozen=True)
class _Coarse:
    """The best edge or pair of edges between frames: frames first..last-1 are without the star (or with it)."""

    first: int
    last: int
    chance_log10: float


def chance_of_step_log10(flux: np.ndarray, exposures: np.ndarray | None = None) -> np.ndarray:
    """Return, for each of many curves (m, n), log10 of the chance that noise alone shows as large a step anywhere.

    The same test that `fit_step` makes before it claims an event; edges at twentieths of a frame.
    """
    flux = np.atleast_2d(np.asarray(flux, float))
    count = flux.shape[1]
    start = np.arange(count, dtype=float)
    times = _instants(start, np.ones(count), None)
    part, power = _centred(np.clip(times[:, None] - start, 0.0, 1.0))
    out = np.empty(flux.shape[0])
    for low in range(0, flux.shape[0], 512):
        centred = flux[low : low + 512] - flux[low : low + 512].mean(axis=1, keepdims=True)
        slope = centred @ part.T / power
        gain = slope**2 * power
        best = gain.argmax(axis=1)
        row = np.arange(best.size)
        left = centred - slope[row, best, None] * part[best]
        total = (centred**2).sum(axis=1)
        out[low : low + 512] = _false_alarm(gain[row, best] / total, count / _shared(left), count)
    return out


def _require_frames(curve: LightCurve) -> None:
    if curve.flux.size < 2 * _LEAST_FRAMES + 2:
        raise NoSolutionError(f"{curve.flux.size} frames are too few for a light curve: 8 at least")


def _coarse(
    flux: np.ndarray, boxes: bool, kind: Kind | None = None, window: np.ndarray | None = None
) -> _Coarse:
    """Find the step, or the box, between whole frames that explains most, from running sums."""
    count = flux.size
    centred = flux - flux.mean()
    total = float(centred @ centred)
    if total <= 0:
        raise NoSolutionError("the light curve shows no event: its flux never changes")
    sums = np.concatenate([[0.0], np.cumsum(centred)])
    if not boxes:
        edge = np.arange(_LEAST_FRAMES, count - _LEAST_FRAMES + 1)
        gain = sums[edge] ** 2 * count / (edge * (count - edge))
        if kind is not None:
            gain = np.where((sums[edge] > 0) == (kind == "disappearance"), gain, 0.0)
        if window is not None:
            gain = np.where(window[edge.clip(0, count - 1)], gain, -1.0)
        best = int(edge[gain.argmax()])
        return _Coarse(best, count, float(_false_alarm(gain.max() / total, count, count)))
    most = (0.0, _LEAST_FRAMES, 2 * _LEAST_FRAMES)
    for first in range(_LEAST_FRAMES, count - 2 * _LEAST_FRAMES + 1):
        last = np.arange(first + _LEAST_FRAMES, count - _LEAST_FRAMES + 1)
        inner = sums[last] - sums[first]
        width = last - first
        # a star is hidden in between, never there only in between
        gain = np.where(inner < 0, inner**2 * count / (width * (count - width)), 0.0)
        at = int(gain.argmax())
        if gain[at] > most[0]:
            most = (float(gain[at]), first, int(last[at]))
    chance = _false_alarm(most[0] / total, count, count * count // 4)
    return _Coarse(most[1], most[2], float(chance))


def _instants(
    start: np.ndarray, exposure: np.ndarray, window_s: tuple[float, float] | None, steps: int = _STEPS_A_FRAME
) -> np.ndarray:
    """Return trial instants that leave the least number of frames on each side."""
    low, high = start[_LEAST_FRAMES - 1] + exposure[_LEAST_FRAMES - 1], start[-_LEAST_FRAMES]
    if window_s is not None:
        low, high = max(low, window_s[0]), min(high, window_s[1])
    if high <= low:
        raise NoSolutionError("the curve has too few frames in the time where the event may be")
    # by frames, not by seconds: where the cadence changes, even steps would pass over a frame
    steps = int(np.clip(_MOST_INSTANTS // start.size, 1, steps))
    edges = np.append(start, start[-1] + exposure[-1])
    times = np.interp(np.arange(start.size * steps + 1) / steps, np.arange(edges.size), edges)
    times = np.concatenate([[low], times[(times > low) & (times < high)], [high]])
    return times if times.size > 40 else np.union1d(times, np.linspace(low, high, 41))


def _centred(shape: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    part = shape - shape.mean(axis=1, keepdims=True)
    return part, np.maximum(np.sum(part**2, axis=1), 1e-12)


def _near(curve: LightCurve, kind: Kind | None, window_s: tuple[float, float] | None) -> LightCurve:
    """Return the frames about the coarsest place of the event that tell its instant and its levels.

    Where frames come more slowly than about the event (the hours before and after), they are left out.
    """
    count = curve.flux.size
    inside = None
    if window_s is not None:
        inside = (curve.start_s >= window_s[0]) & (curve.start_s <= window_s[1])
        if not inside.any():
            raise NoSolutionError("the curve has too few frames in the time where the event may be")
    at = _coarse(curve.flux, False, kind, inside).first
    step = np.diff(curve.start_s)
    usual = float(np.median(step[max(at - 12, 0) : at + 12]))
    slow = np.flatnonzero(step > 8 * usual)
    low = int(slow[slow < at - _LEAST_FRAMES].max(initial=-1)) + 1
    high = int(slow[slow >= at + _LEAST_FRAMES].min(initial=count)) + 1
    low, high = max(low, at - _NEAREST_FRAMES), min(high, at + _NEAREST_FRAMES)
    # slow or not, frames that are needed to tell the levels stay
    enough = 2 * _LEAST_FRAMES + 2
    low, high = min(low, max(at - _LEAST_FRAMES - 1, 0)), max(high, min(at + _LEAST_FRAMES + 1, count))
    low, high = max(min(low, high - enough), 0), max(high, low + enough)
    return curve.part(slice(low, high))


def _fitted(  # type: ignore[no-untyped-def]
    curve: LightCurve,
    shape_at,
    kind: Kind | None,
    window_s: tuple[float, float] | None,
    expected: Kind | None,
) -> EventFit:
    """Profile the likelihood of `flux = a + b shape(time)` over trial instants.

    First with one noise for all frames, which finds the event and its chance; then about it with the noise that frames
    show with the star and without.
    """
    _require_frames(curve)
    near = _near(curve, expected or kind, window_s)
    _require_frames(near)
    flux, count = near.flux, near.flux.size
    times = _instants(near.start_s, near.exposure_s, window_s)
    shape = shape_at(times, near)
    part, power = _centred(shape)
    centred = flux - flux.mean()
    slope = part @ centred / power
    gain = slope**2 * power
    # positive slope: more light before the instant
    if kind is not None:
        gain = np.where((slope > 0) == (kind == "disappearance"), gain, 0.0)
    total = float(centred @ centred)
    best = int(np.argmax(gain))
    if total <= 0 or gain[best] <= 0:
        raise NoSolutionError("the light curve shows no event of this kind")
    left = centred - slope[best] * part[best]
    shared = float(_shared(left[None, :])[0])
    log10 = float(_false_alarm(float(gain[best]) / total, count / shared, curve.flux.size))
    if log10 > FALSE_ALARM_LOG10:
        raise NoSolutionError(
            f"no event: noise alone shows as much in one curve of {10 ** min(-log10, 12):.0f}"
        )
    variance = float(left @ left) / max(count - 3, 1)
    _require_inside(near, kind, window_s, float(gain[best]))
    likely = np.flatnonzero(gain > gain[best] - 2 * _LIKELY * variance * shared)
    at_best = shape[best]
    low, high = times[max(likely[0] - 1, 0)], times[min(likely[-1] + 1, times.size - 1)]
    if window_s is not None:
        low, high = max(low, window_s[0]), min(high, window_s[1])
    cadence = float(np.median(near.exposure_s))
    times = np.linspace(low, high, int(np.clip((high - low) / cadence * 40, 200, _MOST_INSTANTS)) + 1)
    shape = shape_at(times, near)
    noise = _two_noises(flux, left, at_best, shared)
    log_likelihood, slope, base = _profiled(flux, shape, noise)
    chance = np.exp((log_likelihood - log_likelihood.max()) / shared)
    chance /= chance.sum()
    time = float(chance @ times)
    spread = float(np.sqrt(chance @ (times - time) ** 2 + (times[1] - times[0]) ** 2 / 12))
    best = int(np.argmax(log_likelihood))
    ends = base[best], base[best] + slope[best]
    signal = abs(float(slope[best])) / float(np.sqrt(variance))
    inside = (near.start_s <= time) & (time <= near.start_s + near.exposure_s)
    found: Kind = expected or ("disappearance" if slope[best] > 0 else "reappearance")
    return EventFit(
        found, time, spread, float(max(ends)), float(min(ends)), signal, log10,
        float(np.median(near.exposure_s)) / signal, not inside.any(), float(log_likelihood.max()),
    )  # fmt: skip


def _require_inside(
    near: LightCurve, kind: Kind | None, window_s: tuple[float, float] | None, gain: float
) -> None:
    """Refuse a fit of `gain` where an edge within the least frames of an end explains far more."""
    centred, count = near.flux - near.flux.mean(), near.flux.size
    edge = np.array([*range(1, _LEAST_FRAMES), *range(count - _LEAST_FRAMES + 1, count)])
    sums = np.cumsum(centred)[edge - 1]
    allowed = np.full(edge.size, True) if kind is None else (sums > 0) == (kind == "disappearance")
    if window_s is not None:
        allowed &= (near.start_s[edge] >= window_s[0]) & (near.start_s[edge - 1] <= window_s[1])
    outer = float(np.where(allowed, sums**2 * count / (edge * (count - edge)), 0.0).max())
    variance = max(float(centred @ centred) - outer, 0.0) / max(count - 3, 1)
    if outer > gain + 2 * _LIKELY * variance:
        raise NoSolutionError(
            f"its light changes within {_LEAST_FRAMES - 1} frames of an end: too few to tell a star from a spark"
        )


def _two_noises(flux: np.ndarray, left: np.ndarray, shape: np.ndarray, shared: float) -> tuple[float, float]:
    """Return the variances of frames wholly with (shape 1) and wholly without (shape 0).

    Alike unless they differ by more than few frames would: photon noise and scintillation make the star the noisier.
    """
    whole, bare = left[shape > 0.99], left[shape < 0.01]
    both = float(left @ left) / max(left.size - 3, 1)
    if min(whole.size, bare.size) < 8:
        return both, both
    parts = [float(np.sum((part - part.mean()) ** 2)) / (part.size - 1) for part in (whole, bare)]
    ratio = np.log(max(parts[0], 1e-30) / max(parts[1], 1e-30))
    if abs(ratio) < 3 * np.sqrt(shared * (2 / whole.size + 2 / bare.size)):
        return both, both
    return max(parts[0], 1e-6 * both), max(parts[1], 1e-6 * both)


def _profiled(
    flux: np.ndarray, shape: np.ndarray, noise: tuple[float, float]
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return log-likelihood, slope and base of `flux = base + slope shape` at each instant; shape (times, frames)."""
    variance = noise[1] + (noise[0] - noise[1]) * np.clip(shape, 0, 1)
    weight = 1 / variance
    w0, w1, w2 = weight.sum(axis=1), (weight * shape).sum(axis=1), (weight * shape**2).sum(axis=1)
    y0, y1, y2 = weight @ flux, (weight * shape) @ flux, weight @ flux**2
    det = np.maximum(w0 * w2 - w1 * w1, 1e-300)
    slope, base = (w0 * y1 - w1 * y0) / det, (w2 * y0 - w1 * y1) / det
    square = y2 - slope * y1 - base * y0
    return -0.5 * square - 0.5 * np.log(variance).sum(axis=1), slope, base


def _shared(left: np.ndarray) -> np.ndarray:
    """Return how many frames share one noise, for curves (m, n): more than one with scintillation or clouds."""
    count = left.shape[1]
    alike = np.sum(left[:, 1:] * left[:, :-1], axis=1) / np.maximum(np.sum(left**2, axis=1), 1e-30)
    return np.where(alike > 2 / np.sqrt(count), (1 + alike) / (1 - alike.clip(None, 0.98)), 1.0)


def _false_alarm(explained: np.ndarray | float, effective: np.ndarray | float, trials: int) -> np.ndarray:
    """Return log10 of the chance that noise explains so much of the variance at any of the instants tried.

    At one instant the explained part follows a beta law with (1/2, (n - 2)/2); instants a frame apart count as
    independent trials, twice over, which is on the safe side.
    """
    from scipy.special import betainc, betaln

    a, b = 0.5, np.maximum(np.asarray(effective, float) - 2, 1) / 2
    rest = np.maximum(1 - np.asarray(explained, float), 1e-300)
    chance = betainc(b, a, rest)
    # where it is too small for a float, the leading term of the incomplete beta function
    small = (b * np.log(rest) - np.log(b) - betaln(a, b)) / np.log(10)
    single = np.where(chance > 1e-280, np.log10(np.maximum(chance, 1e-300)), small)
    return np.minimum(single + np.log10(2 * trials), 0.0)
