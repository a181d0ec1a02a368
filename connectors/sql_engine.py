"""Connections that can only read, and that are tried again when they are lost."""

from __future__ import annotations

import sqlite3
import time
from collections.abc import Sequence
from contextlib import contextmanager
from itertools import chain, islice
from operator import itemgetter
from typing import TYPE_CHECKING, Any, TypeVar
from urllib.parse import quote

from sqlalchemy import create_engine, event
from sqlalchemy.engine import make_url
from sqlalchemy.exc import DBAPIError, NoSuchModuleError, SQLAlchemyError
from sqlalchemy.pool import NullPool

from connectors.base import ConnectorError

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping
    from pathlib import Path

    from sqlalchemy import Connection, CursorResult, Engine, Executable

    from connectors.sql_options import SqlOptions

__all__ = ["Database"]

T = TypeVar("T")

_WAITS = (1.0, 4.0)
"""[s] before the second and the third try."""

_MOST_PARAMETERS = {"sqlite": 900, "postgresql": 10_000, "mysql": 10_000, "mariadb": 10_000}
"""Well below what each takes: 999 in old SQLite libraries, 65535 in the protocols of the others."""

# SQL Server takes 2100 parameters, Oracle 1000 members of a list.
_MOST_PARAMETERS |= {"mssql": 2_000, "oracle": 900}
_FEW_PARAMETERS = 500

_MOST_CELLS = 60_000
"""Cells fetched at a time at most: what the processor keeps near by."""

_STEPS = 20_000
"""SQLite's steps between two looks at the clock: some hundred microseconds."""


