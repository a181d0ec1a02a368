"""One running instance a site: a lock that lives no longer than the process that holds it.

SQLite: an operating system's lock on a file beside the store. PostgreSQL: an advisory lock of a
connection that is kept open. Either is gone when the process is, however it died; what is written
about the holder only serves the sentence that refuses a second one.
"""

from __future__ import annotations

import os
import socket
import sys
import threading
import time
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa
from sqlalchemy import exc

from monitor.store import schema
from monitor.store.engine import is_sqlite, place, reading, sqlite_path, writing
from monitor.store.errors import InstanceRunning, StoreError
from monitor.store.upsert import upsert

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from pathlib import Path

__all__ = ["InstanceLock", "lock_site"]

_LOCK_CLASS = 0x6C6F7375
"""First half of the advisory lock's key on PostgreSQL; the second is the site's number."""

# A byte far behind the text: Windows does not let others read what is locked.
_LOCKED_BYTE = 1 << 30

# On POSIX a process cannot be refused a lock that it holds itself, and loses it by closing the file
# once more, so a second try in this process must not touch the file.
_held: set[Path] = set()
_held_guard = threading.Lock()


@dataclass(frozen=True)
class InstanceLock:
    """A lock that this process holds.

    Attributes:
        holder: who holds it, in words.
        check: raises StoreError when the lock was lost (PostgreSQL's connection broke).
    """

    holder: str
    check: Callable[[], None]


@contextmanager
def lock_site(engine: sa.Engine, site_id: int, site: str, owner: str) -> Iterator[InstanceLock]:
    """Hold a site's lock.

    Args:
        engine: the store's.
        site_id: the site's number.
        site: the site's id.
        owner: who asks, in words, for example ``lostwork run``.

    Raises:
        InstanceRunning: somebody else holds it; the message says who.
        StoreError: the lock cannot be tried.
    """
    since = time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime())
    holder = f"{owner}, process {os.getpid()} on {socket.gethostname()}, since {since}"
    lock = _file_lock if is_sqlite(engine) else _advisory_lock
    with lock(engine, site_id, site, holder) as held:
        yield held


def _refusal(site: str, holder: str) -> InstanceRunning:
    return InstanceRunning(
        f"site '{site}' is already being computed by {holder or 'another process'}; "
        "stop that one first, or leave the work to it"
    )


@contextmanager
def _file_lock(engine: sa.Engine, _site_id: int, site: str, holder: str) -> Iterator[InstanceLock]:
    store = sqlite_path(engine)
    path = store.with_name(f"{store.name}.{site}.lock").resolve()
    with _held_guard:
        if path in _held:
            raise _refusal(site, "this very process")
        _held.add(path)
    try:
        try:
            # Never removed: a second process may have it open, and would lock a file without name.
            file = os.open(path, os.O_RDWR | os.O_CREAT, 0o644)
        except OSError as error:
            raise StoreError(f"lock file {path}: {error.strerror}") from error
        try:
            if not _try_lock(file):
                os.lseek(file, 0, os.SEEK_SET)
                raise _refusal(site, os.read(file, 1000).decode(errors="replace"))
            os.ftruncate(file, 0)
            os.lseek(file, 0, os.SEEK_SET)
            os.write(file, holder.encode())
            yield InstanceLock(holder, lambda: None)
            os.ftruncate(file, 0)
        finally:
            os.close(file)
    finally:
        with _held_guard:
            _held.discard(path)


def _try_lock(file: int) -> bool:
    """Lock a byte of an open file without waiting; closing the file, or dying, unlocks it."""
    try:
        if sys.platform == "win32":
            import msvcrt  # noqa: PLC0415 - there only

            os.lseek(file, _LOCKED_BYTE, os.SEEK_SET)
            msvcrt.locking(file, msvcrt.LK_NBLCK, 1)
        else:
            import fcntl  # noqa: PLC0415 - there only

            # Not flock: a child made by fork would keep that one after this process has died.
            fcntl.lockf(file, fcntl.LOCK_EX | fcntl.LOCK_NB, 1, _LOCKED_BYTE)
    except OSError:
        return False
    return True


@contextmanager
def _advisory_lock(
    engine: sa.Engine, site_id: int, site: str, holder: str
) -> Iterator[InstanceLock]:
    try:
        # A connection of its own, without a transaction that would stay open for days.
        connection = engine.execution_options(isolation_level="AUTOCOMMIT").connect()
    except exc.DBAPIError as error:
        raise StoreError(f"{place(engine)}: cannot lock site '{site}': {error.orig}") from error
    try:
        if not connection.execute(sa.select(_advisory("pg_try_advisory_lock", site_id))).scalar():
            raise _refusal(site, _stored_holder(engine, site_id))
        with writing(engine, "write who holds the lock") as other:
            row = {"site_id": site_id, "holder": holder}
            upsert(other, schema.instance_holders, [row], ("site_id",))
        yield InstanceLock(holder, lambda: _check(connection, engine, site))
    finally:
        # Closed for good, not back to the pool: the lock belongs to the connection.
        connection.invalidate()
        connection.close()


def _advisory(function: str, site_id: int) -> sa.sql.functions.Function[Any]:
    return getattr(sa.func, function)(_LOCK_CLASS, site_id)  # type: ignore[no-any-return]


def _stored_holder(engine: sa.Engine, site_id: int) -> str:
    table = schema.instance_holders
    query = sa.select(table.c.holder).where(table.c.site_id == site_id)
    with reading(engine, "read who holds the lock") as connection:
        return connection.execute(query).scalar() or ""


def _check(connection: sa.Connection, engine: sa.Engine, site: str) -> None:
    try:
        connection.execute(sa.select(1))
    except exc.DBAPIError as error:
        raise StoreError(
            f"{place(engine)}: the connection that holds the lock of site '{site}' broke; "
            "start again"
        ) from error
