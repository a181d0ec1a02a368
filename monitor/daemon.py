"""The daemon: figures each interval, alarms each hour, pages each quarter hour, shift reports.

All jobs but the notifications run one after the other in one worker thread, so they never overlap.
A job that fails says so once, with its cause, and once more when it works again; meanwhile the
watermark stays, and the next cycle catches up. Whatever ends the process, the store holds whole
windows only.
"""

from __future__ import annotations

import contextlib
import math
import os
import signal
import threading
import time
from contextlib import ExitStack
from dataclasses import dataclass, field
from datetime import UTC, datetime
from typing import TYPE_CHECKING, Any

import pandas as pd
from apscheduler.executors.pool import ThreadPoolExecutor
from apscheduler.schedulers.background import BackgroundScheduler
from apscheduler.triggers.base import BaseTrigger

from connectors.base import ConnectorError
from monitor.backfill import catch_up, last_complete, recorded_sources
from monitor.housekeeping import keep_house
from monitor.judging import judge_site, plant_now
from monitor.log import logger
from monitor.notify.notifier import NOTIFICATIONS, Notifier

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping

    from connectors.base import Connector
    from monitor.figures import Computed
    from monitor.site.load import Site
    from monitor.site.shifts import ShiftCalendar, Span
    from monitor.store.lock import InstanceLock
    from monitor.store.open import Store
    from monitor.store.site import SiteStore

__all__ = ["Daemon", "GridTrigger", "ShiftTrigger", "last_shift", "run_daemon"]

MINUTE, QUARTER, HOUR, DAY = 60, 900, 3600, 86400
_HOUSEKEEPING = 3 * HOUR + 17 * 60
"""[s after midnight UTC] When few look and few write."""
_SEEN = 1000
"""Problems of sources that are remembered, so that each is told once."""


class GridTrigger(BaseTrigger):  # type: ignore[misc]  # no annotations there
    """Fires at every multiple of an interval since 1970, plus an offset, whatever came before."""

    def __init__(self, interval: int, offset: float) -> None:
        self._interval, self._offset = interval, offset

    def get_next_fire_time(self, previous_fire_time: datetime | None, now: datetime) -> datetime:
        """The next time after ``previous_fire_time`` and not before ``now``."""
        cells = math.ceil((now.timestamp() - self._offset) / self._interval)
        if previous_fire_time is not None:
            passed = math.floor((previous_fire_time.timestamp() - self._offset) / self._interval)
            cells = max(cells, passed + 1)
        due = cells * self._interval + self._offset
        return datetime.fromtimestamp(due, tz=UTC)


class ShiftTrigger(BaseTrigger):  # type: ignore[misc]  # as above
    """Fires at the end of every shift, plus an offset: local time, daylight saving included."""

    def __init__(self, calendar: ShiftCalendar, offset: float) -> None:
        self._calendar, self._offset = calendar, offset

    def get_next_fire_time(self, previous_fire_time: datetime | None, now: datetime) -> datetime:
        """The next time after ``previous_fire_time`` and not before ``now``."""
        after = now.timestamp() - self._offset
        if previous_fire_time is not None:
            after = max(after, previous_fire_time.timestamp() - self._offset + 1)
        spans = self._calendar.spans(int(after) - 1, int(after) + 2 * DAY)
        end = next(span.end for span in spans if span.end >= after)
        return datetime.fromtimestamp(end + self._offset, tz=UTC)


def last_shift(calendar: ShiftCalendar, until: float) -> Span:
    """The newest shift that is over at a time (UTC seconds)."""
    spans = calendar.spans(int(until) - 3 * DAY, int(until) + 1)
    return [span for span in spans if span.end <= until][-1]


