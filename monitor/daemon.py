"""A site's jobs: figures each interval, alarms each hour, pages each quarter hour, shift reports.

All jobs but the notifications run one after the other in one worker thread, so they never overlap.
A job that fails says so once, with its cause, and once more when it works again; meanwhile the
watermark stays, and the next cycle catches up. Whatever ends the process, the store holds whole
windows only. The site file is read again when it has changed. `monitor.running` calls the jobs.
"""

from __future__ import annotations

import contextlib
import re
import threading
import time
from contextlib import ExitStack
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import TYPE_CHECKING

import pandas as pd
import sqlalchemy as sa
from structlog.contextvars import bound_contextvars

from connectors.base import ConnectorError
from monitor.backfill import catch_up, kept, last_complete, recorded_sources
from monitor.errors import LostworkError
from monitor.health import Health, heartbeat_path
from monitor.housekeeping import keep_house
from monitor.judging import judge_site, plant_now
from monitor.log import logger
from monitor.notify.notifier import NOTIFICATIONS, Notifier
from monitor.reloading import SiteWatch
from monitor.seen import Seen
from monitor.store import schema
from monitor.store.engine import reading
from monitor.store.errors import InstanceRunning, StoreError
from monitor.triggers import last_shifts

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping

    from connectors.base import Connector
    from monitor.figures import Computed
    from monitor.holding import SiteLock
    from monitor.site.load import Site
    from monitor.store.open import Store
    from monitor.store.site import SiteStore

__all__ = ["Daemon"]

DAY = 86400
_SHIFTS = 9
"""So many shifts are reported that were missed: three days of three."""
_JUDGED_RUNS = 200
"""Runs that a new process looks back over for figures that were not judged."""
_CLOCK_SLACK = 60.0
"""[s] A clock that is set back by less is being kept right."""
_SEEN = 1000
"""Problems of sources that are remembered, so that each is told once."""
_STATE = "state in the store"
"""That the store knows how the jobs are doing: no job, but it can fail like one. People are told of
the jobs that fail with it."""
_NUMBER = re.compile(r"\d+")


class ClockSetBackError(LostworkError):
    """The wall clock shows a time that was passed before."""


