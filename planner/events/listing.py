"""Circumstances as others read them: JSON objects for machines, plain tables to shoot from for people."""

from __future__ import annotations

import math
from datetime import datetime
from typing import Any
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from planner.errors import InputError
from planner.events.against import Comparison
from planner.events.family import Circumstances, Event, Instant
from planner.sky import timescale
from planner.sky.observer import Observer

_LABELS = {
    "contact_1": "contact I",
    "contact_2": "contact II",
    "contact_3": "contact III",
    "contact_4": "contact IV",
    "station_ra_1": "1st station, RA",
    "station_ra_2": "2nd station, RA",
    "station_longitude_1": "1st station, longitude",
    "station_longitude_2": "2nd station, longitude",
}
_LATER = {"rings_later_s": "rings", "lit_part_later_s": "lit part"}
# What a one-line entry of a list shows of an event of weeks, and what it passes over.
_MIDDLES = {"opposition", "conjunction", "greatest_elongation_east", "greatest_elongation_west"}
_ASIDES = {"closest", "conjunction_ra", "conjunction_longitude"}
_UNITS = {
    "_arcsec_s": "arcsec/s",
    "_arcsec": "arcsec",
    "_km_s": "km/s",
    "_au": "au",
    "_deg": "degrees",
    "_days": "days",
    "_km": "km",
    "_s": "s",
}


def as_object(circumstances: Circumstances, brief: bool = False) -> dict[str, Any]:
    """Return circumstances as a JSON object of the machine interface; NaN becomes null.

    With `brief`, as in lists: instants without budget and extras, no conventions.
    """
    event = circumstances.event
    found: dict[str, Any] = {
        "family": event.spec.family,
        "body": body_of(event),
        "title": event.title,
        "site": _site(circumstances.observer),
        "happens": circumstances.happens,
        "reason": circumstances.reason,
        "instants": [_instant(instant, brief) for instant in circumstances.instants],
        "least_separation_arcsec": _number(circumstances.least_separation_arcsec),
    }
    for key in ("other_body", "star"):
        value = getattr(event.spec, key)
        if value is not None:
            found[key] = value
    if not brief:
        found["conventions"] = {
            **circumstances.conventions,
            "time_scale": timescale.utc_kind(event.middle_tt_s),
        }
        found["cautions"] = list(circumstances.cautions)
    found["facts"] = {key: _number(value) for key, value in circumstances.facts.items()}
    if not brief and circumstances.series:
        found["series"] = [
            {
                "title": series.title,
                "rows": [dict(zip(series.columns, map(_number, row), strict=True)) for row in series.rows],
            }
            for series in circumstances.series
        ]
    return found


def body_of(event: Event) -> str:
    """Return what an event is about: its body, or its star."""
    return event.spec.star or "" if event.spec.body in ("", "star") else event.spec.body


def comparison_object(comparison: Comparison) -> dict[str, Any]:
    """Return what `--against` adds to the object of the first site."""
    return {
        "site": _site(comparison.other.observer),
        "happens": comparison.other.happens,
        "reason": comparison.other.reason,
        "baseline_km": _number(comparison.baseline_km),
        "instants": [
            {
                "name": shift.name,
                "utc": timescale.utc_iso(shift.tt_s, 3),
                "other_utc": timescale.utc_iso(shift.other_tt_s, 3) if math.isfinite(shift.later_s) else None,
                "later_s": _number(shift.later_s),
                "along_arcsec": _number(shift.along_arcsec),
                "across_arcsec": _number(shift.across_arcsec),
            }
            for shift in comparison.shifts
        ],
    }


def comparison_table(comparison: Comparison) -> str:
    """Return what `--against` adds to the page of the first site."""
    other = comparison.other
    lines = ["", f"against {_place_line(other.observer)}", f"baseline: {comparison.baseline_km:.1f} km"]
    if not other.happens:
        lines.append(f"DOES NOT HAPPEN THERE: {other.reason}.")
    header = ["instant", "there (UTC)", "later, s", "along, arcsec", "across, arcsec"]
    rows = [
        [
            _LABELS.get(shift.name, shift.name.replace("_", " ")),
            timescale.utc_iso(shift.other_tt_s, 1).replace("T", " ").rstrip("Z")
            if math.isfinite(shift.later_s)
            else "",
            f"{shift.later_s:+.1f}" if math.isfinite(shift.later_s) else "",
            f"{shift.along_arcsec:+.2f}",
            f"{shift.across_arcsec:+.2f}",
        ]
        for shift in comparison.shifts
    ]
    note = "along, across: where the target stands for the other site, ahead on its way and to the left of it"
    return "\n".join(line.rstrip() for line in [*lines, "", *_columns(header, rows), "", note])


def _site(observer: Observer | None) -> dict[str, Any] | str:
    if observer is None:
        return "geocentre"
    return {
        "name": observer.name,
        "latitude_deg": observer.latitude_deg,
        "longitude_deg": observer.longitude_deg,
        "height_m": observer.height_m,
    }


