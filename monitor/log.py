"""The log: structured lines on stderr, for a person by default, as JSON where a machine reads them.

Results go to stdout, so that a pipe never finds a log line in them.
"""

from __future__ import annotations

import logging
import sys
from typing import TYPE_CHECKING, Any, cast

import structlog

if TYPE_CHECKING:
    from structlog.typing import FilteringBoundLogger, Processor

__all__ = ["configure", "logger"]


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
        structlog.processors.JSONRenderer(default=str)
        if json
        else structlog.processors.LogfmtRenderer(key_order=["time", "level", "event"]),
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


class _Forward(logging.Handler):
    """Hands a library's log records on to the structured log."""

    def emit(self, record: logging.LogRecord) -> None:
        details: dict[str, Any] = {"library": record.name}
        if record.exc_info:
            details["exc_info"] = record.exc_info
        logger().log(record.levelno, record.getMessage(), **details)
