"""Rules about the event: are its instants covered, seen, and known well enough?"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from planner.events.family import Instant
from planner.sequence.feasibility import Case
from planner.sequence.models import Finding
from planner.sequence.windows import CONTACT_SIGMAS, burst_half_s, contact_instants

_LOW_DEG = 10.0
_FRAMES_IN_SIGMA = 3.0
_SURE_S = 60.0
# Civil time runs at most some three hours off the Sun anywhere on Earth; common practice, no source.
_ZONE_HOURS = 3.6


def _contacts(case: Case) -> tuple[Instant, ...]:
    return () if case.setting.family.campaign else contact_instants(case.setting.circumstances)


def _reachable_at(case: Case, tt_s: np.ndarray) -> np.ndarray:
    return case.setting.reachable(case.setting.geometry(tt_s))


def contact_out_of_reach(case: Case) -> Iterator[Finding]:
    """A contact happens where the mount or the horizon hides it."""
    contacts = _contacts(case)
    if not contacts:
        return
    reached = _reachable_at(case, np.array([contact.tt_s for contact in contacts]))
    lost = [contact for contact, seen in zip(contacts, reached, strict=True) if not seen]
    for contact in lost:
        altitude = f"{contact.altitude_deg:.1f} degrees up"
        yield Finding(
            rule="contact-out-of-reach",
            level="error" if len(lost) == len(contacts) else "caution",
            where=contact.name,
            sentence=f"It happens {altitude}, under the horizon line or outside the mount's limits.",
            cure="Observe from a site with a lower horizon in that direction, or leave this contact out.",
        )


def contact_uncovered(case: Case) -> Iterator[Finding]:
    """Some of a contact's 3-sigma window has no frames, though it can be reached."""
    _, _, start, exposure = case.frames
    end = start + exposure
    for contact in _contacts(case):
        half = burst_half_s(contact, case.setting.rig.clock.sigma_s, case.setting.wish.burst_s)
        needed = CONTACT_SIGMAS * float(np.hypot(contact.sigma_s, case.setting.rig.clock.sigma_s))
        if not _reachable_at(case, contact.tt_s + np.array([-needed, 0.0, needed])).all():
            continue
        first, last = contact.tt_s - needed, contact.tt_s + needed
        inside = (end >= first - half) & (start <= last + half)
        times = np.sort(start[inside])
        gaps = np.diff(np.concatenate([[first], times[(times > first) & (times < last)], [last]]))
        widest = float(gaps.max())
        regular = float(np.median(np.diff(times))) if len(times) > 1 else np.inf
        if widest > 2.5 * max(regular, 1.0) or half < needed * 0.999:
            yield Finding(
                rule="contact-uncovered",
                level="caution",
                where=contact.name,
                sentence=f"Of the {2 * needed:.0f} s in which it may happen (3 sigma of prediction and clock), "
                f"{widest:.0f} s have no frames.",
                cure="Give burst_s more room, a better clock, or move what interrupts the burst.",
            )


def contact_sparse(case: Case) -> Iterator[Finding]:
    """Frames are too far apart to see a contact within its own uncertainty."""
    _, _, start, _ = case.frames
    for contact in _contacts(case):
        sigma = float(np.hypot(contact.sigma_s, case.setting.rig.clock.sigma_s))
        inside = int(((start > contact.tt_s - sigma) & (start < contact.tt_s + sigma)).sum())
        reached = _reachable_at(case, np.array([contact.tt_s]))[0]
        near = start[np.abs(start - contact.tt_s) < 300]
        spacing = float(np.median(np.diff(near))) if len(near) > 1 else np.inf
        if (
            reached
            and 0.5 < sigma < _SURE_S
            and inside < _FRAMES_IN_SIGMA
            and spacing > sigma / _FRAMES_IN_SIGMA
        ):
            yield Finding(
                rule="contact-sparse",
                level="caution",
                where=contact.name,
                sentence=f"{inside} frames fall within 1 sigma ({sigma:.1f} s) of it.",
                cure="Shorten the burst cadence: shorter exposures, faster readout, or a region of the sensor.",
            )


def clock_too_poor(case: Case) -> Iterator[Finding]:
    """The clock cannot give the timing that is asked for."""
    clock, wish = case.setting.rig.clock, case.setting.wish
    contacts = _contacts(case)
    wanted = wish.timing_s
    if wanted is not None and clock.sigma_s > wanted:
        yield Finding(
            rule="clock-too-poor",
            level="caution",
            where=", ".join(contact.name for contact in contacts) or "all frames",
            sentence=f"The {clock.source} clock is good to {clock.sigma_s:g} s; {wanted:g} s are asked for.",
            cure="Stamp the frames from a satellite receiver, or film a trusted clock before and after.",
        )


def prediction_uncertain(case: Case) -> Iterator[Finding]:
    """The instants themselves are known to a minute at best."""
    poor = [contact for contact in _contacts(case) if contact.sigma_s > _SURE_S]
    if poor:
        worst = max(poor, key=lambda contact: contact.sigma_s)
        yield Finding(
            rule="prediction-uncertain",
            level="caution",
            where=worst.name,
            sentence=f"Its time is known to {worst.sigma_s:.0f} s, mostly because of {worst.largest_term}.",
            cure="Plan again nearer to the event, with newer Earth rotation or a better orbit.",
        )


def contact_low(case: Case) -> Iterator[Finding]:
    """A contact happens so low that air decides the picture."""
    for contact in _contacts(case):
        if 0 < contact.altitude_deg < _LOW_DEG and _reachable_at(case, np.array([contact.tt_s]))[0]:
            yield Finding(
                rule="contact-low",
                level="caution",
                where=contact.name,
                sentence=f"It happens {contact.altitude_deg:.1f} degrees up: the air dims, blurs and flattens it.",
                cure="Keep the horizon free in that direction, expose for the brightness found on the day.",
            )


def event_does_not_happen(case: Case) -> Iterator[Finding]:
    """What is planned does not happen at the site."""
    told = case.setting.circumstances
    if not told.happens:
        yield Finding(
            rule="event-does-not-happen",
            level="caution",
            where="the whole plan",
            sentence=f"The event does not happen at {case.plan.site.name}: {told.reason}.",
            cure="Move the site into the path, or shoot it as a near miss.",
        )


def zone_suspicious(case: Case) -> Iterator[Finding]:
    """The site's civil time is far from its longitude: a wrong zone, or a longitude with the wrong sign."""
    from zoneinfo import ZoneInfo

    site = case.plan.site
    if site.timezone == "UTC" or not case.plan.passages:
        return
    moment = case.plan.passages[0].shots[0].start_utc
    offset = ZoneInfo(site.timezone).utcoffset(moment.replace(tzinfo=None))
    hours = offset.total_seconds() / 3600 if offset else 0.0
    sun_hours = ((site.longitude_deg + 180) % 360 - 180) / 15
    apart = abs((hours - sun_hours + 12) % 24 - 12)
    if apart > _ZONE_HOURS:
        yield Finding(
            rule="zone-suspicious",
            level="caution",
            where="site",
            sentence=f"Civil time in {site.timezone} is UTC{hours:+.1f} h, but the Sun at longitude "
            f"{site.longitude_deg:g} keeps UTC{sun_hours:+.1f} h.",
            cure="Check the zone, and the sign of the longitude: east is positive.",
        )


RULES = (
    event_does_not_happen,
    contact_out_of_reach,
    contact_uncovered,
    contact_sparse,
    contact_low,
    clock_too_poor,
    prediction_uncertain,
    zone_suspicious,
)
