"""The daemon's part: how its jobs are doing, and once a minute what is due.

`Notifier.run` is called in a thread of its own, so that a slow mail server never holds up figures.
"""

from __future__ import annotations

import threading
from typing import TYPE_CHECKING

from monitor.log import logger
from monitor.notify.deliver import Delivery, deliver, wait_after
from monitor.notify.errors import NotifyError
from monitor.notify.message import Message
from monitor.notify.outbox import Entry, Outbox
from monitor.notify.queue import JobState, job_entry, queue_alarms, queue_jobs
from monitor.notify.sender import make_senders
from monitor.store.errors import StoreError

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

    from monitor.notify.sender import Sender
    from monitor.site.load import Site
    from monitor.site.notify import Notify
    from monitor.store.site import SiteStore

__all__ = ["NOTIFICATIONS", "Notifier"]

NOTIFICATIONS = "notifications"
"""The name of the daemon's job; its own failure is told in the log alone."""
_DAY = 86400
_KEPT = 90 * _DAY


class Notifier:
    """Tells the targets of one site; the methods may be called from any thread."""

    def __init__(
        self,
        site: Site,
        store: SiteStore,
        clock: Callable[[], float],
        senders: Mapping[str, Sender] | None = None,
    ) -> None:
        """Keep what is needed; nothing is opened yet.

        Args:
            site: the site.
            store: its part of the store.
            clock: the wall clock, UTC seconds.
            senders: by the target's id; those of the site file when left out.
        """
        self._site, self._store, self._clock = site, store, clock
        self._senders = make_senders(site) if senders is None else senders
        self._lock = threading.Lock()
        self._jobs: dict[str, JobState] = {}
        self._failing: dict[str, str] = {}
        # What was told while the store was away: (target, job) -> the message, or when to try next.
        self._told: dict[tuple[str, str], Entry] = {}
        self._tries: dict[tuple[str, str], tuple[int, float]] = {}
        self._pruned = 0

    def job_failed(self, name: str, cause: str) -> None:
        """Note that a job has failed; the first failure in a row is the one that is told."""
        with self._lock:
            known = self._jobs.get(name)
            if name != NOTIFICATIONS and (known is None or not known.failing):
                self._jobs[name] = JobState(True, int(self._clock()), cause)

    def job_worked(self, name: str) -> None:
        """Note that a job has done its work."""
        with self._lock:
            known = self._jobs.get(name)
            if name != NOTIFICATIONS and (known is None or known.failing):
                self._jobs[name] = JobState(False, int(self._clock()))

    def run(self, stop: Callable[[], bool] = lambda: False) -> tuple[Delivery, ...]:
        """Queue what is new, send what is due, and log what is worth a line, once.

        Args:
            stop: asked before each message; true ends the call.

        Returns:
            Every try.

        Raises:
            StoreError: the database refuses. That jobs fail was told all the same.
        """
        if not self._site.file.notify:
            return ()
        now = int(self._clock())
        with self._lock:
            jobs = dict(self._jobs)
        try:
            self._settle()
            queue_jobs(self._site, self._store, jobs, now)
            queue_alarms(self._site, self._store, now)
            self._prune(now)
            done = deliver(self._store, self._site, now, self._senders, stop=stop)
        except StoreError:
            self._log(self._without_store(jobs, now))
            raise
        self._log(done)
        return done

    def _settle(self) -> None:
        """Put what was told without the store into it, so that it is not told again."""
        if self._told:
            Outbox(self._store).add(self._told.values())
            self._told.clear()
        self._tries.clear()

    def _prune(self, now: int) -> None:
        if now < self._pruned + _DAY:
            return
        oldest = max(notify.not_older_than for notify in self._site.file.notify)
        Outbox(self._store).prune(now - max(_KEPT, int(oldest) + _DAY))
        self._pruned = now

    def _without_store(self, jobs: Mapping[str, JobState], now: int) -> tuple[Delivery, ...]:
        """Tell failing jobs from memory: a store that is away is what people must know of."""
        done: list[Delivery] = []
        for notify in (n for n in self._site.file.notify if "job" in n.on):
            for name, job in jobs.items():
                key = notify.id, name
                tries, due = self._tries.get(key, (0, 0.0))
                if job.failing and key not in self._told and due <= now and tries <= notify.retries:
                    done.append(self._directly(notify, name, job, now))
        return tuple(done)

    def _directly(self, notify: Notify, name: str, job: JobState, now: int) -> Delivery:
        entry = job_entry(self._site, notify, name, job, now)
        key = notify.id, name
        message = Message.read(entry.content)
        try:
            note = self._senders[notify.id].send(message, now)
        except Exception as error:  # noqa: BLE001 - as in `deliver`: told, and no other held up
            tries = self._tries.get(key, (0, 0.0))[0] + 1
            self._tries[key] = tries, now + wait_after(notify, tries)
            fault = None if isinstance(error, NotifyError) else error
            return Delivery(notify.id, message.title, "waiting", str(error), fault)
        self._told[key] = Entry(**{**vars(entry), "state": "sent", "tries": 1, "ended": now})
        return Delivery(notify.id, message.title, "sent", note)

    def _log(self, done: tuple[Delivery, ...]) -> None:
        for tried in done:
            if tried.outcome == "sent":
                logger().info("notified", target=tried.target, title=tried.title)
                if self._failing.pop(tried.target, None) is not None:
                    logger().info("notifications go out again", target=tried.target)
                if tried.error:
                    logger().warning("notified in part", target=tried.target, cause=tried.error)
                continue
            if self._failing.get(tried.target) != tried.error:
                self._failing[tried.target] = tried.error
                logger().error(
                    "cannot notify", target=tried.target, cause=tried.error, exc_info=tried.fault
                )
            if tried.outcome == "failed":
                logger().error("a notification was given up", target=tried.target,
                               title=tried.title)  # fmt: skip
