"""A SQL database as a source: readings of a window out of a table, a view or a query."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING

import numpy as np

from connectors.base import Probe, Quality, ReadResult, Window
from connectors.sql_cells import CellReader
from connectors.sql_engine import Database
from connectors.sql_options import SqlOptions
from connectors.sql_query import QueryReader
from connectors.sql_table import TableReader
from connectors.tidy import ProblemCount, Rows, tidy
from connectors.times import microseconds

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from pathlib import Path

    from pydantic import BaseModel
    from sqlalchemy import Connection

    from connectors.base import Connector

__all__ = ["SqlKind", "SqlSource"]

_UNSETTLED = "reading in the hour that comes twice, pass not known: taken as the first, uncertain"
_REPLACED = "reading given again for the same tag and time: the last one counts"


class SqlSource:
    """Reads a table, a view or a query.

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
        kind = QueryReader if options.query else TableReader
        self._reader = kind(options, self._database, CellReader(options))

    def read(self, tags: Sequence[str], window: Window) -> ReadResult:
        """Return the readings of these tags inside the window.

        Raises:
            ConnectorError: the database cannot be reached, or the table is not as described.
        """
        names = sorted(set(tags))
        rows, problems = self._database.run(lambda c: self._rows(c, names, window))
        start, end = microseconds(window.start), microseconds(window.end)
        inside = (rows.time >= start) & (rows.time < end)
        rows = rows if inside.all() else rows.keep(inside)
        unsettled = rows.doubled_at
        problems.add(self._options.named, _UNSETTLED, len(unsettled))
        rows.quality[unsettled] = np.maximum(rows.quality[unsettled], np.uint8(Quality.UNCERTAIN))
        table, replaced = tidy(rows, names)
        problems.add(self._options.named, _REPLACED, replaced)
        return ReadResult(table, problems.problems())

    def probe(self) -> Probe:
        """Look at the tags and the span of time.

        Raises:
            ConnectorError: the database cannot be reached, or the table is not as described.
        """
        return self._database.run(self._reader.look)

    def close(self) -> None:
        """Close the connections."""
        self._database.close()

    def _rows(
        self, connection: Connection, names: Sequence[str], window: Window
    ) -> tuple[Rows, ProblemCount]:
        # Counted anew on each try: a lost connection must not count its rows twice.
        problems = ProblemCount()
        return self._reader.rows(connection, names, window, problems), problems


class SqlKind:
    """The kind ``sql``: readings in a database."""

    name = "sql"
    options: type[BaseModel] = SqlOptions

    def open(self, options: SqlOptions, folder: Path) -> Connector:
        """Open a database; it is connected to when it is first read."""
        return SqlSource(options, folder)
