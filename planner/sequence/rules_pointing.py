"""Rules about where the camera points: mount, field, trailing, the Sun, and several cameras on one mount."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Literal

import numpy as np

from planner.events.family import Geometry
from planner.sequence.feasibility import Case
from planner.sequence.framing import best_angle_deg, field_of, inside
from planner.sequence.models import Finding, Plan
from planner.sequence.pair import other_body, pair_aim, pair_room

SUN_FORBIDDEN_DEG, SUN_CAUTION_DEG = 5.0, 30.0
_FEW_STARS, _TOO_FEW_STARS = 12, 4
_ZENITH_BLIND_DEG = 85.0


def flip_in_burst(case: Case) -> Iterator[Finding]:
    """The meridian flip falls into a contact burst."""
    for step in case.plan.steps:
        if step.kind != "flip":
            continue
        from planner.sequence.windows import burst_half_s, contact_instants
        from planner.sky.timescale import tt_s_from_datetime

        start = float(tt_s_from_datetime(step.start_utc))
        for contact in contact_instants(case.setting.circumstances):
            half = burst_half_s(contact, case.setting.rig.clock.sigma_s, case.setting.wish.burst_s)
            if start < contact.tt_s + half and start + step.duration_s > contact.tt_s - half:
                yield Finding(
                    rule="flip-in-burst",
                    level="caution",
                    where=contact.name,
                    sentence=f"The mount must turn over at {step.start_utc:%H:%M:%S} UTC, "
                    "within the frames of this contact.",
                    cure="Raise meridian_limit_deg if the mount can track on, or start flipped, or use another mount.",
                )


def trails(case: Case) -> Iterator[Finding]:
    """The picture moves by more than is borne during an exposure."""
    worst, place = 0.0, ""
    for passage in case.plan.passages:
        for shot in passage.shots:
            if not passage.done and shot.trail_px is not None and shot.trail_px > worst:
                worst, place = shot.trail_px, f"{passage.name}, {shot.name} ({shot.exposure_s:g} s)"
    if worst > case.setting.wish.trail_px * 1.001:
        yield Finding(
            rule="trails",
            level="caution",
            where=place,
            sentence=f"The picture moves {worst:.1f} pixels in one exposure.",
            cure="Shorten the exposure, track or guide, use a shorter focal length, or turn the field with a rotator.",
        )


def field_turns(case: Case) -> Iterator[Finding]:
    """The field turns over a passage, on a mount that does not turn with the sky."""
    if case.plan.rig.mount.kind == "equatorial" or case.setting.family.campaign or not len(case.sample_rows):
        return
    angle = np.degrees(np.unwrap(np.radians(case.sky.zenith_pa_deg)))
    turned = float(np.ptp(angle))
    if turned > 1.0:
        yield Finding(
            rule="field-turns",
            level="note",
            where="the whole plan",
            sentence=f"The field turns by {turned:.1f} degrees from the first frame to the last.",
            cure="The composite turns the frames back; leave room for it in the corners.",
        )


def near_zenith(case: Case) -> Iterator[Finding]:
    """An alt-azimuth mount passes close to the zenith, where it cannot follow."""
    if case.plan.rig.mount.kind != "altazimuth" or not len(case.sample_rows):
        return
    high = case.sky.altitude_deg > _ZENITH_BLIND_DEG
    if high.any():
        yield Finding(
            rule="near-zenith",
            level="caution",
            where=case.where(high),
            sentence=f"The target climbs to {case.sky.altitude_deg.max():.1f} degrees: "
            "azimuth turns too fast to follow.",
            cure="Set max_altitude_deg and accept the gap, or tilt the mount.",
        )


def does_not_fit(case: Case) -> Iterator[Finding]:
    """The reference disc, or the whole track, is larger than the field."""
    setting = case.setting
    if not setting.reference_fits:
        disc = case.sky.discs[setting.family.reference]
        field = field_of(setting.rig)
        short = 2 * min(field.half_width_arcsec, field.half_height_arcsec) / 60
        yield Finding(
            rule="does-not-fit",
            level="caution",
            where="all frames",
            sentence=f"The {setting.family.reference.capitalize()} is {disc.semidiameter_arcsec.max() / 30:.1f} "
            f"arcmin wide, the frame {short:.1f} arcmin high: the camera follows "
            f"{setting.event.spec.body or 'the target'} and sees part of the limb.",
            cure="A shorter focal length or a reducer shows the whole disc, which is measured better.",
        )
    aims = {(p.aim_ra_deg, p.aim_dec_deg) for p in case.plan.passages if p.aim == "field"}
    if len(aims) > 1 and not any(passage.panel for passage in case.plan.passages):
        yield Finding(
            rule="does-not-fit",
            level="note",
            where=f"{len(aims)} pointings",
            sentence="The track is larger than the frame with its margin, so the pointing moves along it.",
            cure="camera_angle: best or a shorter focal length may hold it all; mosaic: track shoots all of it "
            "at each visit.",
        )


def other_body_outside(case: Case) -> Iterator[Finding]:
    """Two planets meet, and one frame does not hold both."""
    from planner.sequence.recipes import place_of
    from planner.sky.places import separation_arcsec, unit_vector

    setting, sky = case.setting, case.sky
    other = other_body(setting, sky)
    if other is None or not len(case.sample_rows) or pair_aim(setting, sky):
        return
    rig = min((setting.rig, *setting.mount_mates), key=lambda each: pair_room(each, sky, other))
    there = place_of(sky, other)
    apart = separation_arcsec(unit_vector(*case.target), unit_vector(*there)).max() / 60.0
    field = field_of(rig)
    focal_mm = _two_digits_down(rig.optics.focal_length_mm * pair_room(rig, sky, other))
    both = (np.concatenate(pair) for pair in zip(case.target, there, strict=True))
    turned = rig.model_copy(update={"camera_angle_deg": best_angle_deg(rig, *both)})
    turning = (
        f"camera_angle_deg: {turned.camera_angle_deg:g} holds both; so does"
        if rig.mount.kind == "equatorial" and pair_room(turned, sky, other) >= 1
        else "Both fit with"
    )
    yield Finding(
        rule="other-body-outside",
        level="caution",
        where="all frames",
        sentence=f"{other.capitalize()} stands {apart:.0f} arcmin from {sky.target.capitalize()}; a frame of "
        f"{field.half_width_arcsec / 30:.0f} x {field.half_height_arcsec / 30:.0f} arcmin at this camera angle does "
        f"not hold both with a margin, so the camera follows {sky.target.capitalize()} alone.",
        cure=f"{turning} a focal length of {focal_mm:g} mm or less at this camera angle. Or shoot a mosaic: frames "
        f"of {other.capitalize()} by hand beside these.",
    )


def _two_digits_down(value: float) -> float:
    step = 10 ** (np.floor(np.log10(value)) - 1)
    return float(np.floor(value / step) * step)


def target_leaves_frame(case: Case) -> Iterator[Finding]:
    """The target itself is not in the frame."""
    if not len(case.sample_rows):
        return
    from planner.sequence.frametimes import planned_frames

    frames = planned_frames(case.plan)
    meant = np.array([passage.holds_target for passage in case.plan.passages], bool)
    still = np.isin(frames.start_tt_s, case.frames[2][case.sample_rows]) & meant[frames.passage]
    rows = np.flatnonzero(still)[: len(case.sample_rows)]
    sky = case.setting.geometry(frames.middle_tt_s[rows])
    held = np.array(
        [
            bool(inside(field_of(case.plan.rig, float(frames.rotation_deg[row])), ra0, dec0, ra, dec)[0])
            for row, ra0, dec0, ra, dec in zip(
                rows, frames.ra_deg[rows], frames.dec_deg[rows], *_target_columns(sky), strict=True
            )
        ]
    )
    if not held.all():
        lost = [case.plan.passages[int(frames.passage[row])].name for row in rows[~held]]
        names = list(dict.fromkeys(lost))
        yield Finding(
            rule="target-leaves-frame",
            level="caution" if held.any() else "error",
            where=names[0] if len(names) == 1 else f"{names[0]} to {names[-1]} ({len(names)} passages)",
            sentence=f"In {100 * float((~held).mean()):.0f} % of the frames looked at the target is outside the field.",
            cure="A shorter focal length, fewer visits, another camera angle, or a mount that follows.",
        )


def _target_columns(sky: Geometry) -> tuple[np.ndarray, np.ndarray]:
    from planner.sequence.recipes import place_of

    ra_deg, dec_deg = place_of(sky, sky.target)
    return ra_deg[:, None], dec_deg[:, None]


def margin_thin(case: Case) -> Iterator[Finding]:
    """A pointing error of the mount would push the disc out of the frame."""
    setting = case.setting
    if setting.family.reference not in ("sun", "moon") or not setting.reference_fits:
        return
    disc = case.sky.discs[setting.family.reference]
    field = field_of(setting.rig)
    room = min(field.half_width_arcsec, field.half_height_arcsec) - float(disc.semidiameter_arcsec.max())
    error = setting.rig.mount.pointing_error_arcsec
    if room < 3 * error:
        yield Finding(
            rule="margin-thin",
            level="note",
            where="all frames",
            sentence=f"{room:.0f} arcsec are free beside the disc; the mount points to {error:g} arcsec.",
            cure="Centre by hand before each burst, or guide.",
        )


def too_few_stars(case: Case) -> Iterator[Finding]:
    """A plate solution needs more stars than the frame holds."""
    if case.setting.family.reference != "stars":
        return
    counted = [p for p in case.plan.passages if p.stars_expected is not None and not p.done]
    poor = [p for p in counted if (p.stars_expected or 0) < _FEW_STARS]
    if poor:
        least = min(poor, key=lambda passage: passage.stars_expected or 0)
        count = least.stars_expected or 0
        yield Finding(
            rule="too-few-stars",
            level="error" if count < _TOO_FEW_STARS and case.setting.family.campaign else "caution",
            where=poor[0].name if len(poor) == 1 else f"{poor[0].name} to {poor[-1].name}",
            sentence=f"{count} catalogue stars reach a signal-to-noise of 10 in {least.name}.",
            cure="Expose longer, open the aperture, take a wider field, or wait for a darker sky.",
        )


def sun_near(case: Case) -> Iterator[Finding]:
    """The Sun is up and near an unfiltered field."""
    from planner.sky.places import altaz, direction, separation_arcsec, unit_vector

    setting = case.setting
    if setting.family.reference == "sun" or not len(case.sample_rows):
        return
    sun = direction("sun", setting.observer, case.sky.tt_s)
    apart = separation_arcsec(sun.vector_km, unit_vector(*case.target)) / 3600
    up = altaz(sun.vector_km, setting.observer, case.sky.tt_s)[0] > -1.0
    limit = SUN_FORBIDDEN_DEG + field_of(setting.rig).radius_deg
    levels: tuple[tuple[Literal["error", "caution"], float], ...] = (
        ("error", limit),
        ("caution", SUN_CAUTION_DEG),
    )
    for level, angle in levels:
        near = up & (apart < angle)
        if near.any():
            yield Finding(
                rule="sun-near",
                level=level,
                where=case.where(near),
                sentence=f"The Sun is up, {apart[near].min():.1f} degrees from the field, and nothing filters it.",
                cure="Wait until it has set, shade the optics behind a wall, and keep every slew away from it.",
            )
            return


def shared_mount(plans: list[Plan]) -> Iterator[Finding]:
    """One mount is asked to point to two places at once."""
    for index, first in enumerate(plans):
        for second in plans[index + 1 :]:
            if first.rig.mount.name != second.rig.mount.name:
                continue
            for a in first.passages:
                for b in second.passages:
                    if _overlap(a, b) and _aim(a) != _aim(b):
                        yield Finding(
                            rule="one-mount-two-pointings",
                            level="error",
                            where=f"{a.name} ({first.rig.name}) and {b.name} ({second.rig.name})",
                            sentence=f"The mount {first.rig.mount.name!r} would have to follow {a.aim} and {b.aim} "
                            "at once.",
                            cure="Put the cameras on two mounts, or give them one aim.",
                        )
                        return


def _aim(passage) -> tuple:  # type: ignore[no-untyped-def, type-arg]
    return (
        passage.aim,
        passage.aim_ra_deg,
        passage.aim_dec_deg,
        passage.aim_altitude_deg,
        passage.aim_azimuth_deg,
    )


def _overlap(a, b) -> bool:  # type: ignore[no-untyped-def]
    from planner.sequence.capacity import end_utc

    first_a, first_b = (min(shot.start_utc for shot in each.shots) for each in (a, b))
    return first_a < end_utc(b) and first_b < end_utc(a)


RULES = (
    flip_in_burst,
    trails,
    field_turns,
    near_zenith,
    does_not_fit,
    other_body_outside,
    target_leaves_frame,
    margin_thin,
    too_few_stars,
    sun_near,
)
