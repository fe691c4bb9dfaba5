"""How a plan speaks to people: exposures, times, sizes."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo


def exposure_text(exposure_s: float) -> str:
    """Return an exposure as photographers write it: `1/160 s`, `2.5 s`."""
    if exposure_s >= 0.3:
        return f"{exposure_s:g} s"
    return f"1/{float(f'{1 / exposure_s:.2g}'):.0f} s"


def exposure_range_text(exposures_s: list[float]) -> str:
    """Return the shortest and the longest of some exposures."""
    shortest, longest = exposure_text(min(exposures_s)), exposure_text(max(exposures_s))
    return shortest if shortest == longest else f"{shortest} to {longest}"


def duration_text(seconds: float) -> str:
    """Return a duration: `45 s`, `12 min`, `5 h 20 min`, `3 d`."""
    if seconds < 100:
        return f"{seconds:.0f} s"
    if seconds < 6000:
        return f"{seconds / 60:.0f} min"
    if seconds < 48 * 3600:
        return f"{seconds // 3600:.0f} h {seconds % 3600 // 60:.0f} min"
    return f"{seconds / 86400:.0f} d"


def nearest_second(moment: datetime) -> datetime:
    """Return a moment rounded to the nearest whole second."""
    return (moment + timedelta(milliseconds=500)).replace(microsecond=0)


def local_text(moment: datetime, timezone: str, seconds: bool = True) -> str:
    """Return a moment in the site's civil time, with its offset from UTC."""
    local = moment.astimezone(ZoneInfo(timezone))
    clock = local.strftime("%H:%M:%S" if seconds else "%H:%M")
    days = (local.date() - moment.astimezone(UTC).date()).days
    other_day = f" ({days:+d} d)" if days else ""
    return f"{clock} {local.strftime('%z')[:3]}:{local.strftime('%z')[3:]}{other_day}"
