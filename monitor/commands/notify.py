"""``lostwork notify``: whether messages arrive, and what became of each."""

from __future__ import annotations

import json
import time
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands.arguments import Json, Site  # noqa: TC001 - typer reads them
from monitor.commands.exits import ExitCode
from monitor.commands.group import say, write_json
from monitor.commands.names import known
from monitor.commands.opening import open_site, opened_to_read
from monitor.commands.tables import Column, print_table
from monitor.commands.times import local, utc_text
from monitor.errors import WrongUseError

if TYPE_CHECKING:
    from monitor.notify.outbox import Entry
    from monitor.site.load import Site as ReadSite

__all__ = ["app"]

app = typer.Typer(no_args_is_help=True, help="Try out notifications, and see what became of them.")


@app.command("test")
def send_test(
    site: Site,
    target: Annotated[
        str, typer.Argument(metavar="[ID]", help="The id of one [[notify]]; left out: all.")
    ] = "",
) -> None:
    """Send a test message now, to one target or to all; nothing is kept in the store.

    Example: lostwork notify test site.toml shift_office
    """
    from monitor.notify.errors import NotifyError  # noqa: PLC0415
    from monitor.notify.message import trial_message  # noqa: PLC0415
    from monitor.notify.sender import make_senders  # noqa: PLC0415

    read = open_site(site)
    tables = {notify.id: notify for notify in read.file.notify}
    wanted = [known(target, tables, "[[notify]]")] if target else list(tables)
    if not wanted:
        raise WrongUseError(
            f"{site} has no [[notify]] table; config/README.md says how to write one"
        )
    senders, now = make_senders(read), int(time.time())
    failed = False
    for name in wanted:
        try:
            note = senders[name].send(trial_message(read, tables[name], now), now)
        except NotifyError as error:
            failed = True
            say(str(error))
        else:
            typer.echo(f"{name}: sent{f'; {note}' if note else ''}")
    if failed:
        raise typer.Exit(ExitCode.FOUND_WRONG)


@app.command("list")
def list_notifications(
    site: Site,
    number: Annotated[int, typer.Option("--last", min=1, help="So many at most.")] = 50,
    *,
    as_json: Json = False,
) -> None:
    """List the newest notifications, oldest first: sent, waiting, failed, or why not sent.

    Example: lostwork notify list site.toml --last 20
    """
    from monitor.notify.outbox import Outbox  # noqa: PLC0415

    with opened_to_read(site) as at:
        entries = Outbox(at.store).entries(limit=number)
        if as_json:
            write_json([_plain(entry) for entry in entries])
        elif not entries:
            typer.echo("no notifications")
        else:
            heads = ("no.", "time", "to", "state", "tries", "what", "error")
            columns = [Column(h, right=h in {"no.", "tries"}) for h in heads]
            print_table(columns, [_row(at.site, entry) for entry in entries])


def _plain(entry: Entry) -> dict[str, object]:
    return {
        "id": entry.notification_id,
        "to": entry.target,
        "state": entry.state,
        "tries": entry.tries,
        "due": utc_text(entry.due) if entry.state == "waiting" else None,
        "ended": utc_text(entry.ended),
        "error": entry.error,
        "message": json.loads(entry.content),
    }


def _row(site: ReadSite, entry: Entry) -> tuple[str, ...]:
    return (
        str(entry.notification_id),
        local(entry.time, site.file.site.time_zone),
        entry.target,
        entry.state,
        str(entry.tries),
        str(json.loads(entry.content)["title"]),
        entry.error or "-",
    )
