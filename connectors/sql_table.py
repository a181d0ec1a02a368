"""A table or view of readings: found in the database, asked for a window."""

from __future__ import annotations

import difflib
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from sqlalchemy import MetaData, Table, func, select, type_coerce
from sqlalchemy.exc import NoSuchTableError
from sqlalchemy.types import NullType

from connectors.base import ConnectorError, Probe, Window
from connectors.sql_times import SqlTimes
from connectors.tidy import ProblemCount, Rows, first_few, join_rows
from connectors.times import NO_TIME, from_microseconds

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from sqlalchemy import Column, Connection, Select

    from connectors.sql_cells import CellReader
    from connectors.sql_engine import Database
    from connectors.sql_options import SqlOptions

__all__ = ["TableReader"]

_MOST_COLUMNS = 500
"""Wide columns a statement: PostgreSQL takes 1664 results, SQLite 2000, Oracle and others 1000."""

_MOST_TAGS = 100_000
_RECENT = pd.Timedelta(days=30)
_A_MOMENT = pd.Timedelta(seconds=1)

_NO_TIME = "row dropped: its time cannot be read"


@dataclass(frozen=True)
class _Found:
    """The columns as they are in the database."""

    readings: Table
    time: Any
    times: SqlTimes
    tag: Any = None
    value: Any = None
    quality: Any = None
    key: Any = None
    name: Any = None


