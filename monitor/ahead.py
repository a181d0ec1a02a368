"""Compute windows elsewhere, ahead of the one that writes: local processes, or a Dask cluster.

Both are reached through one interface, that of `concurrent.futures`. Windows are read and computed
there and come back in order of time; whoever asks for them writes them, alone. A worker that dies
has its windows computed again, and since a cell's figures do not depend on who computed them, the
store is the same to the last bit.
"""

from __future__ import annotations

import hashlib
import importlib.metadata
import multiprocessing
import os
import pickle
import platform
import shutil
import signal
import threading
from collections import deque
from concurrent.futures import BrokenExecutor, CancelledError, ProcessPoolExecutor, wait
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import TYPE_CHECKING, Any, Protocol, cast

from monitor.cycle import compute_window
from monitor.errors import LostworkError
from monitor.log import logger
from monitor.sources import open_sources
from monitor.version import version

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping
    from concurrent.futures import Future

    from connectors.base import Connector
    from monitor.cycle import ComputedWindow
    from monitor.site.load import Site

__all__ = ["Job", "WorkersError", "compute_job", "made_with", "on_cluster", "on_processes"]

_AHEAD = 2
"""Windows computed ahead of those in hand: more only takes memory."""
_MOST_IN_FLIGHT = 32
"""Results wait in the writer's memory, however large the cluster is."""
_DEATHS = 3
"""Deaths in a row, with no window computed between them, that are no accident any more."""
_PATIENCE_S = 5.0
_CONNECT_S = 15.0
_ALONE_S = 60.0
"""How long a cluster may be without any worker."""
Client = Any
"""Dask's client: an extra that may not be installed, and that has few annotations."""
_LIBRARIES = ("numpy", "pandas", "pyarrow", "scipy", "CoolProp")


class WorkersError(LostworkError):
    """The processes that compute cannot be reached, differ from this one, or keep dying."""


@dataclass(frozen=True)
class Job:
    """What a worker needs to know of a site; shows nothing of it, since it may hold passwords.

    Attributes:
        site: the site, pickled.
        key: tells one site from another.
        made_with: `made_with` of the process that asks.
    """

    site: bytes = field(repr=False)
    key: str
    made_with: tuple[str, ...]

    @classmethod
    def of(cls, site: Site) -> Job:
        """Pack a site; relative paths in it go on meaning the site file's folder."""
        packed = pickle.dumps(replace(site, path=site.path.resolve()))
        return cls(packed, hashlib.sha256(packed).hexdigest(), made_with())


def made_with() -> tuple[str, ...]:
    """What figures are made with: program, libraries and processor, for equal last bits."""
    libraries = (f"{name} {importlib.metadata.version(name)}" for name in _LIBRARIES)
    return (f"lostwork {version()}", *libraries, platform.machine())


class _Pool(Protocol):
    """Where windows are computed.

    Attributes:
        in_flight: windows asked for and not taken yet, at most.
    """

    in_flight: int

    def submit(self, window: tuple[int, int]) -> Future[Any]:
        """Have a window computed."""

    def result(self, future: Future[Any]) -> ComputedWindow:
        """Wait for it; `BrokenExecutor` when it must be asked for again."""

    def restart(self) -> None:
        """Make the pool usable again after `BrokenExecutor`."""


@contextmanager
def on_processes(
    site: Site, cut: list[tuple[int, int]], count: int
) -> Iterator[Iterator[ComputedWindow]]:
    """Compute windows on processes of this machine.

    Args:
        site: the site.
        cut: windows, integer UTC seconds, in the order in which they are wanted.
        count: processes.

    Raises:
        ConnectorError: a source cannot be read.
        WorkersError: a process died again and again.
    """
    with TemporaryDirectory(prefix="lostwork-", ignore_cleanup_errors=True) as folder:
        pool = _Processes(count, Job.of(site), Path(folder))
        try:
            yield _in_order(pool, cut)
        finally:
            pool.close()


