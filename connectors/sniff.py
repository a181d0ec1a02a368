"""Look at an export that nobody has described yet, and propose its part of a site file.

A proposal, never more: it is tried out with the connector that will read it, and what the file does
not say (the time zone, most units) is named for a person to settle.
"""

from __future__ import annotations

import csv
import io
import json
from dataclasses import dataclass
from typing import TYPE_CHECKING

import pyarrow as pa
import pyarrow.parquet as pq

from connectors.base import ConnectorError
from connectors.csv_source import CsvKind
from connectors.parquet_source import ParquetKind
from connectors.paths import unreadable
from connectors.sniff_columns import columns_of, marks_of, time_columns
from connectors.sniff_text import Sheet, read_sheet
from connectors.sniff_units import needs_datum, unit_in_header, unit_row, usual_unit

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from connectors.base import Connector, Probe, SourceKind
    from connectors.sniff_columns import Columns

__all__ = ["Sniffed", "SniffedTag", "sniff"]

_ROWS = 500
_SHOWN = 5


@dataclass(frozen=True)
class SniffedTag:
    """A tag found in an export.

    Attributes:
        name: its name there.
        unit: as a site file spells it, empty where the export does not say.
        description: what the export says about it.
    """

    name: str
    unit: str = ""
    description: str = ""


@dataclass(frozen=True)
class Sniffed:
    """What an export seems to be.

    Attributes:
        kind: the kind of source.
        options: keys of the [[source]] table, in the order in which they are written.
        tags: the tags, in the order of their names.
        probe: what the connector finds with these options.
        reasons: what the proposal rests on.
        open_points: what a person has to settle.
    """

    kind: str
    options: dict[str, object]
    tags: tuple[SniffedTag, ...]
    probe: Probe
    reasons: tuple[str, ...]
    open_points: tuple[str, ...]

    def source_table(self, source: str = "export") -> str:
        """Return the [[source]] table as TOML, notes as comments before it."""
        lines = [f"# {self.probe.detail}"]
        if self.probe.first is not None and self.probe.last is not None:
            first, last = self.probe.first, self.probe.last
            lines.append(f"# {first:%Y-%m-%d %H:%M} to {last:%Y-%m-%d %H:%M} UTC")
        lines += [f"# {reason}" for reason in map(_on_one_line, self.reasons)]
        lines += [f"# to settle: {point}" for point in map(_on_one_line, self.open_points)]
        lines += ["[[source]]", f"id = {_toml(source)}", f"kind = {_toml(self.kind)}"]
        lines += [f"{key} = {_toml(value)}" for key, value in self.options.items()]
        return "\n".join(lines) + "\n"

    def tag_list(self, source: str = "export") -> str:
        """Return the tag list as CSV, as ``tag_lists`` in a site file takes it."""
        text = io.StringIO(newline="")
        # RFC 4180's line ends: with others, a carriage return in a name would not be quoted.
        writer = csv.writer(text, lineterminator="\r\n")
        writer.writerow(["name", "source", "unit", "description"])
        writer.writerows([tag.name, source, tag.unit, tag.description] for tag in self.tags)
        return text.getvalue()


def sniff(path: Path) -> Sniffed:
    """Propose a [[source]] table and a tag list for an export.

    Args:
        path: a CSV file (packed by gzip or zip or not), or a Parquet file.

    Raises:
        ConnectorError: the file cannot be read, or has no table with times in it.
    """
    if _is_parquet(path):
        sheet, kind = _parquet_sheet(path), "parquet"
    else:
        sheet, kind = read_sheet(path), "csv"
    if not sheet.rows:
        raise ConnectorError(f"{path}: no table: there is no row after the header")
    columns = columns_of(sheet.header, sheet.rows, sheet.times)
    open_points: list[str] = []
    options: dict[str, object] = {"path": path.name}
    options |= _columns(sheet, columns)
    options |= sheet.options
    if kind == "csv":
        options |= _marks(sheet, columns, open_points)
    open_points += _open_points(sheet, columns)
    source: SourceKind = CsvKind() if kind == "csv" else ParquetKind()
    # The pattern characters in a file's own name are no pattern: a file of that name is there.
    connector: Connector = source.open(source.options.model_validate(options), path.parent)
    try:
        probe = connector.probe()
    finally:
        connector.close()
    tags = _tags(sheet, columns, probe.tags)
    open_points += _units_to_settle(tags)
    open_points += [f"{p.count} × {p.what} ({p.where})" for p in probe.problems]
    return Sniffed(kind, options, tags, probe, _reasons(sheet, columns), tuple(open_points))


def _columns(sheet: Sheet, columns: Columns) -> dict[str, object]:
    header, times = sheet.header, sheet.times
    named = [header[at] for at in times.at]
    found: dict[str, object] = {"layout": columns.layout}
    found["time_column"] = named[0] if len(named) == 1 else named
    if times.time_format:
        found["time_format"] = times.time_format
    if columns.tag is not None and columns.value is not None:
        found |= {"tag_column": header[columns.tag], "value_column": header[columns.value]}
    if columns.quality is not None:
        found["quality_column"] = header[columns.quality]
        if columns.quality_kind not in {"", "words"}:
            found["quality_kind"] = columns.quality_kind
    return found


