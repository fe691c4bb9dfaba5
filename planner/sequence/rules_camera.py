"""Rules about camera and computer: signal, buffer, disk, battery, shutter, and frames that collide."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from planner.sequence import radiometry
from planner.sequence.capacity import buffer_load, energy_wh, frame_bytes, overlaps
from planner.sequence.feasibility import Case
from planner.sequence.models import Finding, Plan, Shot

_FAINT_WELL_FRACTION = 0.02
_FINE_SAMPLING, _COARSE_SAMPLING = 6.0, 1.2
_UTC = "%Y-%m-%d %H:%M:%S"


def _kind(shot: Shot) -> str:
    """Return the last part of a shot's name, which says what kind of frame it is, without its number."""
    return shot.name.rsplit(", ", 1)[-1].rstrip("0123456789 ")


def _utc(tt_s: float) -> str:
    from planner.sky.timescale import utc_iso

    return utc_iso(tt_s, 0)


def shots_collide(case: Case) -> Iterator[Finding]:
    """A frame would begin before the one before it is read out."""
    passage, shot, start, exposure = case.frames
    readout_s, between_s = case.plan.rig.sensor.readout_s, _changes_s(case.plan, passage, shot)
    wrong = overlaps(start, exposure, readout_s, between_s)
    if len(wrong):
        first = int(wrong[0])
        short = start[first - 1] + exposure[first - 1] + readout_s + between_s[first - 1] - start[first]
        yield Finding(
            rule="shots-collide",
            level="error",
            where=f"{case.plan.passages[int(passage[first])].name} at {_utc(start[first])}",
            sentence=f"{len(wrong)} frames begin before the one before is read out and filter and mount are ready; "
            f"the first by {short:.2f} s.",
            cure="Lengthen the cadence, or shorten the exposure.",
        )


def _changes_s(plan: Plan, passage: np.ndarray, shot: np.ndarray) -> np.ndarray:
    """Return how long filter and mount need between each frame and the next."""
    from planner.sky.places import separation_arcsec, unit_vector

    between_s = np.zeros(max(len(passage) - 1, 0))
    key = passage * 100000 + shot
    for row in np.flatnonzero(np.diff(key)):
        before, after = (plan.passages[int(passage[each])] for each in (row, row + 1))
        filters = (before.shots[int(shot[row])].filter, after.shots[int(shot[row + 1])].filter)
        between_s[row] = plan.rig.filter_step_s(*filters)
        if before is not after and before.panel and before.visit == after.visit:
            places = [
                unit_vector(np.array([each.aim_ra_deg]), np.array([each.aim_dec_deg]))
                for each in (before, after)
            ]
            slew_s = float(separation_arcsec(*places)[0]) / 3600 / plan.rig.mount.slew_deg_s
            between_s[row] = max(between_s[row], slew_s + plan.rig.mount.settle_s)
    return between_s


def buffer_overflows(case: Case) -> Iterator[Finding]:
    """Frames come faster than the camera can hand them on, for longer than its buffer lasts."""
    sensor = case.plan.rig.sensor
    if sensor.buffer_frames is None or sensor.drain_frames_s is None or not len(case.frames[2]):
        return
    passage, _, start, exposure = case.frames
    load = buffer_load(start + exposure, sensor.drain_frames_s)
    over = np.flatnonzero(load.waiting > sensor.buffer_frames)
    if len(over):
        first = int(over[0])
        yield Finding(
            rule="buffer-overflows",
            level="error",
            where=f"{case.plan.passages[int(passage[first])].name} at {_utc(load.ready_tt_s[first])}",
            sentence=f"Up to {load.most} frames wait in a buffer of {sensor.buffer_frames}; "
            f"it drains {sensor.drain_frames_s:g} a second.",
            cure=f"A burst_cadence_s of {1 / sensor.drain_frames_s:.2g} s never fills it; or shorten the burst.",
        )


