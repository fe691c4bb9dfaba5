"""Cutting the time of an event into windows: bursts around contacts, regular frames between them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.events.family import Circumstances, Instant

CONTACT_SIGMAS = 3.0
LEAST_BURST_S = 20.0
_TOGETHER_S = 240.0
CONTACT_NAMES = ("contact", "disappearance", "reappearance", "graze", "occultation")
# Lead before the first and after the last contact. Nothing of a planet is seen beside the Sun; beside the Moon and
# among stars the approach is part of the picture. Common practice, no source.
LEAD_S = {"sun": 120.0, "moon": 900.0, "stars": 3600.0}
_NAMES = {
    ("contact_1", "contact_2"): "ingress",
    ("contact_3", "contact_4"): "egress",
    ("disappearance_start", "disappearance_end"): "disappearance",
    ("reappearance_start", "reappearance_end"): "reappearance",
    ("disappearance",): "disappearance",
    ("reappearance",): "reappearance",
    ("graze",): "graze",
}


@dataclass(frozen=True)
class Window:
    """A stretch of time with one purpose; `contacts` are the instants a burst is for."""

    name: str
    purpose: str
    start_tt_s: float
    end_tt_s: float
    burst: bool
    contacts: tuple[Instant, ...] = ()


def contact_instants(circumstances: Circumstances) -> tuple[Instant, ...]:
    """Return the instants at which something touches, in time order."""
    return tuple(instant for instant in circumstances.instants if is_contact(instant.name))


def is_contact(name: str) -> bool:
    """Return whether an instant of this name is one of contact."""
    return name.startswith(CONTACT_NAMES)


def burst_half_s(instant: Instant, clock_sigma_s: float, burst_s: float | None = None) -> float:
    """Return how far a burst reaches on both sides of a contact: 3 sigma of instant and clock, or what is asked."""
    if burst_s is not None:
        return burst_s
    return max(LEAST_BURST_S, CONTACT_SIGMAS * float(np.hypot(instant.sigma_s, clock_sigma_s)))


def event_windows(
    circumstances: Circumstances,
    reference: str,
    clock_sigma_s: float,
    lead_s: float | None = None,
    burst_s: float | None = None,
) -> list[Window]:
    """Return the windows of an event in time order, touching, none overlapping."""
    lead = LEAD_S[reference] if lead_s is None else lead_s
    contacts = contact_instants(circumstances)
    if not contacts:
        instant = circumstances.instant("best_view") or circumstances.instant("greatest")
        middle = instant.tt_s if instant else circumstances.event.middle_tt_s
        return [
            Window(
                "closest", "regular frames through the closest approach", middle - lead, middle + lead, False
            )
        ]
    bursts: list[Window] = []
    for contact in contacts:
        half = burst_half_s(contact, clock_sigma_s, burst_s)
        start, end = contact.tt_s - half, contact.tt_s + half
        bursts.append(_burst((contact,), start, end))
        while len(bursts) > 1 and _belong_together(bursts[-2], bursts[-1]):
            second, first = bursts.pop(), bursts.pop()
            begin, end = min(first.start_tt_s, second.start_tt_s), max(first.end_tt_s, second.end_tt_s)
            bursts.append(_burst((*first.contacts, *second.contacts), begin, end))
    windows = [
        Window(
            "approach", "before the first contact", bursts[0].start_tt_s - lead, bursts[0].start_tt_s, False
        )
    ]
    for before, after in zip(bursts, [*bursts[1:], None], strict=True):
        windows.append(before)
        if after is not None and after.start_tt_s > before.end_tt_s:
            windows.append(_between(before, after))
    last_end = bursts[-1].end_tt_s
    windows.append(Window("departure", "after the last contact", last_end, last_end + lead, False))
    return [window for window in windows if window.end_tt_s > window.start_tt_s]


def _belong_together(first: Window, second: Window) -> bool:
    """Bursts that overlap are one; so are two contacts of one limb crossing, unless minutes lie between them."""
    one_limb = (first.contacts[-1].name, second.contacts[0].name) in _NAMES
    return second.start_tt_s <= first.end_tt_s + (_TOGETHER_S if one_limb else 0.0)


def _burst(contacts: tuple[Instant, ...], start_tt_s: float, end_tt_s: float) -> Window:
    names = tuple(contact.name for contact in contacts)
    spelled = [n.replace("_", " ") for n in names]
    default = " and ".join(spelled) if len(names) < 3 else f"{spelled[0]} to {spelled[-1]}"
    name = _NAMES.get(names, default)  # type: ignore[call-overload]
    which = " and ".join(n.replace("_", " ") for n in names)
    return Window(name, f"dense frames through {which}", start_tt_s, end_tt_s, True, contacts)


def _between(before: Window, after: Window) -> Window:
    first, second = before.contacts[-1].name, after.contacts[0].name
    if first.startswith("disappearance"):
        name, purpose = "hidden", "the limb alone, while the body is behind it"
    elif (first, second) == ("contact_2", "contact_3"):
        name, purpose = "crossing", "regular frames through the middle"
    else:
        name = f"{first} to {second}".replace("_", " ")
        purpose = "regular frames between contacts"
    return Window(name, purpose, before.end_tt_s, after.start_tt_s, False)
