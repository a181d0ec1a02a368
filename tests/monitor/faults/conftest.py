"""Everything that a site's store holds, as tables to compare row by row; a daemon to disturb."""

from __future__ import annotations

import json
from contextlib import ExitStack
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import pandas as pd
import pytest
import structlog
from structlog.testing import capture_logs
from typer.testing import CliRunner

from monitor import log
from monitor.cli import app
from monitor.commands.opening import opened
from monitor.daemon import Daemon
from monitor.holding import SiteLock
from monitor.store.engine import make_engine

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from monitor.commands.opening import Opened

# Numbers that the store deals out, and the wall clock's times of writing: nobody's figures.
_RUN = ["run_id"]
TABLES: dict[str, list[str]] = {
    "stream_figures": _RUN,
    "equipment_figures": _RUN,
    "condition_figures": _RUN,
    "ledger_figures": _RUN,
    "tag_quality": _RUN,
    "rollups": [],
    "watermarks": ["updated"],
    "baselines": ["baseline_id", "made", "retired"],
    "drift_points": ["baseline_id"],
    "alarms": ["alarm_id"],
    "alarm_transitions": ["alarm_id", "recorded"],
}
# A transaction that came to nothing leaves gaps in PostgreSQL's numbers, so rows go by name.
NAMES = {
    "subject_id": "select subject_id as id, kind || ' ' || subject as name from subjects",
    "figure_id": "select figure_id as id, figure as name from figure_names",
    "tag_id": "select tag_id as id, tag as name from tags",
}


@pytest.fixture
def whole_store() -> Callable[..., dict[str, pd.DataFrame]]:
    """Read every row of a plant's store but the runs, without the numbers that it deals out."""

    def read(plant, store: str = "sqlite:///figures.sqlite") -> dict[str, pd.DataFrame]:
        engine = make_engine(store, plant.folder)
        with engine.connect() as connection:
            names = {
                column: pd.read_sql_query(query, connection, index_col="id")["name"]
                for column, query in NAMES.items()
            }
            found = {}
            for table, dealt in TABLES.items():
                rows = pd.read_sql_query(f"select * from {table}", connection)
                known = {c: rows[c].map(names[c]) for c in names if c in rows}
                found[table] = _sorted(rows.assign(**known).drop(columns=dealt))
        engine.dispose()
        return found

    return read


def _sorted(table: pd.DataFrame) -> pd.DataFrame:
    return table.sort_values(list(table.columns), ignore_index=True)


@dataclass
class Watched:
    """A daemon under a clock that the test moves, with its lock and its log."""

    plant: Any
    at: Opened
    daemon: Daemon
    now: float
    lines: list[dict[str, Any]]

    def follow(self, until: str) -> None:
        """Live up to a time, a cycle each interval and a judgement each hour."""
        settle = self.at.site.file.site.settle
        while self.now < pd.Timestamp(until).timestamp():
            self.now += self.at.store.interval_s
            self.daemon.beat()
            self.daemon.cycle()
            if (self.now - settle) % 3600 == 0:
                self.daemon.judge()

    def told(self, job: str) -> list[str]:
        """Levels of the lines that a job's fault gave, in order."""
        begun = f"{job} failed"
        return [
            line["log_level"]
            for line in self.lines
            if line["event"] in {begun, f"{job} works again"}
        ]

    def status(self) -> dict[str, Any]:
        """What ``lostwork status`` says at this moment."""
        before = structlog.get_config()
        ran = CliRunner().invoke(app, ["status", str(self.plant.path), "--json"])
        # The command has sent the log elsewhere.
        structlog.configure(**before)
        assert ran.exit_code == 1, ran.output
        return dict(json.loads(ran.stdout))


ONE_FAULT = ["error", "info"]
"""Told once when it begins, and once when it ends."""
BEGIN = "2026-01-11T00:01:00Z"


@pytest.fixture
def watch() -> Iterator[Callable[..., Watched]]:
    """Start to watch a plant a day after its readings begin."""
    with ExitStack() as stack:

        def start(plant, begin: str = BEGIN) -> Watched:
            log.configure()
            lines = stack.enter_context(capture_logs())
            at = stack.enter_context(opened(plant.path))
            lock = SiteLock(at.database, at.site.id, "lostwork run")
            stack.callback(lock.release)
            found = Watched(plant, at, None, pd.Timestamp(begin).timestamp(), lines)
            found.daemon = Daemon(
                at.site, at.store, lambda: found.now, lock=lock, database=at.database
            )
            stack.callback(found.daemon.close)
            found.daemon.cycle()
            return found

        yield start
