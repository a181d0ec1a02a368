"""An index of a growing CSV file: which block of bytes holds which span of time.

A file is parsed once, in blocks cut at line ends. Later windows touch only the blocks that overlap
them, and a file that grew is read only from its old end. The parsed rows stay in memory as long as
there is room for them.
"""

from __future__ import annotations

import contextlib
import time
from collections import OrderedDict
from dataclasses import dataclass
from typing import TYPE_CHECKING, cast

from connectors.base import ConnectorError, Example
from connectors.csv_files import open_export, read_up_to
from connectors.csv_header import check_columns, detect_encoding, line_end, read_header
from connectors.csv_parse import BlockParser
from connectors.order import FileOrder
from connectors.paths import unreadable
from connectors.tidy import ProblemCount, Rows, join_rows

if TYPE_CHECKING:
    import os
    from collections.abc import Iterator, Sequence
    from pathlib import Path

    from connectors.csv_files import Export, ExportFile
    from connectors.csv_header import Encoding, Header
    from connectors.csv_parse import Parsed, Reading

__all__ = [
    "BLOCK",
    "Block",
    "Extent",
    "IndexedFile",
    "RowCache",
]

BLOCK = 4 << 20
"""[bytes] Small enough that a day's window parses little beside itself."""

_SETTLED_AFTER = 600.0
"""[s] A last line without a line end counts as whole once its file was left alone this long."""

_MARK = 1024
_HEADER_WITHIN = 4 * BLOCK
_LINE_WITHIN = 16 * BLOCK
_TWICE = "column that occurs more than once in the header: the last one is read"


@dataclass(eq=False)
class Block:
    """Whole lines of one file.

    Attributes:
        offset, length: the bytes (of the unpacked file).
        line: the number of the first line.
        lines: how many there are.
        first, last: [us] the span of time in it, empty when ``first`` > ``last``.
        doubled: some of its times are in a doubled hour.
        ordered: its rows stand in the order of time.
        late: some of its rows stand after later ones of the same tag.
        before: the order of the file's rows before it, None where it is not needed any more.
    """

    offset: int
    length: int
    line: int
    lines: int
    first: int
    last: int
    doubled: bool
    ordered: bool
    late: bool
    before: FileOrder | None

    def overlaps(self, start: int, end: int) -> bool:
        """Say whether a time in [start, end) may be in the block."""
        return self.first < end and self.last >= start


class RowCache:
    """Keeps parsed rows of blocks within a bound of memory.

    Args:
        limit: [bytes]
    """

    def __init__(self, limit: int) -> None:
        self._limit, self._used = limit, 0
        self._rows: OrderedDict[Block, Rows] = OrderedDict()

    @property
    def used(self) -> int:
        """The memory held now [bytes]."""
        return self._used

    def get(self, block: Block) -> Rows | None:
        """Return a block's rows if they are here."""
        rows = self._rows.get(block)
        if rows is not None:
            self._rows.move_to_end(block)
        return rows

    def offer(self, block: Block, rows: Rows) -> None:
        """Keep rows if there is room.

        A first pass over long files must not push out the oldest blocks: they are read next.
        """
        if self._used + rows.nbytes <= self._limit:
            self._keep(block, rows)

    def put(self, block: Block, rows: Rows) -> None:
        """Keep rows, at the cost of those that were used longest ago."""
        if rows.nbytes > self._limit:
            return
        while self._used + rows.nbytes > self._limit:
            self._used -= self._rows.popitem(last=False)[1].nbytes
        self._keep(block, rows)

    def drop(self, block: Block) -> Rows | None:
        """Forget a block; return the rows that were kept for it."""
        rows = self._rows.pop(block, None)
        self._used -= rows.nbytes if rows is not None else 0
        return rows

    def clear(self) -> None:
        """Forget everything."""
        self._rows.clear()
        self._used = 0

    def _keep(self, block: Block, rows: Rows) -> None:
        self._rows[block] = rows
        self._used += rows.nbytes


@dataclass(frozen=True)
class Extent:
    """What tells one state of a file from another."""

    device: int
    inode: int
    size: int
    changed: int

    @classmethod
    def of(cls, stat: os.stat_result) -> Extent:
        """Take it from a file's status."""
        return cls(stat.st_dev, stat.st_ino, stat.st_size, stat.st_mtime_ns)