def _marks(sheet: Sheet, columns: Columns, open_points: list[str]) -> dict[str, object]:
    skip = [*sheet.times.at, *(at for at in (columns.tag, columns.quality) if at is not None)]
    if sheet.times.time_format.startswith("serial"):
        skip.remove(sheet.times.at[0])
    decimal, thousands, doubt = marks_of(sheet.rows, skip)
    open_points += [doubt] if doubt else []
    found: dict[str, object] = {} if decimal == "." else {"decimal": decimal}
    return found | ({"thousands": thousands} if thousands else {})


def _open_points(sheet: Sheet, columns: Columns) -> list[str]:
    points = [sheet.times.doubt] if sheet.times.doubt else []
    if not sheet.times.has_offset:
        points.append("the times have no offset; set time_zone (UTC is taken until then)")
    if columns.quality is not None and not columns.quality_kind:
        cells = sorted({row[columns.quality] for row in sheet.rows})[:_SHOWN]
        points.append(
            f"quality is written as {', '.join(cells)}: say in quality_good, quality_uncertain and "
            "quality_bad what they mean (ranges such as '0-63' too), or set quality_kind"
        )
    if columns.words:
        shown = ", ".join(f"{word!r} ({count})" for word, count in columns.words[:_SHOWN])
        points.append(
            f"words in the values' place: {shown}: add those that mean no value to bad_words, and "
            "digital states to states, with their numbers"
        )
    return points


def _reasons(sheet: Sheet, columns: Columns) -> tuple[str, ...]:
    rows = len(sheet.rows)
    times = " and ".join(repr(sheet.header[at]) for at in sheet.times.at)
    reasons = [f"times are those of {times}, in all but a few of the first {rows} rows"]
    if columns.tag is not None:
        count = len({row[columns.tag] for row in sheet.rows})
        reasons.append(f"layout long: {count} names in {sheet.header[columns.tag]!r} there")
    else:
        reasons.append("layout wide: no column tells rows of one time apart by names")
    return tuple(reasons)


def _tags(sheet: Sheet, columns: Columns, names: Sequence[str]) -> tuple[SniffedTag, ...]:
    if columns.layout == "long":
        units: dict[str, str] = {}
        if columns.unit is not None and columns.tag is not None:
            for row in sheet.rows:
                units.setdefault(row[columns.tag], usual_unit(row[columns.unit]))
        return tuple(SniffedTag(name, units.get(name, "")) for name in names)
    at = {name: number for number, name in enumerate(sheet.header)}
    of_units = unit_row(sheet.between)
    below = sheet.between[of_units] if of_units is not None else ()
    others = [row for number, row in enumerate(sheet.between) if number != of_units]

    def tag(name: str) -> SniffedTag:
        place = at[name]
        unit = usual_unit(below[place]) if place < len(below) else ""
        texts = [row[place] for row in others if place < len(row) and row[place]]
        return SniffedTag(name, unit or unit_in_header(name), " ".join(texts))

    return tuple(tag(name) for name in names)


def _units_to_settle(tags: Sequence[SniffedTag]) -> list[str]:
    points = []
    without = [tag.name for tag in tags if not tag.unit]
    if without:
        points.append(f"the unit of {_named(without)}, for example 'bar(g)' or 'degC'")
    pressures = [tag.name for tag in tags if needs_datum(tag.unit)]
    if pressures:
        named = _named(pressures)
        points.append(f"absolute or gauge: the datum of {named}, for example 'bar(g)'")
    return points


def _named(names: Sequence[str]) -> str:
    """Name the first few of the tags, and count the others."""
    shown = ", ".join(repr(name) for name in names[:3])
    return shown if len(names) <= 3 else f"{shown} and {len(names) - 3} more"  # noqa: PLR2004


def _is_parquet(path: Path) -> bool:
    try:
        with path.open("rb") as file:
            return file.read(4) == b"PAR1"
    except OSError as error:
        raise unreadable(path, error) from error


def _parquet_sheet(path: Path) -> Sheet:
    """Take the first rows of a Parquet file as texts, so that they are judged as those of CSV."""
    try:
        with pq.ParquetFile(path) as file:
            schema = file.schema_arrow
            batch = next(file.iter_batches(_ROWS), None)
    except (pa.ArrowException, OSError) as error:
        raise ConnectorError(f"{path} is no whole Parquet file ({error})") from error
    kinds = [schema.field(at).type for at in range(len(schema.names))]
    cells = [] if batch is None else [column.to_pylist() for column in batch.columns]
    rows = tuple(
        tuple("" if c is None else str(c) for c in row) for row in zip(*cells, strict=True)
    )
    stamps = [at for at, kind in enumerate(kinds) if pa.types.is_timestamp(kind)]
    times = time_columns([tuple(schema.names), *rows]) if rows else None
    if times is None or len(times.at) > 1 or (stamps and times.at[0] not in stamps):
        raise ConnectorError(
            f"{path}: no column of times found; write the [[source]] table by hand"
        )
    return Sheet(tuple(schema.names), (), rows, times, {})


def _on_one_line(text: str) -> str:
    # Cells of the file are quoted in notes: none may end a comment and start a key.
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())


def _toml(value: object) -> str:
    """Return a TOML value: basic strings, numbers and lists are written as in JSON."""
    return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