@dataclass
class Daemon:
    """The jobs of one site, each callable by itself.

    Attributes:
        site: the site.
        store: its part of the store.
        clock: the wall clock, UTC seconds.
        stop: set when the daemon has to end; jobs look at it between windows and pages.
        lock: held for the daemon's life, or None.
        lost_lock: why the lock is no longer held; the daemon has to end.
    """

    site: Site
    store: SiteStore
    clock: Callable[[], float] = time.time
    stop: threading.Event = field(default_factory=threading.Event)
    lock: InstanceLock | None = None
    lost_lock: Exception | None = field(default=None, init=False)
    _open: ExitStack = field(default_factory=ExitStack, init=False)
    _sources: Mapping[str, Connector] | None = field(default=None, init=False)
    _stale_from: int | None = field(default=None, init=False)
    _failing: dict[str, str] = field(default_factory=dict, init=False)
    _told: set[tuple[str, str]] = field(default_factory=set, init=False)
    _notifier: Notifier = field(init=False)

    def __post_init__(self) -> None:
        self._notifier = Notifier(self.site, self.store, self.clock)

    def start(self) -> None:
        """What a daemon does first: catch up, judge, draw, and report the last shift."""
        for job in (self.cycle, self.judge, self.pages, self.shift_report):
            job()

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
        """Write the report of the last shift that is over."""
        self._guarded("shift report", self._shift_report)

    def housekeeping(self) -> None:
        """Keep the store quick and small."""
        self._guarded("housekeeping", lambda: keep_house(self.store, int(self.clock())))

    def notify(self) -> None:
        """Tell people of alarms and failed jobs; may run beside any other job."""
        if self.stop.is_set():
            return
        # Without a look at the lock, whose connection belongs to the other jobs' thread.
        with self._told_once(NOTIFICATIONS):
            self._notifier.run(self.stop.is_set)

    def close(self) -> None:
        """Close the sources."""
        self._sources = None
        self._open.close()

    def _guarded(self, name: str, job: Callable[[], object]) -> None:
        """Run a job; its failure is told once, and so is its recovery."""
        if self.stop.is_set():
            return
        with self._told_once(name):
            if self.lock is not None:
                self._check_lock(self.lock)
            job()

    @contextlib.contextmanager
    def _told_once(self, name: str) -> Iterator[None]:
        try:
            yield
        except Exception as error:  # noqa: BLE001 - a daemon outlives whatever a job meets
            self._tell_failure(name, error)
            self._notifier.job_failed(name, self._failing[name])
        else:
            if self._failing.pop(name, None) is not None:
                logger().info(f"{name} works again", job=name)
            self._notifier.job_worked(name)

    def _check_lock(self, lock: InstanceLock) -> None:
        try:
            lock.check()
        except Exception as error:
            # Another instance may have begun: two writers are worse than none.
            self.lost_lock = error
            self.stop.set()
            raise

    def _tell_failure(self, name: str, error: Exception) -> None:
        cause = str(error) or type(error).__name__
        if self._failing.get(name) == cause:
            logger().debug(f"{name} still fails", job=name, cause=cause)
            return
        self._failing[name] = cause
        known = isinstance(error, _expected())
        logger().error(f"{name} failed", job=name, cause=cause, exc_info=None if known else error)

    def _cycle(self) -> None:
        begun = time.perf_counter()
        sources = self._opened()
        try:
            done = catch_up(self.site, self.store, sources, self.clock(), stop=self.stop.is_set)
        except ConnectorError:
            # A historian that was away is opened anew when it is back.
            self.close()
            raise
        if not done:
            return
        first = done[0].batch.start
        self._stale_from = first if self._stale_from is None else min(first, self._stale_from)
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
            key = (problem.where, problem.what)
            if key in self._told:
                continue
            if len(self._told) >= _SEEN:
                self._told.clear()
            self._told.add(key)
            logger().warning(
                "passed over in a source", where=problem.where, what=problem.what,
                count=problem.count,
            )  # fmt: skip

    def _judge(self) -> None:
        newest = self.store.newest()
        if newest is None:
            return
        end = int(newest.timestamp()) + self.store.interval_s
        start = end if self._stale_from is None else self._stale_from
        statuses = judge_site(
            self.site, self.store, start, end, plant_now(self.store, self.clock())
        )
        self._stale_from = None
        for status in statuses:
            for action, reason in status.refused:
                logger().warning(
                    "a recorded action fits no alarm any more", subject=status.subject,
                    figure=status.figure, action=str(action.action), by=action.by, reason=reason,
                )  # fmt: skip
        drifting = [f"{s.subject}.{s.figure}" for s in statuses if s.state == "drifting"]
        logger().info("judged", figures=len(statuses), drifting=",".join(drifting) or "none")

    def _pages(self) -> None:
        from monitor.reports.pages import write_pages  # noqa: PLC0415 - plotly takes a second

        for _ in write_pages(self.site, self.store, self._now()):
            if self.stop.is_set():
                return

    def _shift_report(self) -> None:
        from monitor.reports.pages import pages_folder  # noqa: PLC0415 - as above
        from monitor.reports.shift import write_shift_report  # noqa: PLC0415

        if self.store.newest() is None:
            return
        span = last_shift(self.site.calendar, last_complete(self.site, self.clock()))
        path = write_shift_report(self.site, self.store, span, self._now(), pages_folder(self.site))
        logger().info("shift report written", shift=span.name, day=str(span.day), path=str(path))

    def _now(self) -> pd.Timestamp:
        return pd.Timestamp(self.clock(), unit="s", tz="UTC")


