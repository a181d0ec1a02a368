"""What every kind of source agrees on: a window in, tidy readings out.

A connector is handed the historian's own tag names and a UTC window. It returns readings exactly
as the historian has them: no unit is changed and no value is judged beyond the quality that the
source itself states. Nothing here imports ``monitor``.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import IntEnum, IntFlag
from typing import TYPE_CHECKING, Any, Protocol, runtime_checkable

import pandas as pd

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from pydantic import BaseModel

__all__ = [
    "FEW",
    "READING_COLUMNS",
    "Connector",
    "ConnectorError",
    "Example",
    "Mark",
    "Probe",
    "Problem",
    "Quality",
    "ReadResult",
    "SourceKind",
    "Window",
    "empty_readings",
]

FEW = 3
"""So many of each problem are kept for a person to see."""

READING_COLUMNS = ("tag", "time", "value", "quality")


class ConnectorError(Exception):
    """A source cannot be read at all; the message says which, what was found and what to do."""


class Quality(IntEnum):
    """The historian's own word on a reading, in the three classes that sources have in common."""

    GOOD = 0
    UNCERTAIN = 1
    BAD = 2


class Mark(IntFlag):
    """What a source remarks on a reading beside its quality; bits of the ``marks`` column."""

    OUT_OF_ORDER = 1
    """It stood after readings of later times."""
    AMBIGUOUS_TIME = 2
    """Its local time happens twice, and nothing tells which one is meant."""


@dataclass(frozen=True)
class Window:
    """A half-open interval of UTC time: start <= time < end."""

    start: pd.Timestamp
    end: pd.Timestamp

    def __post_init__(self) -> None:
        if self.start.tzinfo is None or self.end.tzinfo is None:
            raise ValueError("a window's ends carry a time zone (UTC)")
        if self.end < self.start:
            raise ValueError(f"a window ends before it starts: {self.start} to {self.end}")


@dataclass(frozen=True)
class Example:
    """One of the things that were passed over: where it stands, and what is written there."""

    place: str = ""
    text: str = ""

    def __str__(self) -> str:
        """The place and the text, as far as there are any."""
        shown = repr(self.text) if self.text else ""
        return f"{self.place} {shown}".strip()


@dataclass(frozen=True)
class Problem:
    """Something in a source that was passed over, counted rather than lost in silence.

    Attributes:
        source: the file or table.
        what: what was found and what became of it.
        count: how often.
        examples: the first few of them.
    """

    source: str
    what: str
    count: int = 1
    examples: tuple[Example, ...] = ()

    def with_more(self, other: Problem) -> Problem:
        """Return the same problem with those counted in that another look has met."""
        examples = (*self.examples, *other.examples)[:FEW]
        return Problem(self.source, self.what, self.count + other.count, examples)

    @property
    def where(self) -> str:
        """Where the first of them stands."""
        place = self.examples[0].place if self.examples else ""
        return f"{self.source}:{place}" if place else self.source

    def __str__(self) -> str:
        """What it is, with the first few of them."""
        shown = ", ".join(filter(None, map(str, self.examples)))
        return f"{self.what} (first: {shown})" if shown else self.what


@dataclass(frozen=True)
class ReadResult:
    """Readings of one window from one source.

    Attributes:
        readings: one row a reading, sorted by tag and time: ``tag`` (categorical of the names that
            were asked for), ``time`` (datetime64[us, UTC]), ``value`` (float64 in the historian's
            own unit, NaN where the cell held no number), ``quality`` (uint8, see `Quality`). A tag
            has at most one row a time: the last one written wins. A source that has remarks adds
            ``marks`` (uint8, see `Mark`).
        problems: what was passed over, with counts.
    """

    readings: pd.DataFrame
    problems: tuple[Problem, ...] = ()


@dataclass(frozen=True)
class Probe:
    """What a source has, as far as a quick look tells.

    Attributes:
        tags: the tag names found in the source (all, or those of the newest part of it).
        first: the oldest reading's time (UTC), None when the source is empty.
        last: the newest reading's time (UTC), None when the source is empty.
        detail: one sentence for a person ("12 files, 48 MB").
        problems: what was passed over, with counts.
    """

    tags: tuple[str, ...]
    first: pd.Timestamp | None
    last: pd.Timestamp | None
    detail: str
    problems: tuple[Problem, ...] = field(default=())


@runtime_checkable
class Connector(Protocol):
    """An open source. It only ever reads."""

    def read(self, tags: Sequence[str], window: Window) -> ReadResult:
        """Return the readings of these tags inside the window.

        A tag the source does not have gives no rows; a source with nothing in the window gives an
        empty table.

        Raises:
            ConnectorError: the source cannot be reached, opened or understood.
        """

    def probe(self) -> Probe:
        """Look at what there is without reading all of it.

        Raises:
            ConnectorError: the source cannot be reached, opened or understood.
        """

    def close(self) -> None:
        """Release files and connections; the connector is not used afterwards."""


class SourceKind(Protocol):
    """A kind of source: its options in the site file, and how one is opened."""

    name: str
    options: type[BaseModel]

    def open(self, options: Any, folder: Path) -> Connector:  # noqa: ANN401
        """Open a source; relative paths are taken from ``folder`` (the site file's)."""


def empty_readings(tags: Sequence[str] = ()) -> pd.DataFrame:
    """Return a table of no readings, with the columns and types that `ReadResult` promises."""
    return pd.DataFrame(
        {
            "tag": pd.Categorical([], categories=sorted(set(tags))),
            "time": pd.DatetimeIndex([], dtype="datetime64[us, UTC]"),
            "value": pd.Series([], dtype="float64"),
            "quality": pd.Series([], dtype="uint8"),
        }
    )
