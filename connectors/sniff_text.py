"""The first part of an export as text: its encoding, its lines, its cells and its header."""

from __future__ import annotations

import codecs
from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING

from connectors.base import ConnectorError
from connectors.csv_files import ExportFile, open_export, read_up_to, unpack_names
from connectors.csv_header import cells_of
from connectors.paths import unreadable
from connectors.sniff_columns import time_columns
from connectors.tidy import ProblemCount

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from connectors.sniff_columns import TimeColumns

__all__ = ["Sheet", "read_sheet"]

_HEAD = 1 << 19
_SQLITE = b"SQLite format 3\x00"
"""Begins every file of that database (its file format, section 1.3.1)."""
_MOST_LINES = 2_000
_DELIMITERS = (";", "\t", "|", ",")
"""In this order: commas may be decimal marks where one of the others cuts the lines."""

_COMMENTS = ("#", "//", "!", "%")
_MOST = 0.8
"""Share of the lines that must agree with what the table is taken for."""


@dataclass(frozen=True)
class Sheet:
    """A table of texts.

    Attributes:
        header: the headers.
        between: the rows between the header and the first reading.
        rows: the rows of readings, as far as they were looked at.
        times: the columns of times.
        options: the keys of a [[source]] table that the text itself tells.
    """

    header: tuple[str, ...]
    between: tuple[tuple[str, ...], ...]
    rows: tuple[tuple[str, ...], ...]
    times: TimeColumns
    options: dict[str, object]


def read_sheet(path: Path) -> Sheet:
    """Find the table in an export's first part.

    Raises:
        ConnectorError: the file cannot be read, or there is no table with times in it.
    """
    encoding, text = _text(path)
    lines = [line.rstrip("\r") for line in text.split("\n")[:_MOST_LINES]]
    options: dict[str, object] = {} if encoding == "utf-8" else {"encoding": encoding}
    for comment in _comments(lines):
        for delimiter in _DELIMITERS:
            sheet = _sheet(lines, delimiter, comment, options)
            if sheet is not None:
                return sheet
    raise ConnectorError(
        f"{path}: no table found: no column of times in lines cut by ; tab | or , below a header; "
        "write the [[source]] table by hand, with a time_format of its own"
    )


def _text(path: Path) -> tuple[str, str]:
    export = next(iter(unpack_names([path])), ExportFile(path))
    try:
        with open_export(export) as file:
            head = read_up_to(file, _HEAD, export.name, ProblemCount())
    except OSError as error:
        raise unreadable(path, error) from error
    if not head.strip():
        raise ConnectorError(f"{path} is empty")
    if head.startswith(_SQLITE):
        raise ConnectorError(
            f"{path} is a SQLite database; only CSV and Parquet exports are looked into: write a "
            f"[[source]] table with kind = 'sql' and url = 'sqlite:///{path}'"
        )
    codec = _encoding(head)
    text = head.decode("utf-8-sig" if codec == "utf-8" else codec, errors="replace")
    # The last line may be cut, and the cut may go through a character.
    whole = text if len(head) < _HEAD else text[: text.rfind("\n") + 1]
    return codec, whole.lstrip("\ufeff")


def _encoding(head: bytes) -> str:
    if head.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        return "utf-16"
    even, odd = head[0:4096:2].count(0), head[1:4096:2].count(0)
    if max(even, odd) > len(head[:4096]) // 8:  # Latin letters in UTF-16: every other byte is zero
        return "utf-16-be" if even > odd else "utf-16-le"
    try:
        codecs.getincrementaldecoder("utf-8")().decode(head)  # not final: the end may be cut
    except UnicodeDecodeError:
        return "cp1252"
    return "utf-8"


def _comments(lines: Sequence[str]) -> list[str]:
    """Return the marks of comments to try, none last: a header may start with such a mark."""
    return [mark for mark in _COMMENTS if any(line.startswith(mark) for line in lines)] + [""]


def _sheet(
    lines: Sequence[str], delimiter: str, comment: str, options: dict[str, object]
) -> Sheet | None:
    cells = {
        number: cells_of(line, delimiter)
        for number, line in enumerate(lines)
        if line.strip() and not (comment and line.startswith(comment))
    }
    if not cells:
        return None
    width, count = Counter(map(len, cells.values())).most_common(1)[0]
    like = {number: row for number, row in cells.items() if len(row) == width}
    if width == 1 or (count < _MOST * len(cells) and count < len(cells) - 20):
        return None
    times = time_columns(list(like.values()))
    if times is None:
        return None
    first = next(number for number, row in like.items() if times.in_row(row))
    header = _header(like, first)
    if header is None:
        return None
    between = [number for number in cells if header < number < first]
    before = [number for number in cells if number < header]
    found = dict(options)
    found |= {"delimiter": "tab" if delimiter == "\t" else delimiter} if delimiter != "," else {}
    found |= {"comment": comment} if comment else {}
    found |= {"skip_lines": header} if before else {}
    found |= {"rows_after_header": len(between)} if between else {}
    rows = tuple(row for number, row in like.items() if number >= first)
    return Sheet(like[header], tuple(cells[n] for n in between), rows, times, found)


def _header(like: dict[int, tuple[str, ...]], first: int) -> int | None:
    """Return the line of the header: the first that names most columns, each once."""
    candidates = [number for number in like if number < first]
    return max(
        candidates, key=lambda number: (len({c for c in like[number] if c}), -number), default=None
    )
