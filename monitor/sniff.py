"""Look at a CSV export that nobody has described yet, and propose its part of a site file.

A proposal, never more: what the file does not say (the time zone, most units) is left for a person
and named. The proposal is tried out with the real connector before it is shown.
"""

from __future__ import annotations

import csv
import datetime as dt
import gzip
import io
import json
import re
from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING

import connectors
from monitor.errors import WrongUseError
from monitor.site.units import UnitError, parse_unit

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence
    from pathlib import Path

    from connectors.base import Probe

__all__ = ["Proposal", "sniff"]

_HEAD = 1 << 18
_ROWS = 400
_MOST = 0.8
"""Share of a column's cells that must agree with what the column is taken for."""
_DELIMITERS = (";", "\t", ",", "|")
_QUALITY = {
    "good", "bad", "uncertain", "ok", "questionable", "suspect", "192", "64", "216", "comm fail",
    "no data", "valid", "invalid",
}  # fmt: skip
_DATE = re.compile(r"^(\d{1,2})[./-](\d{1,2})[./-](\d{2,4})")
_CLOCK = re.compile(r"^\d{1,2}:\d{2}(:\d{2})?([.,]\d+)?(\s?[AaPp][Mm])?$")
_UNIT_IN_HEADER = re.compile(r"^.+?\s*\[(?P<unit>[^\]]+)\]$")


@dataclass(frozen=True)
class Proposal:
    """What an export seems to be.

    Attributes:
        options: keys of the [[source]] table, in order.
        units: by tag; empty where the export does not say.
        probe: what the connector finds with these options.
        open_points: what a person has to settle.
    """

    options: dict[str, object]
    units: dict[str, str]
    probe: Probe
    open_points: tuple[str, ...]

    def toml(self) -> str:
        """The proposal as a piece of a site file."""
        lines = [f"# {self.probe.detail}"]
        if self.probe.first is not None and self.probe.last is not None:
            lines.append(
                f"# {self.probe.first:%Y-%m-%d %H:%M} to {self.probe.last:%Y-%m-%d %H:%M} UTC"
            )
        lines += [f"# to settle: {point}" for point in self.open_points]
        lines += ["[[source]]", 'id = "export"', 'kind = "csv"']
        lines += [f"{key} = {_toml(value)}" for key, value in self.options.items()]
        for tag in self.probe.tags:
            lines += ["", "[[tag]]", f"name = {_toml(tag)}", 'source = "export"']
            lines.append(f"unit = {_toml(self.units.get(tag, ''))}")
        return "\n".join(lines)


@dataclass(frozen=True)
class _Table:
    header: list[str]
    skipped: int
    rows: list[list[str]]

    def column(self, index: int) -> list[str]:
        return [row[index].strip() for row in self.rows if len(row) > index]


def sniff(path: Path) -> Proposal:
    """Propose a [[source]] table and tags for an export.

    Args:
        path: a CSV file, packed with gzip or not.

    Raises:
        WrongUseError: the file cannot be read, or is no table with times.
        ConnectorError: the connector cannot read it after all.
    """
    encoding, text = _text(path)
    delimiter = _delimiter(text)
    table = _table(text, delimiter)
    open_points: list[str] = []
    times, time_format = _times(table, open_points)
    after = _rows_after_header(table, times)
    body = _Table(table.header, table.skipped, table.rows[after:])
    options: dict[str, object] = {"path": path.name}
    options |= _layout(body, times)
    named = [table.header[i] for i in times]
    options["time_column"] = named[0] if len(named) == 1 else named
    options["time_format"] = time_format
    options |= {"encoding": encoding} if encoding != "utf-8" else {}
    options |= {"delimiter": "tab" if delimiter == "\t" else delimiter} if delimiter != "," else {}
    options |= _marks(body, times)
    options |= {"skip_lines": table.skipped} if table.skipped else {}
    options |= {"rows_after_header": after} if after else {}
    if not _have_offsets(body, times) and not time_format.startswith("epoch"):
        open_points.append("the times have no offset; set time_zone (UTC is taken until then)")
    units = _units(table, after) if options["layout"] == "wide" else {}
    connector = connectors.open_source("csv", options, path.parent)
    try:
        probe = connector.probe()
    finally:
        connector.close()
    without = [tag for tag in probe.tags if not units.get(tag)]
    if without:
        tags = "1 tag" if len(without) == 1 else f"{len(without)} tags"
        open_points.append(f"the unit of {tags}, for example 'bar(g)' or 'degC'")
    return Proposal(options, units, probe, tuple(open_points))


