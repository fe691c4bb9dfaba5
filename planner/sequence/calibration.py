"""Calibration frames that belong to a plan; numbers are common practice, no source."""

from __future__ import annotations

from planner.sequence.models import CalibrationSet, Passage
from planner.sequence.setting import Setting

_BIASES, _DARKS, _FLATS = 50, 20, 25
_DARK_FROM_S = 0.5


def calibration_of(setting: Setting, passages: list[Passage]) -> list[CalibrationSet]:
    """Return biases and flats for each gain and filter used, and darks where exposures are long enough to need them."""
    shots = [shot for passage in passages for shot in passage.shots]
    sets = []
    for gain in sorted({shot.gain for shot in shots}):
        sets.append(
            CalibrationSet(
                kind="bias",
                count=_BIASES,
                exposure_s=setting.rig.sensor.min_exposure_s,
                gain=gain,
                text="covered, shortest exposure",
            )
        )
        exposures = [
            shot.exposure_s for shot in shots if shot.gain == gain and shot.exposure_s >= _DARK_FROM_S
        ]
        if exposures:
            sets.append(
                CalibrationSet(
                    kind="dark",
                    count=_DARKS,
                    exposure_s=max(exposures),
                    gain=gain,
                    text="covered, at the sensor temperature of the frames; scale to the shorter exposures",
                )
            )
    for name in sorted({shot.filter or "" for shot in shots}):
        how = (
            "of an even field through the front filter, the optics pointed away from the Sun's disc"
            if setting.family.reference == "sun"
            else "of an evenly lit screen or the twilight sky"
        )
        sets.append(
            CalibrationSet(
                kind="flat",
                count=_FLATS,
                filter=name or None,
                gain=shots[0].gain,
                text=f"{how}, camera and focus untouched, half the range",
            )
        )
    return sets
