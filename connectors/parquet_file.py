"""One Parquet file: which of its row groups hold a span of time, and their rows.

The statistics that Parquet keeps for each row group tell its span of time and of tag names; only
where they are missing, or say nothing (times kept as texts), the column of times is read once. A
window then reads the row groups that overlap it, and of these the columns it needs.
"""

from __future__ import annotations

import bisect
import difflib
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, BinaryIO

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from connectors.base import ConnectorError, Quality
from connectors.parquet_columns import distinct_texts, is_text
from connectors.parquet_pieces import Piece
from connectors.tidy import Rows, first_few
from connectors.times import NO_TIME

if TYPE_CHECKING:
    from collections.abc import Hashable, Iterator, Sequence
    from pathlib import Path

    import numpy.typing as npt

    from connectors.parquet_columns import Cells, ColumnReader
    from connectors.parquet_options import ParquetOptions
    from connectors.parquet_pieces import PieceCache
    from connectors.tidy import ProblemCount
    from connectors.times import ParsedTimes

__all__ = ["Group", "ParquetFile", "Wanted"]

_BATCH = 1 << 18
"""Rows turned at a time: bounds the memory however large a row group is."""

_NO_TIME = "row dropped: its time cannot be read"
_MISSING_HOUR = "row dropped: its local time does not exist, the clock was put forward"
_NO_TAG = "row dropped: it names no tag"
_NOT_A_NUMBER = "value is not a number: the reading is kept as bad"
_UNKNOWN_QUALITY = "quality word is in no list: the reading counts as uncertain"


@dataclass
class Group:
    """A row group.

    Attributes:
        number: its place in the file.
        first, last: [us] its span of time, empty when ``first`` > ``last``.
        tags: the first and last of its tag names in the order of texts, None when not known.
        reported: what is wrong with its times has been counted.
    """

    number: int
    first: int
    last: int
    tags: tuple[str, str] | None
    reported: bool = False


@dataclass(frozen=True)
class Wanted:
    """What a window asks for.

    Attributes:
        names: the tags, distinct and sorted.
        start, end: [us] the span, half open, with the reach of a doubled hour where it has one.
        book: the code of each tag name seen, that of a wanted one its position in ``names``.
    """

    names: Sequence[str]
    start: int
    end: int
    book: dict[str, int]


