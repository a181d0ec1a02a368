"""When jobs come due: on the grid of time, and at the ends of local shifts."""

from __future__ import annotations

import math
from datetime import UTC, datetime
from typing import TYPE_CHECKING

from apscheduler.triggers.base import BaseTrigger

if TYPE_CHECKING:
    from monitor.site.shifts import ShiftCalendar, Span

__all__ = ["GridTrigger", "ShiftTrigger", "last_shifts"]

DAY = 86400


class GridTrigger(BaseTrigger):  # type: ignore[misc]  # no annotations there
    """Fires at every multiple of an interval since 1970, plus an offset, whatever came before."""

    def __init__(self, interval: int, offset: float) -> None:
        self._interval, self._offset = interval, offset

    def get_next_fire_time(self, previous_fire_time: datetime | None, now: datetime) -> datetime:
        """The next time after ``previous_fire_time`` and not before ``now``."""
        cells = math.ceil((now.timestamp() - self._offset) / self._interval)
        if previous_fire_time is not None:
            passed = math.floor((previous_fire_time.timestamp() - self._offset) / self._interval)
            cells = max(cells, passed + 1)
        due = cells * self._interval + self._offset
        return datetime.fromtimestamp(due, tz=UTC)


class ShiftTrigger(BaseTrigger):  # type: ignore[misc]  # as above
    """Fires at the end of every shift, plus an offset: local time, daylight saving included."""

    def __init__(self, calendar: ShiftCalendar, offset: float) -> None:
        self._calendar, self._offset = calendar, offset

    def get_next_fire_time(self, previous_fire_time: datetime | None, now: datetime) -> datetime:
        """The next time after ``previous_fire_time`` and not before ``now``."""
        after = now.timestamp() - self._offset
        if previous_fire_time is not None:
            after = max(after, previous_fire_time.timestamp() - self._offset + 1)
        spans = self._calendar.spans(int(after) - 1, int(after) + 2 * DAY)
        end = next(span.end for span in spans if span.end >= after)
        return datetime.fromtimestamp(end + self._offset, tz=UTC)


def last_shifts(calendar: ShiftCalendar, until: float, most: int = 1) -> list[Span]:
    """The newest shifts that are over at a time (UTC seconds), the oldest first."""
    spans = calendar.spans(int(until) - (2 + most) * DAY, int(until) + 1)
    return [span for span in spans if span.end <= until][-most:]
