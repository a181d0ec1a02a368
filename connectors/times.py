"""Times as historians write them, turned into microseconds of UTC.

Local time has two odd hours a year. In spring an hour is missing: a time inside it cannot have been
read and is refused. In autumn an hour comes twice: which of the two is meant shows only in the
order of the rows, so such a time is carried with both candidates until the order is known.
"""

from __future__ import annotations

import datetime as dt
import zoneinfo
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, cast

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

if TYPE_CHECKING:
    import numpy.typing as npt

__all__ = [
    "DAY",
    "DOUBLED_HOUR_REACH",
    "NO_TIME",
    "ParsedTimes",
    "TimeReader",
    "check_time_format",
    "check_zone",
    "from_microseconds",
    "is_numeric",
    "microseconds",
    "resolve_doubled_hour",
]

NO_TIME = int(np.iinfo(np.int64).min)
"""Stands for a time that could not be read."""

DAY = 86_400_000_000
"""[us]"""

DOUBLED_HOUR_REACH = 3 * 3_600_000_000
"""[us] Rows farther than this from a window share no doubled hour with it."""

# What lies outside is a mistaken time_format (milliseconds read as seconds), not a reading.
_EARLIEST = int(dt.datetime(1900, 1, 1, tzinfo=dt.UTC).timestamp()) * 1_000_000
_LATEST = int(dt.datetime(2200, 1, 1, tzinfo=dt.UTC).timestamp()) * 1_000_000

_EPOCH_SCALE = {"epoch_s": 1_000_000.0, "epoch_ms": 1_000.0, "epoch_us": 1.0}

# Spreadsheets count days. The calendar of 1900 has a 29 February 1900 that never was, so that from
# March 1900 on its day 0 is 30 December 1899.
_SERIAL_START = {"serial_1900": dt.date(1899, 12, 30), "serial_1904": dt.date(1904, 1, 1)}
_NUMERIC = (*_EPOCH_SCALE, *_SERIAL_START)
_ORDERS = ("day_first", "month_first")
_WORDS = ("iso", *_ORDERS, *_NUMERIC)
# No exponents: 1.76984E+09 is off by hours, and nobody would see it.
_NUMBER = r"^[+-]?\d+(\.\d*)?$"

_DATE_AND_TIME = (
    r"^(?P<one>\d{1,2})[./-] ?(?P<two>\d{1,2})[./-] ?(?P<year>\d{4}|\d{2})"
    r"(?:[ T,]+(?P<hour>\d{1,2}):(?P<minute>\d{2})(?::(?P<second>\d{2})(?:[.,](?P<part>\d{1,9}))?)?"
    r"(?: ?(?P<half>[AaPp])\.?[Mm]\.?)?)?$"
)
_CENTURY_TURNS = 69  # POSIX: two-digit years from 69 on are of the 1900s
_HAS_A_CLOCK = r"\d[Tt ]\s*\d"
_ENDS_WITH_AN_OFFSET = r"\d[Tt ]\s*\d.*(?:[Zz]|[+-]\d{2}(?::?\d{2})?)$"


@dataclass(frozen=True)
class ParsedTimes:
    """Times in microseconds since 1970-01-01 UTC.

    Attributes:
        first: the time, or the earlier candidate in a doubled hour; `NO_TIME` where there is none.
        second: the later candidate; equal to ``first`` outside a doubled hour.
        in_missing_hour: the local time does not exist (``first`` is `NO_TIME`).
    """

    first: npt.NDArray[np.int64]
    second: npt.NDArray[np.int64]
    in_missing_hour: npt.NDArray[np.bool_]

    @property
    def doubled(self) -> npt.NDArray[np.bool_]:
        """Where two times are possible."""
        if self.first is self.second:  # the zone has no doubled hours
            return np.zeros(len(self.first), dtype=np.bool_)
        return cast("npt.NDArray[np.bool_]", self.first != self.second)

    def take(self, rows: npt.NDArray[np.int32] | npt.NDArray[np.intp] | slice) -> ParsedTimes:
        """Return the times of these rows."""
        first = self.first[rows]
        second = first if self.second is self.first else self.second[rows]
        return ParsedTimes(first, second, self.in_missing_hour[rows])