def _text(path: Path) -> tuple[str, str]:
    try:
        with path.open("rb") as packed:
            head = (gzip.GzipFile(fileobj=packed) if path.suffix == ".gz" else packed).read(_HEAD)
    except (OSError, EOFError) as error:
        reason = getattr(error, "strerror", None) or error
        raise WrongUseError(f"{path}: cannot be read ({reason})") from error
    if head.startswith((b"\xff\xfe", b"\xfe\xff")):
        return "utf-16", head[: len(head) // 2 * 2].decode("utf-16", errors="ignore")
    try:
        # The cut may have gone through a character.
        return "utf-8", head[: head.rfind(b"\n") + 1 or None].decode("utf-8-sig")
    except UnicodeDecodeError:
        return "cp1252", head.decode("cp1252", errors="replace")


def _delimiter(text: str) -> str:
    lines = [line for line in text.splitlines()[:_ROWS] if line.strip()]

    def steady(mark: str) -> tuple[float, int]:
        counts = Counter(line.count(mark) for line in lines)
        number, times = max(
            ((n, c) for n, c in counts.items() if n), key=lambda pair: pair[1], default=(0, 0)
        )
        return times / max(len(lines), 1), number

    best = max(_DELIMITERS, key=lambda mark: (steady(mark)[0] > _MOST, steady(mark)[0]))
    if not steady(best)[1]:
        raise WrongUseError("no table: its lines are not cut by ; , tab or |")
    return best


def _table(text: str, delimiter: str) -> _Table:
    rows = list(csv.reader(io.StringIO(text), delimiter=delimiter))
    widths = Counter(len(row) for row in rows if any(cell.strip() for cell in row))
    width = widths.most_common(1)[0][0]
    start = next(i for i, row in enumerate(rows) if len(row) == width and row[0].strip())
    header = [cell.strip() for cell in rows[start]]
    body = [row for row in rows[start + 1 : start + 1 + _ROWS] if any(c.strip() for c in row)]
    if not body:
        raise WrongUseError("no table: there is no row after the header")
    return _Table(header, start, body)


def _times(table: _Table, open_points: list[str]) -> tuple[list[int], str]:
    """The column(s) of times, and how they are written."""
    ways: tuple[tuple[str, Callable[[str], bool]], ...] = (
        ("iso", _is_iso),
        ("day_first", lambda cell: _DATE.match(cell) is not None),
        ("epoch_s", lambda cell: _is_epoch(cell, 1)),
        ("epoch_ms", lambda cell: _is_epoch(cell, 1e3)),
        ("epoch_us", lambda cell: _is_epoch(cell, 1e6)),
    )
    for index in range(len(table.header)):
        cells = [cell for cell in table.column(index) if cell]
        for name, fits in ways:
            if cells and sum(map(fits, cells)) > _MOST * len(cells):
                clock = _clock_column(table, index, cells)
                found = [index] if clock is None else [index, clock]
                return found, _day_or_month(cells, open_points) if name == "day_first" else name
    raise WrongUseError(
        f"no column holds times; the header is {', '.join(table.header[:8])}; write the [[source]] "
        "table by hand, with a time_format of its own"
    )


def _clock_column(table: _Table, index: int, dates: Sequence[str]) -> int | None:
    """A column of times of day beside a column of bare dates."""
    if any(":" in cell for cell in dates):
        return None
    for other in range(len(table.header)):
        cells = [cell for cell in table.column(other) if cell]
        if other != index and cells and all(_CLOCK.match(cell) for cell in cells):
            return other
    return None


def _day_or_month(cells: Sequence[str], open_points: list[str]) -> str:
    pairs = [(int(m[1]), int(m[2])) for m in map(_DATE.match, cells) if m]
    if any(second > 12 for _, second in pairs):  # noqa: PLR2004 - months
        return "month_first"
    if not any(first > 12 for first, _ in pairs):  # noqa: PLR2004
        open_points.append("day or month first? time_format = 'day_first' is a guess")
    return "day_first"


def _is_iso(cell: str) -> bool:
    try:
        dt.datetime.fromisoformat(cell)
    except ValueError:
        return False
    return "-" in cell


def _is_epoch(cell: str, per_second: float) -> bool:
    # From 1995 to 2050: earlier and later, a number is more likely a reading.
    try:
        return 0.79e9 < float(cell) / per_second < 2.53e9  # noqa: PLR2004
    except ValueError:
        return False


def _rows_after_header(table: _Table, times: Sequence[int]) -> int:
    """Rows of units or texts before the first time."""
    for count, row in enumerate(table.rows):
        cell = row[times[0]].strip() if len(row) > times[0] else ""
        if any(c.isdigit() for c in cell):
            return count
    return 0


def _layout(table: _Table, times: Sequence[int]) -> dict[str, object]:
    """Long when a text column repeats names; wide when all columns but the time are numbers."""
    quality = tag = value = None
    for index in range(len(table.header)):
        cells = [cell for cell in table.column(index) if cell]
        if index in times or not cells:
            continue
        words = {cell.casefold() for cell in cells}
        if words <= _QUALITY:
            quality = index if quality is None else quality
        elif sum(map(_is_number, cells)) < (1 - _MOST) * len(cells):
            tag = index if tag is None else tag
        elif value is None:
            value = index
    if tag is None or value is None:
        return {"layout": "wide"}
    named: dict[str, object] = {
        "layout": "long",
        "tag_column": table.header[tag],
        "value_column": table.header[value],
    }
    return named | ({} if quality is None else {"quality_column": table.header[quality]})


def _marks(table: _Table, times: Sequence[int]) -> dict[str, object]:
    """Decimal comma, and points or blanks between thousands, from the numbers themselves."""
    cells = [
        cell
        for index in range(len(table.header))
        if index not in times
        for cell in table.column(index)
        if _is_number(cell)
    ]
    both = [cell for cell in cells if "," in cell and "." in cell]
    if both:
        last = max(",.", key=both[0].rfind)
        return {"decimal": last, "thousands": "," if last == "." else "."}
    return {"decimal": ","} if any("," in cell for cell in cells) else {}


def _is_number(cell: str) -> bool:
    return bool(re.fullmatch(r"[-+]?[\d.,\u00a0']+([eE][-+]?\d+)?", cell))


def _have_offsets(table: _Table, times: Sequence[int]) -> bool:
    cells = [cell for cell in table.column(times[-1]) if cell]
    return all(re.search(r"(Z|[+-]\d\d:?\d\d)$", cell) for cell in cells)


def _units(table: _Table, after: int) -> dict[str, str]:
    """Units of a wide export: in a row below the header, or in brackets in the header itself."""
    found: dict[str, str] = {}
    for index, name in enumerate(table.header):
        match = _UNIT_IN_HEADER.match(name)
        given = [row[index].strip() for row in table.rows[:after] if len(row) > index]
        for text in [*given, *([match["unit"]] if match else [])]:
            try:
                found[name] = parse_unit(text).text
            except UnitError:
                continue
    return found


def _toml(value: object) -> str:
    """A TOML value: basic strings, numbers and lists are written as in JSON."""
    return json.dumps(value, ensure_ascii=False)
