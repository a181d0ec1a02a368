"""How the daemon is doing, for whoever watches it: files that are replaced whole, and systemd.

The heartbeat is a small JSON file that tells of every job and of every fault that lasts. It needs
no store, so that ``lostwork status`` can say that the store is what is missing. The store keeps the
same, for those who look from elsewhere or when the daemon has died (`monitor.store.jobs`). The
metrics are the same in the OpenMetrics text format (version 1.0), for a collector that reads files.
"""

from __future__ import annotations

import json
import os
import socket
import threading
from dataclasses import asdict, dataclass, field, replace
from typing import TYPE_CHECKING, Any

from monitor.log import logger
from monitor.store.jobs import DaemonState, JobHealth
from monitor.version import version

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping
    from pathlib import Path

__all__ = ["Health", "heartbeat_path", "read_heartbeat", "tell_systemd"]

EVERY = 15.0
"""[s] Between two beats when nothing happens."""
_PREFIX = "lostwork"


@dataclass
class Health:
    """What is known of a daemon; its methods may be called from any thread.

    Attributes:
        site: the site's id.
        clock: the wall clock, UTC seconds.
        heartbeat: the heartbeat file, None for none.
        metrics: the metrics file, None for none.
        jobs: by name.
        newest: end of the newest figures, UTC seconds.
        readings, windows: read and stored since the daemon started.
        started: when this daemon began, by its clock.
    """

    site: str
    clock: Callable[[], float]
    heartbeat: Path | None = None
    metrics: Path | None = None
    jobs: dict[str, JobHealth] = field(default_factory=dict)
    newest: int | None = None
    readings: int = 0
    windows: int = 0
    started: float = field(default=0.0, init=False)
    _guard: threading.Lock = field(default_factory=threading.Lock, init=False, repr=False)
    _unwritable: set[str] = field(default_factory=set, init=False, repr=False)

    def __post_init__(self) -> None:
        self.started = self.clock()

    def remember(self, known: DaemonState) -> None:
        """Take over from the daemon before this one when each job last did its work."""
        with self._guard:
            for name, job in known.jobs.items():
                if job.last is not None:
                    self.jobs.setdefault(name, JobHealth(last=job.last))

    def state(self, *, ended: bool = False) -> DaemonState:
        """What the store keeps of it."""
        now = self.clock()
        with self._guard:
            jobs = dict(self.jobs)
        if ended:
            jobs = {name: replace(job, next=None) for name, job in jobs.items()}
        return DaemonState(
            os.getpid(), socket.gethostname(), version(), self.started, now,
            now if ended else None, jobs,
        )  # fmt: skip

    def worked(self, name: str) -> None:
        """Note that a job did its work."""
        with self._guard:
            job = self.jobs.get(name, JobHealth())
            self.jobs[name] = replace(job, last=self.clock(), failing_since=None, cause="")

    def failed(self, name: str, cause: str) -> None:
        """Note that a job has failed, and why."""
        with self._guard:
            job = self.jobs.get(name, JobHealth())
            since = self.clock() if job.failing_since is None else job.failing_since
            self.jobs[name] = replace(
                job, failing_since=since, cause=cause, failures=job.failures + 1
            )

    def due(self, times: Mapping[str, float | None]) -> None:
        """Note when jobs are due next."""
        with self._guard:
            for name, time in times.items():
                self.jobs[name] = replace(self.jobs.get(name, JobHealth()), next=time)

    def stored(self, newest: int, readings: int, windows: int) -> None:
        """Note figures that were stored."""
        with self._guard:
            self.newest = newest
            self.readings += readings
            self.windows += windows

    def beat(self) -> None:
        """Write both files; one that cannot be written is told once, and once when it can be."""
        with self._guard:
            if self.heartbeat is not None:
                self._write(self.heartbeat, json.dumps(self._state(), indent=1) + "\n")
            if self.metrics is not None:
                self._write(self.metrics, self._metrics_text())

    def end(self) -> None:
        """Remove the heartbeat: a daemon that ended in order has none."""
        with self._guard:
            if self.heartbeat is not None:
                try:
                    self.heartbeat.unlink(missing_ok=True)
                except OSError as error:
                    logger().warning("the heartbeat stays", path=str(self.heartbeat),
                                     cause=error.strerror)  # fmt: skip

    def _write(self, path: Path, text: str) -> None:
        from dashboards.files import PageError, write_atomically  # noqa: PLC0415 - plotly: a second

        name = str(path)
        try:
            write_atomically(path, text.encode())
        except PageError as error:
            if name not in self._unwritable:
                self._unwritable.add(name)
                logger().error("health cannot be written", path=name, cause=str(error))
        else:
            if name in self._unwritable:
                self._unwritable.remove(name)
                logger().info("health is written again", path=name)

    def _state(self) -> dict[str, Any]:
        return {
            "site": self.site,
            "process": os.getpid(),
            "host": socket.gethostname(),
            "time": self.clock(),
            "newest": self.newest,
            "jobs": {name: asdict(job) for name, job in sorted(self.jobs.items())},
        }

    def _metrics_text(self) -> str:
        jobs = sorted(self.jobs.items())
        families = [
            _family(
                "heartbeat_timestamp_seconds", "gauge", "When this was written.",
                [("", {}, self.clock())],
            ),
            _family(
                "figures_end_timestamp_seconds", "gauge", "End of the newest figures.",
                [("", {}, self.newest)],
            ),
            _family("readings", "counter", "Readings used.", [("_total", {}, self.readings)]),
            _family("windows", "counter", "Windows stored.", [("_total", {}, self.windows)]),
            _family(
                "job_failing", "gauge", "1 while a job fails.",
                [("", {"job": n}, int(j.failing_since is not None)) for n, j in jobs],
            ),
            _family(
                "job_failures", "counter", "How often a job has failed.",
                [("_total", {"job": n}, j.failures) for n, j in jobs],
            ),
            _family(
                "job_last_success_timestamp_seconds", "gauge", "When a job last did its work.",
                [("", {"job": n}, j.last) for n, j in jobs],
            ),
        ]  # fmt: skip
        site = {"site": self.site}
        lines = [
            line for head, samples in families if samples
            for line in (*head, *(_sample(n, {**site, **labels}, v) for n, labels, v in samples))
        ]  # fmt: skip
        return "\n".join([*lines, "# EOF", ""])


