"""Times and spans of time as people write them on a command line."""

from __future__ import annotations

import datetime as dt
import zoneinfo

from monitor.errors import WrongUseError

__all__ = ["duration_seconds", "local", "read_time", "utc_text"]

_WORDS = {"today": 0, "yesterday": -1}


def read_time(text: str, time_zone: str, now: int, option: str) -> int:
    """Read a time into integer UTC seconds.

    Args:
        text: ``2026-03-01``, ``2026-03-01 06:00``, ``2026-03-01T05:00Z``, with another offset,
            ``now``, ``today`` or ``yesterday``. Without an offset it is the site's local time; a
            local time that comes twice is the first of the two.
        time_zone: the site's.
        now: integer UTC seconds.
        option: where it stands, for the error.

    Raises:
        WrongUseError: not a time, or a local time that daylight saving skips.
    """
    zone = zoneinfo.ZoneInfo(time_zone)
    word = text.strip().lower()
    if word == "now":
        return now
    if word in _WORDS:
        today = dt.datetime.fromtimestamp(now, tz=zone).date()
        day = today + dt.timedelta(days=_WORDS[word])
        return int(dt.datetime.combine(day, dt.time(0), tzinfo=zone).timestamp())
    try:
        read = dt.datetime.fromisoformat(text.strip())
    except ValueError:
        raise WrongUseError(
            f"{option} '{text}' is not a time; write 2026-03-01, '2026-03-01 06:00' (site-local "
            "time) or 2026-03-01T05:00Z"
        ) from None
    if read.tzinfo is not None:
        return int(read.timestamp())
    utc = int(read.replace(tzinfo=zone).timestamp())
    if dt.datetime.fromtimestamp(utc, tz=zone).replace(tzinfo=None) != read.replace(microsecond=0):
        raise WrongUseError(
            f"{option} '{text}' is skipped by daylight saving in {time_zone}; write an hour later, "
            "or the time with its offset"
        )
    return utc


def duration_seconds(text: str, option: str) -> int:
    """Read ``8h``, ``30 min`` or ``2 days`` into seconds.

    Raises:
        WrongUseError: not a duration above zero.
    """
    from monitor.site.units import UnitError, duration_s  # noqa: PLC0415

    digits = len(text) - len(text.strip().lstrip("0123456789."))
    try:
        seconds = duration_s(f"{text.strip()[:digits]} {text.strip()[digits:]}")
    except UnitError:
        seconds = 0.0
    if seconds < 1:
        raise WrongUseError(f"{option} '{text}' is not a duration; write 8h, 30min or 2days")
    return int(seconds)


def local(utc_seconds: int | None, time_zone: str) -> str:
    """A time for a person, in the site's own zone with its offset; a dash when there is none."""
    if utc_seconds is None:
        return "-"
    at = dt.datetime.fromtimestamp(utc_seconds, tz=zoneinfo.ZoneInfo(time_zone))
    return at.isoformat(sep=" ", timespec="minutes")


def utc_text(utc_seconds: int | None) -> str | None:
    """A time for a machine: ISO 8601 in UTC."""
    if utc_seconds is None:
        return None
    return dt.datetime.fromtimestamp(utc_seconds, tz=dt.UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
