"""A quick look at CSV exports: what tags and what span of time they hold."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from connectors.base import ConnectorError
from connectors.csv_files import open_export, read_up_to
from connectors.csv_header import check_columns, detect_encoding, line_end, read_header
from connectors.csv_index import BLOCK
from connectors.csv_parse import BlockParser, Reading, TagBook
from connectors.paths import unreadable

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from connectors.csv_files import Export, ExportFile
    from connectors.csv_header import Encoding
    from connectors.csv_options import CsvOptions
    from connectors.csv_parse import Span
    from connectors.tidy import ProblemCount

__all__ = ["Look", "look_at"]

_WHOLE = 64 << 20
"""[bytes] The newest files are read whole up to this size together, the others at both ends."""

_END = 1 << 18


@dataclass(frozen=True)
class Look:
    """What a quick look found.

    Attributes:
        tags: names, sorted.
        first, last: [us] the span of time, empty when ``first`` > ``last``.
        files: how many files there are.
        size: their size together [bytes].
        whole: every byte was looked at.
    """

    tags: tuple[str, ...]
    first: int
    last: int
    files: int
    size: int
    whole: bool


def look_at(exports: Sequence[ExportFile], options: CsvOptions, problems: ProblemCount) -> Look:
    """Look at files.

    Args:
        exports: the files, oldest first.
        options: how they are written.
        problems: what is passed over is counted here.

    Raises:
        ConnectorError: none of the files can be understood.
    """
    book = TagBook()
    book.want_all()
    reading = Reading.of(options, book)
    spans: list[Span] = []
    errors: list[ConnectorError] = []
    size, whole = 0, True
    for export in reversed(exports):
        try:
            length = export.size or export.path.stat().st_size
            size += length
            short = size > _WHOLE
            whole = whole and not short
            with open_export(export) as file:
                found = _FileLook(export, reading, problems).spans(file, length, ends_only=short)
        except (ConnectorError, OSError) as failed:
            error = unreadable(export, failed) if isinstance(failed, OSError) else failed
            errors.append(error)
            problems.add(str(export), f"file passed over: {error}", 1)
            continue
        spans += [span for span in found if span.first <= span.last]
    if errors and len(errors) == len(exports):
        raise errors[0]
    return Look(
        tags=tuple(sorted(name for name in book.names if name)),
        first=min((span.first for span in spans), default=1),
        last=max((span.last for span in spans), default=0),
        files=len(exports),
        size=size,
        whole=whole,
    )


class _FileLook:
    def __init__(self, export: ExportFile, reading: Reading, problems: ProblemCount) -> None:
        self._export, self._reading, self._problems = export, reading, problems
        self._packed = export.packed
        self._line = 1

    def spans(self, file: Export, size: int, *, ends_only: bool) -> list[Span]:
        """Return the spans of time of the pieces that were read."""
        raw = self._read(file, _END if ends_only else BLOCK)
        encoding = detect_encoding(self._reading.options.encoding, raw, str(self._export))
        header = read_header(raw, self._reading.options, encoding)
        if header is None:
            return []
        check_columns(header, self._reading.options, str(self._export))
        parser = BlockParser(self._reading, header, encoding, self._export.name)
        if self._reading.options.layout == "wide":
            times = ("", *self._reading.options.time_columns)
            self._reading.book.codes([name for name in header.columns if name not in times])
        self._line = header.lines + 1
        raw = raw[header.body :]
        if ends_only:
            parts = [raw[: max(line_end(raw, encoding, last=True), 0)]]
            parts.append(self._tail(file, size, encoding))
            return [self._parse(parser, part) for part in parts]
        return list(self._all(parser, file, raw, encoding))

    def _all(
        self, parser: BlockParser, file: Export, raw: bytes, encoding: Encoding
    ) -> Iterator[Span]:
        while raw:
            cut = max(line_end(raw, encoding, last=True), 0)
            yield self._parse(parser, raw[:cut])
            more = self._read(file, BLOCK)
            if not more:
                return
            raw = raw[cut:] + more

    def _parse(self, parser: BlockParser, raw: bytes) -> Span:
        parsed = parser.parse(raw, self._line, self._problems)
        self._line += parsed.lines
        return parsed.span

    def _read(self, file: Export, size: int) -> bytes:
        return read_up_to(file, size, self._export.name, self._problems)

    def _tail(self, file: Export, size: int, encoding: Encoding) -> bytes:
        """Return whole lines at the end of the file, none when they have been read already."""
        if self._packed:
            tail = b""
            while more := self._read(file, BLOCK):
                tail = (tail + more)[-_END:]
        else:
            width = len(encoding.newline)
            start = max(file.tell(), size - _END) // width * width
            file.seek(start)
            tail = file.read(_END)
        return tail[max(line_end(tail, encoding), 0) :]
