"""One window of the cycle: read, compute, store."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pandas as pd

from connectors.base import Problem, ReadResult, Window
from monitor.figures import Computed, compute, lead_in

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence

    from connectors.base import Connector
    from monitor.site.load import Site
    from monitor.store.site import SiteStore

__all__ = ["compute_window", "read_window", "run_window", "store_window"]


def run_window(
    site: Site,
    store: SiteStore,
    sources: Mapping[str, Connector],
    start: int,
    end: int,
    run_id: int,
) -> Computed:
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
    store_window(store, sources, computed, run_id)
    return computed


def compute_window(site: Site, sources: Mapping[str, Connector], start: int, end: int) -> Computed:
    """Read and compute one window; nothing is stored.

    Raises:
        ConnectorError: a source cannot be read.
    """
    return compute(site, read_window(site, sources, start, end), start, end)


def store_window(store: SiteStore, sources: Iterable[str], computed: Computed, run_id: int) -> None:
    """Store one computed window; watermarks move forward with it, and never back.

    A backfill of last month must not send the daemon back to last month.

    Raises:
        StoreError: the store cannot be written; nothing is half-written.
    """
    end, known = computed.batch.end, store.watermarks()
    moved = {source: end for source in sources if known.get(source, end) <= end}
    store.write(computed.batch, run_id, watermarks=moved)


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
