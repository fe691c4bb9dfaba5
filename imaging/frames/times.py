"""When a frame was exposed: beginning, middle and end from FITS keywords or EXIF, and where each came from.

A time zone is never guessed: a stamp of local time without an offset needs one from the user.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, timezone
from typing import Any
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from imaging.frames.frame import FrameTime
from planner.errors import InputError

DAY_S = 86400.0
# What cameras and converters write when their clock was never set (common practice, no source).
_UNSET = ("1900-01-01", "1904-01-01", "1970-01-01", "1980-01-01", "0000-00-00")
_FIRST_YEAR, _LAST_YEAR = 1972, 2150  # UTC with leap seconds begins in 1972; our ephemeris outlasts 2150

_SCALES = {
    "UTC": "utc",
    "UT": "utc",
    "GMT": "utc",
    "Z": "utc",
    "UT1": "ut1",
    "TT": "tt",
    "TDT": "tt",
    "ET": "tt",
}
_SCALES |= {"TAI": "tai", "IAT": "tai", "TDB": "tdb", "TCB": "tcb", "TCG": "tcg"}
_GPS_BEHIND_TAI_S = (
    19.0  # FITS standard 4.0, table 30: GPS runs (approximately) synchronously with TAI - 19 s
)

_TIME_UNITS_S = {"s": 1.0, "min": 60.0, "h": 3600.0, "d": 86400.0, "a": 31557600.0}
_BEGIN = ("DATE-BEG", "DATE-OBS", "DATE_OBS", "MJD-BEG", "MJD-OBS", "JD")
_MIDDLE = ("DATE-AVG", "DATE-MID", "MJD-AVG", "MJD-MID", "JD-MID")
_END = ("DATE-END", "MJD-END")
_CLOCK_KEYS = (
    "TIME-OBS",
    "TIME-BEG",
    "UT-START",
    "UTSTART",
    "UT",
    "UTC",
    "UTC-OBS",
    "UT-OBS",
    "TIME",
    "UT_START",
)
_EXPOSURE = ("XPOSURE", "EXPTIME", "EXPOSURE", "TELAPSE", "ELAPTIME", "EXP_TIME", "ITIME")
_MIDDLE_COMMENT = re.compile(r"\b(mid|middle|mid-?point|centre|center|average)\b", re.IGNORECASE)
_LOCAL_COMMENT = re.compile(r"\blocal\b", re.IGNORECASE)


class NoTimeError(Exception):
    """A frame tells no time that can be trusted; the message is the reason. Caught inside this room."""


@dataclass(frozen=True)
class _Stamp:
    """One instant read from a header: TT seconds, half-width of its resolution, and the key it came from."""

    tt_s: float
    resolution_s: float
    key: str


def zone_of(text: str | None) -> timezone | ZoneInfo | None:
    """Return the zone a user named: `+02:00`, `-0330`, `Z`, `UTC` or an IANA name; None stays None.

    Raises InputError when it is none of these.
    """
    if text is None:
        return None
    stripped = text.strip()
    if stripped.upper() in ("Z", "UTC", "UT", "GMT"):
        return UTC
    match = re.fullmatch(r"([+-])(\d{1,2}):?(\d{2})?", stripped)
    if match:
        minutes = int(match[2]) * 60 + int(match[3] or 0)
        if minutes <= 14 * 60:
            return timezone(timedelta(minutes=minutes if match[1] == "+" else -minutes))
    try:
        return ZoneInfo(stripped)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        raise InputError(
            f"zone: found {text!r}; allowed are an offset such as +02:00, UTC, or an IANA name"
        ) from None


def exposure_s(header: Mapping[str, Any]) -> float | None:
    """Return the exposure in seconds from the usual FITS keywords, or None when none is a sane number."""
    for key in _EXPOSURE:
        value = _number(header.get(key))
        if value is not None and 0 <= value < 10 * DAY_S:
            return value
    return None


def time_from_fits(header: Any, zone: timezone | ZoneInfo | None = None) -> FrameTime:
    """Return the time of a FITS frame (FITS standard 4.0, section 9.5, and the common dialects of it).

    `header`: anything with `.get(key)`; comments are read where it has `.comments`. Mid-exposure is taken from
    a middle keyword, else from begin and end, else from begin plus half the exposure. DATE-OBS counts as the
    beginning unless its comment says that it is the middle. Raises NoTimeError with the reason.
    """
    scale = str(header.get("TIMESYS") or "UTC").strip().upper()
    if scale not in _SCALES and scale not in ("GPS", "LOCAL"):
        raise NoTimeError(f"TIMESYS {scale!r} is not a time scale of the FITS standard")
    notes: list[str] = []
    local_keys = [
        key for key in ("DATE-OBS", "DATE-BEG", "TIME-OBS") if _LOCAL_COMMENT.search(_comment(header, key))
    ]
    is_local = scale == "LOCAL" or bool(local_keys)
    if is_local:
        if zone is None:
            which = "TIMESYS" if scale == "LOCAL" else f"the comment of {local_keys[0]}"
            raise NoTimeError(
                f"{which} says local time and the offset from UTC is missing; give it with --zone"
            )
        notes.append(f"local time, zone given by the user: {zone}")
        scale = "UTC"

    def stamp(keys: tuple[str, ...]) -> _Stamp | None:
        for key in keys:
            found = _stamp(header, key, scale, zone if is_local else UTC)
            if found is not None:
                return found
        return None

    length = exposure_s(header)
    begin, middle, end = stamp(_BEGIN), stamp(_MIDDLE), stamp(_END)
    if middle is None and begin is not None and begin.key.startswith(("DATE-OBS", "DATE_OBS", "MJD-OBS")):
        if _MIDDLE_COMMENT.search(_comment(header, begin.key.split("+")[0])):
            notes.append(f"the comment of {begin.key} says that it is the middle")
            begin, middle = None, begin
    if begin is None and middle is None and end is None:
        raise NoTimeError("no DATE-OBS, DATE-BEG, DATE-AVG, MJD-OBS or like keyword tells when it was taken")
    return _combine(begin, middle, end, length, notes)


def time_of_fits_plane(
    header: Any, index: int, total: int, zone: timezone | ZoneInfo | None = None
) -> FrameTime:
    """Return the time of plane `index` of a cube whose third axis is time (FITS standard 4.0, section 9.2 and 9.5).

    The axis tells the middle of each plane, counted from MJDREF, JDREF or DATEREF, else from DATE-BEG or DATE-OBS;
    a plane lasts as long as the exposure, else as the step. An axis without a name is time where its unit is one.
    Raises NoTimeError for another axis, or with the reason, which is the same for all planes.
    """
    kind = str(header.get("CTYPE3") or "").strip().upper()
    unit = str(header.get("CUNIT3") or "s").strip()
    if not kind and header.get("CUNIT3") and unit in _TIME_UNITS_S and header.get("CDELT3") is not None:
        kind = "TIME"
    if kind != "TIME" and kind not in _SCALES:
        raise NoTimeError(
            f"its header tells no time for each of its {total} planes: the third axis is {kind or 'without a name'}, "
            "not TIME with CDELT3 seconds from plane to plane"
        )
    step = _number(header.get("CDELT3"))
    if unit not in _TIME_UNITS_S or step is None:
        raise NoTimeError(
            f"the time axis of the cube has the unit {unit!r} and the step {header.get('CDELT3')!r}"
        )
    away = (_number(header.get("CRVAL3")) or 0.0) + (
        index + 1 - (_number(header.get("CRPIX3")) or 0.0)
    ) * step
    scale = str(kind if kind != "TIME" else header.get("TIMESYS") or "UTC").strip().upper()
    day = _number(header.get("MJDREF"))
    if day is None and header.get("MJDREFI") is not None:
        day = (_number(header.get("MJDREFI")) or 0.0) + (_number(header.get("MJDREFF")) or 0.0)
    if day is None and header.get("JDREF") is not None:
        day = (_number(header.get("JDREF")) or 0.0) - 2400000.5
    if day is not None and scale in (*_SCALES, "GPS"):
        origin, source = _tt_s_of_mjd(day, scale), "MJDREF"
    elif header.get("DATEREF"):
        origin, source = (
            time_from_fits({"DATE-OBS": header["DATEREF"], "TIMESYS": scale}, zone).begin_tt_s,
            "DATEREF",
        )
    else:
        first = time_from_fits(header, zone)
        origin, source = first.begin_tt_s, first.source
    length = exposure_s(header)
    middle = _Stamp(origin + away * _TIME_UNITS_S[unit], 1e-3, f"{source} and time axis, plane {index}")
    return _combine(None, middle, None, abs(step) * _TIME_UNITS_S[unit] if length is None else length, [])


def time_from_exif(
    tags: Mapping[str, str], zone: timezone | ZoneInfo | None, length_s: float | None
) -> FrameTime:
    """Return the time of a camera frame from EXIF tags.

    Exif 2.31: DateTimeOriginal, SubSecTimeOriginal, OffsetTimeOriginal; `tags` maps tag names without group to
    text. The stamp counts as the beginning of the exposure (common practice, no source).
    Raises NoTimeError when there is no time, or no offset and no `zone`.
    """
    for name, sub, offset in (
        ("DateTimeOriginal", "SubSecTimeOriginal", "OffsetTimeOriginal"),
        ("DateTimeDigitized", "SubSecTimeDigitized", "OffsetTimeDigitized"),
    ):
        text = str(tags.get(name) or "").strip()
        if not text:
            continue
        match = re.fullmatch(r"(\d{4})[:-](\d\d)[:-](\d\d)[ T](\d\d):(\d\d):(\d\d)", text)
        if not match:
            raise NoTimeError(f"EXIF {name} is {text!r}, which is not a date and time")
        digits = re.sub(r"\D", "", str(tags.get(sub) or ""))
        seconds = float("0." + digits) if digits else 0.0
        resolution = 10.0 ** -len(digits) if digits else 1.0
        notes, offset_text = [], str(tags.get(offset) or "").strip()
        source = f"EXIF {name}" + (f" + {sub}" if digits else "")
        if offset_text:
            stated: timezone | ZoneInfo | None = zone_of(offset_text)
            source += f" + {offset}"
        elif zone is not None:
            stated = zone
            notes.append(f"zone given by the user: {zone}")
        else:
            raise NoTimeError(f"EXIF {name} has no offset from UTC; give it with --zone")
        moment = _civil([int(part) for part in match.groups()], text, stated)
        _refuse_unset(text[:10].replace(":", "-"), name)
        from planner.sky.timescale import tt_s_from_datetime

        tt_s = float(tt_s_from_datetime(moment)) + seconds
        return _combine(_Stamp(tt_s, resolution, source), None, None, length_s, notes)
    raise NoTimeError("no EXIF DateTimeOriginal tells when it was taken")


def time_from_begin(tt_s: float, resolution_s: float, length_s: float | None, source: str) -> FrameTime:
    """Return the time of an exposure that began at `tt_s` (video and high-speed containers)."""
    return _combine(_Stamp(tt_s, resolution_s, source), None, None, length_s, [])


def time_from_local_iso(moment: datetime, zone: timezone | ZoneInfo | None, source: str) -> FrameTime:
    """Return the time of a stamp to the second; one without an offset needs `zone`. Raises NoTimeError."""
    from planner.sky.timescale import tt_s_from_datetime

    _refuse_unset(moment.date().isoformat(), source)
    if moment.tzinfo is None:
        if zone is None:
            raise NoTimeError(f"{source} has no offset from UTC; give it with --zone")
        moment = moment.replace(tzinfo=zone)
    resolution = 1e-6 if moment.microsecond else 1.0
    return _combine(_Stamp(float(tt_s_from_datetime(moment)), resolution, source), None, None, None, [])


def time_from_ticks(ticks: int, source: str) -> FrameTime:
    """Return the time of a count of 100 ns since 0001-01-01T00:00 UTC (SER); raises NoTimeError when it is none."""
    from planner.sky.timescale import tt_s_from_datetime

    try:
        moment = datetime(1, 1, 1, tzinfo=UTC) + timedelta(microseconds=ticks // 10)
    except OverflowError:
        raise NoTimeError(f"{source} is {ticks}, which is not a date and time") from None
    _refuse_unset(moment.date().isoformat(), source)
    tt_s = float(tt_s_from_datetime(moment)) + (ticks % 10) * 1e-7
    return _combine(_Stamp(tt_s, 1e-6, source), None, None, None, [])


def time_from_file_date(mtime_s: float, length_s: float | None) -> FrameTime:
    """Return a time from the modification time of the file (POSIX seconds), taken as the end of the exposure."""
    from planner.sky.timescale import tt_s_from_datetime

    tt_s = float(tt_s_from_datetime(datetime.fromtimestamp(mtime_s, UTC)))
    stamp = _Stamp(tt_s, 4.0, "file modification time")
    return _combine(None, None, stamp, length_s, ["file modification time, as asked: it may be minutes off"])


def _combine(
    begin: _Stamp | None, middle: _Stamp | None, end: _Stamp | None, length_s: float | None, notes: list[str]
) -> FrameTime:
    half = None if length_s is None else length_s / 2
    if middle is not None:
        at, key, resolution = middle.tt_s, middle.key, middle.resolution_s
    elif begin is not None and end is not None and end.tt_s >= begin.tt_s and half is None:
        at, key = (begin.tt_s + end.tt_s) / 2, f"{begin.key}, {end.key}"
        resolution, half = max(begin.resolution_s, end.resolution_s), (end.tt_s - begin.tt_s) / 2
    elif begin is not None:
        at, key, resolution = begin.tt_s + (half or 0.0), begin.key, begin.resolution_s
    else:
        assert end is not None
        at, key, resolution = end.tt_s - (half or 0.0), end.key, end.resolution_s
    sigma = resolution / 12**0.5
    if half is None:
        notes.append("the exposure is not stated: the stamp is taken as the middle")
        half = 0.0
    elif middle is None and half > 0:
        key += " and exposure"
    if (
        begin is not None
        and middle is not None
        and half
        and abs(begin.tt_s + half - middle.tt_s) > half + 2.0
    ):
        notes.append(f"{begin.key} and {middle.key} disagree with the exposure; the middle is used")
    return FrameTime(at - half, at, at + half, sigma, key, tuple(notes))


def _stamp(header: Any, key: str, scale: str, zone: Any) -> _Stamp | None:
    value = header.get(key)
    if value is None or value == "":
        return None
    if key.startswith(("MJD", "JD")):
        number = _number(value)
        if number is None or number <= 0:
            return None
        mjd = number - 2400000.5 if key.startswith("JD") else number
        digits = len(repr(value).partition(".")[2])
        resolution = max(10.0**-digits * DAY_S, 1e-6 if key.startswith("MJD") else 4e-5)
        _refuse_year(1858.88 + mjd / 365.2425, key)
        return _Stamp(_tt_s_of_mjd(mjd, scale), resolution, key)
    date, _, clock = str(value).strip().rstrip("Zz").partition("T")
    date, source = _iso_date(date.strip(), key), key
    if not clock and " " in date:
        date, _, clock = date.partition(" ")
    if not clock:
        for other in _CLOCK_KEYS:
            text = str(header.get(other) or "").strip().rstrip("Zz")
            if re.match(r"^\d{1,2}:\d{2}(:\d{2}(\.\d*)?)?$", text):
                clock, source = text, f"{key}+{other}"
                break
        else:
            raise NoTimeError(
                f"{key} is {value!r}: a date without a time of day, and no keyword holds the time"
            )
    match = re.fullmatch(r"(\d{1,2}):(\d{2})(?::(\d{2})(\.\d*)?)?([+-]\d{2}:?\d{2})?", clock.strip())
    if not match:
        raise NoTimeError(f"{key} is {value!r}, which is not a date and time")
    _refuse_unset(date, key)
    fraction = match[4] or ""
    resolution = 60.0 if match[3] is None else 10.0 ** -max(len(fraction) - 1, 0)
    parts = [int(part) for part in date.split("-")] + [int(match[1]), int(match[2]), int(match[3] or 0)]
    if match[5]:
        zone = zone_of(match[5])
    tt_s = _tt_s_of_civil(parts, float("0" + fraction) if len(fraction) > 1 else 0.0, scale, zone, str(value))
    return _Stamp(tt_s, resolution, source)


def _iso_date(text: str, key: str) -> str:
    old = re.fullmatch(r"(\d{2})/(\d{2})/(\d{2}|\d{4})", text)
    if old:  # FITS before 1999: DD/MM/YY, years 1900-1999 (FITS standard 4.0, section 4.4.2.1)
        year = old[3] if len(old[3]) == 4 else f"19{old[3]}"
        return f"{year}-{old[2]}-{old[1]}"
    if not re.match(r"^[+-]?\d{4,5}-\d{2}-\d{2}", text):
        raise NoTimeError(f"{key} is {text!r}, which is not a date")
    return text


def _tt_s_of_civil(parts: list[int], fraction_s: float, scale: str, zone: Any, text: str) -> float:
    from astropy.time import Time

    _refuse_year(parts[0], text)
    if scale == "UTC" or _SCALES.get(scale) == "utc":
        if zone in (UTC, None):
            stamp = "{:04d}-{:02d}-{:02d}T{:02d}:{:02d}:{:02d}".format(*parts)
            try:
                return _tt_s_of_time(Time(stamp, scale="utc")) + fraction_s
            except ValueError:
                raise NoTimeError(f"{text!r} is not a date and time of the calendar") from None
        from planner.sky.timescale import tt_s_from_datetime

        return float(tt_s_from_datetime(_civil(parts, text, zone))) + fraction_s
    stamp = "{:04d}-{:02d}-{:02d}T{:02d}:{:02d}:{:02d}".format(*parts)
    shift = _GPS_BEHIND_TAI_S if scale == "GPS" else 0.0
    try:
        time = Time(stamp, scale="tai" if scale == "GPS" else _SCALES[scale])
    except ValueError:
        raise NoTimeError(f"{text!r} is not a date and time of the calendar") from None
    return _tt_s_of_time(time) + fraction_s + shift


def _tt_s_of_mjd(mjd: float, scale: str) -> float:
    from astropy.time import Time

    if scale == "GPS":
        return _tt_s_of_time(Time(mjd, format="mjd", scale="tai")) + _GPS_BEHIND_TAI_S
    return _tt_s_of_time(Time(mjd, format="mjd", scale=_SCALES[scale]))


def _tt_s_of_time(time: Any) -> float:
    from planner.sky.timescale import tt_s_from_time

    return float(tt_s_from_time(time))


def _civil(parts: list[int], text: str, zone: Any) -> datetime:
    try:
        return datetime(*parts, tzinfo=zone).astimezone(UTC)  # type: ignore[arg-type, misc]
    except (ValueError, OverflowError):
        raise NoTimeError(f"{text!r} is not a date and time of the calendar") from None


def _refuse_unset(date: str, key: str) -> None:
    if date in _UNSET:
        raise NoTimeError(f"{key} is {date}: the camera's clock was never set")
    _refuse_year(int(date[:4]) if date[:4].isdigit() else 0, key)


def _refuse_year(year: float, text: str) -> None:
    if not _FIRST_YEAR <= year <= _LAST_YEAR:
        raise NoTimeError(f"{text}: the year {int(year)} lies outside {_FIRST_YEAR}-{_LAST_YEAR}")


def _comment(header: Any, key: str) -> str:
    comments = getattr(header, "comments", None)
    if comments is None or header.get(key) is None:
        return ""
    try:
        return str(comments[key])
    except (KeyError, ValueError):
        return ""


def _number(value: Any) -> float | None:
    try:
        number = float(value)
    except (TypeError, ValueError):
        return None
    return number if number == number and abs(number) != float("inf") else None
