"""``lostwork check``: everything that can be told before anything runs."""

from __future__ import annotations

from collections import Counter
from pathlib import Path  # noqa: TC003 - typer reads it
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands.exits import ExitCode
from monitor.commands.group import write_json
from monitor.commands.opening import open_site
from monitor.commands.tables import Column, print_table
from monitor.errors import WrongUseError
from monitor.log import printable

if TYPE_CHECKING:
    from monitor.checking import Cause, Checked, Verdict
    from monitor.site.load import Site

__all__ = ["check"]

_MOST_CAUSES = 8


def check(
    site: Annotated[
        Path | None, typer.Argument(metavar="SITE", help="The site file (TOML).")
    ] = None,
    *,
    sniff: Annotated[
        Path | None,
        typer.Option(
            "--sniff",
            help="Instead of a site: propose a [[source]] table and tags for this export, CSV "
            "(packed or not) or Parquet.",
        ),
    ] = None,
    as_json: Annotated[bool, typer.Option("--json", help="Print JSON.")] = False,
) -> None:
    """Look at a site before anything runs.

    Site file, store, sources, tags, streams and balances over the newest day; nothing is stored.
    Each line says ok, look (worth your eyes) or wrong (figures would be wrong); below stand the
    faults that explain the lines, the one to put right first in front. Ends with exit code 1 when
    anything is wrong, 3 when the site file itself is.

    Example: lostwork check site.toml

    Example: lostwork check --sniff exports/day.csv
    """
    from monitor.checking import check as look  # noqa: PLC0415

    if sniff is not None or site is None:
        _propose(site, sniff, as_json=as_json)
        return
    read = open_site(site)
    checked = look(read)
    count = Counter(line.verdict for line in checked.lines)
    if as_json:
        write_json(
            {
                "site": read.id,
                "ok": count["ok"],
                "look": count["look"],
                "wrong": count["wrong"],
                "causes": [vars(cause) for cause in checked.causes],
                "lines": [vars(line) | {"figures": dict(line.figures)} for line in checked.lines],
            }
        )
    else:
        _print(read, checked, count)
    if count["wrong"]:
        raise typer.Exit(ExitCode.FOUND_WRONG)


def _propose(site: Path | None, export: Path | None, *, as_json: bool) -> None:
    from monitor.sniff import sniff  # noqa: PLC0415

    if export is None or site is not None:
        raise WrongUseError("give either a site file, or --sniff EXPORT.csv")
    found = sniff(export)
    if as_json:
        write_json(
            {
                "source": {"kind": found.found.kind, **found.found.options},
                "tags": found.units,
                "because": found.found.reasons,
                "to_settle": found.open_points,
            }
        )
    else:
        typer.echo(found.toml())


def _print(site: Site, checked: Checked, count: Counter[Verdict]) -> None:
    colours = {"ok": "green", "look": "yellow", "wrong": "red"}
    columns = [
        Column("what"),
        Column("name"),
        Column("", styles=colours),
        Column("found"),
        Column("why"),
    ]
    rows = [(x.kind, x.subject, x.verdict, x.found, x.reason) for x in checked.lines]
    print_table(columns, rows)
    if checked.causes:
        typer.echo("\nlook here first:")
        for place, cause in enumerate(checked.causes[:_MOST_CAUSES], start=1):
            typer.echo(printable(f"{place}. {_sentence(cause)}"))
        if len(checked.causes) > _MOST_CAUSES:
            typer.echo(f"and {len(checked.causes) - _MOST_CAUSES} more, in the lines above")
        typer.echo("")
    typer.echo(
        f"{site.file.site.name}: {count['ok']} ok, {count['look']} to look at, "
        f"{count['wrong']} wrong"
    )


def _sentence(cause: Cause) -> str:
    explained = len(cause.explains)
    lines = f" ({explained} other line{'s' if explained > 1 else ''} may follow from it)"
    return f"{cause.kind} {cause.subject}: {cause.reason}{lines if explained else ''}"