class IndexedFile:
    """One file and the blocks found in it so far.

    Args:
        file: the file.
        reading: how its cells are read.
        cache: where parsed rows are kept.
    """

    def __init__(self, file: ExportFile, reading: Reading, cache: RowCache) -> None:
        self.file, self._reading, self._cache = file, reading, cache
        self._packed = file.packed
        self._extent: Extent | None = None
        self.blocks: list[Block] = []
        self.error: ConnectorError | None = None
        self._forget()

    def refresh(self, problems: ProblemCount) -> None:
        """Index what is new in the file.

        Raises:
            ConnectorError: the file cannot be read, or has not the columns it should have.
            FileNotFoundError: the file has gone.
        """
        stat = _status(self.file.path)
        extent = Extent.of(stat)
        quiet = time.time() - stat.st_mtime > _SETTLED_AFTER
        if extent == self._extent and not (self._waiting and quiet):
            return
        self.error = None
        try:
            with open_export(self.file) as file:
                if not self._goes_on(extent, file):
                    self._forget()
                self._drop_unfinished()
                self._extend(file, extent.size, problems, quiet=quiet or self._packed)
                self._remember(file)
        except FileNotFoundError:
            raise
        except OSError as error:
            self._forget()
            self._extent, self.error = None, unreadable(self.file, error)
            raise self.error from error
        except ConnectorError as error:
            self._forget()
            self._extent, self.error = extent, error
            raise
        self._extent = extent

    def rows(self, blocks: Sequence[Block]) -> Iterator[Rows]:
        """Yield the rows of blocks, from memory or by parsing them again.

        The file is opened once and read forward: a packed file can only be unpacked from its start.
        """
        with contextlib.ExitStack() as stack:
            opened: list[Export] = []
            for block in blocks:
                rows = self._cache.get(block)
                if rows is None:
                    try:
                        if not opened:
                            opened.append(open_export(self.file))
                            stack.callback(opened[0].close)
                        rows = self._parse_again(opened[0], block)
                    except OSError as error:
                        raise unreadable(self.file, error) from error
                    self._cache.put(block, rows)
                yield rows

    def _parse_again(self, file: Export, block: Block) -> Rows:
        # What is wrong in the block was reported when it was indexed.
        unheard = ProblemCount()
        file.seek(block.offset)
        raw = read_up_to(file, block.length, self.file.name, unheard)
        order = None if block.before is None else block.before.copy()
        return self._parser().parse(raw, block.line, unheard, order).rows

    def forget_rows(self) -> None:
        """Release what is kept in memory for this file."""
        for block in self.blocks:
            self._cache.drop(block)

    def _parser(self) -> BlockParser:
        if self._parsed_by is None:
            raise ConnectorError(f"{self.file}: the header has not been read yet")
        return self._parsed_by

    def _forget(self) -> None:
        self.forget_rows()
        self.blocks = []
        self._end, self._line = 0, 1
        self._waiting = False
        self._unfinished: Block | None = None
        self._order = FileOrder()
        self._marks = (b"", b"")
        self._encoding: Encoding | None = None
        self._parsed_by: BlockParser | None = None

    def _goes_on(self, extent: Extent, file: Export) -> bool:
        """Say whether the file is the one that was indexed, with more at its end."""
        known = self._extent
        if known is None or self._packed or not self._end:
            return False
        if (known.device, known.inode) != (extent.device, extent.inode):
            return False
        if extent.size < known.size or (
            extent.size == known.size and extent.changed != known.changed
        ):
            return False
        return self._read_marks(file) == self._marks

    def _remember(self, file: Export) -> None:
        self._marks = (b"", b"") if self._packed else self._read_marks(file)

    def _read_marks(self, file: Export) -> tuple[bytes, bytes]:
        size = min(_MARK, self._end)
        file.seek(0)
        head = file.read(size)
        file.seek(self._end - size)
        return head, file.read(size)

    def _drop_unfinished(self) -> None:
        if self._unfinished is not None:
            self._cache.drop(self._unfinished)
            self.blocks.remove(self._unfinished)
            self._unfinished = None

    def _extend(self, file: Export, size: int, problems: ProblemCount, *, quiet: bool) -> None:
        file.seek(self._end)
        raw = b""
        at_end = False
        while not at_end:
            wanted = BLOCK if self._packed else min(BLOCK, size - self._end - len(raw))
            more = read_up_to(file, wanted, self.file.name, problems)
            at_end = len(more) < BLOCK
            raw += more
            if self._parsed_by is None:
                header = self._start(raw, problems)
                if header is None:
                    continue
                raw = raw[header.body :]
            cut = max(line_end(raw, cast("Encoding", self._encoding), last=True), 0)
            if cut:
                self._add(raw[:cut], problems)
            raw = raw[cut:]
            if len(raw) > _LINE_WITHIN:
                raise ConnectorError(
                    f"{self.file}: no line ends within {_LINE_WITHIN >> 20} MB after line "
                    f"{self._line - 1}; correct encoding, or export it again"
                )
        self._waiting = bool(raw) and not quiet
        if raw and quiet and self._parsed_by is not None:
            order = self._order.copy()
            self._unfinished = self._block(raw, problems)
            self._order = order  # the line is read again when it has its end
            self.blocks.append(self._unfinished)

    def _start(self, raw: bytes, problems: ProblemCount) -> Header | None:
        options = self._reading.options
        encoding = detect_encoding(options.encoding, raw, str(self.file))
        header = read_header(raw, options, encoding)
        if header is None:
            if len(raw) > _HEADER_WITHIN:
                raise ConnectorError(
                    f"{self.file}: no header row within {_HEADER_WITHIN >> 20} MB; "
                    "correct skip_lines or encoding"
                )
            return None
        check_columns(header, options, str(self.file))
        twice = {name for name in header.columns if name and header.columns.count(name) > 1}
        examples = (Example("header", name[:40]) for name in sorted(twice))
        problems.add(self.file.name, _TWICE, len(twice), examples)
        self._encoding = encoding
        self._parsed_by = BlockParser(self._reading, header, encoding, self.file.name)
        self._end, self._line = header.body, header.lines + 1
        return header

    def _add(self, raw: bytes, problems: ProblemCount) -> None:
        block = self._block(raw, problems)
        self._end += block.length
        self._line += block.lines
        last = self.blocks[-1] if self.blocks else None
        # A file that grows line by line must not end up as thousands of tiny blocks.
        if last is not None and last.length + block.length <= BLOCK:
            self.blocks[-1] = self._merged(last, block)
        else:
            self.blocks.append(block)
            self._settle(last)

    def _settle(self, block: Block | None) -> None:
        """Drop what a block that cannot grow any more does not need."""
        if block is not None and not block.late:
            block.before = None

    def _block(self, raw: bytes, problems: ProblemCount) -> Block:
        before = self._order.copy()
        parsed = self._parser().parse(raw, self._line, problems, self._order)
        block = _block_of(parsed, self._end, len(raw), self._line, before)
        self._cache.offer(block, parsed.rows)
        return block

    def _merged(self, one: Block, other: Block) -> Block:
        rows = self._cache.drop(one), self._cache.drop(other)
        seam = one.last <= other.first or one.first > one.last or other.first > other.last
        starts = [part.first for part in (one, other) if part.first <= part.last]
        block = Block(
            offset=one.offset,
            length=one.length + other.length,
            line=one.line,
            lines=one.lines + other.lines,
            first=min(starts, default=one.first),
            last=max(one.last, other.last),
            doubled=one.doubled or other.doubled,
            ordered=one.ordered and other.ordered and seam,
            late=one.late or other.late,
            before=one.before,
        )
        if rows[0] is not None and rows[1] is not None:
            self._cache.offer(block, join_rows([rows[0], rows[1]]))
        return block


def _status(path: Path) -> os.stat_result:
    try:
        return path.stat()
    except FileNotFoundError:
        raise
    except OSError as error:
        raise unreadable(path, error) from error


def _block_of(parsed: Parsed, offset: int, length: int, line: int, before: FileOrder) -> Block:
    return Block(
        offset=offset,
        length=length,
        line=line,
        lines=parsed.lines,
        first=parsed.span.first,
        last=parsed.span.last,
        doubled=parsed.span.doubled,
        ordered=parsed.span.ordered,
        late=parsed.late,
        before=before,
    )
