"""Connections that can only read, and that are tried again when they are lost."""

from __future__ import annotations

import sqlite3
import time
from typing import TYPE_CHECKING, Any, TypeVar
from urllib.parse import quote

from sqlalchemy import create_engine, event
from sqlalchemy.engine import make_url
from sqlalchemy.exc import DBAPIError, NoSuchModuleError, SQLAlchemyError
from sqlalchemy.pool import NullPool

from connectors.base import ConnectorError

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

    from sqlalchemy import Connection, Engine

    from connectors.sql_options import SqlOptions

__all__ = ["Database"]

T = TypeVar("T")

_WAITS = (1.0, 4.0)
"""[s] before the second and the third try."""

_READ_ONLY_SESSION = {
    "mysql": "SET SESSION TRANSACTION READ ONLY",
    "mariadb": "SET SESSION TRANSACTION READ ONLY",
}


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
        self._sleep = sleep
        self.dialect = self._url.get_backend_name()
        self._file = folder / str(self._url.database) if self.dialect == "sqlite" else None
        try:
            self._engine = self._create(options)
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
                    return work(connection)
            except DBAPIError as error:
                lost = error.connection_invalidated or not connected
                if wait is None or not lost or self.dialect == "sqlite":
                    raise self._refused(error, lost=lost) from None
                self._sleep(wait)
            except SQLAlchemyError as error:
                raise self._refused(error, lost=False) from None
        raise AssertionError("the last try returns or raises")  # pragma: no cover

    def close(self) -> None:
        """Close the connections."""
        self._engine.dispose()

    def _create(self, options: SqlOptions) -> Engine:
        if self.dialect == "sqlite":
            return self._create_sqlite(options.statement_timeout)
        connect: dict[str, Any] = {}
        if self.dialect == "postgresql" and self._url.get_driver_name().startswith("psycopg"):
            stated = self._url.query.get("options", "")
            stated = " ".join(stated) if isinstance(stated, tuple) else stated
            timeout = int(options.statement_timeout * 1000)
            connect["options"] = (
                f"{stated} -c default_transaction_read_only=on -c statement_timeout={timeout}"
            ).strip()
        engine = create_engine(
            self._url, connect_args=connect, pool_size=1, max_overflow=0, pool_pre_ping=True
        )
        statement = _READ_ONLY_SESSION.get(self.dialect)
        if statement is not None:
            _on_connect(engine, statement)
        if self.dialect == "postgresql":
            return engine.execution_options(postgresql_readonly=True)
        return engine

    def _create_sqlite(self, timeout: float) -> Engine:
        address = f"file:{quote(str(self._file))}?mode=ro"

        def connect() -> sqlite3.Connection:
            # The time-out holds for waiting on a writer; SQLite has none for a statement.
            connection = sqlite3.connect(
                address, uri=True, timeout=timeout, check_same_thread=False
            )
            connection.execute("PRAGMA query_only = ON")
            return connection

        return create_engine("sqlite://", creator=connect, poolclass=NullPool)

    def _refused(self, error: SQLAlchemyError, *, lost: bool) -> ConnectorError:
        reason = str(getattr(error, "orig", None) or error).strip()
        password = self._url.password
        if password:
            reason = reason.replace(str(password), "***")
        todo = (
            f"tried {len(_WAITS) + 1} times; see that the server runs and may be reached from here"
            if lost and self.dialect != "sqlite"
            else "see the reason and correct the source's table, columns or rights"
        )
        return ConnectorError(f"{self.shown}: {reason} ({todo})")


def _on_connect(engine: Engine, statement: str) -> None:
    @event.listens_for(engine, "connect")
    def _read_only(connection: Any, _record: Any) -> None:  # noqa: ANN401 - a driver's own types
        cursor = connection.cursor()
        cursor.execute(statement)
        cursor.close()
