"""Time scales: UTC outside, TT seconds from J2000.0 (`tt_s`) inside, TDB for the ephemeris, UT1 for the Earth.

UTC exists from 1972 and its leap seconds are known only some months ahead. Elsewhere the civil instants that go in
and out are labelled by `utc_kind`: UT1 before 1972 and from 2050 on; between the last known leap second and 2050 no
further leap second is assumed. Calendar dates are Gregorian throughout, as ISO 8601 wants.
"""

from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta
from typing import TYPE_CHECKING, Any

import numpy as np

from planner.errors import InputError
from planner.sky.rotation import (
    DAY_S,
    TT_MINUS_TAI_S,
    YEAR_S,
    delta_t_s,
    earth_orientation,
    ut1_sigma_s,
)

if TYPE_CHECKING:
    from astropy.time import Time

__all__ = [
    "DAY_S",
    "SPAN",
    "YEAR_S",
    "datetime_from_tt_s",
    "delta_t_s",
    "require_span",
    "tdb_s",
    "time_from_tt_s",
    "tt_s_from_datetime",
    "tt_s_from_iso",
    "tt_s_from_time",
    "ut1_s",
    "ut1_sigma_s",
    "utc_iso",
    "utc_kind",
]

# First and last TT second of DE440 as installed (1549-12-31 to 2650-01-25), a day inside its ends so that
# light-time never reaches over them.
SPAN = (-14200747200.0 + 2 * DAY_S, 20514081600.0 - 2 * DAY_S)
_J2000 = datetime(2000, 1, 1, 12, tzinfo=UTC)
_FIRST_UTC_TT_S = (datetime(1972, 1, 1, tzinfo=UTC) - _J2000).total_seconds() + 10.0 + TT_MINUS_TAI_S
_LAST_UTC_S = (datetime(2050, 1, 1, tzinfo=UTC) - _J2000).total_seconds()


def require_span(tt_s: np.ndarray | float, what: str = "date") -> None:
    """Raise InputError naming the date found and the span allowed when a time lies outside the ephemeris."""
    low, high = np.min(tt_s, initial=np.inf), np.max(tt_s, initial=-np.inf)
    if np.isnan(low) or np.isnan(high):
        raise InputError(f"{what}: found a time that is not a number; allowed are finite times")
    for moment in (low, high):
        if np.isfinite(moment) and not SPAN[0] <= moment <= SPAN[1]:
            raise InputError(
                f"{what}: found {_calendar_day(moment)}; allowed is {_calendar_day(SPAN[0])} to "
                f"{_calendar_day(SPAN[1])}, the span of the ephemeris"
            )


def _calendar_day(tt_s: float) -> str:
    year = 2000.0 + tt_s / YEAR_S
    if not 0 < year < 9999:
        return f"the year {year:.0f}"
    return (_J2000 + timedelta(seconds=float(tt_s))).date().isoformat()


def tdb_s(tt_s: np.ndarray) -> np.ndarray:
    """Return TDB seconds from J2000.0, to 10 microseconds.

    Seven-term series of Kaplan 2005, USNO Circular 179, eq. 2.6 (after Fairhead & Bretagnon 1990).
    """
    t = np.asarray(tt_s, float)
    century = t / (100 * YEAR_S)
    return t + (
        0.001657 * np.sin(628.3076 * century + 6.2401)
        + 0.000022 * np.sin(575.3385 * century + 4.2970)
        + 0.000014 * np.sin(1256.6152 * century + 6.1969)
        + 0.000005 * np.sin(606.9777 * century + 4.0212)
        + 0.000005 * np.sin(52.9691 * century + 0.4444)
        + 0.000002 * np.sin(21.3299 * century + 5.5431)
        + 0.000010 * century * np.sin(628.3076 * century + 4.2490)
    )


def ut1_s(tt_s: np.ndarray) -> np.ndarray:
    """Return UT1 seconds from 2000-01-01T12:00 UT1."""
    return np.asarray(tt_s, float) - delta_t_s(tt_s)


def utc_kind(tt_s: float) -> str:
    """Return what the civil time scale of an instant is worth: `UTC`, or which stand-in is printed for it."""
    if tt_s < _FIRST_UTC_TT_S:
        return "UT1 (no UTC before 1972)"
    if tt_s < earth_orientation().leap_expiry_tt_s:
        return "UTC"
    if tt_s < _future_ut1_tt_s():
        return "UTC (leap seconds unknown, none assumed)"
    return "UT1 (leap seconds unknown)"


def _future_ut1_tt_s() -> float:
    return _LAST_UTC_S + float(earth_orientation().leap_offset_s[-1]) + TT_MINUS_TAI_S


