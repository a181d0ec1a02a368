"""How a site stands: figures, sources, runs, the daemon and its jobs, alarms, notifications."""

from __future__ import annotations

import os
import time
from dataclasses import asdict, dataclass, field
from typing import TYPE_CHECKING, Any

from monitor.commands.times import local
from monitor.health import heartbeat_path, read_heartbeat
from monitor.notify.outbox import Outbox
from monitor.store.errors import InstanceRunning
from monitor.store.lock import lock_site

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from monitor.commands.opening import Opened
    from monitor.notify.outbox import Entry
    from monitor.site.load import Site
    from monitor.store.errors import StoreError
    from monitor.store.jobs import DaemonState
    from monitor.store.runs import Run

__all__ = ["Standing", "span", "standing", "standing_without_store"]

_LOOKED_AT = 50
_DAY = 86400
_SILENT = 120
"""[s] A daemon writes its heartbeat many times in this."""
_SILENT_IN_STORE = 600
"""[s] And into the store each minute, unless a mail server keeps it waiting."""


@dataclass(frozen=True)
class Standing:
    """How a site stands; times in integer UTC seconds.

    Attributes:
        newest: end of the newest figures.
        lag_s, allowed_lag_s: how old that is, and how old it may be.
        holder: who computes the site at this moment, in words, None when nobody does.
        last_run: the newest run.
        same_file: whether that was made with the site file as it is now.
        failures: runs that failed since the last one that did not.
        open_alarms: how many.
        behind: sources whose newest reading is before the figures' end, and its time.
        beat: the heartbeat of the daemon that runs on this machine.
        daemon: what the store has of the daemon that ran last.
        undelivered: the newest message to each target, where it could not be handed over.
        failed_messages: messages given up in the last day.
        unhealthy: what is wrong, in sentences.
    """

    newest: int | None = None
    lag_s: int | None = None
    allowed_lag_s: int = 0
    holder: str | None = None
    last_run: Run | None = None
    same_file: bool = True
    failures: int = 0
    open_alarms: int = 0
    behind: Mapping[str, int] = field(default_factory=dict)
    beat: Mapping[str, Any] | None = None
    daemon: DaemonState | None = None
    undelivered: Mapping[str, Entry] = field(default_factory=dict)
    failed_messages: int = 0
    unhealthy: tuple[str, ...] = ()

    @property
    def jobs(self) -> Mapping[str, Mapping[str, Any]]:
        """The daemon's jobs by name, from where they are known best."""
        if self.beat is not None:
            return dict(self.beat["jobs"])
        if self.daemon is None:
            return {}
        return {name: asdict(job) for name, job in self.daemon.jobs.items()}


def standing(at: Opened, allowed: int | None = None) -> Standing:
    """How a site stands by its store, and by the heartbeat beside its site file.

    Args:
        at: the site, open to read.
        allowed: seconds that figures may be old; left out: three intervals.

    Raises:
        StoreError: the store cannot be read.
    """
    now, general = int(time.time()), at.site.file.site
    limit = allowed if allowed is not None else int(3 * general.interval + general.settle)
    edge = at.store.newest()
    newest = None if edge is None else int(edge.timestamp()) + at.store.interval_s
    runs, marks = at.store.runs(_LOOKED_AT), at.store.watermarks()
    over = [run for run in runs if run.status != "running"]
    holder = _holder(at)
    targets = {notify.id for notify in at.site.file.notify}
    box = Outbox(at.store)
    found = Standing(
        newest=newest,
        lag_s=None if newest is None else max(0, now - newest),
        allowed_lag_s=limit,
        holder=holder,
        last_run=runs[0] if runs else None,
        same_file=not runs or runs[0].site_hash == at.site.hash,
        failures=next((n for n, run in enumerate(over) if run.status == "done"), len(over)),
        open_alarms=len(at.store.open_alarms()),
        behind={s: mark for s, mark in marks.items() if newest and mark < newest},
        beat=_own_heartbeat(at.site, holder),
        daemon=at.store.daemon(),
        undelivered={t: e for t, e in box.undelivered().items() if t in targets},
        failed_messages=box.failed_since(now - _DAY),
    )
    unhealthy = [
        *_old_figures(found, at, marks, now),
        *([f"the last run failed ({found.failures} in a row): {over[0].message}"]
          if found.failures else []),
        *_faults(found),
        *_silent_daemon(found, runs, at, now),
        *(f"a message to '{target}' could not be handed over: {entry.error}"
          for target, entry in found.undelivered.items()),
    ]  # fmt: skip
    return Standing(**{**vars(found), "unhealthy": tuple(unhealthy)})


