"""The daemon's process: one scheduler, and for each of its sites a lock, threads and health.

A site that cannot be opened, or whose lock another instance has, is told once and tried again and
again; it never holds up the others. A process of one site ends instead, and says why.
"""

from __future__ import annotations

import contextlib
import os
import signal
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from contextlib import ExitStack, nullcontext
from dataclasses import dataclass, field
from datetime import UTC, datetime
from functools import partial
from typing import TYPE_CHECKING, Any

from apscheduler.executors.pool import ThreadPoolExecutor as Workers
from apscheduler.schedulers.background import BackgroundScheduler

from monitor import log
from monitor.commands.opening import Opened, opened
from monitor.daemon import Daemon
from monitor.errors import LostworkError, WrongUseError
from monitor.health import EVERY, heartbeat_path, tell_systemd
from monitor.holding import SiteLock
from monitor.log import logger
from monitor.notify.notifier import NOTIFICATIONS
from monitor.store.errors import InstanceRunning, StoreError
from monitor.triggers import GridTrigger, ShiftTrigger

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence
    from concurrent.futures import Future
    from contextlib import AbstractContextManager
    from pathlib import Path

    from apscheduler.triggers.base import BaseTrigger

    from monitor.site.load import Site
    from monitor.store.open import Store
    from monitor.store.site import SiteStore

__all__ = ["Runner", "new_scheduler", "run_daemon", "run_sites"]

MINUTE, QUARTER, HOUR, DAY = 60, 900, 3600, 86400
_HOUSEKEEPING = 3 * HOUR + 17 * 60
"""[s after midnight UTC] When few look and few write."""
_AGAIN = 5.0
"""[s] Between two tries to begin a site, at most; far below two cycles of a minute."""
_NAMES = {
    "cycle": "cycle",
    "judge": "judgement",
    "pages": "pages",
    "shift_report": "shift report",
    "housekeeping": "housekeeping",
}
"""The daemon's jobs, and what they are called in the log."""


def run_daemon(
    site: Site,
    database: Store,
    store: SiteStore,
    *,
    clock: Callable[[], float] = time.time,
    stop: threading.Event | None = None,
    standby: bool = False,
) -> None:
    """Run one site that is open already, until a signal comes, or ``stop`` is set.

    Args:
        site: the site.
        database: the store.
        store: the site's part of it.
        clock: the wall clock, UTC seconds.
        stop: ends the daemon when it is set.
        standby: while another instance runs, wait for it to go instead of refusing.

    Raises:
        InstanceRunning: another instance computes this site; the message says who.
        StoreError: the lock cannot be tried.
    """
    at = Opened(site, database, store)
    _run([(str(site.path), lambda: nullcontext(at))], clock, stop, standby=standby)


def run_sites(
    paths: Sequence[Path],
    *,
    clock: Callable[[], float] = time.time,
    stop: threading.Event | None = None,
    standby: bool = False,
) -> None:
    """Run the sites of some site files in one process, until a signal comes, or ``stop`` is set.

    Args:
        paths: of the site files.
        clock: the wall clock, UTC seconds.
        stop: ends the daemon when it is set.
        standby: while another instance runs, wait for it to go instead of refusing.

    Raises:
        LostworkError: the only site, or every one of them, cannot begin.
    """
    _run([(str(p), partial(opened, p)) for p in paths], clock, stop, standby=standby)


