"""``lostwork event``: what was done to the plant, so that a change has its reason."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands.arguments import By, Json, Site  # noqa: TC001 - typer reads them
from monitor.commands.group import write_json
from monitor.commands.names import known, who
from monitor.commands.opening import Opened, opened, opened_to_read
from monitor.commands.tables import Column, print_table
from monitor.commands.times import local, read_time, utc_text
from monitor.errors import WrongUseError

if TYPE_CHECKING:
    from monitor.store.events import Event

__all__ = ["app"]

app = typer.Typer(no_args_is_help=True, help="Record what was done to the plant.")

KINDS = ("wash", "overhaul", "calibration", "repair", "trip", "note")
WHOLE_SITE = "site"


@app.command()
def add(
    site: Site,
    subject: Annotated[
        str,
        typer.Argument(metavar="EQUIPMENT", help="An equipment's id, a tag's name, or 'site'."),
    ],
    kind: Annotated[
        str,
        typer.Argument(
            metavar="KIND",
            help="wash, overhaul or calibration (baselines start anew), repair, trip or note.",
        ),
    ],
    at_time: Annotated[
        str, typer.Option("--at", help="When: 'now', '2026-03-01 06:00' (site-local), ...Z.")
    ] = "now",
    note: Annotated[str, typer.Option("--note", help="In your own words.")] = "",
    by: By = "",
) -> None:
    """Record that something was done; a wash, an overhaul or a calibration restarts baselines.

    Example: lostwork event add site.toml TG1 wash --at "2026-03-28 14:00" --note "blade wash"
    """
    from monitor.drift.judge import RESTARTING_EVENTS  # noqa: PLC0415
    from monitor.store.events import Event  # noqa: PLC0415

    with opened(site) as at:
        if kind not in KINDS:
            raise WrongUseError(f"'{kind}' is not a kind of event; write {', '.join(KINDS)}")
        names = [*at.site.items, *at.site.tags, WHOLE_SITE]
        of = known(subject, names, "equipment or tag")
        zone, now = at.site.file.site.time_zone, int(time.time())
        when = read_time(at_time, zone, now, "--at")
        event = Event("" if of == WHOLE_SITE else of, kind, when, who(by), note)
        number = at.store.add_event(event)
        typer.echo(f"event {number}: {kind} of {of} at {local(when, zone)}")
        if kind in RESTARTING_EVENTS:
            _judge_from(at, when)
            typer.echo("its baselines start anew there")


def _judge_from(at: Opened, when: int) -> None:
    from monitor.judging import judge_site, plant_now  # noqa: PLC0415

    newest = at.store.newest()
    if newest is not None and newest.timestamp() > when:
        end = int(newest.timestamp()) + at.store.interval_s
        judge_site(at.site, at.store, when, end, plant_now(at.store))


@app.command("list")
def list_events(site: Site, *, as_json: Json = False) -> None:
    """List recorded events, oldest first.

    Example: lostwork event list site.toml
    """
    with opened_to_read(site) as at:
        events = at.store.events()
        if as_json:
            write_json([vars(event) | {"time": utc_text(event.time)} for event in events])
        elif not events:
            typer.echo("no events")
        else:
            zone = at.site.file.site.time_zone
            heads = ("no.", "time", "of", "kind", "by", "note")
            print_table(
                [Column(h, right=h == "no.") for h in heads], [_row(e, zone) for e in events]
            )


def _row(event: Event, zone: str) -> tuple[str, ...]:
    return (
        str(event.event_id),
        local(event.time, zone),
        event.subject or WHOLE_SITE,
        event.kind,
        event.who,
        event.note,
    )
