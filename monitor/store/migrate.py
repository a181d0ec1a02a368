"""Bring a database to the schema that this program works with, once, whoever comes first."""

from __future__ import annotations

import threading
from pathlib import Path

import sqlalchemy as sa

from monitor.store.engine import is_sqlite, place, reading, writing
from monitor.store.errors import StoreError
from monitor.store.schema import REVISIONS, VERSION_TABLE

__all__ = ["migrate"]

_LOCK_CLASS = 0x6C6F7374
"""First half of the advisory locks' key on PostgreSQL ("lost" in ASCII)."""
_MIGRATION_LOCK = -1

# Alembic keeps the migration under way in a global: one thread at a time, whatever the database.
_alembic = threading.Lock()


def migrate(engine: sa.Engine) -> None:
    """Migrate up under a lock; a store that is up to date is only looked at.

    Raises:
        StoreError: the database cannot be reached, is newer than the program, or holds tables of
            something else under the same names.
    """
    with reading(engine, "open it") as connection:
        if _revision(connection) == REVISIONS[-1]:
            return
    with writing(engine, "bring its tables up to date") as connection:
        # On SQLite the write transaction is the lock.
        if not is_sqlite(engine):
            connection.execute(
                sa.select(sa.func.pg_advisory_xact_lock(_LOCK_CLASS, _MIGRATION_LOCK))
            )
        # Another process may have done it while this one waited.
        if _revision(connection) != REVISIONS[-1]:
            _upgrade(connection)


def _revision(connection: sa.Connection) -> str | None:
    """The database's revision, None where it has no tables of this program yet."""
    if not sa.inspect(connection).has_table(VERSION_TABLE):
        return None
    found = connection.execute(sa.text(f"select version_num from {VERSION_TABLE}")).scalar()  # noqa: S608
    if found is not None and found not in REVISIONS:
        raise StoreError(
            f"{place(connection.engine)}: its tables are of revision {found}, which is newer than "
            f"this program (it knows up to {REVISIONS[-1]}); update lostwork, or name another store"
        )
    return found


def _upgrade(connection: sa.Connection) -> None:
    # Imported late: a store that is up to date does not need it.
    from alembic import command  # noqa: PLC0415
    from alembic.config import Config  # noqa: PLC0415

    config = Config()
    config.set_main_option("script_location", str(Path(__file__).parent / "migrations"))
    config.set_main_option("path_separator", "os")
    config.attributes["connection"] = connection
    with _alembic:
        command.upgrade(config, "head")
