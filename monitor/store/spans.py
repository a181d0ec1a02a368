"""Spans of time that figures are rolled up over."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from typing import TYPE_CHECKING, Protocol

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["Calendar", "CalendarSpan", "Spans", "calendar_key", "hours", "of"]

HOUR = 3600
# A year of a fixed past: two clock changes, all shifts, no matter when the program runs.
_SAMPLE = (1704067200, 1735689600)


class CalendarSpan(Protocol):
    """A shift, a day or a month in UTC seconds, half open."""

    @property
    def name(self) -> str:
        """For example the shift's name."""

    @property
    def start(self) -> int:
        """Its first second."""

    @property
    def end(self) -> int:
        """The second after its last."""


class Calendar(Protocol):
    """Local time of a site, as `monitor.site.shifts.ShiftCalendar` gives it.

    Each method returns the whole spans that overlap [start, end), in order.
    """

    def spans(self, start: int, end: int) -> Sequence[CalendarSpan]:
        """Shifts."""

    def days(self, start: int, end: int) -> Sequence[CalendarSpan]:
        """Local days."""

    def months(self, start: int, end: int) -> Sequence[CalendarSpan]:
        """Local months."""


@dataclass(frozen=True)
class Spans:
    """Spans in order of time that do not overlap: integer UTC seconds, half open, shape (n,)."""

    starts: npt.NDArray[np.int64]
    ends: npt.NDArray[np.int64]

    def index(self, times: npt.NDArray[np.int64]) -> npt.NDArray[np.int64]:
        """For each time the span it lies in, -1 where none."""
        if not len(self.starts):
            return np.full(times.shape, -1, dtype=np.int64)
        found = np.searchsorted(self.starts, times, side="right") - 1
        inside = (found >= 0) & (times < self.ends[found])
        return np.where(inside, found, -1)

    def only(self, keep: npt.NDArray[np.bool_]) -> Spans:
        """The spans that ``keep`` marks."""
        return Spans(self.starts[keep], self.ends[keep])

    @property
    def on_hours(self) -> npt.NDArray[np.bool_]:
        """Which spans start and end on a full UTC hour, so that hours add up to them."""
        return np.asarray((self.starts % HOUR == 0) & (self.ends % HOUR == 0))

    @property
    def extent(self) -> tuple[int, int]:
        """First start and last end; (0, 0) without spans."""
        return (int(self.starts[0]), int(self.ends[-1])) if len(self.starts) else (0, 0)


def hours(start: int, end: int) -> Spans:
    """Full UTC hours that overlap [start, end)."""
    starts = np.arange(start // HOUR * HOUR, end, HOUR, dtype=np.int64)
    return Spans(starts, starts + HOUR)


def of(calendar: Calendar, resolution: str, start: int, end: int) -> Spans:
    """A calendar's shifts, days or months that overlap [start, end), whole."""
    method = {"shift": calendar.spans, "day": calendar.days, "month": calendar.months}[resolution]
    # A local day that a time zone skipped has no length.
    found = [s for s in method(start, end) if s.start < s.end]
    return Spans(
        np.array([s.start for s in found], dtype=np.int64),
        np.array([s.end for s in found], dtype=np.int64),
    )


def calendar_key(calendar: Calendar) -> str:
    """A short text that changes when the calendar cuts time in other places."""
    marks = hashlib.sha256()
    for resolution in ("shift", "day", "month"):
        marks.update(of(calendar, resolution, *_SAMPLE).starts.astype("<i8").tobytes())
    return marks.hexdigest()[:16]
