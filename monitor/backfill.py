"""Many windows, one after the other: what a site missed, or a stretch of its past.

Each window is a transaction of its own, so whatever ends the work, what is done is kept whole.
Other processes, here or on a cluster, may read and compute ahead; this one writes, and the figures
are the same.
"""

from __future__ import annotations

import datetime as dt
import itertools
import math
import time
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import pandas as pd
import structlog

from connectors.base import ConnectorError, Window
from monitor.ahead import on_cluster, on_processes
from monitor.changed import Changed
from monitor.cycle import compute_window, run_news, run_window, store_window
from monitor.errors import WrongUseError
from monitor.log import logger
from monitor.sources import open_sources
from monitor.store.retention import Keep, oldest_writable
from monitor.version import version

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Mapping

    from connectors.base import Connector, Problem
    from monitor.cycle import ComputedWindow
    from monitor.figures import Computed
    from monitor.seen import Seen
    from monitor.site.load import Site
    from monitor.store.site import SiteStore

__all__ = [
    "Tally",
    "backfill",
    "catch_up",
    "kept",
    "last_complete",
    "recorded_run",
    "recorded_sources",
    "window_length",
    "windows",
]

HOUR, DAY = 3600, 86400
_FEW = 3
"""So many windows are done sooner than another process is up."""
_CELLS = 3000
"""Cells of a window that are enough: each call's own cost no longer counts, the lead-in hardly."""
_READINGS = 3_000_000
"""Readings of a window in memory, some hundred bytes each with their figures; a reading a minute
and tag, or a cell where that is shorter, is reckoned with."""
_LONGEST = 7
"""[days] Of a window, so that what is done shows, and little is lost when it ends midway."""
_PARTS = 10
"""Windows at least, where a stretch of many days is shared by processes."""


@dataclass
class Tally:
    """What some windows came to.

    Attributes:
        windows: how many were stored.
        readings, bad, missing: readings; those left out; cells without a value.
        problems: what the sources passed over, by source and kind, counted over all windows, with
            the first few of each.
        why: what made stored figures be computed again, empty for nothing.
    """

    windows: int = 0
    readings: int = 0
    bad: int = 0
    missing: int = 0
    problems: dict[tuple[str, str], Problem] = field(default_factory=dict)
    why: str = ""

    def add(self, computed: Computed) -> None:
        """Count a window in."""
        self.windows += 1
        self.readings += computed.readings
        self.bad += computed.bad
        self.missing += computed.missing
        for problem in computed.problems:
            self._note(problem)

    def _note(self, problem: Problem) -> None:
        known = self.problems.get((problem.source, problem.what))
        self.problems[problem.source, problem.what] = (
            problem if known is None else known.with_more(problem)
        )


