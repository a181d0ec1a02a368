"""A SQL database as a source: readings of a window out of one table or view."""

from __future__ import annotations

import difflib
import time
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
import pyarrow as pa
from sqlalchemy import MetaData, Table, func, select, type_coerce
from sqlalchemy.exc import NoSuchTableError
from sqlalchemy.types import NullType

from connectors.base import ConnectorError, Probe, Quality, ReadResult, Window
from connectors.numbers import NumberReader
from connectors.quality import QualityWords
from connectors.sql_engine import Database
from connectors.sql_options import SqlOptions
from connectors.sql_times import SqlTimes
from connectors.tidy import ProblemCount, Rows, join_rows, tidy
from connectors.times import NO_TIME, from_microseconds, microseconds

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping, Sequence
    from pathlib import Path

    from pydantic import BaseModel
    from sqlalchemy import Column, Connection

    from connectors.base import Connector

__all__ = ["SqlKind", "SqlSource"]

_BATCH = 500
"""Tags a statement: well below the least limit of bound parameters (999 in old SQLite files)."""

_MOST_TAGS = 100_000
_RECENT = pd.Timedelta(days=30)
_A_MOMENT = pd.Timedelta(seconds=1)

_NO_TIME = "row dropped: its time cannot be read"
_MISSING_HOUR = "row dropped: its local time does not exist, the clock was put forward"
_UNSETTLED = "reading in the hour that comes twice, pass not known: taken as the first, uncertain"
_NOT_A_NUMBER = "value is not a number: the reading is kept as bad"
_UNKNOWN_QUALITY = "quality word is in no list: the reading counts as uncertain"
_REPLACED = "reading given again for the same tag and time: the last one counts"


@dataclass(frozen=True)
class _Tables:
    time: Any
    tag: Column[Any]
    value: Any
    quality: Any
    key: Any
    name: Any


