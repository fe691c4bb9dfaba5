"""One search over all families: what a site sees in a span of dates, within the limits the user sets."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

from planner.errors import InputError
from planner.events.catalogue import FAMILIES, family, predicted
from planner.events.family import Circumstances, Family
from planner.events.orbit import Orbit
from planner.sky import timescale
from planner.sky.observer import Observer

# An asteroid's orbit is a file, so that its occultations are searched for only when the family is named.
_BY_ORBIT = "asteroid-occults-star"
_SEARCHED = tuple(name for name in FAMILIES if name != _BY_ORBIT)


@dataclass(frozen=True)
class Limits:
    """What the user wants to hear of. Events of weeks (tracks, arcs) are kept whatever the altitude of an instant.

    `altitude_deg`: least altitude of one instant that can be seen. `night_only`: leave out what happens by day.
    `magnitude`: faintest target. `within_deg`: how close planets must come.
    """

    altitude_deg: float = 5.0
    night_only: bool = False
    magnitude: float | None = None
    within_deg: float = 1.0


def span_of(start: str, end: str) -> tuple[float, float]:
    """Return TT seconds of two dates (0h UTC) or times; raises InputError when one is wrong or they are reversed."""
    both = []
    for option, text in (("--from", start), ("--to", end)):
        try:
            moment = timescale.tt_s_from_iso(text if "T" in text else f"{text}T00:00:00Z")
        except InputError:
            raise InputError(f"{option}: found {text!r}; allowed is a date such as 2027-01-01") from None
        timescale.require_span(moment, option)
        both.append(moment)
    if both[1] <= both[0]:
        raise InputError(f"--to: found {end}, not after --from {start}; allowed is a later date")
    return both[0], both[1]


def search(
    span_tt_s: tuple[float, float],
    observer: Observer | None,
    families: tuple[str, ...] = (),
    bodies: tuple[str, ...] = (),
    tick: Callable[[int, int], None] | None = None,
    limits: Limits | None = None,
    orbits: tuple[Orbit, ...] = (),
) -> list[Circumstances]:
    """Return the circumstances of all events of these families (none: all) that the site sees, in time order.

    `orbits` are small bodies whose occultations of stars are looked for as well.
    Raises InputError on a family or a body that does not exist.
    """
    limits = limits or Limits()
    chosen = [_limited(family(name), limits) for name in (families or _SEARCHED)]
    small = [_limited(replace(family(_BY_ORBIT), orbit=orbit), limits) for orbit in orbits]  # type: ignore[type-var]
    if small:
        chosen = [one for one in chosen if one.name != _BY_ORBIT] + small
    known = {target for one in chosen for target in one.targets}
    for body in bodies:
        if body not in known:
            raise InputError(f"--body: found {body!r}; allowed are {', '.join(sorted(known))}")
    found: list[Circumstances] = []
    for count, one in enumerate(chosen):
        wanted = tuple(body for body in one.targets if body in bodies) if bodies else None
        if one in small:
            wanted = ("asteroid",) if not bodies or "asteroid" in bodies else ()
        if wanted == ():
            continue

        def tock(done: int, total: int, count: int = count) -> None:
            if tick:
                tick(int(100 * (count + done / max(1, total))), 100 * len(chosen))

        for event in one.search(*span_tt_s, observer, wanted, tock):
            circumstances = predicted(event, observer)
            if one.campaign or _within(circumstances, limits):
                found.append(circumstances)
    return sorted(found, key=lambda circumstances: circumstances.event.middle_tt_s)


def _limited(one: Family, limits: Limits) -> Family:
    """Return a family that looks for what the limits ask, where it can."""
    changes = {}
    if limits.magnitude is not None and hasattr(one, "magnitude_limit"):
        changes["magnitude_limit"] = limits.magnitude
    if hasattr(one, "within_deg"):
        changes["within_deg"] = limits.within_deg
    return replace(one, **changes) if changes else one  # type: ignore[type-var]


def _within(circumstances: Circumstances, limits: Limits) -> bool:
    if circumstances.observer is None:
        return circumstances.happens
    magnitude = circumstances.facts.get("magnitude", circumstances.facts.get("planet_magnitude"))
    if limits.magnitude is not None and magnitude is not None and magnitude > limits.magnitude:
        return False
    for instant in circumstances.instants:
        if not instant.visible or instant.altitude_deg < limits.altitude_deg:
            continue
        sun = dict(instant.extra).get("sun_altitude_deg", -90.0)
        if not (limits.night_only and sun > -6.0):
            return True
    return False
