"""One frame measured: against the limb of a disc or against stars, as the family has it."""

from __future__ import annotations

import hashlib
from dataclasses import replace

import numpy as np

from imaging.frames.frame import Frame, FrameTime, Shutter
from imaging.stars.lens import LearnedLens
from imaging.track.cutout import Cutout, cut_out
from imaging.track.measure_disc import OnDisc
from imaging.track.measure_stars import AmongStars
from imaging.track.measurement import Measurement
from imaging.track.nominal import Promise
from imaging.track.starlight import StarCatcher
from planner.errors import InputError, NoSolutionError


class Measurer:
    """Measures the frames of one plan, one after the other; what one frame taught helps the next."""

    def __init__(self, promise: Promise, lens: LearnedLens | None = None):
        self.promise = promise
        self._on_disc, self._among_stars = OnDisc(promise), AmongStars(promise, lens)
        self._catcher = StarCatcher(promise) if promise.times_a_star else None

    def measure(self, frame: Frame, pictures: bool = False) -> Measurement:
        """Return what a frame gives; a frame that gives nothing says why. The frame must hold a time."""
        assert frame.time is not None
        blank = Measurement(
            file=frame.path.name,
            frame_index=frame.frame_index,
            time=frame.time,
            exposure_s=frame.exposure_s or 0.0,
            nominal=self.promise.of_frame(frame),
            shape=(frame.data.shape[0], frame.data.shape[1]),
            camera=frame.camera,
            site=frame.site,
            row_zero=frame.row_zero,
            digest=_digest(frame.data),
        )
        path = self.promise.path
        try:
            tt_s = np.array([frame.time.middle_tt_s])
            geometry, expected = path.geometry(tt_s), path.at(tt_s)
        except InputError as beyond:
            return replace(blank, reason=f"its time is beyond the ephemeris: {beyond}")
        try:
            if geometry.reference == "stars":
                done = self._among_stars.measure(frame, blank, geometry, expected)
            else:
                done = self._on_disc.measure(frame, blank, geometry, expected)
        except NoSolutionError as none:
            done = replace(blank, reason=str(none))
        if self._catcher is not None:
            found = self._among_stars.found if geometry.reference == "stars" else None
            done = replace(done, star=self._catcher.piece(frame, done, geometry, found))
        done = replace(done, time=self._time_at_target(frame, done))
        return replace(done, cutout=_picture(frame, done)) if pictures else done

    def _time_at_target(self, frame: Frame, m: Measurement) -> FrameTime:
        """Return when the target's own row was exposed: measured, else expected (rolling shutter)."""
        assert frame.time is not None
        y_px = m.y_px if m.measured else m.predicted_px[1]
        if not np.isfinite(y_px) and m.star is not None:
            y_px = m.star.y_px
        shutter = Shutter.of(self.promise.rig.sensor, frame.binning)
        return frame.time.at_row(y_px, frame.data.shape[0], frame.row_zero, shutter)


def _digest(data: np.ndarray) -> str:
    """Return a short name of the pixels; noise makes one row in many enough to tell two frames apart."""
    some = data[:: max(1, data.shape[0] // 256)]
    return hashlib.blake2b(np.ascontiguousarray(some).data, digest_size=12).hexdigest()


def _picture(frame: Frame, m: Measurement) -> Cutout | None:
    measured = (m.x_px, m.y_px) if m.measured else None
    predicted = m.predicted_px if np.isfinite(m.predicted_px).all() else None
    return cut_out(frame.data, frame.row_zero, measured, predicted)