def storage_short(case: Case) -> Iterator[Finding]:
    """The disk is full before the plan ends."""
    rig, plan = case.plan.rig, case.plan
    if plan.storage_gb <= rig.storage_gb:
        return
    fitting = int(rig.storage_gb * 1e9 // frame_bytes(rig))
    passage, _, start, _ = case.frames
    last = min(fitting, len(start) - 1)
    yield Finding(
        rule="storage-short",
        level="error",
        where=f"{plan.passages[int(passage[last])].name} at {_utc(start[last])}",
        sentence=f"{plan.storage_gb:.1f} GB are needed, {rig.storage_gb:g} GB are there: "
        f"frame {fitting + 1} has no room.",
        cure="Bring a larger disk, lengthen cadence_s and burst_cadence_s, or use a region of the sensor.",
    )


def battery_short(case: Case) -> Iterator[Finding]:
    """The battery is empty before the session ends."""
    power = case.plan.rig.power
    needed = energy_wh(case.plan)
    if power.battery_wh is not None and needed > power.battery_wh:
        yield Finding(
            rule="battery-short",
            level="caution",
            where="the longest session",
            sentence=f"It needs {needed:.0f} Wh at {power.draw_w + power.dew_heater_w:g} W; "
            f"the battery holds {power.battery_wh:g} Wh, less in the cold.",
            cure="Bring a second battery, or run from the mains.",
        )


def saturates(case: Case) -> Iterator[Finding]:
    """The brightest pixel is clipped."""
    rig = case.plan.rig
    for passage in case.plan.passages:
        for shot in passage.shots:
            limit = radiometry.saturation_e(rig, shot.gain)
            if passage.done or shot.peak_e is None or shot.peak_e < 0.999 * limit:
                continue
            among_stars = case.setting.family.reference == "stars" and _kind(shot) != "planet"
            if (among_stars and _kind(shot) != "disc") or _kind(shot) == "long":
                continue
            yield Finding(
                rule="saturates",
                level="caution",
                where=f"{passage.name}, {shot.name}",
                sentence=f"The brightest pixel of {shot.peak_of} reaches {shot.peak_e / limit:.1f} times saturation "
                f"in {shot.exposure_s:g} s.",
                cure=f"Expose {shot.exposure_s * limit / shot.peak_e * case.setting.wish.well_fraction:.2g} s, "
                "stop down, or use a denser filter.",
            )
            return


def too_faint(case: Case) -> Iterator[Finding]:
    """What is exposed for stays close to the noise, because trailing or the camera limits the exposure."""
    rig = case.plan.rig
    for passage in case.plan.passages:
        for shot in passage.shots:
            if passage.done or shot.peak_e is None or case.setting.family.campaign:
                continue
            fraction = shot.peak_e / radiometry.saturation_e(rig, shot.gain)
            if fraction < _FAINT_WELL_FRACTION and shot.peak_e < 10 * rig.sensor.read_noise_e**2:
                yield Finding(
                    rule="too-faint",
                    level="caution",
                    where=f"{passage.name}, {shot.name}",
                    sentence=f"The brightest pixel of {shot.peak_of} holds {shot.peak_e:.0f} electrons "
                    f"in {shot.exposure_s:g} s, {100 * fraction:.1f} % of the range.",
                    cure="Track, open the aperture, take a wider filter, or stack frames.",
                )
                return


def signal_short(case: Case) -> Iterator[Finding]:
    """The signal-to-noise that is wished for is not reached within saturation, trailing and what the camera can do."""
    rig, wanted = case.plan.rig, case.setting.wish.signal_to_noise
    if wanted is None or case.setting.family.campaign:
        return
    for passage in case.plan.passages:
        for shot in passage.shots:
            if passage.done or shot.peak_e is None or shot.peak_of not in case.sky.discs:
                continue
            read_e = radiometry.at_gain(rig, shot.gain).read_noise_e
            reached = shot.peak_e / np.sqrt(shot.peak_e + read_e**2)
            if reached < 0.9 * wanted:
                yield Finding(
                    rule="signal-short",
                    level="caution",
                    where=f"{passage.name}, {shot.name}",
                    sentence=f"The brightest pixel reaches a signal-to-noise of {reached:.0f}; "
                    f"{wanted:g} is asked for.",
                    cure="Raise well_fraction or trail_px, track better, or stack "
                    f"{np.ceil((wanted / reached) ** 2):.0f} frames.",
                )
                return


def no_exposure_does_both(case: Case) -> Iterator[Finding]:
    """The bright body and the faint things about it cannot be had in one exposure."""
    doubles = [
        passage
        for passage in case.plan.passages
        if len({_kind(shot) for shot in passage.shots}) > 1
        and any(_kind(shot) in ("long", "disc", "planet", "deep") for shot in passage.shots)
    ]
    if doubles:
        first = doubles[0]
        longest = max(first.shots, key=lambda shot: shot.exposure_s)
        shortest = min(first.shots, key=lambda shot: shot.exposure_s)
        yield Finding(
            rule="no-exposure-does-both",
            level="note",
            where=first.name if len(doubles) == 1 else f"{first.name} to {doubles[-1].name}",
            sentence="No exposure shows both what is bright and what is faint: "
            f"frames of {shortest.exposure_s:g} s and {longest.exposure_s:g} s take turns.",
            cure="Nothing to do; merge them in the composite.",
        )


def planet_clipped(case: Case) -> Iterator[Finding]:
    """Frames deep enough for the stars clip the planet, and no short frames are planned."""
    if not case.setting.family.campaign:
        return
    limit = radiometry.saturation_e(case.plan.rig)
    clipped = [
        passage
        for passage in case.plan.passages
        if not passage.done
        and not any(_kind(shot) == "planet" for shot in passage.shots)
        and any((shot.peak_e or 0) >= 0.999 * limit for shot in passage.shots)
    ]
    if clipped:
        yield Finding(
            rule="planet-clipped",
            level="note",
            where=clipped[0].name if len(clipped) == 1 else f"{clipped[0].name} to {clipped[-1].name}",
            sentence=f"{case.setting.event.spec.body.capitalize()} is clipped in the frames that show the stars; "
            "its place can be measured, its colour and disc cannot.",
            cure="planet_frames: 4 adds short frames to each visit.",
        )


def sampling_poor(case: Case) -> Iterator[Finding]:
    """Pixels are much finer or coarser than the seeing."""
    rig, site = case.plan.rig, case.plan.site
    pixels = float(radiometry.psf_fwhm_arcsec(rig, site.seeing_arcsec, 1.0, 0.0)) / rig.scale_arcsec_px
    if case.setting.family.reference == "stars" and case.setting.family.campaign:
        return
    if pixels > _FINE_SAMPLING or pixels < _COARSE_SAMPLING / 2:
        fine = pixels > _FINE_SAMPLING
        yield Finding(
            rule="sampling-poor",
            level="note",
            where="rig",
            sentence=f"A star is {pixels:.1f} pixels wide (FWHM) in {site.seeing_arcsec:g} arcsec seeing.",
            cure="Bin, or reduce the focal length." if fine else "Lengthen the focal length, or dither.",
        )


def rolling_shutter(case: Case) -> Iterator[Finding]:
    """The rows of a rolling shutter are exposed at times that differ by more than the timing wanted."""
    sensor, wish = case.plan.rig.sensor, case.setting.wish
    wanted = wish.timing_s if wish.timing_s is not None else case.plan.rig.clock.sigma_s
    if sensor.shutter == "rolling" and sensor.rolling_readout_s > wanted:
        yield Finding(
            rule="rolling-shutter",
            level="caution",
            where="all frames",
            sentence=f"First and last row are exposed {sensor.rolling_readout_s:g} s apart; {wanted:g} s matter here.",
            cure="Time by the row the target is on, or use a camera with a global shutter.",
        )


RULES = (
    shots_collide,
    buffer_overflows,
    storage_short,
    battery_short,
    saturates,
    too_faint,
    signal_short,
    no_exposure_does_both,
    planet_clipped,
    sampling_poor,
    rolling_shutter,
)
