"""When the star went out and came back: its light over all frames of a check, and the instants in it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from imaging.discs.lightcurve import EventFit, LightCurve, find_events, fit_step
from imaging.discs.photometry import aperture_flux, compared
from imaging.track.findings import Finding
from imaging.track.fringes import Edge, fit_fringes
from imaging.track.measurement import Measurement
from imaging.track.nominal import Promise
from imaging.track.path import ARCSEC_RAD
from imaging.track.result import ContactTiming, with_sigma
from imaging.track.starlight import HALF_PX, StarPiece
from planner.errors import NoSolutionError
from planner.events.family import Circumstances

LEAST_FRAMES = 8
APERTURES = (0.8, 1.2, 1.7)  # radii in widths of a star
NEIGHBOURS = 15  # frames nearest in time that tell how the star lies from where it is expected
DIM_SIGNAL = 10.0  # light over noise, from which half of the light is no noise in thousands of frames
LEAST_DEPTH = 0.5  # of the dimming expected; less is a cloud, or another star's
UNFILTERED_NM = 250.0  # of light that a bare sensor sees, about 550 nm (common practice, no source)
WITHIN_SIGMA = 3.0  # frames that begin and end so far from an instant must show it
FAR_SIGMA = 5.0  # from the prediction, in its own and the timing's sigma together


@dataclass(frozen=True, eq=False)
class StarCurve:
    """The light of the target star, one value a frame in time order, and what it tells.

    `start_tt_s`: begin of the star's own exposure (rolling shutter included), as stamped; `flux`: in units of the
    star's whole light; `compared`: divided by a comparison. `model`: the fitted light, frame by frame. `told`: what is
    to be said of the curve in one sentence.
    """

    start_tt_s: np.ndarray
    exposure_s: np.ndarray
    flux: np.ndarray
    model: np.ndarray
    compared: bool
    aperture_px: float
    timings: tuple[ContactTiming, ...]
    told: str


def time_star(
    measurements: Sequence[Measurement], promise: Promise, name: str
) -> tuple[StarCurve | None, tuple[Finding, ...]]:
    """Return the light curve of the target star with the instants in it, and findings; None without enough frames.

    Instants hold the curve's own error and that of the frames' clock; see `lightcurve.fit_step`.
    """
    held = [(m, m.star) for m in measurements if m.star is not None]
    if len(held) < LEAST_FRAMES:
        return None, ()
    held.sort(key=lambda pair: pair[0].time.middle_tt_s)
    frames, pieces = [m for m, _ in held], [piece for _, piece in held]
    exposure = np.array([max(m.exposure_s, 1e-6) for m in frames])
    begin = np.array([m.time.middle_tt_s for m in frames]) - exposure / 2
    try:
        flux, was_compared, radius = _light(frames, pieces, exposure)
    except NoSolutionError as none:
        return None, (Finding("no-light-curve", float("nan"), f"{name}: {none}."),)
    origin = float(begin[0])
    curve = LightCurve(begin - origin, exposure, flux)
    circumstances = _circumstances(promise)
    drop = _expected_depth(circumstances)
    events, words = _events(curve, circumstances, origin, drop)
    clock = float(np.hypot(promise.rig.clock.sigma_s, np.median([m.time.sigma_s for m in frames])))
    found = [_by_fringes(curve, event, origin, promise) for event in events]
    events = tuple(event for event, _ in found)
    timings = tuple(_timing(event, origin, clock, circumstances, note) for event, note in found)
    whole = float(np.median([event.level_with for event in events])) if events else float(np.nanmedian(flux))
    unit = whole if whole > 0 else 1.0
    made = StarCurve(
        begin, exposure, flux / unit, _model(curve, events, whole) / unit, was_compared, radius, timings, ""
    )
    findings = _findings(name, timings, circumstances, made, words)
    return replace(made, told=_told(name, made, words)), findings


def _light(
    frames: Sequence[Measurement], pieces: Sequence[StarPiece], exposure: np.ndarray
) -> tuple[np.ndarray, bool, float]:
    """Return the star's light a frame by the aperture, with or without comparison, that leaves it steadiest."""
    widths = np.array([piece.fwhm_px for piece in pieces])
    width = float(np.nanmedian(widths)) if np.isfinite(widths).any() else 3.0
    stack = np.array([piece.data for piece in pieces])
    shift = _shifts(frames, pieces)
    limit = HALF_PX - 3.5 * APERTURES[-1] * width - 1
    shift = np.clip(shift, -max(limit, 0.0), max(limit, 0.0))
    x = HALF_PX + np.array([piece.dx_px for piece in pieces]) + shift[:, 0]
    y = HALF_PX + np.array([piece.dy_px for piece in pieces]) + shift[:, 1]
    other = np.array([piece.comparison for piece in pieces]) / exposure
    best: tuple[float, np.ndarray, bool, float] | None = None
    for part in APERTURES:
        radius = part * width
        if 3.5 * radius + 2 > HALF_PX:
            continue
        plain = aperture_flux(stack, x, y, radius) * float(np.median(exposure)) / exposure
        tried = [(plain, False)]
        if np.isfinite(other).mean() > 0.8:
            tried.append((compared(plain, other), True))
        for flux, divided in tried:
            steady = _steadiness(flux)
            if best is None or steady > best[0]:
                best = steady, flux, divided, radius
    if best is None or not np.isfinite(best[0]):
        raise NoSolutionError(
            "its light cannot be summed: the star's image is too wide, or leaves the frames"
        )
    return best[1:]


