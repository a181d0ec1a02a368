"""One Parquet file: which of its row groups hold a span of time, and their rows.

The statistics that Parquet keeps for each row group tell its span of time and of tag names; only
where they are missing, or say nothing (times kept as texts), the column of times is read once. A
window then reads the row groups that overlap it, and of these the columns it needs.
"""

from __future__ import annotations

import bisect
import difflib
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING, Any, BinaryIO, NamedTuple

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from connectors.base import ConnectorError, Quality
from connectors.parquet_columns import distinct_texts, is_text
from connectors.parquet_pieces import Piece
from connectors.tidy import Rows, first_few, place_of
from connectors.times import NO_TIME

if TYPE_CHECKING:
    from collections.abc import Callable, Hashable, Iterator, Sequence
    from pathlib import Path

    import numpy.typing as npt

    from connectors.order import FileOrder
    from connectors.parquet_columns import Cells, ColumnReader
    from connectors.parquet_options import ParquetOptions
    from connectors.parquet_order import GroupOrder
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
_OTHER_MARK = "value has a decimal comma: the reading is kept as bad; export numbers, not texts"
_UNKNOWN_QUALITY = "quality word is in no list: the reading counts as uncertain"


@dataclass
class Group:
    """A row group.

    Attributes:
        number: its place in the file.
        first, last: [us] its span of time, empty when ``first`` > ``last``.
        tags: the first and last of its tag names in the order of texts, None when not known.
        reported: what is wrong with its times has been counted.
        named: so have the rows that name no tag.
    """

    number: int
    first: int
    last: int
    tags: tuple[str, str] | None
    reported: bool = False
    named: bool = False