class TimeReader:
    """Reads one source's times.

    Args:
        time_format: ``iso``, ``day_first``, ``month_first``, ``epoch_s``, ``epoch_ms``,
            ``epoch_us``, ``serial_1900``, ``serial_1904`` or a strptime format.
        time_zone: IANA name; holds for times that carry no offset of their own.
        decimal: the decimal mark of times that are numbers.
    """

    def __init__(self, time_format: str, time_zone: str, decimal: str = ".") -> None:
        self._format, self._decimal = time_format, decimal
        self._zone = None if time_zone in {"UTC", "Etc/UTC"} else zoneinfo.ZoneInfo(time_zone)

    def read(self, texts: pa.Array) -> ParsedTimes:
        """Read distinct texts; what cannot be read becomes `NO_TIME`, never an error."""
        if self._format in _NUMERIC:
            return self.numbers(self._numbers(texts))
        if self._format in _ORDERS:
            return self.local(_read_numbered(texts, day_first=self._format == "day_first"))
        if self._format == "iso":
            return self._read_iso(texts)
        zoned = "%z" in self._format or "%Z" in self._format
        parsed = pd.to_datetime(_stripped(texts), format=self._format, errors="coerce", utc=zoned)
        if zoned:
            return self.universal(_series_microseconds(parsed))
        return self.local(_series_microseconds(parsed))

    def numbers(self, values: npt.NDArray[np.float64]) -> ParsedTimes:
        """Read numbers; the format is an epoch's or a spreadsheet's."""
        if self._format in _EPOCH_SCALE:
            return self.universal(_scaled(values, _EPOCH_SCALE[self._format]))
        return self.local(_serial(values, _SERIAL_START[self._format]))

    def universal(self, time: npt.NDArray[np.int64]) -> ParsedTimes:
        """Take microseconds of UTC as they are, but for those that no reading can have."""
        time = _plausible(time)
        return ParsedTimes(time, time, np.zeros(len(time), dtype=np.bool_))

    def local(self, time: npt.NDArray[np.int64]) -> ParsedTimes:
        """Turn microseconds of local wall-clock time into UTC."""
        if self._zone is None:
            return self.universal(time)
        there = time != NO_TIME
        wall = pd.DatetimeIndex(_plausible(time).view("datetime64[us]"))
        # pandas takes an array of "is this the first of the two?" for the doubled hour.
        one, other = (
            wall.tz_localize(
                self._zone, ambiguous=np.full(len(wall), fill_value=first), nonexistent="NaT"
            )
            .tz_convert("UTC")
            .as_unit("us")
            .asi8
            for first in (True, False)
        )
        missing = there & (one == NO_TIME) & (wall.asi8 != NO_TIME)
        return ParsedTimes(np.minimum(one, other), np.maximum(one, other), missing)

    def wall_clock(self, time: pd.Timestamp) -> pd.Timestamp:
        """Return the local wall-clock time, without a zone, of a moment."""
        return time.tz_convert(self._zone or "UTC").tz_localize(None)

    def _numbers(self, texts: pa.Array) -> npt.NDArray[np.float64]:
        """Return texts as numbers, NaN where they are none."""
        trimmed = pc.utf8_trim(texts, characters=' \t"')
        if self._decimal != ".":
            trimmed = pc.replace_substring(trimmed, self._decimal, ".")
        number = pc.if_else(pc.match_substring_regex(trimmed, _NUMBER), trimmed, None)
        return np.asarray(number.cast(pa.float64()).to_numpy(zero_copy_only=False), np.float64)

    def _read_iso(self, texts: pa.Array) -> ParsedTimes:
        zoned = len(texts) > 0 and str(texts[0]).strip('" ')[-1:] in {"Z", "z"}
        try:
            stamps = texts.cast(pa.timestamp("us", "UTC") if zoned else pa.timestamp("us"))
        except pa.ArrowInvalid:
            return self._read_mixed_iso(texts)
        time = stamps.cast(pa.int64()).to_numpy(zero_copy_only=False)
        return self.universal(time) if zoned else self.local(time)

    def _read_mixed_iso(self, texts: pa.Array) -> ParsedTimes:
        stripped = _stripped(texts).str.replace(r",(?=\d)", ".", regex=True)
        zoned = stripped.str.contains(_ENDS_WITH_AN_OFFSET, regex=True).to_numpy(dtype=np.bool_)
        with_offset = self.universal(_iso_microseconds(stripped.where(zoned)))
        # With a Z at its end a text that has a damaged offset (06:00-9) is none any more: pandas
        # would take it for one of nine hours.
        clock = stripped.str.contains(_HAS_A_CLOCK, regex=True)
        closed: pd.Series[str] = stripped + np.where(clock, "Z", "T00:00Z")
        without = self.local(_iso_microseconds(closed.where(~zoned)))
        return ParsedTimes(
            np.where(zoned, with_offset.first, without.first),
            np.where(zoned, with_offset.second, without.second),
            ~zoned & without.in_missing_hour,
        )


