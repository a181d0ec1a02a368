"""An export that nobody has described yet, and its part of a site file.

`connectors.sniff` proposes; here the units become those that a site file takes.
"""

from __future__ import annotations

import json
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import connectors
from connectors.base import ConnectorError
from connectors.sniff_units import needs_datum
from monitor.errors import WrongUseError
from monitor.site.units import UnitError, parse_unit

if TYPE_CHECKING:
    from collections.abc import Iterable, Iterator
    from pathlib import Path

__all__ = ["Proposal", "sniff"]

_SHOWN = 3
"""Tags that a point names before it counts the others."""


@dataclass(frozen=True)
class Proposal:
    """What an export seems to be.

    Attributes:
        found: what the connectors propose.
        units: by tag; empty where the export does not say, or says what is no unit here.
        open_points: what a person has to settle.
    """

    found: connectors.Sniffed
    units: dict[str, str]
    open_points: tuple[str, ...]

    def toml(self) -> str:
        """Return the proposal as a piece of a site file."""
        lines = [self.found.source_table().rstrip("\n")]
        for tag in self.found.tags:
            lines += ["", "[[tag]]", f"name = {_toml(tag.name)}", 'source = "export"']
            said = f"  # the export says {_toml(tag.unit)}" if tag.unit else ""
            unit = self.units[tag.name]
            lines.append(f"unit = {_toml(unit)}{'' if unit else said}")
            lines += [f"description = {_toml(tag.description)}"] if tag.description else []
        return "\n".join(lines)


def sniff(path: Path) -> Proposal:
    """Propose a [[source]] table and tags for an export.

    Args:
        path: a CSV file, packed or not, or a Parquet file.

    Raises:
        WrongUseError: the file cannot be read, or is no table with times.
    """
    try:
        found = connectors.sniff(path)
    except ConnectorError as error:
        raise WrongUseError(str(error)) from error
    units = {tag.name: _unit(tag.unit) for tag in found.tags}
    # As it was named: that is right in a site file beside which the command was given.
    options = found.options | {"path": path.as_posix()}
    points = (*found.open_points, *_unknown(found.tags))
    return Proposal(replace(found, options=options, open_points=points), units, points)


def _unknown(tags: Iterable[connectors.SniffedTag]) -> Iterator[str]:
    """Say which of the export's units a site file does not take, beside those without a datum."""
    odd = [tag for tag in tags if tag.unit and not needs_datum(tag.unit) and not _unit(tag.unit)]
    if odd:
        shown = ", ".join(f"{tag.name!r} ({tag.unit})" for tag in odd[:_SHOWN])
        more = f" and {len(odd) - _SHOWN} more" if len(odd) > _SHOWN else ""
        yield f"no unit of a site file: that of {shown}{more}; write another, or leave the tag out"


def _unit(text: str) -> str:
    try:
        return parse_unit(text).text
    except UnitError:
        return ""


def _toml(text: str) -> str:
    """Return a TOML string, which is written as in JSON."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")
