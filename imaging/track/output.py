"""What a check leaves behind: track.ecsv, plate solutions, figures, report, and the same for machines."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from imaging.track.figures import save_figures
from imaging.track.measurement import Measurement
from imaging.track.report import write_report
from imaging.track.result import CheckResult, ContactTiming
from imaging.track.startimes import StarCurve
from imaging.track.table import write_track
from planner.errors import NoSolutionError
from planner.outputs import refuse_existing, whole_file

TRACK, REPORT, APPLIED = "track.ecsv", "report.html", "track_clock.ecsv"
WCS_FOLDER, FIGURES_FOLDER = "wcs", "figures"
MOST_PICTURES = 400


def refuse_outputs(folder: Path, apply_what: str | None, force: bool) -> None:
    """Raise OutputExistsError before any work starts when a result stands in the folder already."""
    for name in (TRACK, REPORT, *([APPLIED] if apply_what else [])):
        refuse_existing(folder / name, force)


def write_outputs(
    result: CheckResult,
    measurements: Sequence[Measurement],
    folder: Path,
    apply_what: str | None = None,
    force: bool = False,
) -> dict[str, Path]:
    """Write everything and return the main files by name.

    Raises OutputExistsError, or NoSolutionError when the clock is to be applied but was not determined.
    """
    folder.mkdir(parents=True, exist_ok=True)
    rows = _with_solutions(result, measurements, folder, force)
    result = replace(result, rows=tuple(rows))
    written = {"track": folder / TRACK, "report": folder / REPORT}
    write_track(written["track"], result.rows, header_of(result), force)
    save_figures(result, folder / FIGURES_FOLDER, force=True)
    pictures = _chosen_pictures(result, measurements)
    write_report(result, written["report"], pictures, force)
    if apply_what == "clock":
        written["applied"] = folder / APPLIED
        _write_applied(result, written["applied"], force)
    return written


def _with_solutions(
    result: CheckResult, measurements: Sequence[Measurement], folder: Path, force: bool
) -> list[Any]:
    rows = []
    for row, m in zip(result.rows, measurements, strict=True):
        if m.stars is not None:
            name = f"{WCS_FOLDER}/{Path(m.file).name.replace('[', '_').replace(']', '')}.hdr"
            with whole_file(folder / name, force) as part:
                part.write_text(m.stars.header, encoding="ascii")
            row = replace(row, wcs_file=name)
        rows.append(row)
    return rows


def _chosen_pictures(result: CheckResult, measurements: Sequence[Measurement]) -> dict[int, Any]:
    """Return cut-outs by row: all that are not on track, and of the others as many as a page bears, evenly."""
    having = [number for number, m in enumerate(measurements) if m.cutout is not None]
    odd = [number for number in having if result.rows[number].verdict != "on-track"][:MOST_PICTURES]
    rest = [number for number in having if number not in set(odd)]
    room = MOST_PICTURES - len(odd)
    if len(rest) > room:
        rest = (
            [rest[i] for i in np.unique(np.linspace(0, len(rest) - 1, max(room, 0)).astype(int))]
            if room
            else []
        )
    return {number: measurements[number].cutout for number in sorted(odd + rest)}


def _write_applied(result: CheckResult, path: Path, force: bool) -> None:
    """Write a copy of the track with the clock offset taken off the times and off the residuals."""
    from planner.sky.timescale import utc_iso

    if not np.isfinite(result.clock_offset_sigma_s) or result.diagnosis is None:
        raise NoSolutionError("--apply clock: the clock offset was not determined by these frames")
    stamps = np.atleast_1d(utc_iso(result.times_tt_s - result.clock_offset_s, 3))
    fit = result.diagnosis.reading.fit
    measured = iter(range(len(fit.along_arcsec)))
    rows = []
    for row, stamp in zip(result.rows, stamps, strict=True):
        row = replace(row, utc_mid=str(stamp))
        if row.verdict != "unmeasured":
            at = next(measured)
            row = replace(
                row, along_arcsec=float(fit.along_arcsec[at]), across_arcsec=float(fit.across_arcsec[at])
            )
        rows.append(row)
    meta = header_of(result)
    meta["clock_applied_s"] = result.clock_offset_s
    meta["clock_offset_s"] = 0.0
    write_track(path, rows, meta, force)


def header_of(result: CheckResult) -> dict[str, Any]:
    """Return the header of track.ecsv: plain values, None where a number is unknown."""
    from planner.sky.timescale import utc_iso

    return {
        "title": result.title,
        "plan": result.plan_name,
        "family": result.family,
        "target": result.target,
        "reference": result.reference,
        "verdict": result.verdict,
        "clock_offset_s": _plain(result.clock_offset_s),
        "clock_offset_sigma_s": _plain(result.clock_offset_sigma_s),
        "clock_drift_s_day": _plain(result.clock_drift_s_day),
        "clock_drift_sigma_s_day": _plain(result.clock_drift_sigma_s_day),
        "rotation_deg": _plain(result.rotation_deg),
        "rotation_sigma_deg": _plain(result.rotation_sigma_deg),
        "scale_arcsec_px": _plain(result.scale_arcsec_px),
        "scale_sigma_arcsec_px": _plain(result.scale_sigma_arcsec_px),
        "rms_along_arcsec": _plain(result.rms_along_arcsec),
        "rms_across_arcsec": _plain(result.rms_across_arcsec),
        "scatter_arcsec": _plain(result.jitter_arcsec),
        "findings": [_finding(finding) for finding in result.findings],
        "contacts": [
            {
                "name": contact.name,
                "predicted_utc": str(utc_iso(contact.predicted_tt_s, 2)),
                "stamped_utc": str(utc_iso(contact.stamped_tt_s, 2)),
                "difference_s": _plain(contact.stamped_tt_s - contact.predicted_tt_s),
                "sigma_s": _plain(contact.sigma_s),
                **_of_light(contact),
            }
            for contact in result.contacts
        ],
        "light_curve": _light_curve(result.star),
        "set_aside": [{"file": aside.file, "reason": aside.reason} for aside in result.set_aside],
        "provenance": dict(result.provenance),
    }


def _of_light(contact: ContactTiming) -> dict[str, Any]:
    """Return what a contact read off a light curve has to tell besides."""
    from planner.sky.timescale import utc_iso

    if not np.isfinite(contact.false_alarm_log10):
        return {}
    return {
        "stamped_utc": str(utc_iso(contact.stamped_tt_s, 3)),
        "predicted_sigma_s": _plain(contact.predicted_sigma_s),
        "false_alarm_log10": contact.false_alarm_log10,
        "signal_to_noise": contact.signal_to_noise,
        "note": contact.note,
    }


def _light_curve(star: StarCurve | None) -> dict[str, Any] | None:
    """Return the target star's light for the header: one value a frame that holds its place, in time order."""
    from planner.sky.timescale import utc_iso

    if star is None:
        return None
    return {
        "told": star.told,
        "begin_utc": [str(each) for each in np.atleast_1d(utc_iso(star.start_tt_s, 4))],
        "exposure_s": [float(each) for each in star.exposure_s],
        "flux": [_rounded(each) for each in star.flux],
        "compared": star.compared,
        "aperture_px": star.aperture_px,
    }


def _rounded(value: float) -> float | None:
    return round(float(value), 5) if np.isfinite(value) else None


def json_of(result: CheckResult) -> dict[str, Any]:
    """Return what `check --json` prints: the counts, and the header of the track."""
    header = header_of(result)
    counts = {
        "frames": len(result.rows) + len(result.set_aside),
        "measured": result.measured,
        "on_track": result.on_track,
        "unmeasured": [
            {"file": row.file, "reason": row.reason} for row in result.rows if row.verdict == "unmeasured"
        ],
    }
    return {**counts, **header}


def _finding(finding) -> dict[str, Any]:  # type: ignore[no-untyped-def]
    plain = {"name": finding.name, "odds": _plain(finding.odds), "sentence": finding.sentence}
    if np.isfinite(finding.value):
        plain |= {"value": _plain(finding.value), "sigma": _plain(finding.sigma), "unit": finding.unit}
    return plain


def _plain(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None
