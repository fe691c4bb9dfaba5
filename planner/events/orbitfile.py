"""Orbits as they are handed around: the one-line format of minor planets, and SPK files."""

from __future__ import annotations

import re
from datetime import date
from pathlib import Path

import numpy as np

from planner.errors import InputError
from planner.events.orbit import Orbit, orbit_from_elements, with_size

_DIGITS = "0123456789ABCDEFGHIJKLMNOPQRSTUVWXYZ"
# Columns (first, last, 1-based) of the export format for minor-planet orbits, as its public description gives them
_COLUMNS = {
    "designation": (1, 7),
    "absolute_magnitude": (9, 13),
    "slope": (15, 19),
    "epoch": (21, 25),
    "mean_anomaly_deg": (27, 35),
    "perihelion_argument_deg": (38, 46),
    "ascending_node_deg": (49, 57),
    "inclination_deg": (60, 68),
    "eccentricity": (71, 79),
    "semi_major_axis_au": (93, 103),
    "uncertainty": (106, 106),
    "name": (167, 194),
}
# Floor of the place error of a well observed orbit, arcsec (common practice, no source)
_FLOOR_ARCSEC = 0.05


def orbit_from_line(line: str, where: str = "orbit", diameter_km: float | None = None) -> Orbit:
    """Return the orbit in one line of the minor-planet orbit format; raises InputError naming the column.

    Its 1-sigma comes from the uncertainty parameter U: a runoff in longitude of up to exp(1.49 U) arcsec a decade
    (the parameter's public definition), taken as a 1-sigma of the semi-major axis, and 0.05" in every direction.
    """
    line = line.rstrip("\r\n")
    if len(line) < 103:
        raise InputError(
            f"{where}: found a line of {len(line)} characters; allowed is the orbit format (202, at least 103)"
        )
    text = {key: line[first - 1 : last].strip() for key, (first, last) in _COLUMNS.items()}

    def number(key: str) -> float:
        try:
            return float(text[key])
        except ValueError:
            first, last = _COLUMNS[key]
            raise InputError(
                f"{where}: columns {first}-{last} ({key}): found {text[key]!r}; allowed is a number"
            ) from None

    a, e = number("semi_major_axis_au"), number("eccentricity")
    elements = (
        a,
        e,
        number("inclination_deg"),
        number("ascending_node_deg"),
        number("perihelion_argument_deg"),
        number("mean_anomaly_deg"),
    )
    level = int(text["uncertainty"]) if text["uncertainty"].isdigit() else 3
    runoff_deg_day = np.exp(1.49 * level) / 3600.0 / 3652.5
    motion_deg_day = 0.9856076686 / a**1.5
    floor_deg = _FLOOR_ARCSEC / 3600.0
    sigma = (
        2.0 / 3.0 * a * runoff_deg_day / motion_deg_day,
        floor_deg * np.pi / 180.0,
        floor_deg,
        floor_deg,
        floor_deg,
        floor_deg,
    )
    stated = f"U = {text['uncertainty']}" if text["uncertainty"].isdigit() else "no U given, 3 assumed"
    return orbit_from_elements(
        text["name"] or text["designation"],
        packed_epoch_jd(text["epoch"], where),
        elements,
        element_sigma=tuple(float(x) for x in sigma),
        absolute_magnitude=number("absolute_magnitude") if text["absolute_magnitude"] else None,
        slope=number("slope") if text["slope"] else 0.15,
        diameter_km=diameter_km,
        source="one-line orbit format",
        notes=(f"1-sigma of the orbit estimated from its uncertainty parameter ({stated})",),
    )


def packed_epoch_jd(text: str, where: str = "orbit") -> float:
    """Return the Julian day of a packed date such as K27BK (2027 November 20.0 TT); raises InputError."""
    try:
        if len(text) != 5 or not re.fullmatch(r"[IJK]\d\d[1-9A-C][1-9A-V]", text):
            raise ValueError
        year = 100 * (18 + "IJK".index(text[0])) + int(text[1:3])
        day = date(year, _DIGITS.index(text[3]), _DIGITS.index(text[4]))
    except ValueError:
        raise InputError(
            f"{where}: columns 21-25 (epoch): found {text!r}; allowed is a packed date such as K26BL"
        ) from None
    return day.toordinal() + 1721424.5


def read_orbit_line(path: str | Path, name: str | None = None) -> Orbit:
    """Return the orbit in a text file of one-line orbits: the only one, or the one with this name or number.

    Raises InputError when the file cannot be read, or holds none or several that fit.
    """
    path = Path(path)
    try:
        lines = path.read_text(encoding="utf-8").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"{path}: found no readable orbit ({error}); allowed is a text file of one-line orbits"
        ) from error
    held = [(count + 1, line) for count, line in enumerate(lines) if len(line.rstrip()) >= 103]
    if name:
        held = [(count, line) for count, line in held if name.lower() in (line[:7] + line[166:194]).lower()]
    if len(held) != 1:
        raise InputError(
            f"{path}: found {len(held)} orbits{f' named {name!r}' if name else ''}; allowed is one, in the orbit format"
        )
    count, line = held[0]
    return orbit_from_line(line, f"{path}:{count}")


def orbit_from_spk(path: str | Path, target: int | None = None, **rest) -> Orbit:  # type: ignore[no-untyped-def]
    """Return the orbit that an SPK file holds, after opening it; `rest` are the other fields of `Orbit`.

    Raises InputError when the file cannot be read or the body has no size.
    """
    from planner.sky.smallbody import small_body

    body = small_body(path, target)
    rest.setdefault("name", f"body {body.target}")
    rest.setdefault("source", Path(path).name)
    return with_size(Orbit(spk=str(path), spk_target=body.target, **rest))
