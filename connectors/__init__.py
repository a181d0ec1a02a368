"""Historian exports in: one file per kind of source, each registered here."""

from __future__ import annotations

from types import MappingProxyType
from typing import TYPE_CHECKING, Any

from connectors.base import ConnectorError
from connectors.csv_source import CsvKind
from connectors.parquet_source import ParquetKind
from connectors.sniff import Sniffed, SniffedTag, sniff
from connectors.sql_source import SqlKind

if TYPE_CHECKING:
    from collections.abc import Mapping
    from pathlib import Path

    from pydantic import BaseModel

    from connectors.base import Connector, SourceKind

__all__ = ["KINDS", "Sniffed", "SniffedTag", "open_source", "parse_options", "sniff"]

_ALL: tuple[SourceKind, ...] = (CsvKind(), ParquetKind(), SqlKind())

KINDS: Mapping[str, SourceKind] = MappingProxyType({kind.name: kind for kind in _ALL})
"""Every kind of source by its name in the site file."""


def parse_options(kind: str, options: Mapping[str, Any]) -> BaseModel:
    """Check the keys of a [[source]] table that belong to its kind.

    Args:
        kind: the kind's name.
        options: the keys beside ``id`` and ``kind``.

    Raises:
        ConnectorError: there is no such kind.
        pydantic.ValidationError: a key is unknown, absent or has a value it cannot have.
    """
    return _kind(kind).options.model_validate(dict(options))


def open_source(kind: str, options: Mapping[str, Any], folder: Path) -> Connector:
    """Open a source for reading.

    Args:
        kind: the kind's name.
        options: the keys beside ``id`` and ``kind``.
        folder: where relative paths start (the site file's folder).

    Raises:
        ConnectorError: there is no such kind, or the source cannot be opened.
        pydantic.ValidationError: a key is unknown, absent or has a value it cannot have.
    """
    return _kind(kind).open(parse_options(kind, options), folder)


def _kind(name: str) -> SourceKind:
    if name not in KINDS:
        raise ConnectorError(f"'{name}' is not a kind of source; known are {', '.join(KINDS)}")
    return KINDS[name]