@dataclass
class Daemon:
    """The jobs of one site, each callable by itself.

    Attributes:
        site: the site.
        store: its part of the store.
        clock: the wall clock, UTC seconds.
        stop: set when the daemon has to end; jobs look at it between windows and pages.
        lock: held for the daemon's life, or None.
        database: the store that ``store`` is a part of; without it the site file is read once.
        lost_lock: another instance has the lock; the daemon has to end.
        health: how the jobs are doing.
        reloaded: called after a changed site file was taken up.
    """

    site: Site
    store: SiteStore
    clock: Callable[[], float] = time.time
    stop: threading.Event = field(default_factory=threading.Event)
    lock: SiteLock | None = None
    database: Store | None = None
    lost_lock: Exception | None = field(default=None, init=False)
    health: Health = field(init=False)
    reloaded: Callable[[], None] | None = field(default=None, init=False)
    _open: ExitStack = field(default_factory=ExitStack, init=False)
    _sources: Mapping[str, Connector] | None = field(default=None, init=False)
    _seen: Seen = field(default_factory=Seen, init=False)
    _stale_from: int | None = field(default=None, init=False)
    _judged: bool = field(default=False, init=False)
    _unreported: int | None = field(default=None, init=False)
    _latest: float = field(default=0.0, init=False)
    _watch: SiteWatch = field(init=False)
    _failing: dict[str, str] = field(default_factory=dict, init=False)
    _told: set[tuple[str, str]] = field(default_factory=set, init=False)
    _notifier: Notifier = field(init=False)

    def __post_init__(self) -> None:
        self._notifier = Notifier(self.site, self.store, self.clock)
        self._watch = SiteWatch(self.site)
        daemon = self.site.file.daemon
        self.health = Health(
            self.site.id,
            self.clock,
            heartbeat_path(self.site.folder, daemon.heartbeat),
            heartbeat_path(self.site.folder, daemon.metrics),
        )

    def start(self) -> None:
        """What a daemon does first: all that came due while none ran."""
        with self._told_once(_STATE):
            self._remember()
        for job in (self.cycle, self.judge, self.pages, self.shift_report):
            job()
        kept_house = self.health.jobs.get("housekeeping")
        if kept_house is not None and self.clock() - (kept_house.last or 0.0) >= DAY:
            self.housekeeping()

    def cycle(self) -> None:
        """Catch up with the sources."""
        self._guarded("cycle", self._cycle)

    def judge(self) -> None:
        """Judge the condition figures of what was computed since the last time."""
        self._guarded("judgement", self._judge)

    def pages(self) -> None:
        """Write all pages."""
        self._guarded("pages", self._pages)

    def shift_report(self) -> None:
        """Write the reports of shifts that are over and are not reported as they stand now."""
        self._guarded("shift report", self._shift_reports)

    def beat(self) -> None:
        """Show that the daemon lives, and look at the clock; may run beside any other job."""
        with bound_contextvars(site=self.site.id):
            with self._told_once("clock"):
                self._look_at_clock()
            self.health.beat()

    def housekeeping(self) -> None:
        """Keep the store quick and small."""
        self._guarded(
            "housekeeping", lambda: keep_house(self.store, int(self.clock()), kept(self.site))
        )

    def notify(self) -> None:
        """Tell people of alarms and failed jobs; may run beside any other job."""
        if self.stop.is_set():
            return
        # Without a look at the lock, whose connection belongs to the other jobs' thread.
        with bound_contextvars(site=self.site.id):
            with self._told_once(NOTIFICATIONS):
                self._notifier.run(self.stop.is_set)
            with self._told_once(_STATE):
                self.store.keep_daemon(self.health.state())

    def end(self) -> None:
        """Say that the daemon ended in order: no heartbeat, and a last word in the store."""
        self.health.end()
        try:
            self.store.keep_daemon(self.health.state(ended=True))
        except StoreError as error:
            logger().warning("the end could not be recorded", site=self.site.id, cause=str(error))

    def close(self) -> None:
        """Close the sources."""
        self._sources = None
        self._open.close()

    def _remember(self) -> None:
        """Know from the store what the daemon before this one did last."""
        known = self.store.daemon()
        if known is not None:
            self.health.remember(known)

    def _guarded(self, name: str, job: Callable[[], object]) -> None:
        """Run a job; its failure is told once, and so is its recovery."""
        if self.stop.is_set():
            return
        with bound_contextvars(site=self.site.id):
            with self._told_once(name):
                if self.lock is not None:
                    self._check_lock(self.lock)
                if name == "cycle":
                    self._reload()
                job()
            self.health.beat()

    @contextlib.contextmanager
    def _told_once(self, name: str) -> Iterator[None]:
        try:
            yield
        except Exception as error:  # noqa: BLE001 - a daemon outlives whatever a job meets
            self._tell_failure(name, error)
            if name != _STATE:
                self._notifier.job_failed(name, self._failing[name])
        else:
            if self._failing.pop(name, None) is not None:
                logger().info(f"{name} works again", job=name)
            self._notifier.job_worked(name)
            self.health.worked(name)

    def _check_lock(self, lock: SiteLock) -> None:
        try:
            lock.check()
        except InstanceRunning as error:
            # Another instance has begun: two writers are worse than none.
            self.lost_lock = error
            self.stop.set()
            raise

    def _look_at_clock(self) -> None:
        now = self.clock()
        if now < self._latest - _CLOCK_SLACK:
            raise ClockSetBackError(
                "the clock was set back; new figures wait until it has passed "
                f"{_utc(int(self._latest))} again"
            )
        self._latest = max(self._latest, now)

    def _reload(self) -> None:
        """Take a changed site file up; one that cannot be used is told, and the old one stays."""
        if self.database is None or not self._watch.changed():
            return
        with self._told_once("site file"):
            site = self._watch.load()
            if site is None:
                return
            # Registering first: whatever fails here leaves everything as it was.
            store = self._registered(site)
            told = site.file.notify != self.site.file.notify
            self.close()
            self.site, self.store = site, store
            if told:
                self._notifier = Notifier(site, store, self.clock)
            logger().info("site file read again", hash=site.hash[:12])
            if self.reloaded is not None:
                self.reloaded()

    def _registered(self, site: Site) -> SiteStore:
        from monitor.commands.opening import register  # noqa: PLC0415 - commands import this

        assert self.database is not None  # noqa: S101 - asked by `_reload`
        return register(site, self.database)

    def _tell_failure(self, name: str, error: Exception) -> None:
        cause = str(error) or type(error).__name__
        self.health.failed(name, cause)
        # Times, ports and process numbers in it do not make it another cause.
        if _NUMBER.sub("#", self._failing.get(name, "")) == _NUMBER.sub("#", cause):
            logger().debug(f"{name} still fails", job=name, cause=cause)
            return
        self._failing[name] = cause
        known = isinstance(error, _expected())
        logger().error(f"{name} failed", job=name, cause=cause, exc_info=None if known else error)

    def _cycle(self) -> None:
        begun = time.perf_counter()
        sources = self._opened()
        try:
            done = catch_up(
                self.site,
                self.store,
                sources,
                self.clock(),
                stop=self.stop.is_set,
                seen=self._seen,
            )
        except ConnectorError:
            # A historian that was away is opened anew when it is back.
            self.close()
            raise
        if not done:
            return
        first = done[0].batch.start
        self._stale_from = _earliest(first, self._stale_from)
        self._unreported = _earliest(first, self._unreported)
        self.health.stored(done[-1].batch.end, sum(c.readings for c in done), len(done))
        self._tell_problems(done)
        logger().info(
            "figures stored",
            until=_utc(done[-1].batch.end),
            windows=len(done),
            readings=sum(c.readings for c in done),
            bad=sum(c.bad for c in done),
            missing=sum(c.missing for c in done),
            seconds=round(time.perf_counter() - begun, 2),
        )

    def _opened(self) -> Mapping[str, Connector]:
        if self._sources is None:
            opening = recorded_sources(self.site, self.store, "cycle")
            self._sources = self._open.enter_context(opening)
        return self._sources

    def _tell_problems(self, done: list[Computed]) -> None:
        for problem in (p for computed in done for p in computed.problems):
            key = (problem.source, problem.what)
            if key in self._told:
                continue
            if len(self._told) >= _SEEN:
                self._told.clear()
            self._told.add(key)
            logger().warning(
                "passed over in a source", where=problem.source, what=str(problem),
                count=problem.count,
            )  # fmt: skip

    def _judge(self) -> None:
        newest = self.store.newest()
        if newest is None:
            return
        end = int(newest.timestamp()) + self.store.interval_s
        start = end if self._stale_from is None else self._stale_from
        if not self._judged:
            start = min(start, self._not_judged(end))
        statuses = judge_site(
            self.site, self.store, start, end, plant_now(self.store, self.clock())
        )
        self._stale_from, self._judged = None, True
        for status in statuses:
            for action, reason in status.refused:
                logger().warning(
                    "a recorded action fits no alarm any more", subject=status.subject,
                    figure=status.figure, action=str(action.action), by=action.by, reason=reason,
                )  # fmt: skip
        drifting = [f"{s.subject}.{s.figure}" for s in statuses if s.state == "drifting"]
        logger().info("judged", figures=len(statuses), drifting=",".join(drifting) or "none")

    def _not_judged(self, end: int) -> int:
        """From where a process that died may have left figures that it computed and not judged."""
        windows = (run.window_start for run in self.store.runs(_JUDGED_RUNS))
        return min((start for start in windows if start is not None), default=end)

    def _pages(self) -> None:
        from monitor.reports.pages import write_pages  # noqa: PLC0415 - plotly takes a second

        for _ in write_pages(self.site, self.store, self._now()):
            if self.stop.is_set():
                return

    def _shift_reports(self) -> None:
        from dashboards.files import shift_file  # noqa: PLC0415 - plotly takes a second
        from monitor.reports.pages import pages_folder  # noqa: PLC0415 - as above
        from monitor.reports.shift import write_shift_report  # noqa: PLC0415

        if self.store.newest() is None:
            return
        folder, zone = pages_folder(self.site), self.site.file.site.time_zone
        spans = last_shifts(self.site.calendar, last_complete(self.site, self.clock()), _SHIFTS)
        begun = self._first_figure()
        for span in spans:
            local = pd.Timestamp(span.start, unit="s", tz="UTC").tz_convert(zone)
            there = (folder / shift_file(local, span.name)).exists()
            new = self._unreported is not None and span.end > self._unreported
            # Of a store that has just begun, what was whole; the last one always.
            early = span.start < begun and span is not spans[-1]
            if self.stop.is_set() or early or (there and not new):
                continue
            path = write_shift_report(self.site, self.store, span, self._now(), folder)
            logger().info(
                "shift report written", shift=span.name, day=str(span.day), path=str(path)
            )
        if not self.stop.is_set():
            self._unreported = None

    def _first_figure(self) -> int:
        """Start of the oldest figures: what lies before it is no shift of this daemon."""
        table = schema.ledger_figures
        query = sa.select(sa.func.min(table.c.time)).where(table.c.site_id == self.store.site_id)
        with reading(self.store.engine, "read its first figure") as connection:
            return int(connection.execute(query).scalar() or 0)

    def _now(self) -> pd.Timestamp:
        return pd.Timestamp(self.clock(), unit="s", tz="UTC")


def _expected() -> tuple[type[Exception], ...]:
    """Errors that speak for themselves; any other is told with its traceback."""
    from dashboards import PageError  # noqa: PLC0415 - plotly takes a second
    from monitor.errors import LostworkError  # noqa: PLC0415

    return (ConnectorError, LostworkError, PageError, OSError)


def _utc(seconds: int) -> str:
    return datetime.fromtimestamp(seconds, tz=UTC).strftime("%Y-%m-%dT%H:%M:%SZ")


def _earliest(time: int, known: int | None) -> int:
    return time if known is None else min(time, known)
