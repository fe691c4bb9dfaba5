"""What a check gives: rows, what was set aside, what was fitted, what was found."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from imaging.track.findings import Diagnosis, Finding
from imaging.track.measurement import AS_PREDICTED, LIGHT_ONLY
from imaging.track.table import TrackRow

if TYPE_CHECKING:
    from imaging.track.startimes import StarCurve


CLOCK_TOLD_S = 600.0  # a clock known no better is not told: its target hardly moves


@dataclass(frozen=True)
class SetAside:
    """A file, or a frame of it, that could not be used, and why."""

    file: str
    reason: str


@dataclass(frozen=True)
class ContactTiming:
    """One contact as the frames tell it, by their own clock.

    A star's is read off its light curve, with the chance that noise alone shows as much; others off the chord.
    """

    name: str
    predicted_tt_s: float
    stamped_tt_s: float
    sigma_s: float
    predicted_sigma_s: float = float("nan")
    false_alarm_log10: float = float("nan")
    signal_to_noise: float = float("nan")
    note: str = ""


@dataclass(frozen=True)
class CheckResult:
    """Everything that track.ecsv, the report and `check --json` show.

    `clock_offset_s`: frame stamps minus true UTC, NaN when not determined. `rms_along_arcsec`, `rms_across_arcsec`:
    after the fit. `times_tt_s`: (n,) mid-exposures of `rows`, as stamped. `line`: the predicted path over the
    frames' time, (k, 2), in (east, north) arcseconds or (ra, dec) degrees.
    """

    title: str
    family: str
    target: str
    reference: str
    plan_name: str
    rows: tuple[TrackRow, ...]
    times_tt_s: np.ndarray
    set_aside: tuple[SetAside, ...]
    diagnosis: Diagnosis | None
    findings: tuple[Finding, ...]
    clock_offset_s: float = float("nan")
    clock_offset_sigma_s: float = float("nan")
    clock_drift_s_day: float = float("nan")
    clock_drift_sigma_s_day: float = float("nan")
    rotation_deg: float = float("nan")
    rotation_sigma_deg: float = float("nan")
    scale_arcsec_px: float = float("nan")
    scale_sigma_arcsec_px: float = float("nan")
    rms_along_arcsec: float = float("nan")
    rms_across_arcsec: float = float("nan")
    jitter_arcsec: float = float("nan")
    contacts: tuple[ContactTiming, ...] = ()
    star: StarCurve | None = None
    line: np.ndarray = field(default_factory=lambda: np.empty((0, 2)))
    provenance: dict[str, Any] = field(default_factory=dict)

    @property
    def measured(self) -> int:
        """Number of frames with a measured place."""
        return sum(row.verdict != "unmeasured" for row in self.rows)

    @property
    def on_track(self) -> int:
        """Number of frames that follow the prediction, one clock error for all allowed."""
        return sum(row.verdict == "on-track" for row in self.rows)

    @property
    def failed(self) -> int:
        """Number of frames without a measured place in which one was to be seen; a star's light is enough."""
        excused = (AS_PREDICTED, LIGHT_ONLY)
        return sum(
            row.verdict == "unmeasured" and not any(words in row.reason for words in excused)
            for row in self.rows
        )

    @property
    def verdict(self) -> str:
        """The verdict in one sentence, with the numbers that matter; a star's instants before its places."""
        if not self.rows:
            return "No frame could be used."
        if self.star is None:
            return self._verdict_on_places
        if not self.measured:
            return self.star.told
        return f"{self.star.told} {self._verdict_on_places}"

    @property
    def _verdict_on_places(self) -> str:
        if not self.measured:
            return f"{proper(self.target)} was measured in none of {frames(len(self.rows))}."
        name = proper(self.target)
        if self.diagnosis is None or not self.diagnosis.explained:
            found = next((f for f in self.findings if f.name in ("unexplained", "ambiguous")), None)
            return found.sentence if found else f"The measured places do not follow the prediction of {name}."
        share = (
            f"all {frames(self.measured)}"
            if self.on_track == self.measured
            else f"{self.on_track} of {frames(self.measured)} measured"
        )
        size = np.hypot(self.rms_along_arcsec, self.rms_across_arcsec)
        reading = self.diagnosis.reading
        slip = (
            next((f.sentence for f in self.findings if f.name == reading.name), "").split(". ")[0].rstrip(".")
        )
        if reading.name == "wrong-body":
            return f"{slip} (in {frames(self.measured)})."
        if reading.name == "clock-far-off":
            slip = ""  # the clock is told below, with its number
        text = f"{slip}; read so, {name}" if slip else name
        text = f"{text} is on its predicted path in {share}, to {size:.2g} arcsec rms"
        if not self.clock_offset_sigma_s < CLOCK_TOLD_S:
            return text + "; the clock could not be judged."
        half = next((f for f in self.findings if f.name == "start-for-middle"), None)
        if half is not None:
            return f"{text}; {half.sentence[:1].lower()}{half.sentence[1:].split(':')[0]} ({abs(half.value):.2g} s)."
        whole = reading.clock_s if reading.name in ("zone", "date") else 0.0
        words = clock_words(self.clock_offset_s - whole, self.clock_offset_sigma_s)
        if whole:
            words = words.replace("the frames' clock", "the clock beyond that", 1)
        return f"{text}; {words}."


def proper(name: str) -> str:
    """Return a name as it is written in a sentence: `Mars`, `HIP 92855`."""
    return name.capitalize() if name.islower() else name


def frames(count: int) -> str:
    """Return `1 frame`, `2 frames`."""
    return f"{count} frame{'s' if count != 1 else ''}"


def with_sigma(value: float, sigma: float) -> str:
    """Return `7.31 ± 0.42`: two digits of the sigma decide the digits shown."""
    if not np.isfinite(sigma) or sigma <= 0:
        return f"{value:.3g}"
    digits = max(0, 1 - int(np.floor(np.log10(sigma))))
    return f"{value:.{digits}f} ± {sigma:.{digits}f}"


def duration_text(seconds: float) -> str:
    """Return a span in the unit a person would use."""
    size = abs(seconds)
    if size < 120:
        return f"{seconds:.3g} s"
    if size < 7200:
        return f"{seconds / 60:.3g} min"
    return f"{seconds / 3600:.3g} h" if size < 172800 else f"{seconds / 86400:.3g} days"


def clock_words(offset_s: float, sigma_s: float) -> str:
    """Return what the clock offset means, in words."""
    if abs(offset_s) < 3 * sigma_s:
        return f"the frames' clock is right as far as they tell (offset {with_sigma(offset_s, sigma_s)} s)"
    way = "fast" if offset_s > 0 else "slow"
    return f"the frames' clock is {with_sigma(abs(offset_s), sigma_s)} s {way}"
