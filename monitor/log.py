"""The log: structured lines on stderr, for a person by default, as JSON where a machine reads them.

Results go to stdout, so that a pipe never finds a log line in them. A daemon's lines may go to a
file too, which is put aside when it has grown (`also_to`).
"""

from __future__ import annotations

import contextlib
import logging
import sys
from logging.handlers import RotatingFileHandler
from typing import TYPE_CHECKING, Any, cast

import structlog

from monitor.errors import LostworkError

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from pathlib import Path

    from structlog.typing import EventDict, FilteringBoundLogger, Processor, WrappedLogger

__all__ = ["LogFileError", "also_to", "configure", "logger", "printable"]


class LogFileError(LostworkError):
    """A log file that cannot be written."""


def configure(*, json: bool = False, debug: bool = False) -> None:
    """Send the log to the present stderr.

    Args:
        json: one JSON object a line instead of ``key=value`` pairs.
        debug: debug lines too, and tracebacks.
    """
    level = logging.DEBUG if debug else logging.INFO
    processors: list[Processor] = [
        structlog.contextvars.merge_contextvars,
        structlog.processors.add_log_level,
        structlog.processors.TimeStamper(fmt="iso", utc=True, key="time"),
        structlog.processors.format_exc_info,
        _to_files(structlog.processors.JSONRenderer(default=str) if json else _logfmt),
    ]
    structlog.configure(
        processors=processors,
        wrapper_class=structlog.make_filtering_bound_logger(level),
        logger_factory=structlog.PrintLoggerFactory(sys.stderr),
        cache_logger_on_first_use=False,
    )
    # What libraries have to say (the scheduler, for one) joins the same lines.
    logging.basicConfig(handlers=[_Forward()], level=logging.WARNING, force=True)
    # It warns that percent is redefined, which `monitor.site.units` does on purpose.
    logging.getLogger("pint").setLevel(logging.ERROR)


def logger() -> FilteringBoundLogger:
    """A logger that follows `configure`, whenever that was called."""
    return cast("FilteringBoundLogger", structlog.get_logger())


def printable(text: str) -> str:
    """Write what a terminal would obey, instead of showing it, as an escape.

    Names of files and tags come from elsewhere. Line breaks stay.
    """
    if text.isprintable():
        return text
    return "".join(
        c if c.isprintable() or c == "\n" else c.encode("unicode_escape").decode() for c in text
    )


_LOGFMT = structlog.processors.LogfmtRenderer(key_order=["time", "level", "event"])


def _logfmt(wrapped: WrappedLogger, name: str, event: EventDict) -> str:
    """``key=value`` pairs on one line, whatever stands in the values."""
    shown = {k: printable(v) if isinstance(v, str) else v for k, v in event.items()}
    return _LOGFMT(wrapped, name, shown)


@contextlib.contextmanager
def also_to(path: Path, site: str, size: int, keep: int) -> Iterator[None]:
    """Write the lines about a site, and those about none, to a file too.

    Args:
        path: of the file; its folder has to be there.
        site: the site's id.
        size: bytes at which the file is put aside as ``path.1``, and a new one begun.
        keep: so many older files are kept; with none, the file is begun anew.

    Raises:
        LogFileError: the file cannot be written now. Later that is told once, on stderr.
    """
    try:
        file = _LogFile(path, maxBytes=size, backupCount=keep, encoding="utf-8")
    except OSError as error:
        raise LogFileError(
            f"[daemon] log_file: {path} cannot be written ({error.strerror}); name another file, "
            "or make its folder writable"
        ) from error
    entry = site, file
    _files.append(entry)
    try:
        yield
    finally:
        _files.remove(entry)
        # What a full disk did not take was told when it was written.
        with contextlib.suppress(OSError):
            file.close()


_files: list[tuple[str, logging.Handler]] = []
"""Sites, and the files that their lines go to."""


def _to_files(render: Callable[[WrappedLogger, str, EventDict], str | bytes]) -> Processor:
    """Render a line, and write it to the files as well."""

    def rendered(wrapped: WrappedLogger, name: str, event: EventDict) -> str:
        site = event.get("site")
        line = str(render(wrapped, name, event))
        for owner, file in tuple(_files):
            if site in {None, owner}:
                file.handle(logging.makeLogRecord({"msg": line}))
        return line

    return rendered


class _LogFile(RotatingFileHandler):
    """A file that no longer can be written is told of once, and so is that it can again."""

    _failed = _told = False

    def emit(self, record: logging.LogRecord) -> None:
        """Write a line."""
        self._failed = False
        super().emit(record)
        if self._told and not self._failed:
            self._told = False
            sys.stderr.write(f"log file {self.baseFilename}: written again\n")

    def handleError(self, record: logging.LogRecord) -> None:  # noqa: N802 - the library's name
        """Tell it on stderr, where the line itself went too."""
        del record
        self._failed = True
        if not self._told:
            self._told = True
            sys.stderr.write(f"log file {self.baseFilename}: {sys.exc_info()[1]}\n")


class _Forward(logging.Handler):
    """Hands a library's log records on to the structured log."""

    def emit(self, record: logging.LogRecord) -> None:
        details: dict[str, Any] = {"library": record.name}
        if record.exc_info:
            details["exc_info"] = record.exc_info
        logger().log(record.levelno, record.getMessage(), **details)
