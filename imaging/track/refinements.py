"""Finer findings: what is wrong with clock, site or camera once the track as a whole is understood."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from imaging.track.displaced import displaced_site, km_per_degree
from imaging.track.findings import DAY_S, MOST_ODDS, SLIP, SMALL_CLOCK_S, Finding, Question, Reading, odds
from imaging.track.fit import Priors, fit_track
from imaging.track.measurement import Measurement
from imaging.track.nominal import Promise
from imaging.track.result import duration_text, with_sigma
from planner.errors import NoSolutionError
from planner.sequence.models import Plan

NAN = float("nan")
CLAIM_SIGMA = 5.0
CLOCK_SIGMA = 3.0
START_ODDS = 20.0  # for half an exposure, over a wrong clock
HALF_EXPOSURE = np.log(
    0.05
)  # how often it is the exposure that is misread, when a clock seems off: our judgement
ANOTHER_DATE_S = 2.0 * DAY_S


@dataclass(frozen=True)
class ClockFindings:
    """Drift of the clock in seconds a day (positive: gaining), and findings about clock and site."""

    drift_s_day: float
    drift_sigma_s_day: float
    findings: tuple[Finding, ...]


@dataclass(frozen=True)
class CameraFindings:
    """Scale and direction of *up*, and findings about the camera."""

    scale_arcsec_px: float
    scale_sigma_arcsec_px: float
    up_pa_deg: float
    up_pa_sigma_deg: float
    findings: tuple[Finding, ...]


def clock_findings(reading: Reading, plan: Plan, promise: Promise, question: Question) -> ClockFindings:
    """Return offset, drift, a start taken for a middle, and a displaced site; after a slip, what is wrong beyond it."""
    findings: list[Finding] = []
    offset, sigma = reading.fit.value["clock_s"], reading.fit.sigma["clock_s"]
    if reading.name == "clock-far-off":
        findings.append(_offset_finding(reading.clock_offset_s, sigma))
    elif abs(offset) > CLOCK_SIGMA * sigma:
        start, perhaps = _start_for_middle(reading, plan, question)
        if start is None:
            start = _offset_finding(offset, sigma, beyond=reading.name != "plain")
            start = replace(start, sentence=f"{start.sentence} {perhaps}".strip())
        findings.append(start)
    drift, drift_sigma = _drift(reading, question)
    if np.isfinite(drift_sigma) and abs(drift) > CLAIM_SIGMA * drift_sigma:
        way = "gains" if drift > 0 else "loses"
        text = f"The frames' clock {way} {with_sigma(abs(drift), drift_sigma)} s a day."
        findings.append(
            Finding(
                "clock-drift",
                odds(0.5 * (drift / drift_sigma) ** 2 + SLIP),
                text,
                drift,
                drift_sigma,
                "s/day",
            )
        )
    moved = displaced_site(reading, promise, question)
    if moved is not None:
        findings.append(moved[0])
    return ClockFindings(drift, drift_sigma, tuple(findings))


def _offset_finding(offset: float, sigma: float, beyond: bool = False) -> Finding:
    """Return the finding of a clock error; `beyond`: one that is left when a slip is put right."""
    way = "fast: its stamps are later than UTC" if offset > 0 else "slow: its stamps are earlier than UTC"
    text = (
        f"The frames' clock is {with_sigma(abs(offset), sigma)} s {way}. "
        "`--apply clock` writes a track with the times put right."
    )
    if beyond:
        text = text.replace("The frames'", "Beyond that the frames'", 1)
    if abs(offset) >= SMALL_CLOCK_S:
        text = text.replace(" s fast", f" s ({duration_text(abs(offset))}) fast").replace(
            " s slow", f" s ({duration_text(abs(offset))}) slow"
        )
    weight = 0.5 * (offset / sigma) ** 2 + np.log(sigma / max(SMALL_CLOCK_S, sigma))
    return Finding("clock-offset", odds(weight), text, offset, sigma, "s")


def _refit(reading: Reading, priors: Priors, clock_s: np.ndarray | float, **more):  # type: ignore[no-untyped-def]
    try:
        return fit_track(reading.sightings, reading.path, priors, clock_s, **more)
    except (NoSolutionError, np.linalg.LinAlgError):
        return None


def _start_for_middle(reading: Reading, plan: Plan, question: Question) -> tuple[Finding | None, str]:
    """Return the finding that half the exposure explains the offset, and words for a clock's own where it may.

    Exposures that differ tell the two apart. Where all are alike nothing but the promise of the rig's clock does, and
    either finding says that the other is possible, and at which odds.
    """
    s, used = reading.sightings, reading.fit.used
    half, sigma = s.exposure_s / 2.0, reading.fit.sigma["clock_s"]
    typical = float(np.median(half[used]))
    if typical < 3.0 * sigma:
        return None, ""
    tight = question.priors(max(plan.rig.clock.sigma_s, 0.05))
    free = _refit(reading, question.priors(SMALL_CLOCK_S), reading.clock_s)
    tried = [(sign, _refit(reading, tight, reading.clock_s + sign * half)) for sign in (-1.0, 1.0)]
    weighed = [(fit.log_evidence, sign) for sign, fit in tried if fit is not None]
    if free is None or not weighed:
        return None, ""
    evidence, sign = max(weighed)
    weight = evidence - free.log_evidence + HALF_EXPOSURE
    which = "start" if sign < 0 else "end"
    slip = f"the {which} of each exposure was taken for its middle"
    alike = float(np.std(half[used])) < 3.0 * sigma
    if weight >= np.log(START_ODDS):
        text = f"{slip[0].upper()}{slip[1:]}: stamps are off by half the exposure ({typical:.3g} s)"
        if alike:
            way = "slow" if sign < 0 else "fast"
            text += (
                f". All exposures are alike, so that a clock {typical:.3g} s {way} would look the same: the odds "
                "hold what the rig's clock promises."
            )
        else:
            text += ", as exposures that differ tell: against a clock that is wrong by chance as much."
        return Finding("start-for-middle", odds(weight), text, sign * typical, NAN, "s"), ""
    if not alike or weight < -np.log(START_ODDS):
        return None, ""
    ratio = f"{np.exp(abs(weight)):.2g} to 1 {'for' if weight > 0 else 'against'}"
    return None, f"Or {slip} ({typical:.3g} s): exposures that are all alike cannot tell; odds {ratio} that."


def _drift(reading: Reading, question: Question) -> tuple[float, float]:
    """Return the drift in seconds a day with its sigma; NaN when the frames are too few to tell."""
    s = reading.sightings
    if reading.fit.used.sum() < 6 or np.ptp(s.tt_s) < 60.0:
        return NAN, NAN
    fit = _refit(reading, replace(question.priors(DAY_S), drift=1e-2), reading.clock_s)
    if fit is None:
        return NAN, NAN
    return fit.value["drift"] * DAY_S, fit.sigma["drift"] * DAY_S


def camera_findings(reading: Reading, plan: Plan, chosen: Sequence[Measurement]) -> CameraFindings:
    """Return what the frames say about scale, orientation and mirroring against the rig file."""
    if chosen[0].stars is not None:
        return _star_camera(plan, chosen)
    fit = reading.fit
    nominal = chosen[0].nominal
    scale = nominal.scale_arcsec_px * float(np.exp(fit.value["log_scale"]))
    sigma = scale * fit.sigma["log_scale"]
    flipped = reading.name == "mirrored"
    rotation = (-nominal.rotation_deg if flipped else nominal.rotation_deg) + fit.value["rotation_deg"]
    up = (rotation + (180.0 if chosen[0].row_zero == "top" else 0.0)) % 360.0
    findings = _scale_findings(scale / nominal.scale_arcsec_px, sigma / nominal.scale_arcsec_px, plan)
    turned = abs(fit.value["rotation_deg"])
    if not flipped and turned > max(5.0, CLAIM_SIGMA * fit.sigma["rotation_deg"]):
        findings.append(_rotation_finding(up, fit.sigma["rotation_deg"], turned))
    return CameraFindings(scale, sigma, up, fit.sigma["rotation_deg"], tuple(findings))


def _rotation_finding(up: float, sigma: float, turned: float) -> Finding:
    text = f"Up in the frames points to position angle {with_sigma(up, sigma)}°, {turned:.1f}° from what the plan says."
    return Finding("camera-turned", MOST_ODDS, text, up, sigma, "deg")


def _scale_findings(ratio: float, sigma: float, plan: Plan) -> list[Finding]:
    if abs(ratio - 1.0) < max(0.005, CLAIM_SIGMA * sigma):
        return []
    focal = plan.rig.optics.focal_length_mm * plan.rig.optics.reducer / ratio
    text = (
        f"The scale is {100 * (ratio - 1):+.1f} % off the rig file: the focal length is {focal:.0f} mm, or the pixels "
        "or the binning are others than it says."
    )
    return [Finding("scale", odds(0.5 * ((ratio - 1) / sigma) ** 2), text, ratio, sigma, "ratio")]


def _star_camera(plan: Plan, chosen: Sequence[Measurement]) -> CameraFindings:
    plates = [(m, m.stars) for m in chosen if m.stars is not None]
    ratio = np.array([stars.scale_arcsec_px / m.nominal.scale_arcsec_px for m, stars in plates])
    scale = np.array([stars.scale_arcsec_px for _, stars in plates])
    n = len(plates)
    sigma = float(np.std(scale, ddof=1) / np.sqrt(n)) if n > 2 else NAN
    findings = _scale_findings(float(np.median(ratio)), max(float(np.std(ratio)), 1e-4), plan)
    flipped = np.mean([stars.parity != m.nominal.parity for m, stars in plates])
    if flipped > 0.5:
        findings.append(
            Finding(
                "mirrored",
                MOST_ODDS,
                "The frames are mirrored: left and right are swapped against what the rig file says "
                f"(by the stars of {round(flipped * n)} of {n} frames).",
            )
        )
    away = np.array([(stars.rotation_deg - m.nominal.rotation_deg + 180) % 360 - 180 for m, stars in plates])
    # a mount that flips turns the frames by 180 degrees, and the plan knows it: the difference does not
    first = plates[0][0]
    up = first.nominal.rotation_deg + float(np.mean(away)) + (180.0 if first.row_zero == "top" else 0.0)
    up_sigma = float(np.std(away, ddof=1) / np.sqrt(n)) if n > 2 else NAN
    if flipped > 0:
        up, up_sigma = plates[0][1].rotation_deg + (180.0 if first.row_zero == "top" else 0.0), NAN
    up %= 360.0
    if flipped < 0.5 and abs(np.median(away)) > 5.0:
        findings.append(_rotation_finding(up, up_sigma, float(abs(np.median(away)))))
    return CameraFindings(float(np.mean(scale)), sigma, up, up_sigma, tuple(findings))


def frame_findings(measurements: Sequence[Measurement], plan: Plan) -> list[Finding]:
    """Return what the files themselves say before anything is compared: site, date, order."""
    findings: list[Finding] = []
    sites = {m.site for m in measurements if m.site is not None}
    away = [_away_km(site, plan) for site in sites]
    if away and min(away) > 1.0:
        text = (
            f"The frames say they were taken {min(away):,.0f} km from the plan's site; plan for the right site, or "
            "check the file headers."
        )
        findings.append(Finding("site-differs", NAN, text, min(away), NAN, "km"))
    findings += _date_findings(measurements, plan)
    order = [m.time.middle_tt_s for m in measurements]
    if any(b < a for a, b in pairwise(order)):
        text = "The files' names are not in the order of their times; frames are shown by time."
        findings.append(Finding("out-of-order", NAN, text))
    return findings


def _date_findings(measurements: Sequence[Measurement], plan: Plan) -> list[Finding]:
    """Return a finding when the frames lie days away from all that was planned."""
    from planner.sequence.frametimes import frame_starts

    start = frame_starts(plan)[2]
    if not measurements or not start.size:
        return []
    stamps = np.array([m.time.middle_tt_s for m in measurements])
    early, late = start.min() - stamps.max(), stamps.min() - start.max()
    away = max(early, late)
    if away < ANOTHER_DATE_S:
        return []
    side = "before the first" if early > late else "after the last"
    text = (
        f"All frames are stamped {duration_text(away)} {side} planned frame: the plan is for another date, or the "
        "camera's date is wrong."
    )
    return [Finding("another-date", NAN, text, away, NAN, "s")]


def _away_km(site: tuple[float, float, float], plan: Plan) -> float:
    north_km_deg, east_km_deg = km_per_degree(plan.site.latitude_deg)
    lon = (site[1] - plan.site.longitude_deg + 180.0) % 360.0 - 180.0
    return float(np.hypot((site[0] - plan.site.latitude_deg) * north_km_deg, lon * east_km_deg))


def majority_camera(measurements: Sequence[Measurement]) -> tuple[str | None, tuple[int, int]] | None:
    """Return camera and shape of most of the frames, None when there are no frames."""
    kinds = Counter((m.camera, m.shape) for m in measurements)
    return kinds.most_common(1)[0][0] if kinds else None
