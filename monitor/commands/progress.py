"""Progress of long work on stderr: a bar on a terminal, silence in a pipe."""

from __future__ import annotations

import sys
from typing import TYPE_CHECKING, Self

if TYPE_CHECKING:
    from types import TracebackType

    from rich.progress import Progress as Bar
    from rich.progress import TaskID

__all__ = ["Progress"]


class Progress:
    """A bar for one piece of work; use it as a context manager.

    Args:
        what: the work, in a word or two.
    """

    def __init__(self, what: str) -> None:
        self._what = what
        self._bar: Bar | None = None
        self._task: TaskID | None = None

    def __enter__(self) -> Self:
        if sys.stderr.isatty():
            from rich.console import Console  # noqa: PLC0415
            from rich.progress import (  # noqa: PLC0415
                BarColumn,
                TextColumn,
                TimeRemainingColumn,
            )
            from rich.progress import Progress as Bar  # noqa: PLC0415

            self._bar = Bar(
                TextColumn("{task.description}", markup=False),
                BarColumn(),
                TextColumn("{task.percentage:>3.0f} %"),
                TimeRemainingColumn(),
                TextColumn("{task.fields[note]}", markup=False),
                console=Console(stderr=True),
            )
            self._bar.start()
            self._task = self._bar.add_task(self._what, total=1.0, note="")
        return self

    def at(self, share: float, note: str = "") -> None:
        """Move the bar to a share of the work, 0 to 1."""
        if self._bar is not None and self._task is not None:
            self._bar.update(self._task, completed=share, note=note)

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        if self._bar is not None:
            self._bar.stop()
