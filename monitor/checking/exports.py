"""What a source's own file says against the keys that the site file gives it.

The same look as `lostwork check --sniff` takes: where the file's text tells of another decimal mark
or order of day and month, both are named. Only CSV leaves such things open.
"""

from __future__ import annotations

import contextlib
from typing import TYPE_CHECKING

import connectors
from connectors.base import ConnectorError
from connectors.paths import matching_files
from connectors.sniff_text import read_sheet

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping
    from pathlib import Path

    from monitor.site.models import Source

__all__ = ["doubts", "texts_of"]

_DEFAULTS = {
    "decimal": ".",
    "thousands": "",
    "time_format": "iso",
    "delimiter": ",",
    "layout": "long",
}
_ORDERS = {
    "day_first": "day_first",
    "month_first": "month_first",
    "%d.%m": "day_first",
    "%d/%m": "day_first",
    "%d-%m": "day_first",
    "%m.%d": "month_first",
    "%m/%d": "month_first",
    "%m-%d": "month_first",
}
_SHOWN = 3


def doubts(source: Source, folder: Path) -> list[str]:
    """Say which keys of a source its newest file contradicts, as clauses; none where none is."""
    if source.kind != "csv":
        return []
    options = {**_DEFAULTS, **(source.model_extra or {})}
    try:
        newest = matching_files(str(options["path"]), folder)[-1]
        found = connectors.sniff(newest)
    except (ConnectorError, KeyError):
        return []
    seen = {**_DEFAULTS, **found.options}
    told = [
        f"{newest.name} seems to be written with {key} = {seen[key]!r}, not {options[key]!r}"
        for key in ("delimiter", "decimal", "thousands")
        if _spelled(seen[key]) != _spelled(options[key])
    ]
    return told + _order(options, seen, newest.name)


def _spelled(value: object) -> str:
    return {"tab": "\t", "\\t": "\t", "space": " "}.get(str(value), str(value))


def _order(options: Mapping[str, object], seen: Mapping[str, object], file: str) -> list[str]:
    """Day before month or the other way round, where both are in numbers."""
    stated, found = (_ORDERS.get(str(o["time_format"])[:11]) or _ORDERS.get(
        str(o["time_format"])[:5]) for o in (options, seen))  # fmt: skip
    if stated is None or found is None or stated == found:
        return []
    return [
        (
            f"{file} seems to be written {found.replace('_', ' ')}, but time_format is "
            f"'{options['time_format']}'"
        )
    ]


def texts_of(source: Source, folder: Path, tag: str) -> tuple[str, ...]:
    """Return a few distinct cells of a tag that are no plain numbers, from the newest file."""
    if source.kind != "csv":
        return ()
    options = {**_DEFAULTS, **(source.model_extra or {})}
    try:
        sheet = read_sheet(matching_files(str(options["path"]), folder)[-1])
    except (ConnectorError, KeyError):
        return ()
    cells: Iterable[str] = ()
    if options["layout"] == "wide" and tag in sheet.header:
        at = sheet.header.index(tag)
        cells = (row[at] for row in sheet.rows if at < len(row))
    elif {"tag", "value"} <= set(sheet.header) or "tag_column" in options:
        names = [str(options.get(f"{k}_column", k)) for k in ("tag", "value")]
        if set(names) <= set(sheet.header):
            name, value = (sheet.header.index(n) for n in names)
            cells = (row[value] for row in sheet.rows if max(name, value) < len(row)
                     and row[name] == tag)  # fmt: skip
    odd = dict.fromkeys(
        c.strip() for c in cells if c.strip() and not _plain(c, str(options["decimal"]))
    )
    return tuple(odd)[:_SHOWN]


def _plain(cell: str, decimal: str) -> bool:
    with contextlib.suppress(ValueError):
        float(cell.strip().replace(decimal, "."))
        return True
    return False