def run_daemon(
    site: Site,
    database: Store,
    store: SiteStore,
    *,
    clock: Callable[[], float] = time.time,
    stop: threading.Event | None = None,
) -> None:
    """Run until a signal comes, or ``stop`` is set.

    Args:
        site: the site.
        database: the store.
        store: the site's part of it.
        clock: the wall clock, UTC seconds.
        stop: ends the daemon when it is set.

    Raises:
        InstanceRunning: another instance computes this site; the message says who.
        StoreError: the lock on the site was lost.
    """
    with database.instance_lock(site.id, "lostwork run") as lock:
        daemon = Daemon(site, store, clock, stop or threading.Event(), lock)
        scheduler = _scheduler(daemon)
        with _signals(daemon.stop):
            scheduler.start()
            logger().info("running", site=site.id, interval_s=store.interval_s, process=os.getpid())
            while not daemon.stop.wait(1.0):
                pass
            logger().info("ending: the window in hand is finished first")
            # Without this the scheduler may still hand a job to workers that are gone.
            scheduler.remove_all_jobs()
            scheduler.shutdown(wait=True)
        daemon.close()
    if daemon.lost_lock is not None:
        raise daemon.lost_lock
    logger().info("ended")


def _scheduler(daemon: Daemon) -> Any:  # noqa: ANN401 - the library has no annotations
    scheduler = BackgroundScheduler(
        timezone=UTC,
        executors={"default": ThreadPoolExecutor(1), NOTIFICATIONS: ThreadPoolExecutor(1)},
        job_defaults={"coalesce": True, "max_instances": 1, "misfire_grace_time": None},
    )
    settle = daemon.site.file.site.settle
    jobs: tuple[tuple[Callable[[], None], BaseTrigger], ...] = (
        (daemon.cycle, GridTrigger(daemon.store.interval_s, settle)),
        # A second apart, so that at a full hour the figures come first and the report last.
        (daemon.judge, GridTrigger(HOUR, settle + 1)),
        (daemon.pages, GridTrigger(QUARTER, settle + 2)),
        (daemon.shift_report, ShiftTrigger(daemon.site.calendar, settle + 3)),
        (daemon.housekeeping, GridTrigger(DAY, _HOUSEKEEPING)),
    )
    scheduler.add_job(daemon.start)
    for job, trigger in jobs:
        scheduler.add_job(job, trigger)
    # A thread of its own: a mail server that does not answer holds up no figures.
    scheduler.add_job(daemon.notify, GridTrigger(MINUTE, 30), executor=NOTIFICATIONS)
    return scheduler


@contextlib.contextmanager
def _signals(stop: threading.Event) -> Iterator[None]:
    """Let SIGTERM and SIGINT end the daemon in order; a second one ends it at once."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return

    def on_signal(number: int, _frame: object) -> None:
        if stop.is_set():
            signal.signal(number, signal.SIG_DFL)
            os.kill(os.getpid(), number)
        stop.set()

    before = {
        number: signal.signal(number, on_signal) for number in (signal.SIGTERM, signal.SIGINT)
    }
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def _expected() -> tuple[type[Exception], ...]:
    """Errors that speak for themselves; any other is told with its traceback."""
    from dashboards import PageError  # noqa: PLC0415 - plotly takes a second
    from monitor.errors import LostworkError  # noqa: PLC0415

    return (ConnectorError, LostworkError, PageError, OSError)


def _utc(seconds: int) -> str:
    return datetime.fromtimestamp(seconds, tz=UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