@contextmanager
def on_cluster(
    site: Site, cut: list[tuple[int, int]], address: str
) -> Iterator[Iterator[ComputedWindow]]:
    """Compute windows on a Dask cluster.

    Its scheduler and workers run in environments like this one (`made_with`), and each worker
    reaches the sources under the paths and addresses of the site file.

    Args:
        site: the site.
        cut: windows, integer UTC seconds, in the order in which they are wanted.
        address: of the scheduler, ``tcp://host:port`` or ``tls://host:port``.

    Raises:
        ConnectorError: a source cannot be read.
        WorkersError: the cluster cannot be reached, differs, or lost a window again and again.
    """
    with _connected(address) as client:
        pool = _Cluster(client, address, Job.of(site))
        try:
            yield _in_order(pool, cut)
        finally:
            pool.close()


def _in_order(pool: _Pool, cut: list[tuple[int, int]]) -> Iterator[ComputedWindow]:
    left = deque(cut)
    waiting: deque[tuple[tuple[int, int], Future[Any]]] = deque()
    deaths = 0
    try:
        while left or waiting:
            try:
                while left and len(waiting) < pool.in_flight:
                    waiting.append((left[0], pool.submit(left[0])))
                    left.popleft()
                computed = pool.result(waiting[0][1])
            except BrokenExecutor as error:
                deaths += 1
                if deaths >= _DEATHS:
                    raise WorkersError(
                        f"a computing process died {deaths} times in a row, perhaps for want of "
                        "memory; try --workers 1"
                    ) from error
                logger().warning("a computing process died; its windows are computed again")
                left.extendleft(window for window, _ in reversed(waiting))
                waiting.clear()
                pool.restart()
                continue
            deaths = 0
            waiting.popleft()
            yield computed
    finally:
        for _, future in waiting:
            future.cancel()


class _Processes:
    """A pool of local processes; it breaks as a whole when one of them dies.

    Windows come back in files. A process that is killed while it writes megabytes into the pool's
    one pipe would leave half a message there, and the pool would wait for the other half for ever.
    """

    def __init__(self, count: int, job: Job, folder: Path) -> None:
        self.in_flight = count + _AHEAD
        self._count, self._job, self._folder = count, job, folder
        self._pool = self._made()

    def _made(self) -> ProcessPoolExecutor:
        # Spawned, not forked: threads and open databases of this process do not survive a fork.
        context = multiprocessing.get_context("spawn")
        start = (self._job, self._folder)
        return ProcessPoolExecutor(
            self._count, mp_context=context, initializer=_start, initargs=start
        )

    def submit(self, window: tuple[int, int]) -> Future[Path]:
        return self._pool.submit(_compute_to_file, window)

    def result(self, future: Future[Path]) -> ComputedWindow:
        file = future.result()
        computed: ComputedWindow = pickle.loads(file.read_bytes())  # noqa: S301 - our own process's
        file.unlink()
        return computed

    def restart(self) -> None:
        self.close()
        self._pool = self._made()

    def close(self) -> None:
        self._pool.shutdown(wait=True, cancel_futures=True)


