"""Parquet files as a source: readings of a window out of one file or many."""

from __future__ import annotations

import os
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, TypeVar

import numpy as np
import pyarrow as pa

from connectors.base import ConnectorError, Probe, ReadResult
from connectors.csv_index import Extent
from connectors.parquet_columns import ColumnReader
from connectors.parquet_file import Group, ParquetFile, Wanted
from connectors.parquet_options import ParquetOptions
from connectors.parquet_order import GroupOrder
from connectors.parquet_pieces import PieceCache
from connectors.paths import matching_files, unreadable
from connectors.tidy import ProblemCount, Rows, join_rows, settle_doubled_hour, tidy
from connectors.times import DOUBLED_HOUR_REACH, from_microseconds, microseconds

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from pathlib import Path

    import pandas as pd
    from pydantic import BaseModel

    from connectors.base import Connector, Window

__all__ = ["ParquetKind", "ParquetSource"]

T = TypeVar("T")

_CACHE = 96 << 20
"""[bytes] Decoded rows kept in memory: some 3 million readings."""

_TAGS_OF = 4_000_000
"""Rows whose tags a probe reads; older row groups are left out beyond these."""

_REPLACED = "reading given again for the same tag and time: the last one counts"
_UNSETTLED = "reading in the hour that comes twice, pass not known: taken as the first, uncertain"


@dataclass
class _Known:
    """What is known of one state of a file."""

    extent: Extent
    groups: list[Group] | None = None
    order: GroupOrder = field(default_factory=GroupOrder)
    error: ConnectorError | None = None


class ParquetSource:
    """Reads Parquet files.

    Args:
        options: what the site file says.
        folder: where relative paths start.
        cache_limit: bound of the memory for decoded rows [bytes].
    """

    def __init__(self, options: ParquetOptions, folder: Path, *, cache_limit: int = _CACHE) -> None:
        self._options, self._folder = options, folder
        self._cache = PieceCache(cache_limit)
        self._reader = ColumnReader(options)
        self._known: dict[Path, _Known] = {}

    def read(self, tags: Sequence[str], window: Window) -> ReadResult:
        """Return the readings of these tags inside the window.

        What is wrong with a row's time is reported once, what is wrong with its value by each read.

        Raises:
            ConnectorError: there is no file, or none that can be understood.
        """
        names = sorted(set(tags))
        problems = ProblemCount()
        start, end = microseconds(window.start), microseconds(window.end)
        book = {name: at for at, name in enumerate(names)}

        def rows_of(file: ParquetFile, groups: Sequence[Group]) -> list[Rows]:
            # To tell the passes of a doubled hour apart, all of that hour's rows are needed.
            reach = DOUBLED_HOUR_REACH if file.is_local else 0
            wanted = Wanted(names, start - reach, end + reach, book)
            return list(file.read(groups, wanted, problems))

        parts = self._each(rows_of, problems)
        rows = self._settled(parts, start, end, problems)
        keep = (rows.tag < len(names)) & (rows.time >= start) & (rows.time < end)
        table, replaced = tidy(rows if keep.all() else rows.keep(keep), names)
        problems.add(self._options.path, _REPLACED, replaced)
        return ReadResult(table, problems.problems())

    def probe(self) -> Probe:
        """Look at the tags of the newest rows and at the span of time of all.

        Raises:
            ConnectorError: there is no file, or none that can be understood.
        """
        problems = ProblemCount()
        left = _TAGS_OF
        spans: list[Group] = []
        tags: set[str] = set()

        def look(file: ParquetFile, groups: Sequence[Group]) -> int:
            nonlocal left
            spans.extend(group for group in groups if group.first <= group.last)
            for group in reversed(groups):
                if left > 0:
                    tags.update(file.tags([group]))
                left -= file.rows_of(group)
            return file.rows

        rows = sum(self._each(look, problems, newest_first=True))
        ends: list[pd.Timestamp | None] = [None, None]
        if spans:
            first, last = min(g.first for g in spans), max(g.last for g in spans)
            ends = list(from_microseconds(np.array([first, last], dtype=np.int64)))
        count = len(self._known)
        part = "" if left >= 0 else "; tags are those of the newest rows"
        detail = (
            f"{count} file{'s' if count != 1 else ''}, {rows:,} rows, "
            f"{self._options.layout} layout{part}"
        )
        return Probe(tuple(sorted(tags)), ends[0], ends[1], detail, problems.problems())

    def close(self) -> None:
        """Forget what is known of the files; none is kept open."""
        self._known.clear()
        self._cache.clear()

    def _each(
        self,
        work: Callable[[ParquetFile, Sequence[Group]], T],
        problems: ProblemCount,
        *,
        newest_first: bool = False,
    ) -> list[T]:
        """Do work on each file, in the order of names; pass over those that cannot be read."""
        paths = matching_files(self._options.path, self._folder)
        self._known = {path: known for path, known in self._known.items() if path in paths}
        done: list[T] = []
        errors: list[ConnectorError] = []
        for path in reversed(paths) if newest_first else paths:
            try:
                done.append(self._on_file(path, work, problems))
            except FileNotFoundError:
                continue  # taken away between listing and opening: as if it had not been listed
            except ConnectorError as error:
                errors.append(error)
        if errors and not done:
            raise errors[-1]
        return done

    def _on_file(
        self,
        path: Path,
        work: Callable[[ParquetFile, Sequence[Group]], T],
        problems: ProblemCount,
    ) -> T:
        try:
            with path.open("rb") as handle:
                extent = Extent.of(os.fstat(handle.fileno()))
                known = self._known.get(path)
                if known is None or known.extent != extent:
                    known = self._known[path] = _Known(extent)
                elif known.error is not None:
                    raise known.error
                file = ParquetFile(
                    path, handle, self._options, self._reader, self._cache, extent, known.order
                )
                if known.groups is None:
                    known.groups = file.groups(problems)
                return work(file, known.groups)
        except FileNotFoundError:
            raise
        except (pa.ArrowException, OSError, ConnectorError) as failed:
            error = _told(path, failed)
            known = self._known.get(path)
            if known is not None and known.error is None:
                known.error = error
                problems.add(str(path), f"file passed over: {error}", 1)
            raise error from failed

    def _settled(
        self, parts: Sequence[Sequence[Rows]], start: int, end: int, problems: ProblemCount
    ) -> Rows:
        rows = join_rows([rows for file in parts for rows in file])
        if not len(rows.doubled_at):
            return rows
        lengths = [sum(len(rows) for rows in file) for file in parts]
        part = np.repeat(np.arange(len(parts), dtype=np.int32), lengths)
        rows, unsettled = settle_doubled_hour(rows, part)
        counted = (rows.time[unsettled] >= start) & (rows.time[unsettled] < end)
        problems.add(self._options.path, _UNSETTLED, int(counted.sum()))
        return rows


class ParquetKind:
    """The kind ``parquet``: columns of readings in files."""

    name = "parquet"
    options: type[BaseModel] = ParquetOptions

    def open(self, options: ParquetOptions, folder: Path) -> Connector:
        """Open Parquet files; they are looked for when they are read."""
        return ParquetSource(options, folder)


def _told(path: Path, failed: Exception) -> ConnectorError:
    if isinstance(failed, ConnectorError):
        return failed
    if isinstance(failed, OSError) and failed.errno is not None:
        return unreadable(path, failed)
    reason = str(failed).splitlines()[0]
    return ConnectorError(
        f"{path} is no whole Parquet file ({reason}); it may still be being written, else export "
        "it again"
    )
