"""CSV exports as a source: readings of a window out of one file or many."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from connectors.base import ConnectorError, Probe, ReadResult
from connectors.csv_files import ExportFile, unpack_names
from connectors.csv_index import Block, IndexedFile, RowCache
from connectors.csv_options import CsvOptions
from connectors.csv_parse import Reading, TagBook
from connectors.csv_probe import Look, look_at
from connectors.paths import matching_files
from connectors.tidy import ProblemCount, Rows, join_rows, settle_doubled_hour, tidy
from connectors.times import DOUBLED_HOUR_REACH, from_microseconds, microseconds

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    import pandas as pd
    from pydantic import BaseModel

    from connectors.base import Connector, Window

__all__ = ["CsvKind", "CsvSource"]

_CACHE = 96 << 20
"""[bytes] Parsed rows kept in memory: some 4 million readings, so that a backfill of years stays
under 500 MB with all else."""

_REPLACED = "reading given again for the same tag and time: the last one counts"
_UNSETTLED = "reading in the hour that comes twice, pass not known: taken as the first, uncertain"
_LEFT_OUT = "file passed over"


class CsvSource:
    """Reads CSV exports.

    Args:
        options: what the site file says.
        folder: where relative paths start.
        cache_limit: bound of the memory for parsed rows [bytes].
    """

    def __init__(self, options: CsvOptions, folder: Path, *, cache_limit: int = _CACHE) -> None:
        self._options, self._folder = options, folder
        self._cache = RowCache(cache_limit)
        self._book = TagBook()
        self._reading = Reading.of(options, self._book)
        self._files: dict[str, IndexedFile] = {}

    def read(self, tags: Sequence[str], window: Window) -> ReadResult:
        """Return the readings of these tags inside the window.

        What is wrong with a row is reported once, by the read that meets the row first.

        Raises:
            ConnectorError: there is no file, or none that can be understood.
        """
        names = sorted(set(tags))
        if self._book.want(names):
            self._cache.clear()  # the rows kept there are those of the tags known so far
        problems = ProblemCount()
        files = self._refresh(problems)
        start, end = microseconds(window.start), microseconds(window.end)
        rows = self._gather(files, start, end, problems)
        rows = self._of_tags(rows, names, start, end)
        table, replaced = tidy(rows, names)
        problems.add(self._options.path, _REPLACED, replaced)
        return ReadResult(table, problems.problems())

    def probe(self) -> Probe:
        """Look at the newest files as a whole, and at both ends of the others.

        Raises:
            ConnectorError: there is no file, or none that can be understood.
        """
        problems = ProblemCount()
        look = look_at(self._exports(), self._options, problems)
        return _as_probe(look, self._options, problems)

    def close(self) -> None:
        """Release the memory that parsed rows take; no file is kept open."""
        self._cache.clear()
        self._files.clear()

    def _exports(self) -> list[ExportFile]:
        return unpack_names(matching_files(self._options.path, self._folder))

    def _refresh(self, problems: ProblemCount) -> list[IndexedFile]:
        exports = self._exports()
        for gone in self._files.keys() - {str(export) for export in exports}:
            self._files.pop(gone).forget_rows()
        for export in exports:
            name = str(export)
            file = self._files.get(name)
            if file is None:
                file = self._files[name] = IndexedFile(export, self._reading, self._cache)
            try:
                file.refresh(problems)
            except ConnectorError as error:
                problems.add(name, f"{_LEFT_OUT}: {error}", 1)
            except FileNotFoundError:
                # Taken away between listing and opening: as if it had not been listed.
                self._files.pop(name).forget_rows()
        files = [self._files[str(e)] for e in exports if str(e) in self._files]
        errors = [file.error for file in files if file.error is not None]
        if errors and len(errors) == len(files):
            raise errors[-1]
        return files

    def _gather(
        self, files: Sequence[IndexedFile], start: int, end: int, problems: ProblemCount
    ) -> Rows:
        parts: list[Rows] = []
        origin: list[int] = []
        for number, file in enumerate(files):
            blocks = [block for block in file.blocks if _concerns(block, start, end)]
            for block, rows in zip(blocks, file.rows(blocks), strict=True):
                parts.append(_inside(rows, block, start, end))
                origin.append(number)
        rows = join_rows(parts)
        if not len(rows.doubled_at):
            return rows
        part = np.repeat(np.array(origin, dtype=np.int32), [len(rows) for rows in parts])
        rows, unsettled = settle_doubled_hour(rows, part)
        counted = (rows.time[unsettled] >= start) & (rows.time[unsettled] < end)
        problems.add(self._options.path, _UNSETTLED, int(counted.sum()))
        return rows

    def _of_tags(self, rows: Rows, names: Sequence[str], start: int, end: int) -> Rows:
        asked = self._book.codes(names)  # gives the names that no row has their codes
        position = np.full(len(self._book.names), -1, dtype=np.int32)
        position[asked] = np.arange(len(names), dtype=np.int32)
        tag = position[rows.tag]
        rows = replace(rows, tag=tag)
        keep = (tag >= 0) & (rows.time >= start) & (rows.time < end)
        return rows if keep.all() else rows.keep(keep)


class CsvKind:
    """The kind ``csv``: historian exports as text files."""

    name = "csv"
    options: type[BaseModel] = CsvOptions

    def open(self, options: CsvOptions, folder: Path) -> Connector:
        """Open CSV exports; files are looked for when they are read."""
        return CsvSource(options, folder)


def _concerns(block: Block, start: int, end: int) -> bool:
    # To tell the passes of a doubled hour apart, all of that hour's rows are needed.
    reach = DOUBLED_HOUR_REACH if block.doubled else 0
    return block.overlaps(start - reach, end + reach)


def _inside(rows: Rows, block: Block, start: int, end: int) -> Rows:
    if block.doubled:
        return rows
    if block.ordered:
        low, high = np.searchsorted(rows.time, [start, end])
        return rows.between(int(low), int(high))
    return rows.keep((rows.time >= start) & (rows.time < end))


def _as_probe(look: Look, options: CsvOptions, problems: ProblemCount) -> Probe:
    empty = look.first > look.last
    ends: list[pd.Timestamp | None] = [None, None]
    if not empty:
        ends = list(from_microseconds(np.array([look.first, look.last], dtype=np.int64)))
    files = f"{look.files} file{'s' if look.files != 1 else ''}"
    part = "" if look.whole else "; tags are those of the newest files and of all files' ends"
    detail = f"{files}, {look.size / 1e6:.3g} MB, {options.layout} layout{part}"
    return Probe(look.tags, ends[0], ends[1], detail, problems.problems())