class _Cluster:
    """A Dask cluster; its scheduler itself gives a dead worker's windows to others."""

    def __init__(self, client: Client, address: str, job: Job) -> None:
        self._client, self._address, self._job = client, address, job
        # Not pure: a window asked for again is read again, the exports may have changed.
        self._pool = client.get_executor(pure=False)
        threads = sum(client.nthreads().values())
        self.in_flight = min(threads + _AHEAD, _MOST_IN_FLIGHT)

    def submit(self, window: tuple[int, int]) -> Future[ComputedWindow]:
        found: Future[ComputedWindow] = self._pool.submit(compute_job, self._job, window)
        return found

    def result(self, future: Future[ComputedWindow]) -> ComputedWindow:
        from distributed import KilledWorker  # noqa: PLC0415

        self._wait(future)
        try:
            return future.result()
        except KilledWorker as error:
            raise WorkersError(
                f"cluster {self._address}: workers died again and again over one window, perhaps "
                "for want of memory; see their logs"
            ) from error
        except CancelledError as error:
            raise WorkersError(
                f"cluster {self._address}: its scheduler is gone; windows before that are stored"
            ) from error

    def _wait(self, future: Future[ComputedWindow]) -> None:
        alone = 0.0
        while not wait([future], _PATIENCE_S).done:
            try:
                alone = 0.0 if self._client.nthreads() else alone + _PATIENCE_S
            except (OSError, AttributeError):
                # The connection is gone: Dask cancels the window when it gives up. A client that
                # has given up has no scheduler (None) to ask, whenever between two lines that is.
                alone += _PATIENCE_S
            if alone >= _ALONE_S:
                raise WorkersError(
                    f"cluster {self._address}: has had no worker for {_ALONE_S:.0f} s; windows "
                    "before that are stored"
                )

    def restart(self) -> None:
        """Nothing to do: Dask restarts its own workers."""

    def close(self) -> None:
        self._pool.shutdown(wait=False)
        if self._client.status == "running":
            # A worker outlives this backfill, and should not keep the exports open.
            self._client.run(close_sources, on_error="ignore")


@contextmanager
def _connected(address: str) -> Iterator[Client]:
    try:
        import distributed  # noqa: PLC0415 - an extra, and slow to import
    except ModuleNotFoundError as error:
        raise WorkersError(
            "--cluster needs Dask, which is not installed; "
            "install it with: pip install 'lostwork[cluster]'"
        ) from error
    try:
        client: Client = cast("Any", distributed).Client(
            address, timeout=_CONNECT_S, set_as_default=False, name="lostwork"
        )
    except (OSError, ValueError) as error:
        raise WorkersError(
            f"cluster {address}: cannot be reached ({str(error).splitlines()[0]}); give the "
            "scheduler's address, for example tcp://10.0.0.5:8786"
        ) from error
    with client:
        yield client


class _Kept:
    """What a worker keeps between windows: one site, and its open sources."""

    key = ""
    site: Site
    stack = ExitStack()
    sources: Mapping[str, Connector]
    # A Dask worker may have several threads, and a source is read by one at a time.
    lock = threading.Lock()


def compute_job(job: Job, window: tuple[int, int]) -> ComputedWindow:
    """Read and compute a window, in whichever process this runs.

    Raises:
        ConnectorError: a source cannot be read.
        WorkersError: this process has other versions than the one that asks.
    """
    here = made_with()
    if here != job.made_with:
        differs = "; ".join(
            f"{own}, not {asked}"
            for own, asked in zip(here, job.made_with, strict=True)
            if own != asked
        )
        raise WorkersError(
            f"the worker on {platform.node()} would give other last digits: it has {differs}; "
            "install the same versions"
        )
    with _Kept.lock:
        if _Kept.key != job.key:
            _close()
            site: Site = pickle.loads(job.site)  # noqa: S301 - from the process that started this
            _Kept.sources = _Kept.stack.enter_context(open_sources(site))
            _Kept.site, _Kept.key = site, job.key
        return compute_window(_Kept.site, _Kept.sources, *window)


def close_sources() -> None:
    """Close what a worker keeps open."""
    with _Kept.lock:
        _close()


def _close() -> None:
    _Kept.key = ""
    _Kept.stack.close()


class _Local:
    """What a process of this machine is told when it starts."""

    job: Job
    folder: Path


def _start(job: Job, folder: Path) -> None:
    # Ctrl-C reaches every process of a terminal; the writing one decides what happens.
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    # A writer that was killed tells nobody; without this the process would wait for it for ever.
    threading.Thread(target=_leave_with_parent, daemon=True).start()
    _Local.job, _Local.folder = job, folder


def _leave_with_parent() -> None:
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        shutil.rmtree(_Local.folder, ignore_errors=True)
        os._exit(1)


def _compute_to_file(window: tuple[int, int]) -> Path:
    file = _Local.folder / f"{window[0]}.{os.getpid()}"
    file.write_bytes(pickle.dumps(compute_job(_Local.job, window), pickle.HIGHEST_PROTOCOL))
    return file