def windows(start: int, end: int, length: int = DAY) -> list[tuple[int, int]]:
    """Cut [start, end), integer UTC seconds, half open.

    Args:
        start: on a full hour.
        end: on the grid.
        length: [s] of a window: hours that divide a day, or whole days, from midnight UTC on.
    """
    step = min(length, DAY)
    cuts = [start, *range(start // step * step + length, end, length), end]
    return [(a, b) for a, b in itertools.pairwise(cuts) if a < b]


def window_length(site: Site, stretch: int, parts: int = 1) -> int:
    """How long the windows of a stretch are best [s], see `windows`.

    As long as the overhead of each wants it, as short as memory and progress want it: a week of
    5-minute figures, two days of 1-minute figures, and hours where a site has thousands of tags.

    Args:
        site: the site.
        stretch: [s]
        parts: windows of whole days at least, where the stretch has so many days.
    """
    interval = int(site.file.site.interval)
    readings = len(site.used_tags()) * DAY / min(interval, 60)
    most = _READINGS / readings
    if most < 1:
        return next((h for h in (12, 8, 6) if h <= most * 24), 4) * HOUR
    enough = _CELLS * interval // DAY
    share = math.ceil(stretch / DAY / parts)
    return max(min(int(most), enough, share, _LONGEST), 1) * DAY


def last_complete(site: Site, now: float) -> int:
    """End of the newest cell that is over and has settled, integer UTC seconds."""
    general = site.file.site
    return int((now - general.settle) // general.interval * general.interval)


def kept(site: Site) -> Keep:
    """How long the site file says that figures are kept."""
    store = site.file.store
    return Keep(store.keep_cells, store.keep_hours, store.keep_drift)


def backfill(
    site: Site,
    store: SiteStore,
    start: int,
    end: int,
    *,
    progress: Callable[[int, int, Computed], None] | None = None,
    run_kind: str = "backfill",
    workers: int = 1,
    cluster: str = "",
) -> Tally:
    """Compute a stretch of time, window by window (`window_length`).

    Args:
        site: the site.
        store: its part of the store.
        start: integer UTC seconds; the first window starts at the full hour at or before it.
        end: integer UTC seconds; the last window ends on the grid at or before it.
        progress: told after each window: windows done, windows in all, the window.
        run_kind: the run's name in the store.
        workers: processes on this machine. 1 computes and writes in turn; with more, one writes and
            the others compute ahead, when there are enough windows to be worth their start.
        cluster: address of a Dask scheduler whose workers compute instead.

    Raises:
        WrongUseError: the stretch holds no whole cell, or begins where figures have expired.
        ConnectorError: a source cannot be read; windows before that are kept.
        StoreError: the store cannot be written; windows before that are kept.
        WorkersError: the other processes cannot be used; windows before that are kept.
    """
    interval = int(site.file.site.interval)
    first, last = start // HOUR * HOUR, end // interval * interval
    if first >= last:
        raise WrongUseError("the stretch to compute is empty: it must end after it starts")
    oldest = oldest_writable(kept(site), time.time())
    if oldest is not None and first < oldest:
        since = dt.datetime.fromtimestamp(oldest, dt.UTC)
        raise WrongUseError(
            f"figures from before {since:%Y-%m-%d} have expired; begin there or later, or set "
            "[store] keep_cells to a longer time"
        )
    parts = _PARTS if cluster or workers > 1 else 1
    cut = windows(first, last, window_length(site, last - first, parts))
    with recorded_run(site, store, run_kind, first, last) as (run_id, tally):
        with _computed(site, cut, workers, cluster) as stream:
            for computed in stream:
                store_window(site, store, computed, run_id)
                tally.add(computed)
                if progress is not None:
                    progress(tally.windows, len(cut), computed)
        return tally


def catch_up(
    site: Site,
    store: SiteStore,
    sources: Mapping[str, Connector],
    now: float,
    *,
    stop: Callable[[], bool] = lambda: False,
    run_kind: str = "cycle",
    seen: Seen | None = None,
) -> list[Computed]:
    """Compute what came since the last time, and the look-back before it again.

    From where the figures end, less ``look_back``, to the newest cell that has settled, a UTC day a
    window at most. A source that was behind and has delivered since is taken up from where it was.
    An empty store gets its last 24 hours; older ones are for `backfill`. Of a long gap without any
    reading the first and the last window are stored, so that it shows, and not months of nothing.

    Args:
        site: the site.
        store: its part of the store.
        sources: open connectors by source id.
        now: the wall clock, UTC seconds.
        stop: asked between windows; what is left is for the next time.
        run_kind: the run's name in the store.
        seen: what the newest figures were made of, kept from one call to the next, so that hours
            of the look-back with no new reading are not computed again.

    Returns:
        The windows in order; empty when there is nothing new.

    Raises:
        ConnectorError, StoreError: as `backfill`.
    """
    end = last_complete(site, now)
    newest = store.newest()
    if newest is None:
        logger().info("the store is empty: taking the last 24 hours; use backfill for older ones")
        reached = start = (end - DAY) // HOUR * HOUR
    else:
        reached = int(newest.timestamp()) + store.interval_s
        late = _late(site, store, sources, min(reached, end))
        if reached >= end and late is None:
            return []
        behind = min(reached, end) if late is None else late
        start = int(behind - site.file.site.look_back) // HOUR * HOUR
        # What came so late that its time has expired stays out, as with `backfill`.
        start = max(start, oldest_writable(kept(site), now) or start)
    done: list[Computed] = []
    changed = Changed.since(store, start, min(reached, end))
    with recorded_run(site, store, run_kind, start, end) as (run_id, tally):
        length = min(window_length(site, end - start), DAY)
        live = seen is not None and end - start <= length
        cut, skipped = [(start, end)] if live else windows(start, end, length), 0
        for first, last in cut:
            if stop():
                break
            if live and seen is not None:
                computed = run_news(site, store, sources, first, last, run_id, seen)
            elif done and not done[-1].readings and (first, last) != cut[-1]:
                computed = compute_window(site, sources, first, last)
                if not computed.readings:
                    skipped += 1
                    continue
                store_window(site, store, computed, run_id)
            else:
                computed = run_window(site, store, sources, first, last, run_id)
            done.append(computed)
            tally.add(computed)
            changed.note(computed.batch)
        tally.why = changed.told(site)
    if skipped:
        logger().info("days without any reading were not stored", days=skipped)
    return done


def _late(
    site: Site, store: SiteStore, sources: Mapping[str, Connector], reached: int
) -> int | None:
    """Where a source was, that has delivered readings since from before the figures' end."""
    marks, found = store.watermarks(), []
    for source_id, connector in sources.items():
        mark = marks.get(source_id, reached)
        if mark >= reached:
            continue
        names = {t.historian_name for t in site.used_tags().values() if t.source == source_id}
        span = Window(
            *(pd.Timestamp(t, unit="s", tz="UTC").as_unit("us") for t in (mark + 1, reached))
        )
        if mark + 1 < reached and len(connector.read(sorted(names), span).readings):
            logger().info("late readings", source=source_id, since=str(span.start))
            found.append(mark)
    return min(found, default=None)


@contextmanager
def recorded_run(
    site: Site, store: SiteStore, job: str, start: int | None, end: int | None
) -> Iterator[tuple[int, Tally]]:
    """Record a run, and how it ends: ``done``, or ``failed`` with the cause."""
    run_id = store.begin_run(job, version(), site.hash, start, end)
    tally = Tally()
    try:
        with structlog.contextvars.bound_contextvars(run=run_id):
            yield run_id, tally
    except BaseException as error:
        cause = str(error) or type(error).__name__
        if isinstance(error, KeyboardInterrupt):
            cause = "interrupted"
        try:
            _finish(store, run_id, "failed", tally, cause)
        except Exception as second:  # noqa: BLE001 - the first cause is the one to tell
            logger().warning("the failed run could not be recorded", run=run_id, cause=str(second))
        raise
    _finish(store, run_id, "done", tally, _message(tally))


@contextmanager
def recorded_sources(site: Site, store: SiteStore, job: str) -> Iterator[Mapping[str, Connector]]:
    """Open a site's sources; when one cannot be opened, that is a failed run.

    Raises:
        ConnectorError: a source cannot be opened.
    """
    with ExitStack() as stack:
        try:
            sources = stack.enter_context(open_sources(site))
        except ConnectorError:
            with recorded_run(site, store, job, None, None):
                raise
        yield sources


def _message(tally: Tally) -> str:
    """What a run came to, for a person: windows, why some again, what most was passed over."""
    parts = ["1 window" if tally.windows == 1 else f"{tally.windows} windows", tally.why]
    if tally.problems:
        worst = max(tally.problems.values(), key=lambda problem: problem.count)
        total = sum(problem.count for problem in tally.problems.values())
        parts.append(f"passed over {total}, most: {worst} ({worst.source})")
    return "; ".join(filter(None, parts))


def _finish(store: SiteStore, run_id: int, status: str, tally: Tally, message: str) -> None:
    store.finish_run(
        run_id,
        "done" if status == "done" else "failed",
        readings=tally.readings,
        bad=tally.bad,
        missing=tally.missing,
        message=message,
    )


@contextmanager
def _computed(
    site: Site, cut: list[tuple[int, int]], workers: int, cluster: str
) -> Iterator[Iterator[ComputedWindow]]:
    """Give computed windows in order, from this process or from others that work ahead."""
    if cluster:
        with on_cluster(site, cut, cluster) as stream:
            yield stream
    elif workers > 1 and len(cut) > _FEW:
        with on_processes(site, cut, workers - 1) as stream:
            yield stream
    else:
        with open_sources(site) as sources:
            yield (compute_window(site, sources, first, last) for first, last in cut)