def resolve_doubled_hour(
    first: npt.NDArray[np.int64],
    tag: npt.NDArray[np.int32],
    part: npt.NDArray[np.int32],
) -> npt.NDArray[np.int8]:
    """Tell the two passes through a doubled hour apart by the order of the rows.

    The clock runs forward but for one step back between the passes. Rows are looked at as a whole,
    then tag by tag (an export may list one tag after the other), then part by part. A group shows
    both passes when it steps back exactly once and some tag stands on both sides of that step:
    without the second condition, two tags listed one after the other would pass for two passes.

    Args:
        first: [us] the earlier candidate of each row, in the order the rows were written.
        tag: the tag of each row.
        part: the file of each row.

    Returns:
        0 for the first pass, 1 for the second, -1 where the order does not tell.
    """
    if not len(first):
        return np.zeros(0, dtype=np.int8)
    result = np.full(len(first), -1, dtype=np.int8)
    distinct = np.unique(first)
    autumn = np.searchsorted(distinct[1:][np.diff(distinct) > DAY], first, side="right")
    whole = np.zeros(len(first), dtype=np.int64)
    # A tag's own time cannot stand still: equal times of one tag are a step too (hourly exports).
    for group, equal_steps in ((whole, False), (tag, True), (part, False)):
        key = group.astype(np.int64) * (int(autumn.max()) + 1) + autumn
        seen = _passes(key, first, tag, equal_steps=equal_steps)
        result = np.where(result >= 0, result, seen).astype(np.int8)
    return result


def _passes(
    key: npt.NDArray[np.int64],
    first: npt.NDArray[np.int64],
    tag: npt.NDArray[np.int32],
    *,
    equal_steps: bool,
) -> npt.NDArray[np.int8]:
    order = np.argsort(key, kind="stable")
    sorted_key, sorted_first = key[order], first[order]
    same = sorted_key[1:] == sorted_key[:-1]
    back = (
        sorted_first[1:] <= sorted_first[:-1]
        if equal_steps
        else sorted_first[1:] < sorted_first[:-1]
    )
    group = np.concatenate([[0], np.cumsum(~same)])
    steps = np.concatenate([[0], np.cumsum(same & back)])
    starts = np.concatenate([[0], np.flatnonzero(~same) + 1])
    ends = np.concatenate([starts[1:], [len(order)]]) - 1
    taken = steps - steps[starts][group]
    once = (steps[ends] - steps[starts]) == 1
    sides = np.unique(np.stack([group, tag[order], taken])[:, once[group]], axis=1)
    shared = np.zeros(len(starts), dtype=np.bool_)
    both = (sides[0, 1:] == sides[0, :-1]) & (sides[1, 1:] == sides[1, :-1])
    shared[sides[0, 1:][both]] = True
    result = np.empty(len(order), dtype=np.int8)
    result[order] = np.where((once & shared)[group], taken, -1)
    return result


def microseconds(time: pd.Timestamp) -> int:
    """Return a moment as whole microseconds since 1970-01-01 UTC."""
    return int(pd.DatetimeIndex([time.tz_convert("UTC")]).as_unit("us").asi8[0])


def from_microseconds(time: npt.NDArray[np.int64]) -> pd.DatetimeIndex:
    """Return microseconds since 1970-01-01 UTC as an index of UTC times."""
    return pd.DatetimeIndex(time.view("datetime64[us]")).tz_localize("UTC")


def check_zone(name: str) -> str:
    """Return the name of a time zone that exists.

    Raises:
        ValueError: there is no such zone.
    """
    try:
        zoneinfo.ZoneInfo(name)
    except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError) as error:
        raise ValueError(
            f"'{name}' is not a time zone; write one such as 'Europe/Vienna' or 'UTC'"
        ) from error
    return name


def is_numeric(time_format: str) -> bool:
    """Say whether times of this format are numbers."""
    return time_format in _NUMERIC


