"""Which event, from where: the options that every command shares which needs to know, with or without a file."""

from __future__ import annotations

import functools
import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import click

from planner.errors import InputError

if TYPE_CHECKING:
    from planner.events.family import EventSpec
    from planner.sequence.models import Brief
    from planner.sky.observer import Observer


@dataclass(frozen=True)
class Asked:
    """What the user asked about; `observer` None is the geocentre, `brief` None when no file was given."""

    spec: EventSpec
    observer: Observer | None
    brief: Brief | None


def event_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Add BRIEF, --event, the site and what refines the event; the command gets `asked: Asked`."""

    @click.argument("brief", required=False, type=click.Path(exists=True, dir_okay=False))
    @click.option(
        "--event",
        "event_text",
        metavar="FAMILY:BODY:DATE",
        help="Instead of a brief: solar-transit:mercury:2032-11-13 (moon-occults-star:'HIP 21421':DATE, "
        "planets-meet:venus+jupiter:DATE).",
    )
    @click.option(
        "--at", "at_text", metavar="LAT,LON,HEIGHT", help="Site in degrees (east positive) and metres."
    )
    @click.option("--site", "site_file", type=click.Path(exists=True, dir_okay=False), help="Site file.")
    @click.option("--geocentric", is_flag=True, help="As seen from the Earth's centre.")
    @click.option("--timezone", metavar="ZONE", help="IANA name for civil times, with --at.")
    @click.option(
        "--radii", metavar="NAME", help="Convention of radii, such as tables, surface, iau, measured."
    )
    @click.option(
        "--orbit", metavar="FILE", help="Orbit of an asteroid: elements (YAML, JSON, one line) or SPK."
    )
    @click.option("--star", "star_text", metavar="STAR", help="Star of the event, such as 'HIP 21421'.")
    @click.option("--epoch", type=float, metavar="YEAR", help="Epoch of a star given as RA,DEC.")
    @click.option("--pm", metavar="RA,DEC", help="Its proper motion in mas a year (RA times cos DEC).")
    @click.option(
        "--limb", metavar="FILE", help="Lunar elevation grid (PDS label or image), for the real limb."
    )
    @click.option("--limb-orientation", metavar="FILE", help="Lunar orientation kernel (.bpc).")
    @click.option("--limb-frame", metavar="FILE", help="Lunar frame kernel (.tf).")
    @functools.wraps(command)
    def wrapped(  # type: ignore[no-untyped-def]
        brief, event_text, at_text, site_file, geocentric, timezone, **others
    ):
        names = ("radii", "orbit", "star_text", "epoch", "pm", "limb", "limb_orientation", "limb_frame")
        more = {name: others.pop(name) for name in names}
        asked = _asked(brief, event_text, at_text, site_file, geocentric, timezone)
        return command(asked=replace(asked, spec=_refined(asked.spec, **more)), **others)

    return wrapped


def _refined(  # type: ignore[no-untyped-def]
    spec: EventSpec, radii, orbit, star_text, epoch, pm, limb, limb_orientation, limb_frame
) -> EventSpec:
    """Return the event with what was given beside it on the command line."""
    options = dict(spec.options)
    if epoch is not None:
        options["epoch_year"] = epoch
    if pm is not None:
        try:
            east, north = (float(part) for part in pm.split(","))
        except ValueError:
            raise InputError(f"--pm: found {pm!r}; allowed are two numbers such as 62.8,-189.4") from None
        options["pm_mas_yr"] = (east, north)
    changes: dict[str, Any] = {"options": tuple(options.items())}
    changes |= {key: value for key, value in (("radii", radii), ("star", star_text)) if value}
    if orbit is not None:
        from planner.sequence.documents import load_orbit, orbit_of

        changes["orbit"] = orbit_of(load_orbit(orbit))
    if limb is not None:
        from planner.sky.moonlimb import limb_model

        changes["limb"] = limb_model(limb, limb_orientation, limb_frame)
    elif limb_orientation or limb_frame:
        raise InputError(
            "--limb: found none beside --limb-orientation; allowed is the elevation grid with it"
        )
    return replace(spec, **changes)


def _asked(  # type: ignore[no-untyped-def]
    brief_path, event_text, at_text, site_file, geocentric, timezone
) -> Asked:
    if (brief_path is None) == (event_text is None):
        raise InputError(
            "event: found " + ("both" if brief_path else "neither") + "; give a BRIEF or --event"
        )
    if sum(map(bool, (at_text, site_file, geocentric))) > 1:
        raise InputError("site: found more than one; allowed is one of --at, --site, --geocentric")
    brief = None
    observer = site_observer(at_text, site_file, timezone)
    if brief_path is not None:
        from planner.sequence.documents import event_spec, load_brief, observer_of

        brief = load_brief(brief_path)
        spec = event_spec(brief.event)
        if observer is None and not geocentric:
            observer = observer_of(brief.site)  # type: ignore[arg-type]
    else:
        spec = spec_of(event_text)
        if observer is None and not geocentric:
            raise InputError("site: found none; give --at LAT,LON,HEIGHT, --site FILE or --geocentric")
    return Asked(spec, observer, brief)


def spec_of(text: str) -> EventSpec:
    """Return the event of FAMILY:BODY:DATE; raises InputError that names the part that is wrong."""
    from planner.events.family import EventSpec
    from planner.sky.timescale import tt_s_from_iso

    # a date with a time holds colons of its own
    parts = text.split(":", 2)
    if len(parts) != 3 or not all(parts):
        raise InputError(
            f"--event: found {text!r}; allowed is FAMILY:BODY:DATE such as solar-transit:mercury:2032-11-13"
        )
    family, body, date = parts
    moment = date if "T" in date else f"{date}T12:00:00Z"
    try:
        tt_s = tt_s_from_iso(moment)
    except InputError:
        raise InputError(
            f"--event: found date {date!r}; allowed is 2032-11-13, or a time with Z or an offset"
        ) from None
    if family == "moon-occults-star":
        return EventSpec(family, "star", tt_s, star=body)
    other = None
    if "+" in body:
        body, other = body.split("+", 1)
    return EventSpec(family, body, tt_s, other_body=other)


def other_site(text: str) -> Observer | None:
    """Return the site of --against: a site file, LAT,LON,HEIGHT, or `geocentre`."""
    from pathlib import Path

    if text == "geocentre":
        return None
    if Path(text).is_file():
        return site_observer(None, text, None)
    if "," not in text:
        raise InputError(f"--against: found {text!r}; allowed is a site file, LAT,LON,HEIGHT or geocentre")
    return observer_at(text, option="--against")


def site_observer(at_text: str | None, site_file: str | None, timezone: str | None) -> Observer | None:
    """Return the observer of --at or --site, None when neither is given; raises InputError."""
    if site_file:
        from planner.sequence.documents import load_site, observer_of

        return observer_of(load_site(site_file))
    return observer_at(at_text, timezone) if at_text else None


def observer_at(text: str, timezone: str | None = None, option: str = "--at") -> Observer:
    """Return the observer of LAT,LON,HEIGHT; raises InputError that names the number that is wrong."""
    from planner.sky.observer import Observer

    parts = text.split(",")
    if len(parts) == 2:
        raise InputError(
            f"--at: found {text!r}, without height; allowed is LAT,LON,HEIGHT with the height in metres"
        )
    try:
        latitude, longitude, height = (float(part) for part in parts)
    except ValueError:
        raise InputError(
            f"--at: found {text!r}; allowed is LAT,LON,HEIGHT such as 48.137,11.575,520"
        ) from None
    for name, value, low, high in (
        ("latitude", latitude, -90.0, 90.0),
        ("longitude", longitude, -180.0, 360.0),
        ("height", height, -500.0, 9000.0),
    ):
        if not math.isfinite(value) or not low <= value <= high:
            raise InputError(f"{option}: found {name} {value:g}; allowed is {low:g} to {high:g}")
    observer = Observer(text, latitude, longitude, height)
    return observer if timezone is None else replace(observer, timezone=timezone)