class TableReader:
    """Reads a table or view.

    Args:
        options: what the site file says.
        database: where it is.
        cells: reads its cells.
    """

    def __init__(self, options: SqlOptions, database: Database, cells: CellReader) -> None:
        self._options, self._database, self._cells = options, database, cells
        self._known: _Found | None = None

    def rows(
        self,
        connection: Connection,
        names: Sequence[str],
        window: Window,
        problems: ProblemCount,
    ) -> Rows:
        """Return rows in and around the window, a tag's code being its position in the names."""
        found = self._find(connection)
        if self._options.layout == "wide":
            return self._wide_rows(connection, found, names, window, problems)
        keys = self._keys(connection, found, names)
        columns = [found.time, found.tag, found.value]
        columns += [found.quality] if found.quality is not None else []
        condition = found.times.condition(connection, window)
        parts: list[Rows] = []
        asked, most = list(keys), self._database.most_parameters
        for at in range(0, len(asked), most):
            statement = select(*columns).where(found.tag.in_(asked[at : at + most]), *condition)
            for _, cells in self._database.stream(connection, statement):
                parts.append(self._cells.long(cells, keys, found.times, problems, collated=True))
        return join_rows(parts)

    def look(self, connection: Connection) -> Probe:
        """Return the table's tags and its span of time."""
        problems = ProblemCount()
        found = self._find(connection)
        where = f"table {self._options.table} of {self._database.shown}"
        ends = connection.execute(select(func.min(found.time), func.max(found.time))).one()
        first = last = None
        if ends[0] is not None:
            parsed = found.times.parse(list(ends))
            lost = parsed.first == NO_TIME
            examples = first_few(lost, ends.__getitem__)
            problems.add(self._options.table, _NO_TIME, int(lost.sum()), examples)
            if not lost.any():
                first, last = from_microseconds(np.array([parsed.first[0], parsed.second[1]]))
        if self._options.layout == "wide":
            tags = self._wide_tags(found)
            return Probe(tuple(sorted(tags)), first, last, where, problems.problems())
        statement, part = self._tags(connection, found, last)
        names = connection.execute(statement.distinct().limit(_MOST_TAGS)).scalars().all()
        tags = {str(name) for name in names if name is not None}
        return Probe(tuple(sorted(tags)), first, last, where + part, problems.problems())

    def _wide_rows(
        self,
        connection: Connection,
        found: _Found,
        names: Sequence[str],
        window: Window,
        problems: ProblemCount,
    ) -> Rows:
        there = self._wide_tags(found)
        asked = [(at, name) for at, name in enumerate(names) if name in there]
        condition = found.times.condition(connection, window)
        parts: list[Rows] = []
        for at in range(0, len(asked), _MOST_COLUMNS):
            batch = asked[at : at + _MOST_COLUMNS]
            columns = [self._raw(found.readings.columns[name]) for _, name in batch]
            statement = select(found.time, *columns).where(*condition)
            codes, called = [code for code, _ in batch], [name for _, name in batch]
            # Only one of the batches tells of times that cannot be read.
            heard = problems if at == 0 else ProblemCount()
            for _, cells in self._database.stream(connection, statement):
                parts.append(self._cells.wide(cells, codes, found.times, heard, called))
        return join_rows(parts)

    def _wide_tags(self, found: _Found) -> set[str]:
        return set(found.readings.columns.keys()) - {self._options.time_column}

    def _tags(
        self, connection: Connection, found: _Found, last: pd.Timestamp | None
    ) -> tuple[Select[Any], str]:
        if found.name is not None:
            return select(found.name), ""
        if last is None:
            return select(found.tag), ""
        # All tags ever written would be a scan of the whole table, hours on a large one.
        recent = found.times.condition(connection, Window(last - _RECENT, last + _A_MOMENT))
        part = f"; tags are those of the newest {_RECENT.days} days"
        return select(found.tag).where(*recent), part

    def _keys(self, connection: Connection, found: _Found, names: Sequence[str]) -> dict[Any, int]:
        """Return what the tag column holds for each name, with the name's position."""
        position = {name: at for at, name in enumerate(names)}
        if found.key is None:
            return _typed_keys(found.tag, position)
        keys: dict[Any, int] = {}
        most = self._database.most_parameters
        for at in range(0, len(names), most):
            batch = names[at : at + most]
            statement = select(found.key, found.name).where(found.name.in_(batch))
            pairs = connection.execute(statement)
            keys.update({key: position[name] for key, name in pairs if name in position})
        return keys

    def _find(self, connection: Connection) -> _Found:
        if self._known is None:
            self._known = self._found(connection)
        return self._known

    def _found(self, connection: Connection) -> _Found:
        options = self._options
        readings = self._reflect(connection, options.table)
        time = self._column(readings, "time_column")
        times = SqlTimes.of(time, options, is_text_store=self._database.dialect == "sqlite")
        if options.layout == "wide":
            return _Found(readings, time, times)
        look_up = self._reflect(connection, options.tag_table) if options.tag_table else None
        return _Found(
            readings,
            time,
            times,
            tag=self._column(readings, "tag_column"),
            value=self._column(readings, "value_column"),
            quality=self._column(readings, "quality_column") if options.quality_column else None,
            key=self._column(look_up, "tag_table_key") if look_up is not None else None,
            name=self._column(look_up, "tag_table_name") if look_up is not None else None,
        )

    def _column(self, table: Table, key: str) -> Any:  # noqa: ANN401 - a column or one coerced
        name = getattr(self._options, key)
        if name in table.columns:
            column = table.columns[name]
            return column if key == "tag_column" else self._raw(column)
        found = list(table.columns.keys())
        near = difflib.get_close_matches(name, found, n=1, cutoff=0.4)
        hint = f"; nearest is '{near[0]}'" if near else ""
        raise ConnectorError(
            f"table '{table.name}' has no column '{name}' ({key}){hint}; "
            f"columns found: {', '.join(map(repr, found))}"
        )

    def _raw(self, column: Column[Any]) -> Any:  # noqa: ANN401
        # SQLite keeps what it was given whatever the column's type: take it as it is.
        return type_coerce(column, NullType()) if self._database.dialect == "sqlite" else column

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


def _typed_keys(tag: Column[Any], position: Mapping[str, int]) -> dict[Any, int]:
    try:
        numeric = tag.type.python_type is int
    except NotImplementedError:
        numeric = False
    if not numeric:
        return dict(position)
    # A name that is no number cannot be in a column of numbers.
    return {int(name): at for name, at in position.items() if name.strip().isdecimal()}