Sample = tuple[str, dict[str, str], float]


def _family(
    name: str, kind: str, about: str, samples: list[tuple[str, dict[str, str], float | None]]
) -> tuple[tuple[str, ...], list[Sample]]:
    """A metric family: its head, and those of its samples that have a value."""
    full = f"{_PREFIX}_{name}"
    unit = (f"# UNIT {full} seconds",) if name.endswith("_seconds") else ()
    head = (f"# TYPE {full} {kind}", *unit, f"# HELP {full} {about}")
    return head, [(full + suffix, labels, v) for suffix, labels, v in samples if v is not None]


def _sample(name: str, labels: Mapping[str, str], value: float) -> str:
    pairs = ",".join(f'{key}="{_escaped(text)}"' for key, text in labels.items())
    return f"{name}{{{pairs}}} {value}"


def _escaped(text: str) -> str:
    return text.replace("\\", r"\\").replace("\n", r"\n").replace('"', r"\"")


def heartbeat_path(folder: Path, name: str) -> Path | None:
    """Where a site's health file is, None when the site file names none."""
    return folder / name if name else None


def read_heartbeat(path: Path | None) -> dict[str, Any] | None:
    """Read a heartbeat; None when there is none, or it is none of ours."""
    try:
        found = None if path is None else json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    return found if isinstance(found, dict) and isinstance(found.get("jobs"), dict) else None


def tell_systemd(message: str) -> bool:
    """Send ``READY=1``, ``WATCHDOG=1`` or ``STOPPING=1`` to the service manager that started this.

    The protocol of sd_notify(3): a datagram to the socket that NOTIFY_SOCKET names; a leading ``@``
    stands for an abstract socket.

    Returns:
        Whether there is such a socket and it took the message.
    """
    address = os.environ.get("NOTIFY_SOCKET", "")
    if not address or not hasattr(socket, "AF_UNIX"):
        return False
    if address.startswith("@"):
        address = "\0" + address[1:]
    try:
        with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as out:
            out.connect(address)
            out.sendall(message.encode())
    except OSError as error:
        logger().debug("the service manager does not listen", cause=str(error))
        return False
    return True
