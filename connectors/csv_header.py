"""The top of a CSV file: its encoding, its header, and where the readings begin."""

from __future__ import annotations

import codecs
import csv
import difflib
from dataclasses import dataclass
from typing import TYPE_CHECKING

from connectors.base import ConnectorError

if TYPE_CHECKING:
    from connectors.csv_options import CsvOptions

__all__ = [
    "Encoding",
    "Header",
    "HeaderError",
    "cells_of",
    "check_columns",
    "detect_encoding",
    "line_end",
    "read_header",
]


class HeaderError(ConnectorError):
    """A file's header does not have a column that the site file names."""


@dataclass(frozen=True)
class Encoding:
    """How a file's bytes become text.

    Attributes:
        name: the codec, without a byte order mark.
        start: the length of the byte order mark.
        newline: the bytes that end a line.
    """

    name: str
    start: int
    newline: bytes

    def to_utf8(self, raw: bytes) -> bytes:
        """Return whole lines as UTF-8; what cannot be decoded becomes U+FFFD."""
        if self.name == "utf-8" or (self.newline == b"\n" and raw.isascii()):
            return raw
        return raw.decode(self.name, errors="replace").encode()


@dataclass(frozen=True)
class Header:
    """A file's header row.

    Attributes:
        columns: the headers, stripped of blanks.
        body: the offset of the first byte after the header and the rows that belong to it.
        lines: the number of lines before that.
    """

    columns: tuple[str, ...]
    body: int
    lines: int

    def position(self, name: str) -> int:
        """Return the place of a column; the last one when a header occurs twice."""
        return len(self.columns) - 1 - self.columns[::-1].index(name)


def detect_encoding(name: str, head: bytes, file: str) -> Encoding:
    """Settle the encoding of a file from its first bytes.

    Args:
        name: the codec that the site file names.
        head: the first bytes.
        file: the file's name for the message.

    Raises:
        ConnectorError: the file starts with the mark of another encoding.
    """
    marks = (codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)
    if name == "utf-16":
        codec = "utf-16-be" if head.startswith(codecs.BOM_UTF16_BE) else "utf-16-le"
        return Encoding(codec, 2 if head.startswith(marks) else 0, "\n".encode(codec))
    if name.startswith("utf-16"):
        return Encoding(name, 2 if head.startswith(marks) else 0, "\n".encode(name))
    if head.startswith(marks):
        raise ConnectorError(
            f"{file} is written in UTF-16, but the source's encoding is '{name}'; "
            "set encoding = 'utf-16'"
        )
    start = len(codecs.BOM_UTF8) if head.startswith(codecs.BOM_UTF8) else 0
    return Encoding("utf-8" if name == "utf-8-sig" else name, start, b"\n")


def line_end(raw: bytes, encoding: Encoding, start: int = 0, *, last: bool = False) -> int:
    """Return the offset after the first (or last) line end at or after ``start``, -1 for none.

    ``raw`` starts on a whole character, so in UTF-16 a line end has an even offset.
    """
    width = len(encoding.newline)
    find = raw.rfind if last else raw.find
    low, high = start, len(raw)
    while (at := find(encoding.newline, low, high)) >= 0:
        if at % width == 0:
            return at + width
        low, high = (start, at + width - 1) if last else (at + 1, len(raw))
    return -1


def read_header(head: bytes, options: CsvOptions, encoding: Encoding) -> Header | None:
    """Read the header from a file's first bytes.

    Lines that are empty or a comment do not count as the header or as a row after it, but every
    line counts for ``skip_lines``.

    Returns:
        The header, or None when the bytes end before the last of its rows.
    """
    # The mark is as long as a whole number of characters of its encoding, 3 bytes of UTF-8 or 2.
    at, lines = encoding.start, 0
    columns: tuple[str, ...] | None = None
    rows_left = options.rows_after_header
    while columns is None or rows_left:
        end = line_end(head, encoding, at)
        if end < 0:
            return None
        text = head[at:end].decode(encoding.name, errors="replace").strip("\r\n")
        at, lines = end, lines + 1
        if lines <= options.skip_lines or not text.strip() or _is_comment(text, options.comment):
            continue
        if columns is None:
            columns = cells_of(text, options.delimiter)
        else:
            rows_left -= 1
    return Header(columns, at, lines)


def cells_of(line: str, delimiter: str) -> tuple[str, ...]:
    """Return a line's cells without blanks around them; a line that is no CSV is cut all the same.

    A carriage return inside a line, or a cell of more than 128 kB, is what the parser refuses.
    """
    try:
        cells = next(csv.reader([line], delimiter=delimiter), [])
    except csv.Error:
        cells = line.split(delimiter)
    return tuple(cell.strip() for cell in cells)


def check_columns(header: Header, options: CsvOptions, file: str) -> None:
    """See that a header has the columns that the site file names, each once.

    Raises:
        HeaderError: a column is absent or there twice.
    """
    wanted = [("time_column", name) for name in options.time_columns]
    if options.layout == "long":
        keys = ["tag_column", "value_column"] + ["quality_column"] * bool(options.quality_column)
        wanted += [(key, getattr(options, key)) for key in keys]
    for key, name in wanted:
        found = header.columns.count(name)
        if found > 1:
            raise HeaderError(f"{file}: column '{name}' ({key}) occurs {found} times in the header")
        if found:
            continue
        near = difflib.get_close_matches(name, header.columns, n=1, cutoff=0.4)
        hint = f"; nearest is '{near[0]}'" if near else ""
        shown = ", ".join(repr(column) for column in header.columns[:30])
        raise HeaderError(
            f"{file} has no column '{name}' ({key}){hint}; columns found: {shown}. "
            "Correct the key, or delimiter, skip_lines and encoding if the columns look wrong"
        )


def _is_comment(text: str, prefix: str) -> bool:
    return bool(prefix) and text.startswith(prefix)
