"""``lostwork export``: stored figures for a spreadsheet or a notebook."""

from __future__ import annotations

import os
import sys
import time
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Literal

import typer

from monitor.commands.arguments import Site  # noqa: TC001 - typer reads it
from monitor.commands.group import say
from monitor.commands.names import count
from monitor.commands.opening import opened_to_read
from monitor.commands.times import read_time
from monitor.errors import WrongUseError

if TYPE_CHECKING:
    from collections.abc import Iterator
    from typing import BinaryIO

__all__ = ["export"]


def export(
    site: Site,
    start: Annotated[
        str, typer.Option("--from", help="First time (site-local, or with an offset).")
    ],
    end: Annotated[str, typer.Option("--to", help="End; left out: now.")] = "now",
    what: Annotated[
        Literal["streams", "equipment", "conditions", "ledger", "alarms", "runs"],
        typer.Option("--what", help="Which figures; or the runs that made them."),
    ] = "ledger",
    kind: Annotated[
        Literal["csv", "parquet"], typer.Option("--format", help="File format.")
    ] = "csv",
    out: Annotated[str, typer.Option("--out", help="A file, or - for stdout.")] = "-",
) -> None:
    """Write stored figures as CSV or Parquet.

    Units stand in the column names, times are UTC. The run_id of a figure is that of the run that
    made it, whose program version and site-file hash --what runs gives.

    Example: lostwork export site.toml --from 2026-03-01 --what equipment --out march.csv
    """
    from monitor.export import export as write  # noqa: PLC0415

    with opened_to_read(site) as at:
        zone, now = at.site.file.site.time_zone, int(time.time())
        first = read_time(start, zone, now, "--from")
        last = read_time(end, zone, now, "--to")
        if first >= last:
            raise WrongUseError("--to must be later than --from")
        with _output(out, kind) as file:
            rows = write(at.store, what, first, last, kind, file)
    say(count(rows, "row"))


@contextmanager
def _output(out: str, kind: str) -> Iterator[BinaryIO]:
    if out == "-":
        if kind == "parquet" and sys.stdout.isatty():
            raise WrongUseError("Parquet on a terminal is noise; name a file with --out")
        yield sys.stdout.buffer
        sys.stdout.buffer.flush()
        return
    path = Path(out)
    # Whole or not at all: a half-written file would look like a short stretch.
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with part.open("wb") as file:
            yield file
        part.replace(path)
    except OSError as error:
        if error.filename != str(part):
            raise
        # The person named the file, not the part that stands in for it.
        said = f"cannot be written ({error.strerror}); name a file in a folder that takes it"
        raise OSError(error.errno, said, str(path)) from error
    finally:
        part.unlink(missing_ok=True)
