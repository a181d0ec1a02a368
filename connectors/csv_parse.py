"""Lines of a CSV export, turned into rows by a column-wise parser.

Most blocks are clean and take the fast way: numbers are parsed straight into floats, and times,
tags and quality words are looked at once for each distinct text. Only a column that turns out to
hold words is read as text, from then on.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pacsv

from connectors.base import FEW, Example, Quality
from connectors.numbers import NumberReader
from connectors.quality import QualityWords
from connectors.tidy import ProblemCount, Rows, first_few, join_rows
from connectors.times import NO_TIME, ParsedTimes, TimeReader

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Sequence

    import numpy.typing as npt

    from connectors.csv_header import Encoding, Header
    from connectors.csv_options import CsvOptions
    from connectors.order import FileOrder

__all__ = ["BlockParser", "Parsed", "Reading", "Span", "TagBook"]

_TEXT = pa.string()
_DISTINCT = pa.dictionary(pa.int32(), pa.string())
_CHUNK = 1 << 20

_NO_TIME = "row dropped: its time cannot be read"
_MISSING_HOUR = "row dropped: its local time does not exist, the clock was put forward"
_NO_TAG = "row dropped: it names no tag"
_WRONG_CELLS = "row dropped: more or fewer cells than the header"
_NOT_A_NUMBER = "value is not a number: the reading is kept as bad"
_OTHER_MARK = "value has a decimal {found}: the reading is kept as bad; set decimal = '{mark}'"
_UNKNOWN_QUALITY = "quality word is in no list: the reading counts as uncertain"
_NOT_DECODED = "characters that the encoding does not have, replaced"
_STRAY_QUOTE = "block with a quotation mark that is not closed: quotes are read as plain text there"


class TagBook:
    """Gives every tag name a code, and knows the names that have been asked for."""

    def __init__(self) -> None:
        self.names: list[str] = []
        self._codes: dict[str, int] = {}
        self._wanted: set[str] | None = set()

    def want(self, tags: Iterable[str]) -> bool:
        """Note names that are asked for; true when some of them are new."""
        if self._wanted is None:
            return False
        before = len(self._wanted)
        self._wanted |= set(tags)
        return len(self._wanted) > before

    def want_all(self) -> None:
        """Ask for every tag there is."""
        self._wanted = None

    def is_wanted(self, name: str) -> bool:
        """Say whether a name has been asked for."""
        return self._wanted is None or name in self._wanted

    def codes(self, names: Sequence[str]) -> npt.NDArray[np.int32]:
        """Return the codes of names, new ones for new names."""
        for name in names:
            if name not in self._codes:
                self._codes[name] = len(self.names)
                self.names.append(name)
        return np.array([self._codes[name] for name in names], dtype=np.int32)


@dataclass(frozen=True)
class Reading:
    """What the parsers of one source share: how its cells are read."""

    options: CsvOptions
    book: TagBook
    times: TimeReader
    numbers: NumberReader
    words: QualityWords

    @classmethod
    def of(cls, options: CsvOptions, book: TagBook) -> Reading:
        """Build the readers that the options describe."""
        words = QualityWords(options)
        return cls(
            options=options,
            book=book,
            times=TimeReader(options.time_format, options.time_zone, options.decimal),
            numbers=NumberReader(options.decimal, options.thousands, words),
            words=words,
        )


@dataclass(frozen=True)
class Span:
    """The times of a block.

    Attributes:
        first, last: [us] the first and last, both candidates of a doubled hour included; ``first``
            > ``last`` when there are none.
        doubled: some are in a doubled hour.
        ordered: they stand in the order of time.
    """

    first: int = NO_TIME + 1
    last: int = NO_TIME
    doubled: bool = False
    ordered: bool = True


@dataclass(frozen=True)
class Parsed:
    """A parsed block.

    Attributes:
        rows: its readings, of the wanted tags alone (of all tags in a doubled hour, where the order
            of all rows counts).
        span: what its times are like, those of all tags.
        lines: how many lines it has.
        late: some of its readings, of whatever tag, stand after later ones.
    """

    rows: Rows
    span: Span
    lines: int
    late: bool = False


class BlockParser:
    """Parses blocks of whole lines of one file.

    Args:
        reading: how cells are read.
        header: the file's header.
        encoding: the file's encoding.
        file: the file's name for problems.
    """

    def __init__(self, reading: Reading, header: Header, encoding: Encoding, file: str) -> None:
        self._reading, self._header, self._encoding, self._file = reading, header, encoding, file
        self._as_text: set[int] = set()
        options = reading.options
        found, mark = ("comma", ",") if options.decimal == "." else ("point", ".")
        self._other_mark = _OTHER_MARK.format(found=found, mark=mark)
        self._time = tuple(header.position(name) for name in options.time_columns)
        self._long = options.layout == "long"
        if self._long:
            self._tag = header.position(options.tag_column)
            self._value = header.position(options.value_column)
            self._quality = (
                header.position(options.quality_column) if options.quality_column else None
            )
        self._comment = (
            re.compile(rb"(?m)^" + re.escape(options.comment.encode()) + rb".*\n?")
            if options.comment
            else None
        )

    def parse(
        self, raw: bytes, line: int, problems: ProblemCount, order: FileOrder | None = None
    ) -> Parsed:
        """Parse whole lines.

        Args:
            raw: the bytes.
            line: the number of the first line, for problems.
            problems: what is passed over is counted here.
            order: that of the rows before; None where it does not matter.
        """
        note = _Note(self._file, line, problems)
        data = self._encoding.to_utf8(raw)
        if data is not raw:
            note.count(_NOT_DECODED, data.count("\ufffd".encode()))
        elif not data.isascii():
            data = _decoded(data, note)
        lines = _line_ends(data)
        if self._comment is not None:
            data = self._comment.sub(b"\n", data)  # the parser passes over empty lines
        if not data or data.isspace():
            return Parsed(join_rows([]), Span(), lines)
        columns = self._value_columns()
        table = self._table(data, columns, note)
        if self._long:
            return self._parse_long(table, lines, note, order)
        return self._parse_wide(table, columns, lines, note, order)

    def _value_columns(self) -> tuple[int, ...]:
        if self._long:
            return (self._value,)
        names = self._header.columns
        last = {name: at for at, name in enumerate(names) if name and at not in self._time}
        return tuple(sorted(at for name, at in last.items() if self._reading.book.is_wanted(name)))

    def _table(self, data: bytes, columns: tuple[int, ...], note: _Note) -> pa.Table:
        types = {_name(at): _TEXT if at in self._as_text else pa.float64() for at in columns}
        try:
            table, refused = self._read(data, types, _CHUNK)
        except pa.ArrowInvalid:
            # Words among the numbers, or one huge line: read as text.
            types = dict.fromkeys(types, _TEXT)
            table, refused = self._read(data, types, len(data) + 1)
            self._as_text.update(at for at in columns if not _all_numbers(table[_name(at)]))
        quote = True
        if b'"' in data and table.num_rows + refused.count != len(_full_lines(data)):
            note.count(_STRAY_QUOTE, 1)
            types, quote = dict.fromkeys(types, _TEXT), False
            table, refused = self._read(data, types, len(data) + 1, quote=quote)
        if refused.count:
            # Only a single thread that reads it in one piece tells which rows these are.
            text = dict.fromkeys(types, _TEXT)
            _, refused = self._parse_text(data, text, len(data) + 1, quote=quote, threads=False)
        note.laid_out(data, table.num_rows, refused)
        note.refused(_WRONG_CELLS, refused)
        return table

    def _read(
        self, data: bytes, types: dict[str, Any], chunk: int, *, quote: bool = True
    ) -> tuple[pa.Table, _Refused]:
        try:
            return self._parse_text(data, types, chunk, quote=quote, threads=True)
        except pa.ArrowInvalid:
            raise
        except pa.ArrowException:
            # "A chunk failed converting for an unknown reason": seen once in many thousand blocks,
            # on a busy machine, never without threads.
            return self._parse_text(data, types, chunk, quote=quote, threads=False)

    def _parse_text(
        self, data: bytes, types: dict[str, Any], chunk: int, *, quote: bool, threads: bool
    ) -> tuple[pa.Table, _Refused]:
        refused = _Refused()
        keys = [*self._time]
        if self._long:
            keys += [self._tag] if self._quality is None else [self._tag, self._quality]
        types = {**{_name(at): _DISTINCT for at in keys}, **types}
        options = self._reading.options
        table = pacsv.read_csv(
            pa.BufferReader(data),
            read_options=pacsv.ReadOptions(
                column_names=[_name(at) for at in range(len(self._header.columns))],
                block_size=chunk,
                use_threads=threads,
            ),
            parse_options=pacsv.ParseOptions(
                delimiter=options.delimiter,
                quote_char='"' if quote else False,
                invalid_row_handler=refused,
            ),
            convert_options=pacsv.ConvertOptions(
                include_columns=list(types),
                column_types=types,
                null_values=self._null_values(),
                decimal_point=options.decimal,
            ),
        )
        return table.unify_dictionaries(), refused

    def _null_values(self) -> list[str]:
        if not self._long:
            return [""]  # a word must be told from an empty cell
        words = self._reading.words.bad_values
        return ["", *{form for w in words for form in (w, w.lower(), w.upper(), w.capitalize())}]

    def _parse_long(
        self, table: pa.Table, lines: int, note: _Note, order: FileOrder | None
    ) -> Parsed:
        times, has_time = self._times(table, note)
        names, name_at = _distinct(table[_name(self._tag)])
        names = [name.strip(' \t"') for name in names]
        named = np.array([bool(name) for name in names], dtype=np.bool_)
        has_tag = named[name_at] if not named.all() else np.ones(len(name_at), dtype=np.bool_)
        note.rows(_NO_TAG, has_time & ~has_tag)
        there = has_time & has_tag
        codes = self._reading.book.codes(names)
        wanted = np.array([self._reading.book.is_wanted(name) for name in names], dtype=np.bool_)
        doubled = times.doubled
        keep = there & (wanted[name_at] | doubled)
        value, bad = self._numbers(table[_name(self._value)], there, note)
        quality = self._qualities(table, there, note)
        quality[bad] = Quality.BAD
        tag = codes[name_at]
        late = np.flatnonzero(_late(order, tag, times, there))
        rows = Rows(tag, times.first, value, quality, *_doubled(times, doubled), late)
        rows = rows if keep.all() else rows.keep(keep)
        return Parsed(rows, _span(times, there), lines, bool(len(late)))

    def _parse_wide(
        self,
        table: pa.Table,
        columns: tuple[int, ...],
        lines: int,
        note: _Note,
        order: FileOrder | None,
    ) -> Parsed:
        times, has_time = self._times(table, note)
        span = _span(times, has_time)
        # A row is in order or not, for all of its tags.
        late = _late(order, np.zeros(len(has_time), dtype=np.int32), times, has_time)
        if not columns:
            return Parsed(join_rows([]), span, lines, bool(late.any()))
        cells = [self._cells(table[_name(at)], has_time, note) for at in columns]
        value, bad, there = (np.column_stack(part) for part in zip(*cells, strict=True))
        there &= has_time[:, np.newaxis]
        codes = self._reading.book.codes([self._header.columns[at] for at in columns])
        row, column = np.nonzero(there)
        rows = Rows(
            codes[column],
            times.first[row],
            value[there],
            np.where(bad[there], Quality.BAD, Quality.GOOD).astype(np.uint8),
            *_doubled(times.take(row), times.doubled[row]),
            np.flatnonzero(late[row]),
        )
        return Parsed(rows, span, lines, bool(late.any()))

    def _times(self, table: pa.Table, note: _Note) -> tuple[ParsedTimes, npt.NDArray[np.bool_]]:
        texts, at = self._time_texts(table)
        times = self._reading.times.read(texts).take(at)
        has_time = times.first != NO_TIME
        if not has_time.all():
            missing = times.in_missing_hour
            for what, rows in ((_MISSING_HOUR, missing), (_NO_TIME, ~has_time & ~missing)):
                note.rows(what, rows, lambda row: texts[at[row]])
        return times, has_time

    def _time_texts(self, table: pa.Table) -> tuple[pa.Array, npt.NDArray[np.intp]]:
        """Return the distinct texts of times, and which of them each row has."""
        columns = [table[_name(at)].combine_chunks() for at in self._time]
        ats = [column.indices.to_numpy(zero_copy_only=False) for column in columns]
        if len(columns) == 1:
            return columns[0].dictionary, ats[0]
        date, clock = (pc.utf8_trim(column.dictionary, ' \t"') for column in columns)
        at, pairs = pd.factorize(ats[0].astype(np.int64) * len(clock) + ats[1])
        texts = pc.binary_join_element_wise(
            date.take(pa.array(pairs // len(clock))), clock.take(pa.array(pairs % len(clock))), " "
        )
        return texts, at

    def _cells(
        self, column: pa.ChunkedArray, has_time: npt.NDArray[np.bool_], note: _Note
    ) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.bool_], npt.NDArray[np.bool_]]:
        """Return a wide column's values, where they are bad, and where there is a cell at all."""
        if pa.types.is_string(column.type):
            there = pc.not_equal(pc.utf8_trim_whitespace(column), "").to_numpy()
        else:
            there = column.is_valid().to_numpy()
        value, bad = self._numbers(column, has_time & there, note)
        return value, bad, there

    def _numbers(
        self, column: pa.ChunkedArray, counted: npt.NDArray[np.bool_], note: _Note
    ) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.bool_]]:
        """Return values, NaN where there is none, and where they are bad."""
        if pa.types.is_string(column.type):
            parsed = self._reading.numbers.read(column.combine_chunks())
            value, unknown, other = parsed.value, parsed.not_understood, parsed.other_mark
        else:
            value = column.to_numpy()
            unknown = np.isinf(value)
            other = np.zeros_like(unknown)
        if unknown.any():
            note.rows(_NOT_A_NUMBER, unknown & ~other & counted, lambda row: column[row])
            note.rows(self._other_mark, other & counted, lambda row: column[row])
            value = np.where(unknown, np.nan, value)
        return value, np.isnan(value)

    def _qualities(
        self, table: pa.Table, counted: npt.NDArray[np.bool_], note: _Note
    ) -> npt.NDArray[np.uint8]:
        if self._quality is None:
            return np.full(table.num_rows, Quality.GOOD, dtype=np.uint8)
        words, at = _distinct(table[_name(self._quality)])
        classes, unknown = self._reading.words.classify(words)
        if unknown.any():
            note.rows(_UNKNOWN_QUALITY, unknown[at] & counted, lambda row: words[at[row]])
        return classes[at]