class SqlSource:
    """Reads a table of readings.

    Args:
        options: what the site file says.
        folder: where a relative SQLite path starts.
        sleep: waits between tries after a lost connection.
    """

    def __init__(
        self, options: SqlOptions, folder: Path, sleep: Callable[[float], object] = time.sleep
    ) -> None:
        self._options = options
        self._database = Database(options, folder, sleep)
        self._words = QualityWords(options)
        self._numbers = NumberReader(".", "", self._words)
        self._found: tuple[_Tables, SqlTimes] | None = None

    def read(self, tags: Sequence[str], window: Window) -> ReadResult:
        """Return the readings of these tags inside the window.

        Raises:
            ConnectorError: the database cannot be reached, or the table is not as described.
        """
        names = sorted(set(tags))
        rows, problems = self._database.run(lambda c: self._rows(c, names, window))
        start, end = microseconds(window.start), microseconds(window.end)
        rows = rows.keep((rows.time >= start) & (rows.time < end))
        unsettled = rows.doubled_at
        problems.add(self._options.table, "", _UNSETTLED, len(unsettled))
        rows.quality[unsettled] = np.maximum(rows.quality[unsettled], np.uint8(Quality.UNCERTAIN))
        table, replaced = tidy(rows, names)
        problems.add(self._options.table, "", _REPLACED, replaced)
        return ReadResult(table, problems.problems())

    def probe(self) -> Probe:
        """Look at the table's tags and its span of time.

        Raises:
            ConnectorError: the database cannot be reached, or the table is not as described.
        """
        return self._database.run(self._look)

    def close(self) -> None:
        """Close the connections."""
        self._database.close()

    def _rows(
        self, connection: Connection, names: list[str], window: Window
    ) -> tuple[Rows, ProblemCount]:
        # Counted anew on each try: a lost connection must not count its rows twice.
        problems = ProblemCount()
        tables, times = self._tables(connection)
        keys = self._keys(connection, tables, names)
        condition = times.condition(connection, window)
        columns = [tables.time, tables.tag, tables.value]
        columns += [tables.quality] if tables.quality is not None else []
        parts: list[Rows] = []
        asked = list(keys)
        for at in range(0, len(asked), _BATCH):
            statement = select(*columns).where(tables.tag.in_(asked[at : at + _BATCH]), *condition)
            chunks = self._stream(connection, statement)
            parts += [self._chunk(chunk, keys, times, problems) for chunk in chunks]
        return join_rows(parts), problems

    def _stream(self, connection: Connection, statement: Any) -> Iterator[Sequence[Any]]:  # noqa: ANN401
        options = {"stream_results": True, "max_row_buffer": self._options.chunk_rows}
        with connection.execute(statement, execution_options=options) as result:
            yield from result.partitions(self._options.chunk_rows)

    def _chunk(
        self,
        chunk: Sequence[Any],
        keys: Mapping[Any, int],
        times: SqlTimes,
        problems: ProblemCount,
    ) -> Rows:
        columns = list(zip(*chunk, strict=True))
        table = self._options.table
        parsed = times.parse(columns[0])
        there = parsed.first != NO_TIME
        missing = parsed.in_missing_hour
        problems.add(table, "", _MISSING_HOUR, int(missing.sum()))
        lost = ~there & ~missing
        example = str(columns[0][int(lost.argmax())]) if lost.any() else ""
        problems.add(table, "", _NO_TIME, int(lost.sum()), example=example)
        codes, distinct = pd.factorize(pd.Series(columns[1], dtype=object))
        tag = np.array([keys[key] for key in distinct], dtype=np.int32)[codes]
        value = self._values(columns[2], problems)
        quality = self._qualities(columns[3] if len(columns) > 3 else None, len(value), problems)  # noqa: PLR2004
        quality[np.isnan(value)] = Quality.BAD
        doubled = np.flatnonzero(parsed.doubled)
        rows = Rows(tag, parsed.first, value, quality, doubled, parsed.second[doubled])
        return rows.keep(there)

    def _values(self, cells: Sequence[Any], problems: ProblemCount) -> np.ndarray[Any, Any]:
        try:
            value = np.array(cells, dtype=np.float64)  # None becomes NaN
        except (TypeError, ValueError):
            parsed = self._numbers.read(pa.array(["" if c is None else str(c) for c in cells]))
            problems.add(
                self._options.table,
                "",
                _NOT_A_NUMBER,
                int(parsed.not_understood.sum()),
                example=parsed.example,
            )
            return parsed.value
        infinite = np.isinf(value)
        problems.add(self._options.table, "", _NOT_A_NUMBER, int(infinite.sum()))
        value[infinite] = np.nan
        return value

    def _qualities(
        self, cells: Sequence[Any] | None, count: int, problems: ProblemCount
    ) -> np.ndarray[Any, np.dtype[np.uint8]]:
        if cells is None:
            return np.full(count, Quality.GOOD, dtype=np.uint8)
        at, distinct = pd.factorize(pd.Series(cells, dtype=object), use_na_sentinel=False)
        words = [_word(cell) for cell in distinct]
        classes, unknown = self._words.classify(words)
        rows = unknown[at]
        example = words[at[int(rows.argmax())]] if rows.any() else ""
        problems.add(self._options.table, "", _UNKNOWN_QUALITY, int(rows.sum()), example=example)
        return classes[at]

    def _keys(self, connection: Connection, tables: _Tables, names: list[str]) -> dict[Any, int]:
        """Return what the tag column holds for each name, with the name's position."""
        position = {name: at for at, name in enumerate(names)}
        if tables.key is None or tables.name is None:
            return _typed_keys(tables.tag, position)
        keys: dict[Any, int] = {}
        for at in range(0, len(names), _BATCH):
            batch = names[at : at + _BATCH]
            statement = select(tables.key, tables.name).where(tables.name.in_(batch))
            keys.update({key: position[name] for key, name in connection.execute(statement)})
        return keys

    def _look(self, connection: Connection) -> Probe:
        problems = ProblemCount()
        tables, times = self._tables(connection)
        where = f"table {self._options.table} of {self._database.shown}"
        ends = connection.execute(select(func.min(tables.time), func.max(tables.time))).one()
        first = last = None
        if ends[0] is not None:
            parsed = times.parse(list(ends))
            lost = parsed.first == NO_TIME
            example = str(ends[int(lost.argmax())])
            problems.add(self._options.table, "", _NO_TIME, int(lost.sum()), example=example)
            if not lost.any():
                first, last = from_microseconds(np.array([parsed.first[0], parsed.second[1]]))
        if tables.name is not None:
            statement = select(tables.name)
        elif last is not None:
            # All tags ever written would be a scan of the whole table, hours on a large one.
            recent = times.condition(connection, Window(last - _RECENT, last + _A_MOMENT))
            statement = select(tables.tag).where(*recent)
            where += f"; tags are those of the newest {_RECENT.days} days"
        else:
            statement = select(tables.tag)
        found = connection.execute(statement.distinct().limit(_MOST_TAGS)).scalars().all()
        tags = tuple(sorted(str(name) for name in found if name is not None))
        return Probe(tags, first, last, where, problems.problems())

    def _tables(self, connection: Connection) -> tuple[_Tables, SqlTimes]:
        if self._found is None:
            self._found = self._find_tables(connection)
        return self._found

    def _find_tables(self, connection: Connection) -> tuple[_Tables, SqlTimes]:
        options = self._options
        readings = self._reflect(connection, options.table)
        look_up = self._reflect(connection, options.tag_table) if options.tag_table else None
        tables = _Tables(
            time=self._column(readings, "time_column"),
            tag=self._column(readings, "tag_column"),
            value=self._column(readings, "value_column"),
            quality=self._column(readings, "quality_column") if options.quality_column else None,
            key=self._column(look_up, "tag_table_key") if look_up is not None else None,
            name=self._column(look_up, "tag_table_name") if look_up is not None else None,
        )
        times = SqlTimes.of(tables.time, options, is_text_store=self._database.dialect == "sqlite")
        return tables, times

    def _column(self, table: Table, key: str) -> Any:  # noqa: ANN401 - a column or one coerced
        name = getattr(self._options, key)
        if name in table.columns:
            column = table.columns[name]
            # SQLite keeps what it was given whatever the column's type: take it as it is.
            is_raw = self._database.dialect == "sqlite" and key != "tag_column"
            return type_coerce(column, NullType()) if is_raw else column
        found = list(table.columns.keys())
        near = difflib.get_close_matches(name, found, n=1, cutoff=0.4)
        hint = f"; nearest is '{near[0]}'" if near else ""
        raise ConnectorError(
            f"table '{table.name}' has no column '{name}' ({key}){hint}; "
            f"columns found: {', '.join(map(repr, found))}"
        )

    def _reflect(self, connection: Connection, name: str) -> Table:
        try:
            return Table(
                name, MetaData(), schema=self._options.db_schema or None, autoload_with=connection
            )
        except NoSuchTableError:
            schema = f" in schema '{self._options.db_schema}'" if self._options.db_schema else ""
            raise ConnectorError(
                f"{self._database.shown}: there is no table or view '{name}'{schema}; correct the "
                "source's table, or give the login the right to see it"
            ) from None


class SqlKind:
    """The kind ``sql``: a table of readings in a database."""

    name = "sql"
    options: type[BaseModel] = SqlOptions

    def open(self, options: SqlOptions, folder: Path) -> Connector:
        """Open a database; it is connected to when it is first read."""
        return SqlSource(options, folder)


def _typed_keys(tag: Column[Any], position: Mapping[str, int]) -> dict[Any, int]:
    try:
        numeric = tag.type.python_type is int
    except NotImplementedError:
        numeric = False
    if not numeric:
        return dict(position)
    # A name that is no number cannot be in a column of numbers.
    return {int(name): at for name, at in position.items() if name.strip().isdecimal()}


def _word(cell: object) -> str:
    if isinstance(cell, float) and cell.is_integer():
        return str(int(cell))
    return "" if cell is None else str(cell)
