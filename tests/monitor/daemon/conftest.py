"""A daemon with a clock that the test sets, and the store as tables to compare."""

from __future__ import annotations

from contextlib import ExitStack
from dataclasses import dataclass
from typing import TYPE_CHECKING

import pandas as pd
import pytest

from monitor import log
from monitor.commands.opening import opened
from monitor.daemon import Daemon
from monitor.store.engine import make_engine

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from monitor.commands.opening import Opened

TABLES = (
    "stream_figures",
    "equipment_figures",
    "condition_figures",
    "ledger_figures",
    "tag_quality",
    "rollups",
)


@dataclass
class Clock:
    """A wall clock that stands until it is set."""

    now: float = 0.0

    def __call__(self) -> float:
        return self.now

    def set(self, text: str) -> None:
        self.now = pd.Timestamp(text).timestamp()


@dataclass
class Driven:
    """A daemon, its clock, and the plant it watches."""

    daemon: Daemon
    clock: Clock
    at: Opened


@pytest.fixture
def drive() -> Iterator[Callable[..., Driven]]:
    """Open a plant's site and give a daemon whose jobs the test calls."""
    log.configure()
    with ExitStack() as stack:

        def open_daemon(plant, now: str) -> Driven:
            at = stack.enter_context(opened(plant.path))
            clock = Clock()
            clock.set(now)
            daemon = Daemon(at.site, at.store, clock)
            stack.callback(daemon.close)
            return Driven(daemon, clock, at)

        yield open_daemon


@pytest.fixture
def stored() -> Callable[..., dict[str, pd.DataFrame]]:
    """Read every figure of a plant's store, without the number of the run that wrote it."""

    def read(plant, store: str = "sqlite:///figures.sqlite") -> dict[str, pd.DataFrame]:
        engine = make_engine(store, plant.folder)
        with engine.connect() as connection:
            found = {
                table: pd.read_sql_query(f"select * from {table}", connection)
                .drop(columns="run_id", errors="ignore")
                .sort_values(KEYS[table], ignore_index=True)
                for table in TABLES
            }
        engine.dispose()
        return found

    return read


KEYS = {
    "stream_figures": ["subject_id", "time"],
    "equipment_figures": ["subject_id", "time"],
    "condition_figures": ["subject_id", "time", "figure_id"],
    "ledger_figures": ["site_id", "time"],
    "tag_quality": ["tag_id", "hour"],
    "rollups": ["resolution", "subject_id", "start", "figure_id"],
}