class _Refused:
    """Counts the rows that have the wrong number of cells.

    Attributes:
        count: how many.
        texts: the first few.
        numbers: which of the lines that hold anything they are, from 0 on; none where the parser
            does not tell.
    """

    def __init__(self) -> None:
        self.count = 0
        self.texts: list[str] = []
        self.numbers: list[int] = []

    def __call__(self, row: Any) -> str:  # noqa: ANN401 - the parser's own row type
        self.count += 1
        if len(self.texts) < FEW:
            self.texts.append(str(row.text))
        if row.number is not None:
            self.numbers.append(row.number - 1)
        return "skip"


@dataclass
class _Note:
    """Notes a block's problems with the lines they stand on.

    Attributes:
        file: the file's name.
        line: the number of the block's first line.
        problems: what is passed over is counted there.
    """

    file: str
    line: int
    problems: ProblemCount
    _layout: tuple[bytes, int, _Refused] | None = None
    _lines: tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]] | None = None

    def laid_out(self, data: bytes, rows: int, refused: _Refused) -> None:
        """Note how many rows the parser made of the lines, and which it refused."""
        self._layout = data, rows, refused

    def _places(self) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]:
        """Return the lines of the rows, and those of the refused ones.

        They are worked out when there is something to tell: counting takes longer than parsing.
        """
        if self._lines is None:
            data, rows, refused = self._layout or (b"", 0, _Refused())
            full = _full_lines(data)
            if len(full) != rows + len(refused.numbers):  # a quoted cell holds a line end
                full = np.arange(rows + len(refused.numbers))
            numbers = np.array(refused.numbers, dtype=np.int64)
            self._lines = self.line + np.delete(full, numbers), self.line + full[numbers]
        return self._lines

    def rows(
        self, what: str, rows: npt.NDArray[np.bool_], text: Callable[[int], object] = lambda _: ""
    ) -> None:
        count = int(np.count_nonzero(rows))
        if count:
            examples = first_few(rows, text, lambda row: f"line {self._places()[0][row]}")
            self.problems.add(self.file, what, count, examples)

    def count(self, what: str, count: int) -> None:
        self.problems.add(self.file, what, count, [Example(f"line {self.line}")])

    def refused(self, what: str, refused: _Refused) -> None:
        if refused.count:
            lines = self._places()[1].tolist()
            found = zip(lines, refused.texts, strict=False)
            examples = [Example(f"line {line}", text[:40]) for line, text in found]
            self.problems.add(self.file, what, refused.count, examples)