def _instant(instant: Instant, brief: bool) -> dict[str, Any]:
    found = {
        "name": instant.name,
        "utc": timescale.utc_iso(instant.tt_s, 3),
        "sigma_s": _number(instant.sigma_s),
        "largest_term": instant.largest_term,
        "position_angle_deg": _number(instant.position_angle_deg),
        "altitude_deg": _number(instant.altitude_deg),
        "azimuth_deg": _number(instant.azimuth_deg),
        "visible": bool(instant.visible),
        "limited_by": instant.limited_by,
    }
    if not brief:
        found["budget_s"] = {term.name: _number(term.sigma_s) for term in instant.budget}
        found |= {key: _number(value) for key, value in instant.extra}
    return found


def _number(value: Any) -> Any:
    """Return floats rounded to what they are worth writing, NaN and infinity as None, the rest as it is."""
    if isinstance(value, float):
        return float(f"{value:.9g}") if math.isfinite(value) else None
    return value


def zone_of(observer: Observer | None) -> ZoneInfo:
    """Return the time zone of a site; raises InputError on a name that does not exist."""
    name = observer.timezone if observer is not None else "UTC"
    try:
        return ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        raise InputError(
            f"site.timezone: found {name!r}; allowed is an IANA name such as Europe/Berlin"
        ) from None


def as_table(circumstances: Circumstances) -> str:
    """Return a plain text page to shoot from: instants in UTC and civil time, angles, what is seen, cautions."""
    observer = circumstances.observer
    lines = [circumstances.event.title, _place_line(observer)]
    if not circumstances.happens:
        lines.append(f"DOES NOT HAPPEN HERE: {circumstances.reason}.")
    lines += ["", *_columns(_header(observer, circumstances), _rows(circumstances)), ""]
    least = circumstances.least_separation_arcsec
    if math.isfinite(least):
        lines.append(f"least separation of centres: {least:.1f} arcsec")
    lines += [_fact(key, value) for key, value in circumstances.facts.items()]
    for series in circumstances.series:
        rows = [[f"{v:.1f}" if isinstance(v, float) else str(v) for v in row] for row in series.rows]
        lines += ["", series.title, *_columns([name.replace("_", " ") for name in series.columns], rows)]
    kind = timescale.utc_kind(circumstances.event.middle_tt_s)
    lines += ["", "+-: 1 sigma in seconds, and the largest term of it", f"time scale: {kind}"]
    lines += [f"{key.replace('_', ' ')}: {text}" for key, text in circumstances.conventions.items()]
    lines += ["", *(f"CAUTION: {text}" for text in circumstances.cautions)]
    return "\n".join(line.rstrip() for line in lines)


def as_list(found: list[Circumstances], observer: Observer | None) -> str:
    """Return a plain text list of events, a line each: what can be seen first and last, in UTC and civil time."""
    if not found:
        return "nothing found in this span within these limits"
    zone = zone_of(observer)
    header = ["event", "what", "UTC", "apart"]
    if observer is not None:
        header += ["civil time"] if _has_civil(observer) else []
        header += ["alt", "az", "Sun", "seen"]
    rows = []
    for circumstances in found:
        instant = _foremost(circumstances)
        least = circumstances.least_separation_arcsec
        row = [
            circumstances.event.title,
            _label(instant),
            timescale.utc_iso(instant.tt_s, 0)[:19].replace("T", " "),
            _apart(least) if math.isfinite(least) else "",
        ]
        if observer is not None:
            weeks = instant.name in _MIDDLES
            seen = f"{sum(one.visible for one in circumstances.instants)} of {len(circumstances.instants)}"
            row += [_civil(instant.tt_s, 0, zone)] if _has_civil(observer) else []
            row += [_angle(instant.altitude_deg), _angle(instant.azimuth_deg)]
            row += [_angle(dict(instant.extra).get("sun_altitude_deg", math.nan))]
            row = [*row[:-3], "", "", "", "weeks"] if weeks else [*row, seen]
        rows.append(row)
    return "\n".join([_place_line(observer), "", *(line.rstrip() for line in _columns(header, rows))])


def _foremost(circumstances: Circumstances) -> Instant:
    """Return the instant that a list shows: the middle of what lasts weeks, else the first that matters and is seen."""
    middle = next((one for one in circumstances.instants if one.name in _MIDDLES), None)
    if middle is not None:
        return middle
    instants = [one for one in circumstances.instants if one.name not in _ASIDES] or list(
        circumstances.instants
    )
    return next((one for one in instants if one.visible), instants[0])


def _label(instant: Instant) -> str:
    return _LABELS.get(instant.name, instant.name.replace("_", " "))


def _apart(arcsec: float) -> str:
    """Return a separation in the unit that reads best."""
    if arcsec < 100.0:
        return f"{arcsec:.0f} arcsec"
    return f"{arcsec / 60.0:.1f} arcmin" if arcsec < 6000.0 else f"{arcsec / 3600.0:.1f} deg"