def _civil_s(tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return civil seconds from 2000-01-01T12:00, and True where they lie inside a leap second (:60)."""
    tt_s = np.asarray(tt_s, float)
    table = earth_orientation()
    row = np.clip(np.searchsorted(table.leap_tt_s, tt_s, side="right") - 1, 0, None)
    civil = tt_s - TT_MINUS_TAI_S - table.leap_offset_s[row]
    following = np.minimum(row + 1, len(table.leap_tt_s) - 1)
    in_leap = (
        (following > row) & (tt_s >= table.leap_tt_s[following] - 1.0) & (tt_s < table.leap_tt_s[following])
    )
    by_ut1 = (tt_s < _FIRST_UTC_TT_S) | (tt_s >= _future_ut1_tt_s())
    return np.where(by_ut1, tt_s - delta_t_s(tt_s), civil), in_leap & ~by_ut1


def _tt_s(civil_s: np.ndarray) -> np.ndarray:
    """Return TT seconds from civil seconds from 2000-01-01T12:00."""
    civil_s = np.asarray(civil_s, float)
    table = earth_orientation()
    starts = table.leap_tt_s - TT_MINUS_TAI_S - table.leap_offset_s
    row = np.clip(np.searchsorted(starts, civil_s, side="right") - 1, 0, None)
    utc = civil_s + table.leap_offset_s[row] + TT_MINUS_TAI_S
    ut1 = civil_s + delta_t_s(civil_s)
    for _ in range(2):
        ut1 = civil_s + delta_t_s(ut1)
    return np.where((civil_s < starts[0]) | (civil_s >= _LAST_UTC_S), ut1, utc)


def tt_s_from_datetime(moment: datetime | list[datetime] | tuple[datetime, ...]) -> Any:
    """Return TT seconds from J2000.0 of an aware datetime (float), or of several (array).

    Raises InputError on a datetime without a time zone.
    """
    several = isinstance(moment, list | tuple)
    moments: list[datetime] = list(moment) if isinstance(moment, list | tuple) else [moment]
    for one in moments:
        if one.tzinfo is None:
            raise InputError(f"time: found {one.isoformat()}; allowed is a time with Z or an offset")
    # whole days and microseconds apart: timedelta is exact, a float of all seconds is not
    civil = np.array(
        [(d := one - _J2000).days * DAY_S + d.seconds + d.microseconds * 1e-6 for one in moments]
    )
    tt_s = _tt_s(civil)
    return tt_s if several else float(tt_s[0])


def tt_s_from_iso(text: str) -> float:
    """Return TT seconds from J2000.0 of an ISO 8601 instant with `Z` or an offset, a leap second (:60) included.

    Raises InputError on anything else.
    """
    leap = re.fullmatch(r"(.*T\d\d:59:)60((?:\.\d+)?)(Z|\+00:00)", text.strip())
    try:
        if leap:
            moment = datetime.fromisoformat(f"{leap[1]}59{leap[2]}{leap[3]}")
        else:
            moment = datetime.fromisoformat(text.strip())
    except ValueError:
        raise InputError(
            f"time: found {text!r}; allowed is ISO 8601 with Z or an offset, such as 2032-11-13T06:41:12Z"
        ) from None
    return tt_s_from_datetime(moment) + (1.0 if leap else 0.0)


def tt_s_from_time(time: Time) -> Any:
    """Return TT seconds from J2000.0 of an astropy Time of any scale, in its shape."""
    tt = time.tt
    return (tt.jd1 - 2451545.0) * DAY_S + tt.jd2 * DAY_S


def time_from_tt_s(tt_s: np.ndarray | float) -> Time:
    """Return an astropy Time: scale UTC where all of the instants have one, otherwise TT."""
    from astropy.time import Time

    tt_s = np.asarray(tt_s, float)
    days = np.floor(tt_s / DAY_S)
    time = Time(2451545.0 + days, (tt_s - days * DAY_S) / DAY_S, format="jd", scale="tt")
    if np.all((tt_s >= _FIRST_UTC_TT_S) & (tt_s < _future_ut1_tt_s())):
        time = time.utc
    time.format = "isot"
    return time


def datetime_from_tt_s(tt_s: np.ndarray | float) -> Any:
    """Return an aware UTC datetime (a list for an array), rounded to the microsecond; see `utc_kind`."""
    civil, _ = _civil_s(np.asarray(tt_s, float))
    moments = [
        _J2000 + timedelta(seconds=int(whole), microseconds=round((one - whole) * 1e6))
        for one, whole in zip(np.atleast_1d(civil), np.floor(np.atleast_1d(civil)), strict=True)
    ]
    return moments[0] if np.ndim(tt_s) == 0 else moments


def utc_iso(tt_s: np.ndarray | float, decimals: int = 1) -> Any:
    """Return `2032-11-13T06:41:12.3Z` (a list for an array), rounded with carry; see `utc_kind`.

    A leap second is written as :60.
    """
    unit = 10**decimals
    moments = np.atleast_1d(np.asarray(tt_s, float))
    civil, _ = _civil_s(moments)
    # move to the tick first: rounding may lead into a leap second or out of it
    civil, in_leap = _civil_s(moments + (np.round(civil * unit) / unit - civil) + 1e-6)
    texts = []
    for one, leap in zip(civil, in_leap, strict=True):
        ticks = round((one - leap) * unit)
        seconds, fraction = divmod(ticks, unit)
        text = (_J2000 + timedelta(seconds=seconds)).strftime("%Y-%m-%dT%H:%M:%S")
        text = text.rjust(19, "0")
        if leap:
            text = text[:-2] + "60"
        texts.append(text + (f".{fraction:0{decimals}d}" if decimals else "") + "Z")
    return texts[0] if np.ndim(tt_s) == 0 else texts
