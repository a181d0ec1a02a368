"""The time column of a table: how a window is asked for, and how times are read."""

from __future__ import annotations

import datetime as dt
import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import pandas as pd
import pyarrow as pa
from sqlalchemy import BigInteger, DateTime, String, and_, or_, select

from connectors.base import ConnectorError
from connectors.numbers import floats
from connectors.times import DOUBLED_HOUR_REACH, NO_TIME, TimeReader, microseconds

if TYPE_CHECKING:
    from collections.abc import Sequence

    from sqlalchemy import ColumnElement, Connection
    from sqlalchemy.types import TypeEngine

    from connectors.base import Window
    from connectors.sql_options import SqlOptions
    from connectors.times import ParsedTimes

__all__ = ["SqlTimes"]

_REACH = pd.Timedelta(microseconds=DOUBLED_HOUR_REACH)
# The clocks of the world, by the IANA time zone database: 12 h behind UTC to 14 h before it.
_BEHIND, _BEFORE = pd.Timedelta(hours=12), pd.Timedelta(hours=14)
_PER_SECOND = {"epoch_s": 1, "epoch_ms": 1_000, "epoch_us": 1_000_000}
_MINUTE = len("2026-01-31T06:00")
_DATE = len("2026-01-31")
_ANY_DATE = "____-__-__"
_A_MINUTE = dt.timedelta(minutes=1)
_ISO = re.compile(r"\d{4}-\d{2}-\d{2}([T ]|$)")