def _name(at: int) -> str:
    return f"c{at}"  # headers may be empty or occur twice; these do not


def _distinct(column: pa.ChunkedArray) -> tuple[list[str], npt.NDArray[np.int32]]:
    joined = column.combine_chunks()
    return joined.dictionary.to_pylist(), joined.indices.to_numpy(zero_copy_only=False)


def _all_numbers(column: pa.ChunkedArray) -> bool:
    try:
        pc.if_else(pc.equal(column, ""), None, column).cast(pa.float64())
    except pa.ArrowInvalid:
        return False
    return True


def _decoded(data: bytes, note: _Note) -> bytes:
    try:
        data.decode()
    except UnicodeDecodeError:
        text = data.decode(errors="replace")
        note.count(_NOT_DECODED, text.count("\ufffd"))
        return text.encode()
    return data


def _full_lines(data: bytes) -> npt.NDArray[np.int64]:
    """Return which lines hold anything, as the parser ends them: by LF, CR LF or CR alone."""
    text = np.frombuffer(data, dtype=np.uint8)
    feeds, returns = text == ord("\n"), text == ord("\r")
    paired = np.zeros(len(text), dtype=np.bool_)
    paired[:-1] = returns[:-1] & feeds[1:]
    ends = np.flatnonzero(feeds | (returns & ~paired))
    starts = np.concatenate([[0], ends + 1])
    stops = np.concatenate([ends, [len(text)]])
    lengths = stops - starts
    lengths[:-1] -= feeds[ends] & paired[ends - 1] & (ends > 0)
    return np.flatnonzero(lengths)


