"""How a command ends: exit codes, and which error gives which."""

from __future__ import annotations

from enum import IntEnum
from typing import TYPE_CHECKING

from monitor.errors import LostworkError, SiteFileError, SiteUnreadableError, WrongUseError

if TYPE_CHECKING:
    from collections.abc import Iterator

__all__ = ["MEANINGS", "ExitCode", "ended_by"]


class ExitCode(IntEnum):
    """What a command's exit code says."""

    OK = 0
    FOUND_WRONG = 1
    WRONG_USE = 2
    SITE_FILE = 3
    SOURCE = 4
    STORE = 5
    RUNNING = 6
    WORKERS = 7
    FAULT = 70
    INTERRUPTED = 130


MEANINGS = {
    ExitCode.OK: "done",
    ExitCode.FOUND_WRONG: "the command worked and found something wrong",
    ExitCode.WRONG_USE: "the command cannot be used like this",
    ExitCode.SITE_FILE: "the site file is wrong",
    ExitCode.SOURCE: "a source cannot be read",
    ExitCode.STORE: "the store, or a file to write, cannot be used",
    ExitCode.RUNNING: "another instance is running",
    ExitCode.WORKERS: "the processes that compute cannot be used",
    ExitCode.FAULT: "a fault of the program itself",
    ExitCode.INTERRUPTED: "interrupted",
}


def ended_by(error: Exception) -> tuple[ExitCode, str] | None:
    """Say how a command ends that met this error; None for a fault of the program itself."""
    for kind, code in _kinds():
        if isinstance(error, kind):
            return code, _sentence(error)
    return None


def _kinds() -> Iterator[tuple[type[Exception], ExitCode]]:
    """Errors and their codes, the narrower before the wider; libraries imported when needed."""
    yield WrongUseError, ExitCode.WRONG_USE
    yield SiteFileError, ExitCode.SITE_FILE
    yield SiteUnreadableError, ExitCode.SITE_FILE

    from monitor.site.units import UnitError  # noqa: PLC0415

    yield UnitError, ExitCode.WRONG_USE

    from connectors.base import ConnectorError  # noqa: PLC0415

    yield ConnectorError, ExitCode.SOURCE

    from monitor.store.errors import InstanceRunning, StoreError  # noqa: PLC0415

    yield InstanceRunning, ExitCode.RUNNING
    yield StoreError, ExitCode.STORE

    from monitor.log import LogFileError  # noqa: PLC0415

    yield LogFileError, ExitCode.STORE

    from monitor.ahead import WorkersError  # noqa: PLC0415

    yield WorkersError, ExitCode.WORKERS

    from sqlalchemy.exc import SQLAlchemyError  # noqa: PLC0415

    yield SQLAlchemyError, ExitCode.STORE

    from monitor.drift.alarms import AlarmError  # noqa: PLC0415
    from monitor.drift.baseline import BaselineError  # noqa: PLC0415

    yield AlarmError, ExitCode.WRONG_USE
    yield BaselineError, ExitCode.FOUND_WRONG

    from monitor.demo.plan import DemoError  # noqa: PLC0415

    yield DemoError, ExitCode.WRONG_USE
    from dashboards.files import PageError  # noqa: PLC0415

    yield PageError, ExitCode.STORE
    yield LostworkError, ExitCode.FOUND_WRONG
    # A full disk or a folder that may not be written, wherever it shows.
    yield OSError, ExitCode.STORE


def _sentence(error: Exception) -> str:
    if isinstance(error, OSError) and error.strerror:
        where = f"{error.filename}: " if error.filename else ""
        return f"{where}{error.strerror}"
    return str(error)