@dataclass(frozen=True)
class SqlTimes:
    """A time column.

    Attributes:
        column: the column, None in the site's own query.
        name: its name, for messages.
        kind: ``zoned``, ``local``, ``text_iso``, ``epoch_s``, ``epoch_ms`` or ``epoch_us``.
        reader: reads texts and local times.
        zone: the zone of times without an offset.
    """

    column: Any
    name: str
    kind: str
    reader: TimeReader
    zone: str

    @classmethod
    def of(cls, column: Any, options: SqlOptions, *, is_text_store: bool) -> SqlTimes:  # noqa: ANN401
        """Describe a column as it was found in the database.

        Args:
            column: the reflected column, None in the site's own query.
            options: what the site file says.
            is_text_store: the database keeps times as text whatever the column's type (SQLite).
        """
        kind = options.time_kind.removeprefix("timestamp_")
        if kind == "timestamp":
            zoned = bool(getattr(column.type, "timezone", False)) or "OFFSET" in repr(column.type)
            kind = "zoned" if zoned else "local"
        if is_text_store and kind in {"zoned", "local"}:
            kind = "text_iso"
        return cls(
            column=column,
            name=options.time_column,
            kind=kind,
            reader=TimeReader(kind if kind in _PER_SECOND else "iso", options.time_zone),
            zone=options.time_zone,
        )

    def condition(self, connection: Connection, window: Window) -> tuple[ColumnElement[bool], ...]:
        """Return what a row must fulfil to be in the window, or close to it.

        Local times and texts are asked for with a margin: the exact cut is made on UTC afterwards.

        Raises:
            ConnectorError: the column holds no times of its kind.
        """
        if self.kind != "text_iso":
            return self._between(*self.bounds(window))
        self._check_texts(connection)
        start, end = self._wall_clock(window)
        return self._text_between(start, end, *self._any_clock(window, start, end))

    def bounds(self, window: Window) -> tuple[Any, Any]:
        """Return the least time that may be in the window, and the first that cannot.

        Texts are bounded so that they hold however the column writes them: with a blank or a T, in
        any offset. They bring rows from around the window too.
        """
        if self.kind == "zoned":
            start, end = window.start.tz_convert("UTC"), window.end.tz_convert("UTC")
            return start.to_pydatetime(), end.to_pydatetime()
        if self.kind in _PER_SECOND:
            scale = 1_000_000 // _PER_SECOND[self.kind]
            # Rounded up: a reading at a whole unit is inside from there on.
            return -(-microseconds(window.start) // scale), -(-microseconds(window.end) // scale)
        start, end = self._wall_clock(window)
        if self.kind == "local":
            return start.to_pydatetime(), end.to_pydatetime()
        low, high = self._any_clock(window, start, end)
        return low.isoformat(sep=" ")[:_MINUTE], high.isoformat(sep="T")[:_MINUTE]

    @property
    def bound_type(self) -> TypeEngine[Any]:
        """The type by which bounds are handed to the database."""
        if self.kind in {"zoned", "local"}:
            return DateTime(timezone=self.kind == "zoned")
        return BigInteger() if self.kind in _PER_SECOND else String()

    def parse(self, cells: Sequence[Any]) -> ParsedTimes:
        """Read fetched cells; what cannot be read becomes `NO_TIME`."""
        if self.kind in _PER_SECOND:
            try:
                return self.reader.numbers(floats(cells))
            except (TypeError, ValueError):
                pass  # texts among the numbers: read one by one below
        if self.kind in {"zoned", "local"}:
            stamps = pa.array(
                list(cells), pa.timestamp("us", "UTC" if self.kind == "zoned" else None)
            )
            time = stamps.cast(pa.int64()).fill_null(NO_TIME).to_numpy(zero_copy_only=False)
            read = self.reader.universal if self.kind == "zoned" else self.reader.local
            return read(time)
        coded = _texts(cells).dictionary_encode()
        return self.reader.read(coded.dictionary).take(coded.indices.to_numpy())

    def _wall_clock(self, window: Window) -> tuple[pd.Timestamp, pd.Timestamp]:
        """Return local bounds that hold the window, both passes of a doubled hour included."""
        start, end = window.start, window.end
        around = [self.reader.wall_clock(t) - t.tz_convert("UTC").tz_localize(None)
                  for t in (start - _REACH, end + _REACH)]  # fmt: skip
        margin = _REACH if around[0] != around[1] else pd.Timedelta(0)
        return self.reader.wall_clock(start) - margin, self.reader.wall_clock(end) + margin

    @staticmethod
    def _any_clock(
        window: Window, low: pd.Timestamp, high: pd.Timestamp
    ) -> tuple[pd.Timestamp, pd.Timestamp]:
        """Return bounds that hold the window as any clock of the world shows it.

        Args:
            window: the window.
            low: where the zone's own clock begins to be asked for.
            high: where that ends.
        """
        start, end = (t.tz_convert("UTC").tz_localize(None) for t in (window.start, window.end))
        earliest, latest = min(start - _BEHIND, low), max(end + _BEFORE, high)
        # A minute more on both sides: a date alone sorts before its midnight.
        return earliest.floor("min") - _A_MINUTE, latest.ceil("min") + _A_MINUTE

    def _check_texts(self, connection: Connection) -> None:
        example = connection.execute(
            select(self.column).where(self.column.is_not(None)).limit(1)
        ).scalar()
        text = "2026-01-31T06:00" if example is None else str(example)
        if not _ISO.match(text):
            raise ConnectorError(
                f"column '{self.name}' holds times such as {text[:40]!r}, which are no ISO "
                "texts; correct the source's time_kind (epoch_s and epoch_ms are for numbers)"
            )

    def _text_between(
        self, start: pd.Timestamp, end: pd.Timestamp, earliest: pd.Timestamp, latest: pd.Timestamp
    ) -> tuple[ColumnElement[bool], ...]:
        """Compare texts as texts, whether a blank or a T stands before the time of day.

        A blank sorts before a T, so that one range holds the window in both forms: from its start
        with a blank to its end with a T. What lies in it too, the first day's earlier times with a
        T and the last day's later ones with a blank, is taken out again.

        A text with an offset may show another clock than those around it: out of all that lie
        within the reach of any clock, those with an offset are taken.
        """
        column = self.column
        first, last = start.floor("min"), end.ceil("min") + _A_MINUTE
        first_day, last_day = f"{first:%Y-%m-%d}", f"{last:%Y-%m-%d}"
        since, until = f"{first:%H:%M}", f"{last:%H:%M}"
        # A date alone is its midnight, and sorts before all times of its day.
        low = first_day if since == "00:00" else f"{first_day} {since}"
        # What holds for most rows comes first: a database stops there.
        begun = [or_(column >= f"{first_day}T{since}", column < f"{first_day}T")]
        plain = and_(
            column >= low,
            *(begun if since != "00:00" else []),
            or_(
                column < f"{last_day} {until}",
                and_(column >= f"{last_day}T", column < f"{last_day}T{until}"),
            ),
        )
        return (
            *self._between(f"{earliest:%Y-%m-%d %H:%M}", f"{latest:%Y-%m-%dT%H:%M}"),
            or_(plain, self._has_offset()),
        )

    def _has_offset(self) -> ColumnElement[bool]:
        """Say of a text whether it shows another clock than the zone's."""
        column = self.column
        with_sign = or_(column.like(f"{_ANY_DATE}%+%"), column.like(f"{_ANY_DATE}%-%"))
        if self.zone in {"UTC", "Etc/UTC"}:
            return and_(with_sign, column.not_like("%+00:00"))
        return or_(with_sign, column.like("%Z"), column.like("%z"))

    def _between(
        self, low: object, high: object
    ) -> tuple[ColumnElement[bool], ColumnElement[bool]]:
        return self.column >= low, self.column < high


def _texts(cells: Sequence[Any]) -> pa.Array:
    """Return cells as texts, a null as an empty one."""
    try:
        held = cells if isinstance(cells, list) else list(cells)
        return pa.array(held, pa.string()).fill_null("")
    except (pa.ArrowException, UnicodeError):
        texts = ["" if cell is None else str(cell) for cell in cells]
        return pa.array(texts, pa.string())