@dataclass
class Runner:
    """One site of this process: under way, or waiting until it can begin.

    Attributes:
        name: what it is called while its site file cannot be read.
        source: opens the site and its store.
        scheduler: of the process.
        clock: the wall clock, UTC seconds.
        taken: files and folders that the process writes, and whose they are.
        daemon: the site's jobs while it is under way.
    """

    name: str
    source: Callable[[], AbstractContextManager[Opened]]
    scheduler: Any
    clock: Callable[[], float] = time.time
    taken: dict[Path, str] = field(default_factory=dict)
    daemon: Daemon | None = field(default=None, init=False)
    _ends: ExitStack = field(default_factory=ExitStack, init=False)
    _told: str = field(default="", init=False)

    def begin(self) -> None:
        """Open the site, take its lock and have its jobs scheduled.

        Raises:
            InstanceRunning: another instance computes it.
            LostworkError: the site file, or the store, cannot be used.
        """
        with ExitStack() as ends:
            at = ends.enter_context(self.source())
            ends.enter_context(self._own_files(at.site))
            ends.enter_context(_log_file(at.site))
            lock = SiteLock(at.database, at.site.id, "lostwork run")
            ends.callback(lock.release)
            lock.check()
            daemon = Daemon(at.site, at.store, self.clock, threading.Event(), lock, at.database)
            ends.callback(daemon.close)
            self._schedule(daemon)
            ends.callback(self._unschedule)
            logger().info(
                "running", site=at.site.id, interval_s=at.store.interval_s, process=os.getpid()
            )
            if self._told:
                logger().info("taking over", site=at.site.id)
            self.daemon, self._ends, self._told = daemon, ends.pop_all(), ""

    @property
    def lost_lock(self) -> Exception | None:
        """Why the site has to end: another instance computes it now."""
        return None if self.daemon is None else self.daemon.lost_lock

    def try_to_begin(self) -> None:
        """Begin, or tell why not."""
        try:
            self.begin()
        except Exception as error:  # noqa: BLE001 - a bad site holds up no other
            self.tell(error)

    def tell(self, error: Exception) -> None:
        """Tell why the site cannot begin, once for each cause."""
        # Who runs changes seldom, and a store that is away may come back.
        if str(error) == self._told:
            return
        self._told = str(error)
        if isinstance(error, InstanceRunning):
            logger().info("standing by", site_file=self.name, cause=str(error))
            return
        trace = None if isinstance(error, (LostworkError, OSError)) else error
        logger().error(
            "cannot begin; tried again and again", site_file=self.name, cause=str(error),
            exc_info=trace,
        )  # fmt: skip

    def end(self) -> None:
        """Finish the window in hand, and let go of everything; harmless when nothing is held."""
        daemon, self.daemon = self.daemon, None
        if daemon is None:
            return
        daemon.stop.set()
        # First the jobs, which end the threads that the lock and the sources belong to.
        with self._ends:
            self._unschedule()
            # Where another instance runs, what is written is its.
            if daemon.lost_lock is None:
                daemon.end()
                logger().info("ended", site=daemon.site.id)

    def beat(self) -> None:
        """Show that the site's jobs are alive, and when each is due."""
        if self.daemon is None:
            return
        self._put_right()
        self.daemon.health.due(
            {job.name: job.next_run_time.timestamp() for job in self._jobs()
             if job.name in _NAMES.values() and job.next_run_time}
        )  # fmt: skip
        self.daemon.beat()

    def _put_right(self) -> None:
        """Let no job wait for a time that the clock showed before it was set back."""
        now = datetime.now(UTC)
        for job in self._jobs():
            due = job.trigger.get_next_fire_time(None, now)
            if job.next_run_time and due and due < job.next_run_time:
                job.modify(next_run_time=due)

    @contextlib.contextmanager
    def _own_files(self, site: Site) -> Iterator[None]:
        """Hold what only one site of a process may write."""
        own = _files(site)
        for path, key in own.items():
            if path in self.taken:
                raise WrongUseError(
                    f"{site.path}: {key} is '{path}', which {self.taken[path]} writes too; "
                    "sites that run together need files and folders of their own"
                )
        self.taken.update(dict.fromkeys(own, str(site.path)))
        try:
            yield
        finally:
            for path in own:
                self.taken.pop(path, None)

    def _schedule(self, daemon: Daemon) -> None:
        scheduler = self.scheduler
        # A thread for the notifications: a mail server that does not answer holds up no figures.
        for threads in (self._jobs_alias, self._notify_alias):
            scheduler.add_executor(Workers(1), threads)
        scheduler.add_job(daemon.start, executor=self._jobs_alias)
        for method, trigger in _triggers(daemon).items():
            scheduler.add_job(
                getattr(daemon, method), trigger, name=_NAMES[method], executor=self._jobs_alias
            )
        scheduler.add_job(
            daemon.notify, GridTrigger(MINUTE, 30), name=NOTIFICATIONS, executor=self._notify_alias
        )

        def reschedule() -> None:
            due = {_NAMES[method]: trigger for method, trigger in _triggers(daemon).items()}
            for job in self._jobs():
                if job.name in due:
                    job.reschedule(due[job.name])

        daemon.reloaded = reschedule

    def _unschedule(self) -> None:
        # Without this the scheduler may still hand a job to threads that are gone.
        for job in self._jobs():
            with contextlib.suppress(LookupError):
                job.remove()
        for threads in (self._jobs_alias, self._notify_alias):
            with contextlib.suppress(LookupError):
                self.scheduler.remove_executor(threads)

    def _jobs(self) -> list[Any]:
        own = {self._jobs_alias, self._notify_alias}
        return [job for job in self.scheduler.get_jobs() if job.executor in own]

    @property
    def _jobs_alias(self) -> str:
        return self.name

    @property
    def _notify_alias(self) -> str:
        return f"{self.name} {NOTIFICATIONS}"


def new_scheduler() -> Any:  # noqa: ANN401 - the library has no annotations
    """A scheduler without jobs: one that is late runs once, and never beside itself."""
    return BackgroundScheduler(
        timezone=UTC,
        job_defaults={"coalesce": True, "max_instances": 1, "misfire_grace_time": None},
    )