def _steadiness(flux: np.ndarray) -> float:
    """Return the bright frames' light over the scatter between neighbours: blind to when the star goes."""
    good = flux[np.isfinite(flux)]
    if good.size < LEAST_FRAMES:
        return -np.inf
    high = float(np.quantile(good, 0.9))
    return high / max(_scatter(good), 1e-9)


def _scatter(flux: np.ndarray) -> float:
    return 1.48 * float(np.median(np.abs(np.diff(flux)))) / np.sqrt(2)


def _shifts(frames: Sequence[Measurement], pieces: Sequence[StarPiece]) -> np.ndarray:
    """Return by how much the star lies off its expected place in each frame: what frames nearby that see it say."""
    seen = np.array(
        [m.measured and not m.far and piece.placed for m, piece in zip(frames, pieces, strict=True)]
    )
    off = np.array([(m.x_px - m.predicted_px[0], m.y_px - m.predicted_px[1]) for m in frames])
    out = np.zeros((len(frames), 2))
    when = np.array([m.time.middle_tt_s for m in frames])
    turn = np.array([round(m.nominal.rotation_deg) for m in frames])
    for one in np.unique(turn):
        known = np.flatnonzero(seen & (turn == one))
        if known.size < 3:
            continue
        for index in np.flatnonzero(turn == one):
            order = np.argsort(np.abs(when[known] - when[index]), kind="stable")[:NEIGHBOURS]
            out[index] = np.median(off[known[order]], axis=0)
    return out


def _circumstances(promise: Promise) -> Circumstances:
    from planner.events.catalogue import family
    from planner.sequence.documents import observer_of
    from planner.sequence.frametimes import planned_event

    plan = promise.plan
    return family(plan.event.family).predict(planned_event(plan), observer_of(plan.site))


def _expected_depth(circumstances: Circumstances) -> float:
    drop = circumstances.facts.get("magnitude_drop", np.inf)
    return float(1 - 10 ** (-0.4 * drop)) if np.isfinite(drop) else 1.0