def check_time_format(text: str) -> str:
    """Return a time format that can be read.

    Raises:
        ValueError: neither one of the words nor a strptime format with a full date.
    """
    if text in _WORDS:
        return text
    known = f"write {', '.join(map(repr, _WORDS))} or such as '%d.%m.%Y %H:%M'"
    if "%" not in text:
        raise ValueError(f"'{text}' is not a time format; {known}")
    moment = dt.datetime(2026, 11, 23, 13, 0, tzinfo=dt.UTC)
    try:
        back = pd.to_datetime(moment.strftime(text), format=text)
    except (ValueError, TypeError) as error:
        raise ValueError(f"'{text}' is not a time format ({error}); {known}") from error
    if (back.year, back.month, back.day, back.hour) != (2026, 11, 23, 13):
        raise ValueError(
            f"'{text}' leaves part of a date or hour out (13:00 on 23 November 2026 reads back as "
            f"{back}); {known}"
        )
    return text


def _stripped(texts: pa.Array) -> pd.Series[Any]:
    trimmed = pc.utf8_trim(texts, characters=' \t"')
    return pd.Series(trimmed.to_numpy(zero_copy_only=False), dtype="str")


def _iso_microseconds(texts: pd.Series[Any]) -> npt.NDArray[np.int64]:
    parsed = pd.to_datetime(texts, format="ISO8601", errors="coerce", utc=True)
    return _series_microseconds(parsed)


def _series_microseconds(times: pd.Series[Any]) -> npt.NDArray[np.int64]:
    return pd.DatetimeIndex(times).as_unit("us").asi8


def _scaled(values: npt.NDArray[np.float64], scale: float) -> npt.NDArray[np.int64]:
    time = values * scale
    readable = np.abs(time) < float(_LATEST)  # False for NaN
    return np.where(readable, np.rint(np.where(readable, time, 0.0)), NO_TIME).astype(np.int64)


def _serial(days: npt.NDArray[np.float64], start: dt.date) -> npt.NDArray[np.int64]:
    """Return local wall-clock time of day numbers, to the millisecond.

    Five decimals of a day are a second, and spreadsheets write as many as they like: finer than a
    millisecond is rounding.
    """
    offset = (start - dt.date(1970, 1, 1)).days
    milliseconds = np.rint((days + offset) * (DAY / 1_000))
    return _scaled(milliseconds, 1_000.0)


def _read_numbered(texts: pa.Array, *, day_first: bool) -> npt.NDArray[np.int64]:
    """Return local wall-clock time of texts such as 31.1.2026 6:00 or 1/31/26 6:00:00.5 PM."""
    found = pc.extract_regex(pc.utf8_trim(texts, characters=' \t"'), _DATE_AND_TIME)
    parts = dict(zip((field.name for field in found.type), found.flatten(), strict=True))
    part = pc.utf8_rpad(pc.utf8_slice_codeunits(parts["part"], 0, 6), width=6, padding="0")
    half = pc.utf8_lower(parts["half"])
    year, hour = _whole(parts["year"]), _whole(parts["hour"])
    short = pc.equal(pc.utf8_length(parts["year"]), 2).fill_null(False).to_numpy(False)
    year = np.where(short, year + np.where(year < _CENTURY_TURNS, 2000, 1900), year)
    twelve = pc.is_in(half, pa.array(["a", "p"])).to_numpy(zero_copy_only=False)
    wrong = twelve & ((hour < 1) | (hour > 12))  # noqa: PLR2004 - a clock's face
    afternoon = pc.equal(half, "p").fill_null(False).to_numpy(False)
    hour = np.where(twelve, hour % 12 + 12 * afternoon, hour)
    one, two = _whole(parts["one"]), _whole(parts["two"])
    parsed = pd.to_datetime(
        pd.DataFrame(
            {
                "year": year,
                "month": two if day_first else one,
                "day": one if day_first else two,
                "hour": np.where(hour < 24, hour, 0),  # noqa: PLR2004
            }
        ),
        errors="coerce",
    )
    minute, second = _whole(parts["minute"]), _whole(parts["second"])
    wrong |= (hour > 23) | (minute > 59) | (second > 59)  # noqa: PLR2004
    wrong |= found.is_null().to_numpy(zero_copy_only=False)
    time = _series_microseconds(parsed)
    inside = (minute * 60 + second) * 1_000_000 + _whole(part)
    return np.where(wrong | (time == NO_TIME), NO_TIME, time + inside)


def _whole(texts: pa.Array) -> npt.NDArray[np.int64]:
    """Return digits as numbers, 0 where there are none."""
    filled = pc.if_else(pc.fill_null(pc.not_equal(texts, ""), False), texts, "0")
    return np.asarray(filled.cast(pa.int64()).to_numpy(zero_copy_only=False), np.int64)


def _plausible(time: npt.NDArray[np.int64]) -> npt.NDArray[np.int64]:
    return np.where((time >= _EARLIEST) & (time < _LATEST), time, NO_TIME)