def _line_ends(data: bytes) -> int:
    # Three times as fast as bytes.count for a single byte.
    return int(np.count_nonzero(np.frombuffer(data, dtype=np.uint8) == ord("\n")))


def _span(times: ParsedTimes, there: npt.NDArray[np.bool_]) -> Span:
    if not there.any():
        return Span()
    first, second = times.first, times.second
    if not there.all():
        first, second = first[there], second[there]
    ordered = bool((first[1:] >= first[:-1]).all())
    if first is second:
        return Span(int(first.min()), int(first.max()), doubled=False, ordered=ordered)
    doubled = bool((first != second).any())
    return Span(int(first.min()), int(second.max()), doubled=doubled, ordered=ordered)


def _late(
    order: FileOrder | None,
    tag: npt.NDArray[np.int32],
    times: ParsedTimes,
    there: npt.NDArray[np.bool_],
) -> npt.NDArray[np.bool_]:
    """Say which rows stand after later ones of their tag."""
    if order is None:
        return np.zeros(len(tag), dtype=np.bool_)
    if there.all():
        return order.late(tag, times.first, times.second)
    late = np.zeros(len(tag), dtype=np.bool_)
    late[there] = order.late(tag[there], times.first[there], times.second[there])
    return late


def _doubled(
    times: ParsedTimes, doubled: npt.NDArray[np.bool_]
) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]:
    at = np.flatnonzero(doubled)
    return at, times.second[at]
