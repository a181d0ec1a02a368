"""The site's own query in place of a table."""

from __future__ import annotations

import difflib
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from sqlalchemy import bindparam, text

from connectors.base import ConnectorError, Probe, Window
from connectors.sql_times import SqlTimes
from connectors.tidy import ProblemCount, Rows, join_rows
from connectors.times import from_microseconds

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from sqlalchemy import Connection, TextClause

    from connectors.sql_cells import CellReader
    from connectors.sql_engine import Database
    from connectors.sql_options import SqlOptions

__all__ = ["QueryReader"]

_LOOK_BACK = tuple(pd.Timedelta(days=days) for days in (1, 30, 366, 3660))
"""A probe looks at the newest day, then ever further back until there is something."""

_AHEAD = pd.Timedelta(days=1)
_MOST_TAGS = 100_000


class QueryReader:
    """Reads what a query returns.

    Args:
        options: what the site file says.
        database: where it runs.
        cells: reads its cells.
    """

    def __init__(self, options: SqlOptions, database: Database, cells: CellReader) -> None:
        self._options, self._database, self._cells = options, database, cells
        self._times = SqlTimes.of(None, options, is_text_store=database.dialect == "sqlite")
        self._has_tags = "tags" in text(options.query).compile().params

    def rows(
        self,
        connection: Connection,
        names: Sequence[str],
        window: Window,
        problems: ProblemCount,
    ) -> Rows:
        """Return rows in and around the window, a tag's code being its position in the names."""
        position = {name: at for at, name in enumerate(names)}
        parts: list[Rows] = []
        for batch in self._batches(names):
            statement = self._statement(window, batch)
            for found, cells in self._database.stream(connection, statement):
                parts.append(self._turned(found, cells, position, problems))
        return join_rows(parts)

    def look(self, connection: Connection) -> Probe:
        """Return the tags, and the span of time of the newest readings."""
        now = pd.Timestamp.now("UTC")
        tags = self._listed(connection)
        problems, where = ProblemCount(), f"query on {self._database.shown}"
        for back in _LOOK_BACK:
            problems = ProblemCount()
            seen, time = set(tags), np.zeros(0, dtype=np.int64)
            for part, rows in self._looked(connection, tags, now - back, now, problems):
                seen |= part
                time = np.append(time, [rows.time.min(), rows.time.max()]) if len(rows) else time
            if len(time):
                ends = from_microseconds(np.array([time.min(), time.max()], dtype=np.int64))
                detail = f"{where}; looked at the newest {back.days} day(s)"
                return Probe(tuple(sorted(seen)), ends[0], ends[1], detail, problems.problems())
        return Probe(tuple(sorted(tags)), None, None, where, problems.problems())

    def _looked(
        self,
        connection: Connection,
        tags: set[str],
        start: pd.Timestamp,
        end: pd.Timestamp,
        problems: ProblemCount,
    ) -> Iterator[tuple[set[str], Rows]]:
        window = Window(start, end + _AHEAD)
        for batch in self._batches(sorted(tags)):
            statement = self._statement(window, batch)
            for found, cells in self._database.stream(connection, statement):
                names = self._names(found, cells)
                position = {name: at for at, name in enumerate(names)}
                yield set(names), self._turned(found, cells, position, problems)

    def _listed(self, connection: Connection) -> set[str]:
        if not self._options.tag_query:
            return set()
        statement = text(self._options.tag_query)
        names = connection.execute(statement).scalars().fetchmany(_MOST_TAGS)
        return {str(name) for name in names if name is not None}

    def _batches(self, names: Sequence[str]) -> list[Sequence[str]]:
        if not self._has_tags:
            return [names]
        most = self._database.most_parameters
        return [names[at : at + most] for at in range(0, len(names), most)]

    def _statement(self, window: Window, names: Sequence[str]) -> TextClause:
        low, high = self._times.bounds(window)
        kind = self._times.bound_type
        bound = [bindparam("start", low, kind), bindparam("end", high, kind)]
        if self._has_tags:
            bound.append(bindparam("tags", list(names), expanding=True))
        return text(self._options.query).bindparams(*bound)

    def _turned(
        self,
        found: Sequence[str],
        cells: Sequence[Sequence[Any]],
        position: dict[str, int],
        problems: ProblemCount,
    ) -> Rows:
        options = self._options
        time = self._place(found, "time_column")
        if options.layout == "wide":
            asked = [at for at, name in enumerate(found) if at != time and name in position]
            codes = [position[found[at]] for at in asked]
            return self._cells.wide(
                [cells[at] for at in (time, *asked)],
                codes,
                self._times,
                problems,
                [found[at] for at in asked],
            )
        places = [time, self._place(found, "tag_column"), self._place(found, "value_column")]
        places += [self._place(found, "quality_column")] if options.quality_column else []
        columns = [cells[at] for at in places]
        columns[1] = [None if tag is None else str(tag) for tag in columns[1]]
        return self._cells.long(columns, position, self._times, problems, collated=self._has_tags)

    def _names(self, found: Sequence[str], cells: Sequence[Sequence[Any]]) -> list[str]:
        if self._options.layout == "wide":
            return [name for name in found if name != self._options.time_column]
        tags = cells[self._place(found, "tag_column")]
        return sorted({str(tag) for tag in tags if tag is not None})

    def _place(self, found: Sequence[str], key: str) -> int:
        name = getattr(self._options, key)
        if name in found:
            return found.index(name)
        near = difflib.get_close_matches(name, found, n=1, cutoff=0.4)
        hint = f"; nearest is '{near[0]}'" if near else ""
        raise ConnectorError(
            f"the query returns no column '{name}' ({key}){hint}; columns found: "
            f"{', '.join(map(repr, found))}"
        )