class ParquetFile:
    """An open Parquet file.

    Args:
        path: the file.
        handle: the same, opened.
        options: what the site file says.
        reader: reads its columns.
        cache: keeps decoded pieces of row groups.
        state: tells this state of the file from others, for the cache.

    Raises:
        ConnectorError: a column is not there, or not of a fitting type.
        pyarrow.ArrowInvalid: this is no (whole) Parquet file.
    """

    def __init__(
        self,
        path: Path,
        handle: BinaryIO,
        options: ParquetOptions,
        reader: ColumnReader,
        cache: PieceCache,
        state: Hashable,
    ) -> None:
        self._path, self._options, self._reader = path, options, reader
        self._cache, self._state = cache, state
        self._file = pq.ParquetFile(handle)
        self._schema = self._file.schema_arrow
        self._check_columns()
        self._is_local = reader.is_local(self._schema.field(options.time_column).type)

    @property
    def is_local(self) -> bool:
        """Whether the times are those of a zone with a doubled hour."""
        return self._is_local

    @property
    def rows(self) -> int:
        """How many rows there are."""
        return int(self._file.metadata.num_rows)

    def rows_of(self, group: Group) -> int:
        """Say how many rows a row group has."""
        return int(self._file.metadata.row_group(group.number).num_rows)

    def groups(self, problems: ProblemCount) -> list[Group]:
        """Return the row groups with their spans."""
        return [self._group(number, problems) for number in range(self._file.num_row_groups)]

    def tags(self, groups: Sequence[Group]) -> set[str]:
        """Return the tag names: all in layout ``wide``, else those of these groups."""
        if self._options.layout == "wide":
            return set(self._schema.names) - {self._options.time_column}
        found: set[str] = set()
        for batch in self._batches(groups, [self._options.tag_column]):
            found.update(distinct_texts(batch.column(0))[0])
        return found - {""}

    def read(
        self, groups: Sequence[Group], wanted: Wanted, problems: ProblemCount
    ) -> Iterator[Rows]:
        """Yield the rows of a window, piece by piece, with the tags' codes in the window's book.

        In a doubled hour rows of other tags come too: the order of all rows tells the passes apart.
        """
        for group in groups:
            if not self._concerns(group, wanted):
                continue
            counted = None if group.reported else problems
            group.reported = True
            yield from self._group_rows(group, wanted, counted, problems)

    def _group_rows(
        self, group: Group, wanted: Wanted, unheard: ProblemCount | None, problems: ProblemCount
    ) -> Iterator[Rows]:
        options = self._options
        if options.layout == "wide":
            names = [name for name in wanted.names if name in self._schema.names]
            names = [name for name in names if name != options.time_column]
            for piece in self._pieces(group, [options.time_column, *names], wanted, unheard):
                yield self._wide(piece.batch, piece.times, names, wanted, problems)
            return
        columns = [options.time_column, options.tag_column, options.value_column]
        columns += [options.quality_column] if options.quality_column else []
        for piece in self._pieces(group, columns, wanted, unheard):
            yield self._long(piece, wanted, unheard, problems)

    def _pieces(
        self, group: Group, columns: list[str], wanted: Wanted, unheard: ProblemCount | None
    ) -> Iterator[Piece]:
        """Yield a row group's pieces, from memory or by decoding them."""
        key = (self._path, self._state, group.number, *columns)
        kept = self._cache.get(key)
        if kept is not None:
            yield from kept
            return
        # The next window needs those that reach beyond this one.
        reaches = group.first < wanted.start or group.last >= wanted.end
        fresh: list[Piece] = []
        size = 0 if reaches else self._cache.limit + 1
        for batch in self._batches([group], columns):
            piece = self._piece(batch, unheard)
            size += piece.nbytes
            fresh = [*fresh, piece] if size <= self._cache.limit else []
            yield piece
        if fresh:
            self._cache.put(key, fresh)

    def _piece(self, batch: pa.RecordBatch, unheard: ProblemCount | None) -> Piece:
        options = self._options
        times = self._times(batch, unheard)
        is_long = options.layout == "long"
        done = {options.time_column, options.tag_column} if is_long else {options.time_column}
        values = batch.select([name for name in batch.schema.names if name not in done])
        if not is_long:
            return Piece(values, times, [], np.zeros(0, dtype=np.int64))
        return Piece(values, times, *distinct_texts(batch.column(options.tag_column)))

    def _concerns(self, group: Group, wanted: Wanted) -> bool:
        if group.first >= wanted.end or group.last < wanted.start:
            return False
        if group.tags is None or self._is_local:
            return True
        at = bisect.bisect_left(wanted.names, group.tags[0])
        return at < len(wanted.names) and wanted.names[at] <= group.tags[1]

    def _times(self, batch: pa.RecordBatch, problems: ProblemCount | None) -> ParsedTimes:
        times = self._reader.times(batch.column(self._options.time_column), str(self._path))
        if problems is not None:
            missing = times.in_missing_hour
            lost = (times.first == NO_TIME) & ~missing
            column = batch.column(self._options.time_column)
            examples = first_few(lost, lambda row: column[row])
            problems.add(self._path.name, _MISSING_HOUR, int(missing.sum()))
            problems.add(self._path.name, _NO_TIME, int(lost.sum()), examples)
        return times

    def _long(
        self,
        piece: Piece,
        wanted: Wanted,
        unheard: ProblemCount | None,
        problems: ProblemCount,
    ) -> Rows:
        options, name = self._options, self._path.name
        batch, times = piece.batch, piece.times
        book, others = wanted.book, len(wanted.names)
        codes = [book.setdefault(word, len(book)) if word else -1 for word in piece.words]
        tag = np.array(codes, dtype=np.int32)[piece.tag_at]
        has_time = times.first != NO_TIME
        if unheard is not None:
            unheard.add(name, _NO_TAG, int((has_time & (tag < 0)).sum()))
        keep = _inside(times, wanted) & (tag >= 0) & ((tag < others) | times.doubled)
        rows = np.flatnonzero(keep)
        kept = batch.take(pa.array(rows)) if len(rows) < len(keep) else batch
        cells = self._reader.cells(
            kept.column(options.value_column), options.value_column, str(self._path)
        )
        asked = tag[rows] < others
        self._count_words(cells, asked, problems)
        quality = np.full(len(rows), Quality.GOOD, dtype=np.uint8)
        if options.quality_column:
            words = kept.column(options.quality_column)
            quality, unknown = self._reader.qualities(words)
            unknown &= asked
            examples = first_few(unknown, lambda row: words[row])
            problems.add(name, _UNKNOWN_QUALITY, int(unknown.sum()), examples)
        quality[np.isnan(cells.value)] = Quality.BAD
        return _rows(times.take(rows), tag[rows], cells.value, quality)

    def _wide(
        self,
        batch: pa.RecordBatch,
        times: ParsedTimes,
        names: Sequence[str],
        wanted: Wanted,
        problems: ProblemCount,
    ) -> Rows:
        rows = np.flatnonzero(_inside(times, wanted))
        kept = batch.take(pa.array(rows)) if len(rows) < batch.num_rows else batch
        cells = [self._reader.cells(kept.column(n), n, str(self._path)) for n in names]
        for part in cells:
            self._count_words(part, np.ones(len(rows), dtype=np.bool_), problems)
        shape = (len(rows), len(names))
        there = np.column_stack([c.there for c in cells]) if cells else np.zeros(shape, np.bool_)
        value = np.column_stack([c.value for c in cells]) if cells else np.zeros(shape)
        row, column = np.nonzero(there)
        tag = np.array([wanted.book[name] for name in names], dtype=np.int32)[column]
        value = value[there]
        quality = np.where(np.isnan(value), Quality.BAD, Quality.GOOD).astype(np.uint8)
        return _rows(times.take(rows[row]), tag, value, quality)

    def _count_words(
        self, cells: Cells, asked: npt.NDArray[np.bool_], problems: ProblemCount
    ) -> None:
        unknown = cells.not_understood & asked
        examples = first_few(unknown, cells.text)
        problems.add(self._path.name, _NOT_A_NUMBER, int(unknown.sum()), examples)

    def _batches(self, groups: Sequence[Group], columns: list[str]) -> Iterator[pa.RecordBatch]:
        numbers = [group.number for group in groups]
        yield from self._file.iter_batches(_BATCH, row_groups=numbers, columns=columns)

    def _group(self, number: int, problems: ProblemCount) -> Group:
        options = self._options
        span = self._stated(number, options.time_column)
        tags = None
        if options.layout == "long":
            ends = self._stated(number, options.tag_column)
            if ends is not None and all(isinstance(end, str) for end in ends):
                tags = (ends[0], ends[1])
        kind = self._schema.field(options.time_column).type
        if span is not None and not is_text(kind):
            times = self._reader.times(pa.array(span, type=kind), str(self._path))
            if (times.first != NO_TIME).all():
                return Group(number, int(times.first[0]), int(times.second[1]), tags)
        group = Group(number, 1, 0, tags, reported=True)
        for batch in self._batches([group], [options.time_column]):
            times = self._times(batch, problems)
            there = times.first != NO_TIME
            if there.any():
                low, high = int(times.first[there].min()), int(times.second[there].max())
                empty = group.first > group.last
                group.first = low if empty else min(group.first, low)
                group.last = high if empty else max(group.last, high)
        return group

    def _stated(self, number: int, column: str) -> tuple[Any, Any] | None:
        """Return the least and greatest value that the row group states for a column."""
        if not self._is_flat:
            return None
        group = self._file.metadata.row_group(number)
        statistics = group.column(self._schema.names.index(column)).statistics
        if statistics is None or not statistics.has_min_max:
            return None
        return statistics.min, statistics.max

    @property
    def _is_flat(self) -> bool:
        # In a nested schema the columns of the metadata are not those of the table.
        return list(self._file.metadata.schema.names) == list(self._schema.names)

    def _check_columns(self) -> None:
        options = self._options
        wanted = {"time_column": options.time_column}
        if options.layout == "long":
            wanted |= {"tag_column": options.tag_column, "value_column": options.value_column}
            wanted |= {"quality_column": options.quality_column} if options.quality_column else {}
        names = list(self._schema.names)
        for key, name in wanted.items():
            if names.count(name) == 1:
                continue
            near = difflib.get_close_matches(name, names, n=1, cutoff=0.4)
            hint = f"; nearest is '{near[0]}'" if near else ""
            found = "twice or more" if name in names else "not"
            shown = ", ".join(map(repr, names[:30]))
            raise ConnectorError(
                f"{self._path}: column '{name}' ({key}) is there {found}{hint}; columns found: "
                f"{shown}. Correct the key"
            )


def _inside(times: ParsedTimes, wanted: Wanted) -> npt.NDArray[np.bool_]:
    return (times.first >= wanted.start) & (times.first < wanted.end)


def _rows(
    times: ParsedTimes,
    tag: npt.NDArray[np.int32],
    value: npt.NDArray[np.float64],
    quality: npt.NDArray[np.uint8],
) -> Rows:
    doubled = np.flatnonzero(times.doubled)
    return Rows(tag, times.first, value, quality, doubled, times.second[doubled])
