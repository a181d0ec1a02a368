"""The shift calendar: local time, with its two odd hours a year, turned into UTC spans."""

from __future__ import annotations

import datetime as dt
import itertools
import zoneinfo
from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from monitor.site.models import Shifts

__all__ = ["ShiftCalendar", "Span"]


@dataclass(frozen=True)
class Span:
    """A shift, day or month: its name, its UTC seconds (half open), its local day."""

    name: str
    start: int
    end: int
    day: dt.date


@dataclass(frozen=True)
class ShiftCalendar:
    """Spans of local time as UTC seconds.

    A shift that starts at a local time which daylight saving skips starts when the clock has moved;
    at a doubled time it starts at the first of the two. So every instant belongs to one shift.
    """

    starts: tuple[dt.time, ...]
    names: tuple[str, ...]
    time_zone: str

    @classmethod
    def of(cls, shifts: Shifts, time_zone: str) -> ShiftCalendar:
        """Build the calendar of a site."""
        return cls(shifts.starts, shifts.names, time_zone)

    def spans(self, start: int, end: int) -> list[Span]:
        """Shifts that overlap [start, end), whole, in order; ``day`` is the day they start on."""
        day = self._local_day(start) - dt.timedelta(days=1)
        last = self._local_day(end) + dt.timedelta(days=1)
        marks = []
        while day <= last:
            marks += [
                (self._utc(day, at), name, day)
                for at, name in zip(self.starts, self.names, strict=True)
            ]
            day += dt.timedelta(days=1)
        return [
            Span(name, begins, ends, on)
            for (begins, name, on), (ends, _, _) in itertools.pairwise(marks)
            if begins < end and ends > start
        ]

    def days(self, start: int, end: int) -> list[Span]:
        """Local calendar days that overlap [start, end), whole, in order."""
        day, last = self._local_day(start), self._local_day(end)
        found = []
        while day <= last:
            after = day + dt.timedelta(days=1)
            found.append(Span(day.isoformat(), self._midnight(day), self._midnight(after), day))
            day = after
        return [s for s in found if s.start < end and s.end > start]

    def months(self, start: int, end: int) -> list[Span]:
        """Local calendar months that overlap [start, end), whole, in order."""
        day = self._local_day(start).replace(day=1)
        found = []
        while self._midnight(day) < end:
            after = (day + dt.timedelta(days=32)).replace(day=1)
            found.append(
                Span(day.strftime("%Y-%m"), self._midnight(day), self._midnight(after), day)
            )
            day = after
        return [s for s in found if s.end > start]

    def _local_day(self, utc_seconds: int) -> dt.date:
        zone = zoneinfo.ZoneInfo(self.time_zone)
        return dt.datetime.fromtimestamp(utc_seconds, tz=zone).date()

    def _midnight(self, day: dt.date) -> int:
        return self._utc(day, dt.time(0))

    def _utc(self, day: dt.date, at: dt.time) -> int:
        zone = zoneinfo.ZoneInfo(self.time_zone)
        # fold=0: the first of a doubled time; a skipped time takes the offset before the change,
        # which is the instant at which the clock moves plus the minutes past it.
        return int(dt.datetime.combine(day, at, tzinfo=zone).timestamp())
