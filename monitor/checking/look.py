"""Look at a site before anything runs: store, sources, tags, streams, balances of the newest day.

Nothing is written. The figures are those of the daemon: the same readings, states and balances. The
day ends where the sources all have readings: one that lags is told for itself, and does not spoil
every balance that it has a part in.
"""

from __future__ import annotations

from contextlib import ExitStack
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
import sqlalchemy as sa

import connectors
from connectors.base import ConnectorError, ReadResult
from monitor.checking.causes import Found, causes, explained
from monitor.checking.clocks import offsets
from monitor.checking.datums import odd_datums
from monitor.checking.equipment_lines import equipment_lines
from monitor.checking.exports import doubts
from monitor.checking.frozen import frozen_for
from monitor.checking.lines import Checked, Line
from monitor.checking.source_lines import STOPPED, SourceDay, source_line
from monitor.checking.stream_lines import stream_lines
from monitor.checking.suspects import suspects
from monitor.checking.tag_lines import TagDay, out_of_range, tag_line
from monitor.checking.twins import twins
from monitor.checking.typical import typical
from monitor.cycle import read_window
from monitor.figures import compute, lead_in
from monitor.store.engine import is_sqlite, make_engine, place, reading, sqlite_path
from monitor.store.errors import StoreError

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from connectors.base import Connector, Probe
    from monitor.site.load import Site

__all__ = ["check"]

HOUR, DAY = 3600, 86400
_DAYS_OF_CLOCKS = 3
"""Days that are read: their movements tell whether two sources keep the same time."""


def check(site: Site) -> Checked:
    """Look at everything that a site file names.

    Args:
        site: a site file that loads.

    Returns:
        Lines in the order store, sources, tags, streams, equipment, and the causes that explain
        them. A source that cannot be read is a line of its own; what hangs on it is then told as
        far as it goes.
    """
    lines = [_store(site)]
    probes: dict[str, Probe] = {}
    with ExitStack() as stack:
        opened: dict[str, Connector] = {}
        for source in site.file.source:
            try:
                options = dict(source.model_extra or {})
                connector = connectors.open_source(source.kind, options, site.folder)
                stack.callback(connector.close)
                probes[source.id] = connector.probe()
                opened[source.id] = connector
            except ConnectorError as error:
                reason = "; ".join([str(error), *doubts(source, site.folder)])
                lines.append(Line("source", source.id, "wrong", "cannot be read", reason))
        day = _newest_day(site, probes)
        if day is None:
            empty = [
                source_line(site, i, SourceDay(probe, 0), probes, {}) for i, probe in probes.items()
            ]
            lines += empty
            return Checked(causes(site, lines), tuple(lines))
        return _look(site, opened, probes, day, lines)


def _store(site: Site) -> Line:
    """Reach the store, without making one: the first run does that."""
    try:
        engine = make_engine(site.file.store.url, site.folder)
        if is_sqlite(engine) and not sqlite_path(engine).exists():
            return Line("store", site.id, "ok", f"{place(engine)}; the first run makes it")
        try:
            with reading(engine, "check it") as connection:
                connection.execute(sa.select(1))
        finally:
            engine.dispose()
    except StoreError as error:
        return Line("store", site.id, "wrong", "cannot be used", str(error))
    return Line("store", site.id, "ok", place(engine))


@dataclass(frozen=True)
class _Day:
    start: int
    end: int


def _newest_day(site: Site, probes: Mapping[str, Probe]) -> _Day | None:
    """The newest day that every source has, but for those that stopped long before the others."""
    ends = [probe.last for probe in probes.values() if probe.last is not None]
    if not ends:
        return None
    alive = [end for end in ends if (max(ends) - end).total_seconds() <= STOPPED]
    interval = int(site.file.site.interval)
    end = (int(min(alive).timestamp()) // interval + 1) * interval
    return _Day((end - DAY) // HOUR * HOUR, end)


def _look(
    site: Site,
    opened: Mapping[str, Connector],
    probes: Mapping[str, Probe],
    day: _Day,
    lines: list[Line],
) -> Checked:
    before = (_DAYS_OF_CLOCKS - 1) * DAY
    read = read_window(site, opened, day.start - before, day.end)
    times = read.readings["time"]
    now = read.readings[(times >= _utc(day.start)) & (times < _utc(day.end))]
    parts: dict[str, pd.DataFrame] = {
        str(name): part for name, part in now.groupby("tag", observed=True)
    }
    shifts = {}
    if len(opened) > 1:
        shifts = offsets(site, read.readings, day.start - before, day.end)
    earlier = set(read.readings["tag"][times < _utc(day.start)].unique())
    needed = ReadResult(
        read.readings[times >= _utc(day.start - lead_in(site))].reset_index(drop=True),
        read.problems,
    )
    window = compute(site, needed, day.start, day.end, with_budgets=True)
    batch = window.batch
    for source_id, probe in probes.items():
        own = [n for n, tag in site.used_tags().items() if tag.source == source_id]
        rows = sum(len(parts[n]) for n in own if n in parts)
        seen_source = SourceDay(
            probe, rows, not earlier & set(own), frozen_for(site, parts, source_id)
        )
        lines.append(source_line(site, source_id, seen_source, probes, shifts))
    counted = batch.tag_quality.groupby("tag", observed=True)[["cells", "cells_stuck"]].sum()
    cells, stuck_cells = (counted[c].to_numpy(dtype=np.float64) for c in ("cells", "cells_stuck"))
    shares = stuck_cells / np.maximum(cells, 1.0)
    stuck = {str(name): float(share) for name, share in zip(counted.index, shares, strict=True)}
    for name, tag in site.used_tags().items():
        if tag.source in probes:
            seen = TagDay(
                parts.get(name), probes[tag.source], day.start, day.end, stuck.get(name, 0.0)
            )
            lines.append(tag_line(site, tag, seen))
    normal = typical(site, parts, day.start, day.end)
    believed = {n: v for n, v in normal.raw.items() if n not in _unusable(lines)}
    pairs = twins(site, parts)
    doubted = {name for pair in pairs for name in (pair.copy, pair.of)}
    found, contradicted = suspects(site, replace(normal, raw=believed), sorted(doubted))
    lines += stream_lines(site, batch)
    lines += equipment_lines(site, window, contradicted)
    told = causes(site, lines, Found(shifts, pairs, found, odd_datums(site, normal)))
    return Checked(told, tuple(explained(lines, told)))


def _unusable(lines: Sequence[Line]) -> set[str]:
    """Tags that are wrong by what they deliver: no other is suspected for what they show."""
    return {
        line.subject
        for line in lines
        if line.kind == "tag" and line.verdict == "wrong" and not out_of_range(line)
    }


def _utc(seconds: int) -> pd.Timestamp:
    return pd.Timestamp(seconds, unit="s", tz="UTC")
