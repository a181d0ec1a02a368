"""The command ``lostwork``: its groups put together; each command stands in `monitor.commands`."""

from __future__ import annotations

from typing import Annotated

import typer

from monitor import log
from monitor.commands import alarms, baselines, events, notify
from monitor.commands.check import check
from monitor.commands.demo import demo
from monitor.commands.exits import MEANINGS
from monitor.commands.explain import explain
from monitor.commands.export import export
from monitor.commands.group import CommandGroup
from monitor.commands.report import pages, report
from monitor.commands.run import backfill, once, run
from monitor.commands.state import state
from monitor.commands.status import status
from monitor.version import version

__all__ = ["app", "main"]

_EXIT_CODES = "Exit codes: " + "; ".join(f"{int(c)} {text}" for c, text in MEANINGS.items()) + "."

app = typer.Typer(
    name="lostwork",
    cls=CommandGroup,
    no_args_is_help=True,
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    epilog=_EXIT_CODES,
)


def _show_version(value: bool) -> None:  # noqa: FBT001 - typer calls it like this
    if value:
        typer.echo(f"lostwork {version()}")
        raise typer.Exit


@app.callback()
def lostwork(
    *,
    debug: Annotated[
        bool, typer.Option("--debug", help="Debug lines and tracebacks; may stand anywhere.")
    ] = False,
    log_json: Annotated[
        bool, typer.Option("--log-json", help="Log lines as JSON; may stand anywhere.")
    ] = False,
    show_version: Annotated[  # noqa: ARG001 - its callback does the work
        bool,
        typer.Option("--version", callback=_show_version, is_eager=True, help="Print the version."),
    ] = False,
) -> None:
    """Account for work potential (exergy) in a steam system, from its historian's readings.

    Results go to stdout, log and progress to stderr. Start with 'lostwork demo', then write a site
    file and look at it with 'lostwork check'.
    """
    log.configure(json=log_json, debug=debug)


app.command()(demo)
app.command()(check)
app.command()(once)
app.command()(run)
app.command()(backfill)
app.command()(report)
app.command()(pages)
app.add_typer(baselines.app, name="baseline")
app.add_typer(alarms.app, name="alarms")
app.add_typer(events.app, name="event")
app.add_typer(notify.app, name="notify")
app.command()(explain)
app.command()(state)
app.command()(status)
app.command()(export)


def main() -> None:
    """Run the command."""
    app(prog_name="lostwork")


if __name__ == "__main__":
    main()
