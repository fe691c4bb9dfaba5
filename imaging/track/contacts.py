"""Contacts as the frames time them: the chord of the target against the limb of the reference disc.

Distances in units of the fitted limb radius need neither clock, rotation nor scale. Squared, they are a parabola in
time plus what the prediction knows of parallax; so the difference of observed and predicted squares is fitted as a
parabola (a straight line when the frames lie on one side), and its crossings of (1 +- k)^2 are the contacts, k the
ratio of the predicted semidiameters. No drop that joins planet and limb enters: only centres do.
"""

from __future__ import annotations

import numpy as np

from imaging.track.findings import Reading
from imaging.track.nominal import Promise
from imaging.track.path import tangent_offsets, target_place, unit_vectors
from imaging.track.result import ContactTiming
from planner.sequence.models import Plan

LEAST_FRAMES = 4
LIMB_SIGMA_PX = 0.08  # bias of fitted radii at several scales of rehearsed frames (docs/track.md)
REACH = 0.35  # of the chord's length, how far from the nearest frame a contact may lie
CONTACTS = {
    "contact_1": (+1, "outer"),
    "contact_2": (-1, "inner"),
    "contact_3": (-1, "inner"),
    "contact_4": (+1, "outer"),
    "disappearance_start": (+1, "outer"),
    "disappearance_end": (-1, "inner"),
    "reappearance_start": (-1, "inner"),
    "reappearance_end": (+1, "outer"),
    "disappearance": (0, "center"),
    "reappearance": (0, "center"),
}


def time_contacts(
    reading: Reading, promise: Promise, plan: Plan, scale_arcsec_px: float, center_sigma_arcsec: float = 0.0
) -> tuple[ContactTiming, ...]:
    """Return the contacts that the frames reach, in time order; none on a path among stars.

    Sigmas hold the measured scatter, and what the fitted limb may be off by in all frames alike: its radius
    (LIMB_SIGMA_PX at the frames' own scale), which moves contacts on one side later and on the other earlier, and its
    centre (`center_sigma_arcsec`).
    """
    sightings, used = reading.sightings, reading.fit.used
    if not sightings.on_disc or used.sum() < LEAST_FRAMES:
        return ()
    from planner.events.catalogue import family
    from planner.sequence.documents import observer_of
    from planner.sequence.frametimes import planned_event

    circumstances = family(plan.event.family).predict(planned_event(plan), observer_of(plan.site))
    instants = [instant for instant in circumstances.instants if instant.name in CONTACTS]
    if not instants:
        return ()
    s = sightings.part(used)
    chord = _Chord(s, reading, float(np.hypot(LIMB_SIGMA_PX * scale_arcsec_px, center_sigma_arcsec)))
    timings = []
    span = max(i.tt_s for i in instants) - min(i.tt_s for i in instants)
    for instant in instants:
        sign = CONTACTS[instant.name][0]
        guess = instant.tt_s + reading.clock_offset_s
        if np.min(np.abs(s.tt_s - guess)) > max(REACH * span, 300.0):
            continue
        stamped, sigma = chord.crossing(guess, sign)
        if np.isfinite(stamped):
            timings.append(ContactTiming(instant.name, instant.tt_s, stamped, sigma))
    return tuple(timings)


class _Chord:
    """The fitted parabola of squared distance, observed minus predicted."""

    def __init__(self, s, reading: Reading, limb_sigma_arcsec: float):  # type: ignore[no-untyped-def]
        self.path, self.clock_s = reading.path, reading.clock_offset_s
        radius = _radius_arcsec(s, self.path)
        self.limb_share = limb_sigma_arcsec / float(np.median(radius))
        seen = np.hypot(s.east_arcsec, s.north_arcsec) / radius
        predicted, _, shrink = self.predicted(s.tt_s)
        measured = seen / shrink
        unit = s.places / np.hypot(s.east_arcsec, s.north_arcsec)[:, None]
        variance = np.einsum("ni,nij,nj->n", unit, s.covariance_arcsec2, unit) + reading.fit.jitter_arcsec**2
        sigma = 2 * measured * np.sqrt(variance) / radius
        self.middle, self.half = float(np.mean(s.tt_s)), max(float(np.ptp(s.tt_s)) / 2, 1.0)
        long = np.ptp(predicted) > 0.3 and len(s) >= 8
        self.degree = 2 if long else 1
        design = self.basis(s.tt_s)
        self.covariance = np.linalg.inv(design.T @ (design / sigma[:, None] ** 2))
        self.value = self.covariance @ (design.T @ ((measured**2 - predicted**2) / sigma**2))
        residual = (measured**2 - predicted**2 - design @ self.value) / sigma
        freedom = len(s) - self.degree - 1
        if freedom > 2:
            self.covariance *= max(1.0, float(residual @ residual) / freedom) * freedom / (freedom - 2)

    def basis(self, tt_s):  # type: ignore[no-untyped-def]
        x = (np.atleast_1d(tt_s) - self.middle) / self.half
        return np.stack([x**power for power in range(self.degree + 1)], axis=1)

    def predicted(self, stamped_tt_s):  # type: ignore[no-untyped-def]
        """Return true distance in limb radii, ratio of semidiameters, and by what refraction shrinks the distance."""
        t = np.atleast_1d(stamped_tt_s) - self.clock_s
        geometry = self.path.geometry(t)
        disc = geometry.discs[geometry.reference]
        ra, dec, semidiameter = target_place(geometry)
        east, north = tangent_offsets(disc.ra_deg, disc.dec_deg, unit_vectors(ra, dec))
        expected = self.path.at(t)
        true = np.hypot(east, north)
        shrink = np.hypot(expected.east_arcsec, expected.north_arcsec) / true
        return true / disc.semidiameter_arcsec, semidiameter / disc.semidiameter_arcsec, shrink

    def crossing(self, guess_tt_s: float, sign: int) -> tuple[float, float]:
        """Return (stamped instant, sigma_s) at which the squared distance is (1 + sign k)^2, near a guess."""
        t, step = guess_tt_s, 0.5
        for _ in range(20):
            around = np.array([t - step, t, t + step])
            distance, ratio, _ = self.predicted(around)
            excess = distance**2 + self.basis(around) @ self.value - (1 + sign * ratio) ** 2
            slope = (excess[2] - excess[0]) / (2 * step)
            if slope == 0 or not np.isfinite(slope):
                return float("nan"), float("nan")
            move = float(np.clip(-excess[1] / slope, -300.0, 300.0))
            t += move
            if abs(move) < 1e-3:
                break
        else:
            return float("nan"), float("nan")
        basis = self.basis(t)[0]
        limb = 2.0 * float(distance[1]) ** 2 * self.limb_share
        return t, float(np.sqrt(basis @ self.covariance @ basis + limb**2) / abs(slope))


def _radius_arcsec(s, path) -> np.ndarray:  # type: ignore[no-untyped-def]
    """Return the limb's radius on the nominal scale of the sightings, by the radii of all frames together."""
    semidiameter = s.semidiameter_arcsec
    if semidiameter is None:
        semidiameter = path.at(s.tt_s).reference_semidiameter_arcsec
    good = np.isfinite(s.log_scale) & (s.log_scale_sigma > 0)
    weight = s.log_scale_sigma[good] ** -2.0
    return semidiameter * np.exp(-np.average(s.log_scale[good], weights=weight))