class Database:
    """A database that is only ever read.

    SQLite files are opened with ``mode=ro``, which neither creates nor changes a file. PostgreSQL
    sessions start with ``default_transaction_read_only``, and every transaction says so again.

    Args:
        options: what the site file says.
        folder: where a relative SQLite path starts.
        sleep: waits between tries.

    Raises:
        ConnectorError: the database's driver is not installed.
    """

    def __init__(
        self, options: SqlOptions, folder: Path, sleep: Callable[[float], object] = time.sleep
    ) -> None:
        self._url = make_url(options.url.get_secret_value())
        self._timeout = options.statement_timeout
        self._chunk = options.chunk_rows
        self._deadline = float("inf")
        self._sleep = sleep
        self.dialect = self._url.get_backend_name()
        self._file = folder / str(self._url.database) if self.dialect == "sqlite" else None
        try:
            self._engine = self._create()
        except (ImportError, NoSuchModuleError) as error:
            raise ConnectorError(
                f"{self.shown}: the driver is not installed ({error}); install it, for PostgreSQL "
                "the extra 'postgres'"
            ) from None

    @property
    def shown(self) -> str:
        """The URL with the password masked."""
        return self._url.render_as_string(hide_password=True)

    def run(self, work: Callable[[Connection], T]) -> T:
        """Do read-only work in one transaction; from the start again when the connection is lost.

        Raises:
            ConnectorError: the database cannot be reached (after three tries) or refuses.
        """
        if self._file is not None and not self._file.is_file():
            raise ConnectorError(
                f"{self._file} is not there; correct the source's url (a relative path starts at "
                "the site file's folder)"
            )
        for wait in (*_WAITS, None):
            connected = False
            try:
                with self._engine.connect() as connection:
                    connected = True
                    self._start_clock()
                    return work(connection)
            except DBAPIError as error:
                lost = error.connection_invalidated or not connected
                if wait is None or not lost or self.dialect == "sqlite":
                    raise self._refused(error, lost=lost) from None
                self._sleep(wait)
            except SQLAlchemyError as error:
                raise self._refused(error, lost=False) from None
        raise AssertionError("the last try returns or raises")  # pragma: no cover

    @property
    def most_parameters(self) -> int:
        """How many tags one statement may name."""
        return _MOST_PARAMETERS.get(self.dialect, _FEW_PARAMETERS)

    def stream(
        self, connection: Connection, statement: Executable
    ) -> Iterator[tuple[Sequence[str], Sequence[Sequence[Any]]]]:
        """Yield the rows of a statement in chunks, as the columns' names and their cells.

        No more than a chunk is held here, whatever the statement returns.
        """
        options: dict[str, Any] = {}
        if self.dialect != "sqlite":
            options = {"stream_results": True, "max_row_buffer": self._chunk}
        self._start_clock()
        with connection.execute(statement, execution_options=options) as result:
            names = list(result.keys())
            # Wide rows are cut shorter: memory is bound by cells.
            most = max(1, min(self._chunk, _MOST_CELLS // len(names)))
            for cells in self._chunks(connection, result, most):
                yield names, cells
                # As servers do: each fetch has the time of a statement, not all of them together.
                self._start_clock()

    def _chunks(
        self, connection: Connection, result: CursorResult[Any], most: int
    ) -> Iterator[list[Sequence[Any]]]:
        width = len(result.keys())
        cursor: Any = result.cursor
        if self.dialect == "sqlite":
            with _driver_errors(connection):
                # Into one flat list as the driver makes them: a million rows kept as tuples cost
                # the collector more than reading them.
                while flat := list(chain.from_iterable(islice(cursor, most))):
                    yield [flat[at::width] for at in range(width)]
        elif cursor is not None and connection.dialect.driver == "psycopg":
            # The first row is fetched already; the others need no second row of SQLAlchemy's.
            rows: Sequence[Any] = result.fetchmany(1)
            with _driver_errors(connection):
                while rows:
                    yield [_Column(rows, at) for at in range(width)]
                    rows = cursor.fetchmany(most)
        else:
            for rows in result.partitions(most):
                yield [_Column(rows, at) for at in range(width)]

    def close(self) -> None:
        """Close the connections."""
        self._engine.dispose()

    def _create(self) -> Engine:
        if self.dialect == "sqlite":
            return self._create_sqlite()
        connect: dict[str, Any] = {}
        if self.dialect == "postgresql" and self._url.get_driver_name().startswith("psycopg"):
            stated = self._url.query.get("options", "")
            stated = " ".join(stated) if isinstance(stated, tuple) else stated
            timeout = int(self._timeout * 1000)
            # Times without a zone are compared with times in UTC as if they were UTC too.
            connect["options"] = (
                f"{stated} -c default_transaction_read_only=on -c statement_timeout={timeout} "
                "-c timezone=UTC"
            ).strip()
        engine = create_engine(
            self._url, connect_args=connect, pool_size=1, max_overflow=0, pool_pre_ping=True
        )
        prepare = _SESSIONS.get(self.dialect)
        if prepare is not None:
            _on_connect(engine, prepare, self._timeout)
        if self.dialect == "postgresql":
            return engine.execution_options(postgresql_readonly=True)
        return engine

    def _create_sqlite(self) -> Engine:
        address = f"file:{quote(str(self._file))}?mode=ro"

        def connect() -> sqlite3.Connection:
            # Its own time-out holds for waiting on a writer; it has none for a statement.
            connection = sqlite3.connect(
                address, uri=True, timeout=self._timeout, check_same_thread=False
            )
            connection.execute("PRAGMA query_only = ON")
            connection.set_progress_handler(self._is_late, _STEPS)
            return connection

        return create_engine("sqlite://", creator=connect, poolclass=NullPool)

    def _start_clock(self) -> None:
        self._deadline = time.monotonic() + self._timeout

    def _is_late(self) -> bool:
        return time.monotonic() > self._deadline

    def _refused(self, error: SQLAlchemyError, *, lost: bool) -> ConnectorError:
        reason = str(getattr(error, "orig", None) or error).strip()
        if reason == "interrupted":
            reason = f"canceled, longer than the statement timeout of {self._timeout:g} s"
        password = self._url.password
        if password:
            reason = reason.replace(str(password), "***")
        todo = (
            f"tried {len(_WAITS) + 1} times; see that the server runs and may be reached from here"
            if lost and self.dialect != "sqlite"
            else "see the reason and correct the source's table, columns or rights"
        )
        return ConnectorError(f"{self.shown}: {reason} ({todo})")


class _Column(Sequence[Any]):
    """The cells at one place of each row, without a list of their own."""

    def __init__(self, rows: Sequence[Sequence[Any]], at: int) -> None:
        self._rows, self._at = rows, at

    def __len__(self) -> int:
        return len(self._rows)

    def __getitem__(self, number: Any) -> Any:  # noqa: ANN401
        return self._rows[number][self._at]

    def __iter__(self) -> Iterator[Any]:
        return map(itemgetter(self._at), self._rows)


@contextmanager
def _driver_errors(connection: Connection) -> Iterator[None]:
    """Turn what the driver itself raises into what SQLAlchemy would have made of it."""
    driver: Any = connection.dialect.dbapi
    try:
        yield
    except driver.Error as error:
        dialect, held = connection.dialect, connection.connection.dbapi_connection
        lost = dialect.is_disconnect(error, held, None)
        if lost:
            connection.invalidate(error)
        told = DBAPIError.instance(
            None, None, error, driver.Error, connection_invalidated=lost, dialect=dialect
        )
        raise told from error


def _on_connect(
    engine: Engine,
    prepare: Callable[[Any, float], None],
    timeout: float,
) -> None:
    @event.listens_for(engine, "connect")
    def _prepare(connection: Any, _record: Any) -> None:  # noqa: ANN401 - a driver's own types
        prepare(connection, timeout)


def _prepare_mysql(connection: Any, timeout: float) -> None:  # noqa: ANN401
    """Make a MySQL or MariaDB session read-only and bound its statements."""
    cursor = connection.cursor()
    cursor.execute("SET SESSION TRANSACTION READ ONLY")
    # TIMESTAMP columns are written in the session's zone, DATETIME columns as they are.
    cursor.execute("SET SESSION time_zone = '+00:00'")
    cursor.execute("SELECT VERSION()")
    if "mariadb" in str(cursor.fetchone()[0]).casefold():
        cursor.execute(f"SET SESSION max_statement_time = {timeout:.3f}")  # seconds
    else:
        cursor.execute(f"SET SESSION max_execution_time = {int(timeout * 1000)}")  # milliseconds
    cursor.close()


def _prepare_mssql(connection: Any, timeout: float) -> None:  # noqa: ANN401
    connection.timeout = max(1, round(timeout))  # pyodbc: whole seconds, 0 for none


def _prepare_oracle(connection: Any, timeout: float) -> None:  # noqa: ANN401
    connection.call_timeout = int(timeout * 1000)  # oracledb: milliseconds for each round trip


_SESSIONS: Mapping[str, Callable[[Any, float], None]] = {
    "mysql": _prepare_mysql,
    "mariadb": _prepare_mysql,
    "mssql": _prepare_mssql,
    "oracle": _prepare_oracle,
}
