"""Tables on stdout: ruled and wrapped on a terminal, aligned and whole in a pipe."""

from __future__ import annotations

import sys
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import typer

from monitor.log import printable

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

__all__ = ["Column", "print_table"]


@dataclass(frozen=True)
class Column:
    """A column.

    Attributes:
        title: its heading.
        right: numbers stand to the right.
        styles: colours of certain words, on a terminal.
    """

    title: str
    right: bool = False
    styles: Mapping[str, str] = field(default_factory=dict)


def print_table(columns: Sequence[Column], rows: Sequence[Sequence[str]]) -> None:
    """Print a table; text from sites and historians is data, never markup nor a control code."""
    texts = [[printable(str(cell).replace("\n", " ")) for cell in row] for row in rows]
    if sys.stdout.isatty():
        _print_rich(columns, texts)
        return
    heads = [column.title for column in columns]
    widths = [
        max(len(line[k]) for line in [heads, *texts]) if k < len(columns) - 1 else 0
        for k in range(len(columns))
    ]
    for line in [heads, *texts]:
        cells = [
            cell.rjust(width) if column.right else cell.ljust(width)
            for cell, width, column in zip(line, widths, columns, strict=True)
        ]
        typer.echo("  ".join(cells).rstrip())


def _print_rich(columns: Sequence[Column], rows: Sequence[Sequence[str]]) -> None:
    from rich import box  # noqa: PLC0415
    from rich.console import Console  # noqa: PLC0415
    from rich.table import Table  # noqa: PLC0415
    from rich.text import Text  # noqa: PLC0415

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for column in columns:
        table.add_column(column.title, justify="right" if column.right else "left")
    for row in rows:
        table.add_row(
            *(
                Text(str(cell), style=column.styles.get(str(cell), ""))
                for cell, column in zip(row, columns, strict=True)
            )
        )
    Console().print(table)