def standing_without_store(site: Site, error: StoreError) -> Standing | None:
    """What the heartbeat tells of a site whose store cannot be read; None without a heartbeat."""
    beat = read_heartbeat(heartbeat_path(site.folder, site.file.daemon.heartbeat))
    if beat is None:
        return None
    newest, now = beat.get("newest"), time.time()
    found = Standing(
        newest=newest,
        lag_s=None if newest is None else max(0, int(now - newest)),
        holder=f"process {beat.get('process')} on {beat.get('host')}, by its heartbeat",
        beat=beat,
    )
    wrong = (str(error), *_faults(found), *_silent(now - beat["time"], _SILENT))
    return Standing(**{**vars(found), "unhealthy": wrong})


def span(seconds: float) -> str:
    """A length of time in words."""
    whole = int(seconds)
    if whole < 120:  # noqa: PLR2004
        return f"{whole} s"
    if whole < 7200:  # noqa: PLR2004
        return f"{whole // 60} min"
    return f"{whole // 3600} h" if whole < 172800 else f"{whole // 86400} days"  # noqa: PLR2004


def _old_figures(found: Standing, at: Opened, marks: Mapping[str, int], now: int) -> Iterator[str]:
    limit = found.allowed_lag_s
    if found.lag_s is None or found.newest is None:
        yield "there are no figures yet"
    elif found.lag_s > limit:
        yield f"the newest figure is {span(found.lag_s)} old, more than {span(limit)}"
    else:
        # Sources whose readings ended long before the figures, which are there but empty since.
        for source, mark in marks.items():
            if mark < found.newest and now - mark > limit:
                zone = at.site.file.site.time_zone
                yield f"source {source} has given no reading since {local(mark, zone)}"


def _faults(found: Standing) -> Iterator[str]:
    """What lasts of the faults that a daemon has told; not of one that is over."""
    if found.beat is None and (found.daemon is None or found.daemon.ended is not None):
        return
    for name, job in found.jobs.items():
        if job["failing_since"]:
            yield f"{name} fails: {job['cause']}"


def _silent_daemon(found: Standing, runs: list[Run], at: Opened, now: int) -> Iterator[str]:
    if found.beat is not None:
        yield from _silent(now - found.beat["time"], _SILENT)
        return
    daemon = found.daemon
    if daemon is None or daemon.ended is not None:
        return
    if found.holder is not None:
        if _is(found.holder, daemon.process, daemon.host):
            yield from _silent(now - daemon.seen, _SILENT_IN_STORE)
        return
    # Who has turned to `lostwork once` misses no daemon.
    if not any(run.job == "once" and run.started > daemon.seen for run in runs):
        yield (
            f"the daemon (process {daemon.process} on {daemon.host}) has died; its last sign of "
            f"life was at {local(int(daemon.seen), at.site.file.site.time_zone)}"
        )


def _silent(seconds: float, most: float) -> Iterator[str]:
    if seconds > most:
        yield f"no sign of life for {span(seconds)}"


def _own_heartbeat(site: Site, holder: str | None) -> dict[str, Any] | None:
    """The heartbeat beside the site file, if it is that of the process which holds the lock."""
    if holder is None:
        return None
    beat = read_heartbeat(heartbeat_path(site.folder, site.file.daemon.heartbeat))
    if beat is None or not _is(holder, beat.get("process"), beat.get("host")):
        return None
    return beat


def _is(holder: str, process: object, host: object) -> bool:
    if holder == _MYSELF:
        return process == os.getpid()
    return f"process {process} on {host}," in f"{holder},"


_MYSELF = "this very process"


def _holder(at: Opened) -> str | None:
    """Who computes the site, None when nobody does: by trying the lock, which cannot be stale."""
    try:
        # Not `instance_lock`: a look must not close other processes' runs.
        with lock_site(at.database.engine, at.store.site_id, at.site.id, "lostwork status"):
            return None
    except InstanceRunning as running:
        text = str(running)
        return text.partition("computed by ")[2].partition(";")[0] or text