def _events(
    curve: LightCurve, circumstances: Circumstances, origin: float, drop: float
) -> tuple[tuple[EventFit, ...], str]:
    """Return the events of the curve, each as deep as expected; and why there is none."""
    events: list[EventFit] = []
    words = ""
    try:
        events = list(find_events(curve))
    except NoSolutionError as none:
        words = str(none).removeprefix("no event: ")
    # an event too weak to show among all frames may show among those about its prediction
    for instant in circumstances.instants:
        if instant.name not in ("disappearance", "reappearance") or any(
            e.kind == instant.name for e in events
        ):
            continue
        reach = max(10 * instant.sigma_s, 30.0)
        window = instant.tt_s - origin - reach, instant.tt_s - origin + reach
        near = (curve.start_s > window[0] - reach) & (curve.start_s < window[1] + reach)
        try:
            events.append(fit_step(curve.part(near), instant.name, window))  # type: ignore[arg-type]
        except NoSolutionError:
            continue
    deep = [event for event in events if event.depth > LEAST_DEPTH * drop]
    if events and not deep:
        most = max(event.depth for event in events)
        words = f"it dims by {100 * most:.0f} % where {100 * drop:.0f} % are expected: a cloud, or another star's light"
    return tuple(sorted(deep, key=lambda event: event.time_s)), words


def _model(curve: LightCurve, events: Sequence[EventFit], whole: float) -> np.ndarray:
    """Return the light as fitted, frame by frame."""
    if not events:  # of what dims without an instant, no steady light is drawn
        return np.full(curve.start_s.size, np.nan if _dim_frames(curve.flux) else whole)
    seen = np.zeros(curve.start_s.size)
    for event in events:
        before = np.clip((event.time_s - curve.start_s) / curve.exposure_s, 0, 1)
        seen += before if event.kind == "disappearance" else 1 - before
    bare = float(np.median([event.level_without for event in events]))
    return bare + (whole - bare) * np.clip(seen, 0, 1)


def _by_fringes(curve: LightCurve, event: EventFit, origin: float, promise: Promise) -> tuple[EventFit, str]:
    """Return an event timed by the fringes of the Moon's edge, where frames show them, and what is said of it."""
    if promise.plan.event.family != "moon-occults-star":
        return event, ""
    try:
        fringes = fit_fringes(curve.usable(), event, edge_of_moon(promise, origin + event.time_s))
    except NoSolutionError:
        return event, ""
    return fringes.event, fringes.told


def edge_of_moon(promise: Promise, tt_s: float) -> Edge:
    """Return the Moon's mean limb at the star at an instant, in the band of the plan's first filter."""
    expected = promise.path.airless().at(np.array([tt_s - 0.5, tt_s + 0.5]))
    apart = np.hypot(expected.east_arcsec, expected.north_arcsec) - expected.reference_semidiameter_arcsec
    distance_km = float(promise.path.geometry(np.array([tt_s])).discs["moon"].distance_km[0])
    speed_m_s = abs(float(np.diff(apart)[0])) / ARCSEC_RAD * distance_km * 1e3
    filters = {one.name: one for one in promise.rig.filters}
    used = next(
        (shot.filter for passage in promise.plan.passages for shot in passage.shots if shot.filter), None
    )
    width_nm = filters[used].bandwidth_nm if used in filters else UNFILTERED_NM
    return Edge(max(speed_m_s, 1.0), distance_km, 550.0, width_nm)


def _timing(
    event: EventFit, origin: float, clock_s: float, circumstances: Circumstances, note: str = ""
) -> ContactTiming:
    predicted = circumstances.instant(event.kind)
    return ContactTiming(
        name=event.kind,
        predicted_tt_s=predicted.tt_s if predicted is not None else float("nan"),
        stamped_tt_s=origin + event.time_s,
        sigma_s=float(np.hypot(event.sigma_s, clock_s)),
        predicted_sigma_s=predicted.sigma_s if predicted is not None else float("nan"),
        false_alarm_log10=event.false_alarm_log10,
        signal_to_noise=event.signal_to_noise,
        note=note or ("between two exposures" if event.in_dead_time else ""),
    )