def _place_line(observer: Observer | None) -> str:
    if observer is None:
        return "as seen from the Earth's centre"
    north = "N" if observer.latitude_deg >= 0 else "S"
    east = "E" if observer.longitude_deg >= 0 else "W"
    return (
        f"{observer.name}: {abs(observer.latitude_deg):.4f} {north}, {abs(observer.longitude_deg):.4f} {east}, "
        f"{observer.height_m:.0f} m"
        + (f", times also in {observer.timezone}" if _has_civil(observer) else "")
    )


def _has_civil(observer: Observer | None) -> bool:
    """Return whether a site has a civil time of its own."""
    return observer is not None and observer.timezone != "UTC"


def _header(observer: Observer | None, circumstances: Circumstances) -> list[str]:
    header = ["instant", "UTC"]
    if _has_civil(observer):
        header.append("civil time")
    header += ["+- s", "largest term"]
    if _has_angles(circumstances):
        header.append("PA")
        if observer is not None:
            header.append("from zenith")
    if observer is not None:
        header += ["alt", "az", "Sun", "seen"]
    return header


def _has_angles(circumstances: Circumstances) -> bool:
    return any(math.isfinite(instant.position_angle_deg) for instant in circumstances.instants)


def _rows(circumstances: Circumstances) -> list[list[str]]:
    observer, zone = circumstances.observer, zone_of(circumstances.observer)
    rows = []
    for instant in circumstances.instants:
        decimals = 0 if instant.sigma_s >= 5.0 else 1
        utc = timescale.utc_iso(instant.tt_s, decimals)
        row = [_label(instant), utc.replace("T", " ").rstrip("Z")]
        if _has_civil(observer):
            row.append(_civil(instant.tt_s, decimals, zone))
        row += [_sigma(instant.sigma_s), instant.largest_term or ""]
        extra = dict(instant.extra)
        if _has_angles(circumstances):
            row.append(_angle(instant.position_angle_deg))
            if observer is not None:
                row.append(_angle(extra.get("zenith_position_angle_deg", math.nan)))
        if observer is not None:
            row += [_angle(instant.altitude_deg), _angle(instant.azimuth_deg)]
            row += [_angle(extra.get("sun_altitude_deg", math.nan))]
            words = [extra["limb"] + " limb"] if "limb" in extra and instant.name != "closest" else []
            words = [] if words == [instant.limited_by] else words
            for key, what in _LATER.items():
                if math.isfinite(extra.get(key, math.nan)):
                    words.append(f"{what} {extra[key]:+.1f} s")
            row.append(", ".join([instant.limited_by or "yes", *words]))
        rows.append(row)
    return rows


def _civil(tt_s: float, decimals: int, zone: ZoneInfo) -> str:
    """Return civil time rounded as the UTC beside it, with the zone's own abbreviation."""
    moment = timescale.datetime_from_tt_s(tt_s)
    whole = timescale.utc_iso(tt_s, decimals)[:-1]
    rounded = datetime.fromisoformat(whole + "+00:00") if ":60" not in whole else moment
    local = rounded.astimezone(zone)
    text = f"{local:%m-%d %H:%M:%S}"
    if decimals:
        text += f".{local.microsecond // 10 ** (6 - decimals):0{decimals}d}"
    return f"{text} {local:%Z}"


def _sigma(sigma_s: float) -> str:
    return f"{sigma_s:.2f}" if sigma_s < 10 else f"{sigma_s:.0f}"


def _angle(value: float) -> str:
    return f"{value:.1f}" if math.isfinite(value) else ""


def _fact(key: str, value: Any) -> str:
    """Return `sun_semidiameter_arcsec: 969.8` as a reader wants it: `sun semidiameter: 969.8 arcsec`."""
    unit = next((unit for suffix, unit in _UNITS.items() if key.endswith(suffix)), "")
    name = key.removesuffix(next((suffix for suffix in _UNITS if key.endswith(suffix)), "")).replace("_", " ")
    if isinstance(value, bool):
        return f"{name}: {'yes' if value else 'no'}"
    if isinstance(value, float) and unit == "s" and value >= 60.0:
        minutes, seconds = divmod(round(value), 60)
        hours, minutes = divmod(minutes, 60)
        return f"{name}: " + (f"{hours} h " if hours else "") + f"{minutes} min {seconds:02d} s"
    return f"{name}: {value:.4g} {unit}".rstrip() if isinstance(value, float) else f"{name}: {value}"


def _columns(header: list[str], rows: list[list[str]]) -> list[str]:
    """Return lines with columns in line; columns of numbers end in line, text begins in line."""
    table = [header, *rows]
    widths = [max(len(row[i]) for row in table) for i in range(len(header))]
    numeric = [all(_is_number(row[i]) for row in rows) for i in range(len(header))]
    lines = []
    for row in table:
        cells = [c.rjust(w) if n else c.ljust(w) for c, w, n in zip(row, widths, numeric, strict=True)]
        lines.append("  " + "  ".join(cells))
    return lines


def _is_number(text: str) -> bool:
    try:
        float(text or 0)
    except ValueError:
        return False
    return True
