"""One window of the cycle: read, compute, store."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import pandas as pd

from connectors.base import Problem, ReadResult, Window
from monitor.figures import Computed, compute, lead_in

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence

    from connectors.base import Connector
    from monitor.seen import Seen
    from monitor.site.load import Site
    from monitor.store.site import SiteStore

__all__ = [
    "ComputedWindow",
    "compute_window",
    "read_window",
    "run_news",
    "run_window",
    "store_window",
]


def run_window(
    site: Site,
    store: SiteStore,
    sources: Mapping[str, Connector],
    start: int,
    end: int,
    run_id: int,
) -> ComputedWindow:
    """Read, compute and store one window, and move the watermarks in the same transaction.

    Args:
        site: the site.
        store: its part of the store.
        sources: open connectors by source id.
        start: UTC s, on a full hour.
        end: UTC s, on the grid.
        run_id: the run that the figures belong to.

    Raises:
        ConnectorError: a source cannot be read; nothing is written.
        StoreError: the store cannot be written; nothing is half-written.
    """
    computed = compute_window(site, sources, start, end)
    store_window(site, store, computed, run_id)
    return computed


def run_news(
    site: Site,
    store: SiteStore,
    sources: Mapping[str, Connector],
    start: int,
    end: int,
    run_id: int,
    seen: Seen,
) -> ComputedWindow:
    """As `run_window`, but leave out the hours in front whose readings are those of before.

    Args:
        site: as for `run_window`.
        store: likewise.
        sources: likewise.
        start: likewise; the window that is computed may begin later.
        end: likewise.
        run_id: likewise.
        seen: what the stored figures were made of; brought up to date.

    Raises:
        ConnectorError, StoreError: as `run_window`.
    """
    read = read_window(site, sources, start, end)
    first = start - lead_in(site)
    newest = _newest(site, sources, read.readings, start)
    edge = store.newest()
    stored = 0 if edge is None else int(edge.timestamp()) + store.interval_s
    begin = seen.news_from(site, read.readings, first, start, end, stored)
    wanted = read
    if begin > start:
        since = pd.Timestamp(begin - lead_in(site), unit="s", tz="UTC").as_unit("us")
        wanted = ReadResult(read.readings[read.readings["time"] >= since], read.problems)
    found = ComputedWindow(**vars(compute(site, wanted, begin, end)), newest=newest)
    store_window(site, store, found, run_id)
    seen.remember(site, read.readings, first, start, end)
    return found


@dataclass(frozen=True)
class ComputedWindow(Computed):
    """Figures of one window, and how far each source reached into it.

    Attributes:
        newest: of each source that was read, the newest reading inside the window (UTC s), None
            where it has none there.
    """

    newest: Mapping[str, int | None] = field(default_factory=dict)


def compute_window(
    site: Site, sources: Mapping[str, Connector], start: int, end: int
) -> ComputedWindow:
    """Read and compute one window; nothing is stored.

    Raises:
        ConnectorError: a source cannot be read.
    """
    read = read_window(site, sources, start, end)
    newest = _newest(site, sources, read.readings, start)
    return ComputedWindow(**vars(compute(site, read, start, end)), newest=newest)


def store_window(site: Site, store: SiteStore, computed: ComputedWindow, run_id: int) -> None:
    """Store one computed window; watermarks move forward with it, and never back.

    A source that has readings up to the window's end, less the look-back, is used up to there. One
    that has not (an export that comes once a day) keeps its watermark at its newest reading, so
    that its late readings are known for what they are. A backfill of last month moves none.

    Raises:
        StoreError: the store cannot be written; nothing is half-written.
    """
    batch, known = computed.batch, store.watermarks()
    moved: dict[str, int] = {}
    for source, newest in computed.newest.items():
        if newest is None:
            mark = known.get(source, batch.start)
        elif newest >= batch.end - site.file.site.look_back:
            mark = batch.end
        else:
            mark = newest
        if known.get(source, mark) <= mark:
            moved[source] = mark
    store.write(batch, run_id, watermarks=moved)


def _newest(
    site: Site, sources: Iterable[str], readings: pd.DataFrame, start: int
) -> dict[str, int | None]:
    inside = readings[readings["time"] >= pd.Timestamp(start, unit="s", tz="UTC")]
    last = inside.groupby("tag", observed=True)["time"].max()
    found: dict[str, int | None] = dict.fromkeys(sources)
    for tag, time in last.items():
        source, at = site.tags[str(tag)].source, int(time.timestamp())
        found[source] = max(found[source] or at, at)
    return found


def read_window(site: Site, sources: Mapping[str, Connector], start: int, end: int) -> ReadResult:
    """Read what a window needs from every source, under the site's own tag names.

    Args:
        site: the site.
        sources: open connectors by source id.
        start: of the window, UTC s; the lead-in is added here.
        end: of the window, UTC s; the reading at ``end`` itself is read too, which the content of a
            vessel at the last cell's end needs.

    Raises:
        ConnectorError: a source cannot be read.
    """
    first = pd.Timestamp(start - lead_in(site), unit="s", tz="UTC").as_unit("us")
    last = pd.Timestamp(end, unit="s", tz="UTC").as_unit("us") + pd.Timedelta(1, "us")
    window = Window(first, last)
    parts: list[pd.DataFrame] = []
    problems: list[Problem] = []
    for source_id, connector in sources.items():
        names: dict[str, list[str]] = {}
        for tag in site.used_tags().values():
            if tag.source == source_id:
                names.setdefault(tag.historian_name, []).append(tag.name)
        result = connector.read(list(names), window)
        problems += result.problems
        parts.append(_renamed(result.readings, names))
    return ReadResult(_joined(parts), tuple(problems))


def _renamed(readings: pd.DataFrame, names: Mapping[str, list[str]]) -> pd.DataFrame:
    """Put the site's tag names in place of the historian's."""
    own = {k: v[0] for k, v in names.items()}
    renamed = readings.assign(tag=readings["tag"].cat.rename_categories(own))
    copies = [
        _copied(renamed, own[historian_name], other)
        for historian_name, site_names in names.items()
        for other in site_names[1:]
    ]
    return _joined([renamed, *copies]) if copies else renamed


def _copied(readings: pd.DataFrame, of: str, name: str) -> pd.DataFrame:
    """The readings of one tag again under another name: a historian tag may serve two."""
    rows = readings[readings["tag"] == of]
    return rows.assign(tag=pd.Categorical([name] * len(rows), categories=[name]))


def _joined(parts: Sequence[pd.DataFrame]) -> pd.DataFrame:
    if len(parts) == 1:
        return parts[0]
    tags = pd.api.types.union_categoricals(
        [pd.Categorical(p["tag"]) for p in parts], ignore_order=True
    )
    joined = pd.concat([p.drop(columns="tag") for p in parts], ignore_index=True)
    return joined.assign(tag=tags)