def _findings(
    name: str,
    timings: Sequence[ContactTiming],
    circumstances: Circumstances,
    curve: StarCurve,
    words: str,
) -> tuple[Finding, ...]:
    found = []
    for timing in timings:
        late = timing.stamped_tt_s - timing.predicted_tt_s
        sigma = float(np.hypot(timing.sigma_s, timing.predicted_sigma_s))
        if np.isfinite(late) and abs(late) > FAR_SIGMA * sigma:
            sentence = (
                f"the {timing.name} of {name} came {abs(late):.2f} s {'later' if late > 0 else 'earlier'} than "
                f"predicted, {abs(late) / sigma:.0f} sigma: the frames' clock, the site, or the prediction is off."
            )
            odds = float(min(np.exp(0.5 * min((late / sigma) ** 2, 80.0)), 1e12))
            found.append(Finding("off-prediction", odds, sentence, late, sigma, "s"))
    missing = [
        instant
        for instant in circumstances.instants
        if instant.name in ("disappearance", "reappearance")
        and instant.visible
        and not any(timing.name == instant.name for timing in timings)
        and curve.start_tt_s[0] + WITHIN_SIGMA * instant.sigma_s < instant.tt_s
        and instant.tt_s < curve.start_tt_s[-1] - WITHIN_SIGMA * instant.sigma_s
    ]
    if missing and not timings:
        names = " and no ".join(i.name for i in missing)
        dim = _dim_frames(curve.flux)
        if dim:
            sentence = f"{name} is dim in {dim} of {len(curve.flux)} frames, but no {names} can be told"
        else:
            sentence = f"{name} shows no {names} in {len(curve.flux)} frames"
        # what visibly dims is not called steady
        kind = "event-unclear" if dim else "no-event"
        found.append(Finding(kind, float("nan"), f"{sentence}: {words}." if words else f"{sentence}."))
    elif missing:
        names = " and ".join(i.name for i in missing)
        found.append(
            Finding("event-not-seen", float("nan"), f"the {names} of {name} is not seen in the frames.")
        )
    return tuple(found)


def _dim_frames(flux: np.ndarray) -> int:
    """Return how many frames show less than half of the star's whole light, where noise does not."""
    good = flux[np.isfinite(flux)]
    if good.size < LEAST_FRAMES:
        return 0
    # a star that goes within two frames of an end shines there alone
    whole = max(float(np.quantile(good, 0.9)), float(good[:2].max()), float(good[-2:].max()))
    return int(np.sum(good < 0.5 * whole)) if whole > DIM_SIGNAL * _scatter(good) else 0


def _told(name: str, curve: StarCurve, words: str) -> str:
    """Return the verdict on the curve in one sentence."""
    from planner.sky.timescale import utc_iso

    if not curve.timings:
        dim = _dim_frames(curve.flux)
        if dim:
            return f"{name} is dim in {dim} of {len(curve.flux)} frames, but no instant can be told: {words}."
        return f"{name} neither went out nor came back in {len(curve.flux)} frames" + (
            f": {words}." if words else "."
        )
    parts = []
    for timing in curve.timings:
        verb = "went out" if timing.name == "disappearance" else "came back"
        digits = int(np.clip(1 - np.floor(np.log10(timing.sigma_s)), 1, 4))
        stamp = str(utc_iso(timing.stamped_tt_s, digits))
        text = f"{verb} at {stamp.split('T')[1].rstrip('Z')} ± {timing.sigma_s:.{digits}f} s"
        if np.isfinite(timing.predicted_tt_s):
            late = timing.stamped_tt_s - timing.predicted_tt_s
            text += f" ({with_sigma(late, float(np.hypot(timing.sigma_s, timing.predicted_sigma_s)))} s from predicted)"
        parts.append(text)
    return f"{name} {' and '.join(parts)}, by the frames' clock."
