"""What is exposed at the visits of a campaign: each pointing's frames, filter by filter, and how long they take."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import UTC, datetime, timedelta
from math import ceil

import numpy as np

from planner.sequence import exposure, radiometry
from planner.sequence.framing import field_of
from planner.sequence.models import Shot
from planner.sequence.motion import motion_at_rates
from planner.sequence.nights import Nights
from planner.sequence.recipes import tracking_of
from planner.sequence.setting import Setting
from planner.sequence.starfield import StarFrames, star_frames

_HALF_STEP_S = 60.0


@dataclass(frozen=True)
class Stops:
    """Every pointing of every visit in time order; arrays of shape (n,).

    `visit`: row among the visits. `slew_s`: before it, settling included; 0 where a visit begins. `target`: whether
    it is the pointing that the target's own frames are taken at; `holds_target`: whether the target is in its field.
    `off_axis_deg`: of the target from the middle of the frame.
    """

    visit: np.ndarray
    panel: tuple[str | None, ...]
    ra_deg: np.ndarray
    dec_deg: np.ndarray
    slew_s: np.ndarray
    target: np.ndarray
    holds_target: np.ndarray
    off_axis_deg: np.ndarray

    def __len__(self) -> int:
        """Give the number of pointings."""
        return len(self.visit)


@dataclass(frozen=True)
class _Through:
    """What is exposed through one filter at n pointings; arrays of shape (n,), NaN where there is no such frame."""

    filter: str | None
    frames: StarFrames
    planet_s: np.ndarray
    peak_e_s: np.ndarray
    tracked_e_s: np.ndarray


@dataclass(frozen=True)
class Exposures:
    """What one camera exposes at n pointings."""

    setting: Setting
    body: str
    through: tuple[_Through, ...]
    trail_px_s: np.ndarray
    gain: float

    @property
    def stars(self) -> np.ndarray:
        """Fewest stars for a plate solution among the filters, (n,)."""
        return np.min([each.frames.stars for each in self.through], axis=0)

    def shots(self, row: int, start_utc: datetime, reverse: bool) -> tuple[list[Shot], datetime]:
        """Return the shots of a pointing from a moment on, and when they are over; every other pointing in reverse.

        In reverse the first filter is the one the pointing before ended with, which saves a step.
        """
        shots: list[Shot] = []
        moment = start_utc
        order = self.through[::-1] if reverse else self.through
        for number, through in enumerate(order):
            if number:
                moment += timedelta(
                    seconds=ceil(
                        self.setting.rig.filter_step_s(order[number - 1].filter, through.filter) - 1e-9
                    )
                )
            for name, exposure_s, count in self._kinds(through, row):
                shot = self._shot(through, row, name, exposure_s, count, moment)
                shots.append(shot)
                moment += timedelta(seconds=ceil(shot.cadence_s * count))
        return shots, moment

    def busy_s(self, row: int) -> float:
        """Return how long the shots of a pointing take."""
        zero = datetime(2000, 1, 1, tzinfo=UTC)
        return (self.shots(row, zero, False)[1] - zero).total_seconds()

    def _kinds(self, through: _Through, row: int) -> list[tuple[str, float, int]]:
        wish = self.setting.wish
        kinds = [("stars", exposure.rounded_up(float(through.frames.exposure_s[row])), wish.frames_per_visit)]
        if np.isfinite(through.planet_s[row]):
            count = wish.planet_frames or wish.frames_per_visit
            kinds.append(("planet", exposure.rounded_down(float(through.planet_s[row])), count))
        if wish.deep_frames:
            longest_s = exposure.rounded_down(float(through.frames.longest_s[row]))
            kinds.append(("deep", longest_s, wish.deep_frames))
        return kinds

    def _shot(
        self, through: _Through, row: int, name: str, exposure_s: float, count: int, start_utc: datetime
    ) -> Shot:
        setting = self.setting
        cadence_s = ceil((exposure_s + setting.rig.sensor.readout_s) * 10 - 1e-9) / 10 + 1.0
        peaks = through.tracked_e_s if exposure_s > radiometry.TRACKED_FROM_S else through.peak_e_s
        peak_e_s = float(peaks[row])
        return Shot(
            name=name if len(self.through) == 1 else f"{through.filter}, {name}",
            start_utc=start_utc,
            cadence_s=round(cadence_s, 3),
            count=count,
            exposure_s=exposure_s,
            gain=self.gain,
            filter=through.filter,
            tracking=tracking_of(setting, "field"),
            peak_of=self.body if peak_e_s > 0 else None,
            peak_e=float(f"{exposure_s * peak_e_s:.4g}") if peak_e_s > 0 else None,
            trail_px=float(f"{exposure_s * self.trail_px_s[row]:.2g}"),
        )


def exposures_at(setting: Setting, visits: Nights, stops: Stops) -> Exposures:
    """Return what a camera exposes at every pointing of the visits."""
    from planner.sky.places import altaz

    gain = setting.gain_for_faint()
    rows = stops.visit
    geometry = setting.geometry(visits.tt_s[rows])
    disc = geometry.discs[geometry.target]
    altitude_deg = geometry.altitude_deg
    if any(stops.panel):
        altitude_deg, _ = altaz((stops.ra_deg, stops.dec_deg), setting.observer, geometry.tt_s)
    trail = _trail_px_s(setting, visits)[rows]
    through = []
    for each in setting.in_turn():
        seen = (each.rig, each.site, each.through, disc.name, disc, geometry.altitude_deg)
        corner = radiometry.vignetting_factor(each.rig, stops.off_axis_deg / field_of(each.rig).radius_deg)
        peak, tracked = (exposure.peak_rate_e_s(*seen, long) * corner for long in (False, True))
        there = replace(geometry, altitude_deg=np.maximum(altitude_deg, 1.0))
        frames = star_frames(each, there, stops.ra_deg, stops.dec_deg, peak, trail, gain)
        if any(stops.panel):
            # the panels of one picture are exposed alike: for the one that needs most, within what all can bear
            alike_s = np.minimum(
                _of_visits(np.maximum, frames.exposure_s, rows),
                _of_visits(np.minimum, frames.longest_s, rows),
            )
            frames = star_frames(each, there, stops.ra_deg, stops.dec_deg, peak, trail, gain, alike_s)
        peak, tracked = (np.where(stops.holds_target, rate, 0.0) for rate in (peak, tracked))
        needed = stops.target & (frames.clips_too_much | (each.wish.planet_frames > 0))
        planet_s = exposure.wanted_exposure_s(
            each.rig, np.maximum(peak, 1e-12), each.wish.well_fraction, gain
        )
        through.append(_Through(each.filter_name, frames, np.where(needed, planet_s, np.nan), peak, tracked))
    return Exposures(setting, disc.name, tuple(through), trail, gain)


def _of_visits(extreme: np.ufunc, values: np.ndarray, visit: np.ndarray) -> np.ndarray:
    """Return the least or greatest value of each visit, for every pointing of it."""
    first = np.flatnonzero(np.diff(visit, prepend=-1))
    return extreme.reduceat(values, first)[np.cumsum(np.diff(visit, prepend=-1) > 0) - 1]


def _trail_px_s(setting: Setting, visits: Nights) -> np.ndarray:
    """Return how fast stars and planet trail in the frame, pixels a second at the corner."""
    from planner.sky.places import offsets_arcsec

    before, after = (
        setting.geometry(visits.tt_s + step_s).discs[visits.disc.name]
        for step_s in (-_HALF_STEP_S, _HALF_STEP_S)
    )
    east, north = offsets_arcsec(before.ra_deg, before.dec_deg, after.ra_deg, after.dec_deg)
    rates = (east / (2 * _HALF_STEP_S), north / (2 * _HALF_STEP_S))
    place = (visits.disc.ra_deg, visits.disc.dec_deg)
    tracking = tracking_of(setting, "field")
    moving = motion_at_rates(setting.rig, setting.observer, tracking, place, rates, visits.tt_s)
    return moving.trail_px(setting.rig, 1.0, corner=True)