class _Unheard(NamedTuple):
    """Where what is wrong with a row group is counted, None once it has been."""

    times: ProblemCount | None
    tags: ProblemCount | None


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
        order: the order of the rows of this state of the file.

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
        order: GroupOrder,
    ) -> None:
        self._path, self._options, self._reader = path, options, reader
        self._cache, self._state, self._order = cache, state, order
        # Texts that repeat come as they are stored, each of them once.
        repeating = [options.time_column]
        if options.layout == "long":
            repeating += [options.tag_column]
            repeating += [options.quality_column] if options.quality_column else []
        metadata = pq.read_metadata(handle)
        there = {metadata.schema.column(at).path for at in range(metadata.num_columns)}
        self._file = pq.ParquetFile(
            handle, metadata=metadata, read_dictionary=[n for n in repeating if n in there]
        )
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
            unheard = _Unheard(
                None if group.reported else problems, None if group.named else problems
            )
            group.reported = group.named = True
            yield from self._group_rows(group, groups, wanted, unheard, problems)

    def _group_rows(
        self,
        group: Group,
        groups: Sequence[Group],
        wanted: Wanted,
        unheard: _Unheard,
        problems: ProblemCount,
    ) -> Iterator[Rows]:
        options = self._options
        if options.layout == "wide":
            names = [name for name in wanted.names if name in self._schema.names]
            names = [name for name in names if name != options.time_column]
            columns = [options.time_column, *names]
            for piece in self._pieces(group, groups, columns, wanted, unheard):
                yield self._wide(piece.within(wanted.start, wanted.end), names, wanted, problems)
            return
        columns = [options.time_column, options.tag_column, options.value_column]
        columns += [options.quality_column] if options.quality_column else []
        for piece in self._pieces(group, groups, columns, wanted, unheard):
            yield self._long(piece.within(wanted.start, wanted.end), wanted, problems)

    def _pieces(
        self,
        group: Group,
        groups: Sequence[Group],
        columns: list[str],
        wanted: Wanted,
        unheard: _Unheard,
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
        order = self._order.before(group.number, groups, self._look)
        row = sum(self.rows_of(other) for other in groups[: group.number]) + 1
        for batch in self._batches([group], columns):
            piece = self._piece(batch, order, row, unheard)
            row += len(batch)
            size += piece.nbytes
            fresh = [*fresh, piece] if size <= self._cache.limit else []
            yield piece
        if fresh:
            self._cache.put(key, fresh)

    def _look(self, group: Group) -> Iterator[tuple[ParsedTimes, list[str], npt.NDArray[np.int64]]]:
        """Yield what the order of a row group hangs on."""
        options = self._options
        is_long = options.layout == "long"
        columns = [options.time_column, *([options.tag_column] if is_long else [])]
        for batch in self._batches([group], columns):
            yield self._times(batch, 0, None), *self._tags_of(batch)

    def _tags_of(self, batch: pa.RecordBatch) -> tuple[list[str], npt.NDArray[np.int64]]:
        if self._options.layout == "wide":
            return [], np.zeros(0, dtype=np.int64)
        return distinct_texts(batch.column(self._options.tag_column))

    def _piece(self, batch: pa.RecordBatch, order: FileOrder, row: int, unheard: _Unheard) -> Piece:
        options = self._options
        times = self._times(batch, row, unheard.times)
        is_long = options.layout == "long"
        done = {options.time_column, options.tag_column} if is_long else {options.time_column}
        values = batch.select([name for name in batch.schema.names if name not in done])
        words, tag_at = self._tags_of(batch)
        if unheard.tags is not None and "" in words:
            nameless = np.array([not word for word in words], dtype=np.bool_)[tag_at]
            lost = nameless & (times.first != NO_TIME)
            examples = first_few(lost, lambda _: "", lambda at: f"row {row + at}")
            unheard.tags.add(self._path.name, _NO_TAG, int(lost.sum()), examples)
        late = self._order.late(order, times, words, tag_at)
        ordered = bool((times.first[1:] >= times.first[:-1]).all())
        return Piece(values, times, words, tag_at, late, ordered)

    def _concerns(self, group: Group, wanted: Wanted) -> bool:
        if group.first >= wanted.end or group.last < wanted.start:
            return False
        if group.tags is None or self._is_local:
            return True
        at = bisect.bisect_left(wanted.names, group.tags[0])
        return at < len(wanted.names) and wanted.names[at] <= group.tags[1]

    def _times(self, batch: pa.RecordBatch, row: int, problems: ProblemCount | None) -> ParsedTimes:
        """Read a batch's times; ``row`` is the number of its first row in the file."""
        times = self._reader.times(batch.column(self._options.time_column), str(self._path))
        if problems is not None:
            missing = times.in_missing_hour
            lost = (times.first == NO_TIME) & ~missing
            column = batch.column(self._options.time_column)
            for what, rows in ((_MISSING_HOUR, missing), (_NO_TIME, lost)):
                examples = first_few(rows, column.__getitem__, lambda at: f"row {row + at}")
                problems.add(self._path.name, what, int(rows.sum()), examples)
        return times

    def _long(
        self,
        piece: Piece,
        wanted: Wanted,
        problems: ProblemCount,
    ) -> Rows:
        options, name = self._options, self._path.name
        batch, times = piece.batch, piece.times
        book, others = wanted.book, len(wanted.names)
        codes = [book.setdefault(word, len(book)) if word else -1 for word in piece.words]
        tag = np.array(codes, dtype=np.int32)[piece.tag_at]
        keep = (tag >= 0) & (tag < others)
        if times.second is not times.first:
            keep |= (tag >= 0) & times.doubled
        rows = np.flatnonzero(keep)
        kept = batch
        if len(rows) < len(keep):
            kept, times, tag = batch.take(pa.array(rows)), times.take(rows), tag[rows]
        cells = self._reader.cells(
            kept.column(options.value_column), options.value_column, str(self._path)
        )
        asked = tag < others

        def place(row: int) -> str:
            return place_of(wanted.names[tag[row]], int(times.first[row]))

        self._count_words(cells, asked, place, problems)
        quality = np.full(len(rows), Quality.GOOD, dtype=np.uint8)
        if options.quality_column:
            words = kept.column(options.quality_column)
            quality, unknown = self._reader.qualities(words)
            unknown &= asked
            examples = first_few(unknown, words.__getitem__, place)
            problems.add(name, _UNKNOWN_QUALITY, int(unknown.sum()), examples)
        quality[np.isnan(cells.value)] = Quality.BAD
        late = None if piece.late is None else piece.late[rows]
        return _rows(times, tag, cells.value, quality, late)

    def _wide(
        self,
        piece: Piece,
        names: Sequence[str],
        wanted: Wanted,
        problems: ProblemCount,
    ) -> Rows:
        times, first = piece.times, piece.times.first
        cells = [self._reader.cells(piece.batch.column(n), n, str(self._path)) for n in names]
        for name, part in zip(names, cells, strict=True):
            place = partial(_place_in, name, first)
            self._count_words(part, np.ones(len(first), dtype=np.bool_), place, problems)
        shape = (len(first), len(names))
        there = np.column_stack([c.there for c in cells]) if cells else np.zeros(shape, np.bool_)
        value = np.column_stack([c.value for c in cells]) if cells else np.zeros(shape)
        row, column = np.nonzero(there)
        tag = np.array([wanted.book[name] for name in names], dtype=np.int32)[column]
        value = value[there]
        quality = np.where(np.isnan(value), Quality.BAD, Quality.GOOD).astype(np.uint8)
        late = None if piece.late is None else piece.late[row]
        return _rows(times.take(row), tag, value, quality, late)

    def _count_words(
        self,
        cells: Cells,
        asked: npt.NDArray[np.bool_],
        place: Callable[[int], str],
        problems: ProblemCount,
    ) -> None:
        unknown = cells.not_understood & asked
        if unknown.any():
            comma = unknown & cells.other_mark
            for what, rows in ((_NOT_A_NUMBER, unknown & ~comma), (_OTHER_MARK, comma)):
                examples = first_few(rows, cells.text, place)
                problems.add(self._path.name, what, int(rows.sum()), examples)

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
        row = sum(self._file.metadata.row_group(n).num_rows for n in range(number)) + 1
        for batch in self._batches([group], [options.time_column]):
            times = self._times(batch, row, problems)
            row += len(batch)
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


def _place_in(name: str, first: npt.NDArray[np.int64], row: int) -> str:
    return place_of(name, int(first[row]))


def _rows(
    times: ParsedTimes,
    tag: npt.NDArray[np.int32],
    value: npt.NDArray[np.float64],
    quality: npt.NDArray[np.uint8],
    late: npt.NDArray[np.bool_] | None,
) -> Rows:
    doubled = np.zeros(0, dtype=np.int64)
    if times.second is not times.first:
        doubled = np.flatnonzero(times.doubled)
    late_at = np.zeros(0, dtype=np.int64) if late is None else np.flatnonzero(late)
    return Rows(tag, times.first, value, quality, doubled, times.second[doubled], late_at)
