"""What a plan asks of camera and computer: the buffer frame by frame, the disk, the battery."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta

import numpy as np

from planner.sequence.models import Passage, Plan, Rig, Shot

_HEADER_BYTES = 5760  # two blocks of a FITS header


def frame_bytes(rig: Rig) -> int:
    """Return the size of a frame as stored: whole bytes a sample, without compression, and a header."""
    sensor = rig.sensor
    return sensor.width_px * sensor.height_px * (-(-sensor.bit_depth // 8)) + _HEADER_BYTES


def shot_end_utc(shot: Shot) -> datetime:
    """Return when the last exposure of a shot ends."""
    return shot.start_utc + timedelta(seconds=shot.cadence_s * (shot.count - 1) + shot.exposure_s)


def end_utc(passage: Passage) -> datetime:
    """Return when the last exposure of a passage ends."""
    return max(shot_end_utc(shot) for shot in passage.shots)


@dataclass(frozen=True)
class Load:
    """The camera's buffer after each frame, in frames waiting; arrays of shape (n,)."""

    ready_tt_s: np.ndarray
    waiting: np.ndarray

    @property
    def most(self) -> int:
        """Most frames waiting at once."""
        return int(self.waiting.max()) if len(self.waiting) else 0


def buffer_load(ready_tt_s: np.ndarray, drain_frames_s: float) -> Load:
    """Return how a buffer fills when frames become ready at these times (sorted) and drain one by one at a rate.

    Frame i leaves at (i + 1) / rate + max over j <= i of (ready_j - j / rate): the queue solved without a loop.
    """
    index = np.arange(len(ready_tt_s))
    # times from the first frame keep the resolution of small differences
    ready = ready_tt_s - ready_tt_s[0] if len(ready_tt_s) else ready_tt_s
    left = (index + 1) / drain_frames_s + np.maximum.accumulate(ready - index / drain_frames_s)
    gone = np.searchsorted(left, ready + 1e-9, side="right")
    return Load(ready_tt_s, index + 1 - gone)


def overlaps(
    start_tt_s: np.ndarray, exposure_s: np.ndarray, readout_s: float, between_s: np.ndarray | float = 0.0
) -> np.ndarray:
    """Return the indices of frames (in time order) that would begin before the one before them is read out.

    `between_s`: what must be done before each but the first beside that, such as changing a filter; shape (n - 1,).
    """
    free = start_tt_s[:-1] + exposure_s[:-1] + readout_s + between_s
    return np.flatnonzero(start_tt_s[1:] < free - 1e-4) + 1


def energy_wh(plan: Plan) -> float:
    """Return the energy from half an hour before the first frame to the end of the longest unbroken session."""
    power = plan.rig.power
    longest = 0.0
    begun: datetime | None = None
    last: datetime | None = None
    for passage in plan.passages:
        start = min(shot.start_utc for shot in passage.shots)
        if begun is None or last is None or (start - last).total_seconds() > 6 * 3600:
            begun = start
        last = end_utc(passage)
        longest = max(longest, (last - begun).total_seconds())
    return (longest / 3600 + 0.5) * (power.draw_w + power.dew_heater_w)
