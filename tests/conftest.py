"""Fixtures for all tests: a real PostgreSQL server of the tests' own, and an empty store URL."""

from __future__ import annotations

import os
import shutil
import socket
import subprocess
import tempfile
import uuid
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import psycopg
import pytest

if TYPE_CHECKING:
    from collections.abc import Iterator

# The users that distributions create for PostgreSQL, and the last resort on any Unix.
_UNPRIVILEGED = ("postgres", "nobody")


@dataclass(frozen=True)
class PostgresServer:
    """A running server: trust authentication, on loopback and on a socket in its own folder."""

    host: str
    port: int
    socket_folder: Path

    def url(self, database: str) -> str:
        return f"postgresql+psycopg://postgres@{self.host}:{self.port}/{database}"

    def dsn(self, database: str) -> str:
        return f"postgresql://postgres@{self.host}:{self.port}/{database}"


def _binaries() -> Path | None:
    """Find the folder with initdb and pg_ctl: on the path, else the newest packaged version."""
    found = shutil.which("initdb")
    if found and shutil.which("pg_ctl"):
        return Path(found).resolve().parent
    packaged = [p.parent for p in Path("/usr/lib/postgresql").glob("*/bin/initdb")]
    return max(packaged, key=lambda p: int(p.parent.name), default=None)


def _free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def _group(user: str) -> int | None:
    """The user's own group, None where there is no such user."""
    import pwd  # noqa: PLC0415 - Unix only, and the other tests run on Windows too

    try:
        return pwd.getpwnam(user).pw_gid
    except KeyError:
        return None


def _server_user() -> str | None:
    """PostgreSQL refuses to run as root: name the user to run it as, None for the current one."""
    if os.name == "nt" or os.geteuid() != 0:
        return None
    for name in _UNPRIVILEGED:
        if _group(name) is not None:
            return name
    pytest.skip("running as root, and there is no unprivileged user to run PostgreSQL as")


def _run(command: list[str | Path], user: str | None, log: Path, folder: Path) -> None:
    # A file, not a pipe: the server that pg_ctl starts would keep the pipe open.
    with log.open("a") as output:
        done = subprocess.run(
            command,
            user=user,
            group=None if user is None else _group(user),
            extra_groups=None if user is None else [],
            cwd=folder,
            env={**os.environ, "LC_ALL": "C.UTF-8", "HOME": str(folder)},
            stdin=subprocess.DEVNULL,
            stdout=output,
            stderr=subprocess.STDOUT,
            check=False,
            timeout=120,
        )
    if done.returncode != 0:
        pytest.fail(f"{command[0]} gave exit code {done.returncode}:\n{log.read_text()[-2000:]}")


@pytest.fixture(scope="session")
def postgres_server() -> Iterator[PostgresServer]:
    """A real PostgreSQL server for the session; without binaries skip, and in CI fail."""
    binaries = _binaries()
    if binaries is None:
        reason = "no PostgreSQL server binaries (initdb, pg_ctl) on the path or packaged"
        if os.environ.get("CI") == "true":
            pytest.fail(reason)
        pytest.skip(reason)
    user = _server_user()
    # Not in pytest's own temporary folder: that one only root may enter when root runs the tests,
    # and a socket's path may have 107 bytes at most.
    folder = Path(tempfile.mkdtemp(prefix="lostwork-pg-"))
    log = folder / "commands.log"
    log.touch()
    data = folder / "data"
    if user is not None:
        shutil.chown(folder, user, _group(user))
    port = _free_port()
    options = (
        f"-c listen_addresses=127.0.0.1 -c port={port} -c unix_socket_directories={folder} "
        "-c fsync=off -c synchronous_commit=off -c full_page_writes=off -c shared_buffers=64MB"
    )
    control: list[str | Path] = [binaries / "pg_ctl", "-D", data, "-w"]
    initdb: list[str | Path] = [binaries / "initdb", "-D", data, "-U", "postgres", "-A", "trust"]
    try:
        _run([*initdb, "-E", "UTF8", "--locale=C.UTF-8", "--no-sync"], user, log, folder)
        _run([*control, "-l", folder / "server.log", "-o", options, "start"], user, log, folder)
        try:
            yield PostgresServer("127.0.0.1", port, folder)
        finally:
            _run([*control, "-m", "immediate", "stop"], user, log, folder)
    finally:
        shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture
def postgres_url(postgres_server: PostgresServer) -> Iterator[str]:
    """The SQLAlchemy URL of a fresh, empty database, dropped afterwards."""
    name = f"test_{uuid.uuid4().hex}"
    with psycopg.connect(postgres_server.dsn("postgres"), autocommit=True) as server:
        server.execute(f"create database {name}")
    try:
        yield postgres_server.url(name)
    finally:
        with psycopg.connect(postgres_server.dsn("postgres"), autocommit=True) as server:
            server.execute(f"drop database {name} with (force)")


@pytest.fixture(params=["sqlite", pytest.param("postgres", marks=pytest.mark.postgres)])
def store_url(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    """The URL of an empty store, once on SQLite and once on PostgreSQL."""
    if request.param == "sqlite":
        return f"sqlite:///{tmp_path / 'store.sqlite'}"
    return str(request.getfixturevalue("postgres_url"))