def _run(
    sources: Sequence[tuple[str, Callable[[], AbstractContextManager[Opened]]]],
    clock: Callable[[], float],
    stop: threading.Event | None,
    *,
    standby: bool,
) -> None:
    stop = stop or threading.Event()
    scheduler = new_scheduler()
    taken: dict[Path, str] = {}
    runners = [Runner(name, source, scheduler, clock, taken) for name, source in sources]
    with _signals(stop):
        scheduler.start()
        try:
            _begin(runners, stop, standby=standby)
            tell_systemd("READY=1")
            _live(runners, stop)
        finally:
            tell_systemd("STOPPING=1")
            _end(runners)
            scheduler.shutdown(wait=True)


def _end(runners: Sequence[Runner]) -> None:
    # All are told before any is waited for.
    for daemon in (runner.daemon for runner in runners):
        if daemon is not None:
            daemon.stop.set()
            logger().info("ending: the window in hand is finished first", site=daemon.site.id)
    for runner in runners:
        runner.end()


def _begin(runners: Sequence[Runner], stop: threading.Event, *, standby: bool) -> None:
    """Begin the sites; nothing that can run is an error, unless it is waited for."""
    failures: list[tuple[Runner, Exception]] = []
    for runner in runners:
        if stop.is_set():
            return
        try:
            runner.begin()
        except Exception as error:  # noqa: BLE001 - as in `try_to_begin`
            failures.append((runner, error))
    waited_for = standby and failures and isinstance(failures[0][1], (InstanceRunning, StoreError))
    if len(failures) == len(runners) and not waited_for:
        raise failures[0][1]
    for runner, why in failures:
        runner.tell(why)


def _live(runners: Sequence[Runner], stop: threading.Event) -> None:
    """Beat, and try again to begin what waits, until the process has to end."""
    alone = len(runners) == 1
    beaten, tried = -EVERY, time.monotonic()
    trying: Future[None] | None = None
    with ThreadPoolExecutor(1, "begin") as others:
        # A store that is away takes seconds to say so: that holds up no beat.
        while not stop.wait(1.0):
            now = time.monotonic()
            for runner in runners:
                if (lost := runner.lost_lock) is None:
                    continue
                runner.end()
                if alone:
                    raise lost
            waiting = [runner for runner in runners if runner.daemon is None]
            if waiting and (trying is None or trying.done()) and now - tried >= _AGAIN:
                tried, trying = now, others.submit(_try, waiting, stop)
            if now - beaten >= EVERY:
                beaten = now
                _beat(runners)


def _try(waiting: Sequence[Runner], stop: threading.Event) -> None:
    for runner in waiting:
        if not stop.is_set():
            runner.try_to_begin()


def _beat(runners: Sequence[Runner]) -> None:
    for runner in runners:
        runner.beat()
    # This thread alone is no sign of life: the scheduler's has to be there too.
    if runners[0].scheduler.running:
        under_way = sum(runner.daemon is not None for runner in runners)
        status = f"{under_way} of {len(runners)} running" if under_way else "standing by"
        tell_systemd(f"WATCHDOG=1\nSTATUS={status}")


def _triggers(daemon: Daemon) -> dict[str, BaseTrigger]:
    """When each job is due, by the site file in force."""
    settle = daemon.site.file.site.settle
    return {
        "cycle": GridTrigger(daemon.store.interval_s, settle),
        # A second apart, so that at a full hour the figures come first and the report last.
        "judge": GridTrigger(HOUR, settle + 1),
        "pages": GridTrigger(QUARTER, settle + 2),
        "shift_report": ShiftTrigger(daemon.site.calendar, settle + 3),
        "housekeeping": GridTrigger(DAY, _HOUSEKEEPING),
    }


def _files(site: Site) -> dict[Path, str]:
    """What a running site writes beside its store, and the keys that say where."""
    daemon = site.file.daemon
    named = {
        "[daemon] heartbeat": heartbeat_path(site.folder, daemon.heartbeat),
        "[daemon] metrics": heartbeat_path(site.folder, daemon.metrics),
        "[daemon] log_file": heartbeat_path(site.folder, daemon.log_file),
        "[pages] folder": site.folder / site.file.pages.folder,
    }
    return {path.resolve(): key for key, path in named.items() if path is not None}


def _log_file(site: Site) -> AbstractContextManager[None]:
    daemon = site.file.daemon
    path = heartbeat_path(site.folder, daemon.log_file)
    return nullcontext() if path is None else log.also_to(
        path, site.id, int(daemon.log_size), daemon.log_keep
    )  # fmt: skip


@contextlib.contextmanager
def _signals(stop: threading.Event) -> Iterator[None]:
    """Let SIGTERM and SIGINT end the process in order; a second one ends it at once."""
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
