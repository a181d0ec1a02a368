"""``lostwork alarms``: what is open, and what people do with it (ISA-18.2 / IEC 62682)."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands.arguments import By, Json, Site  # noqa: TC001 - typer reads them
from monitor.commands.group import write_json
from monitor.commands.names import who
from monitor.commands.opening import opened, opened_to_read
from monitor.commands.tables import Column, print_table
from monitor.commands.times import duration_seconds, local, utc_text
from monitor.errors import WrongUseError

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from monitor.commands.opening import Opened
    from monitor.drift.alarms import Action
    from monitor.store.alarms import AlarmRecord

__all__ = ["app"]

app = typer.Typer(no_args_is_help=True, help="List, acknowledge or shelve alarms.")

Number = Annotated[int, typer.Argument(metavar="ID", help="The alarm's number, from the list.")]
Note = Annotated[str, typer.Option("--note", help="Why; kept with the alarm.")]


@app.command("list")
def list_alarms(
    site: Site,
    *,
    everything: Annotated[
        bool, typer.Option("--all", help="Also the alarms that are over.")
    ] = False,
    as_json: Json = False,
) -> None:
    """List open alarms, newest first.

    Example: lostwork alarms list site.toml --all
    """
    with opened_to_read(site) as at:
        alarms = at.store.alarm_history(0, 1 << 62) if everything else at.store.open_alarms()
        if as_json:
            write_json([_plain(alarm) for alarm in alarms])
        elif not alarms:
            typer.echo("no alarms" if everything else "no open alarms")
        else:
            _print(at, alarms)


@app.command()
def acknowledge(site: Site, alarm: Number, by: By = "", note: Note = "") -> None:
    """Say that an alarm has been seen.

    Example: lostwork alarms acknowledge site.toml 3 --by "M. Reyes" --note "wash planned Tuesday"
    """
    from monitor.drift.alarms import Action  # noqa: PLC0415

    _act(site, alarm, Action.ACKNOWLEDGE, by, note)


@app.command()
def shelve(
    site: Site,
    alarm: Number,
    duration: Annotated[
        str, typer.Option("--for", help="How long: 8h, 30min, 2days; it comes back by itself.")
    ],
    by: By = "",
    note: Note = "",
) -> None:
    """Put an alarm aside for a stated time.

    Example: lostwork alarms shelve site.toml 3 --for 8h --note "valve is on the list"
    """
    from monitor.drift.alarms import Action  # noqa: PLC0415

    _act(site, alarm, Action.SHELVE, by, note, duration_seconds(duration, "--for"))


@app.command()
def unshelve(site: Site, alarm: Number, by: By = "", note: Note = "") -> None:
    """Bring a shelved alarm back before its time.

    Example: lostwork alarms unshelve site.toml 3
    """
    from monitor.drift.alarms import Action  # noqa: PLC0415

    _act(site, alarm, Action.UNSHELVE, by, note)


def _act(
    path: Path, number: int, action: Action, by: str, note: str, seconds: int | None = None
) -> None:
    from monitor.drift.alarms import Alarm, AlarmState, act  # noqa: PLC0415
    from monitor.judging import judge_site, plant_now, rules_of  # noqa: PLC0415
    from monitor.store.alarms import AlarmAction, AlarmTransition  # noqa: PLC0415
    from monitor.store.errors import NoSuchAlarm  # noqa: PLC0415

    with opened(path) as at:
        try:
            record = at.store.alarm(number)
        except NoSuchAlarm as error:
            raise WrongUseError(f"{error}; 'lostwork alarms list {path}' shows them") from error
        name, now = who(by), plant_now(at.store)
        until = None if seconds is None else now + seconds
        before = Alarm(AlarmState(record.state), record.cleared is None, record.shelved_until)
        _, step = act(before, action, now, by=name, note=note, until=until)
        at.store.record_action(
            AlarmAction(
                record.subject, record.figure, record.kind, now, str(action), name, note, until
            )
        )
        # Shown at once, and kept: judging plays the recorded action again each time.
        rule = [
            r for r in rules_of(at.site) if (r.subject, r.figure) == (record.subject, record.figure)
        ]
        if rule:
            judge_site(at.site, at.store, now, now, now, only=tuple(rule))
        else:
            at.store.record_transition(
                number,
                AlarmTransition(
                    now, str(action), str(step.before), str(step.after), name, note, until
                ),
            )
        after = at.store.alarm(number)
        back = after.shelved_until
        zone = at.site.file.site.time_zone
        ends = "" if back is None else f" until {local(back, zone)}"
        typer.echo(f"alarm {number} of {record.subject} {record.figure} is {after.state}{ends}")


def _print(at: Opened, alarms: Sequence[AlarmRecord]) -> None:
    zone = at.site.file.site.time_zone
    columns = [
        Column("no.", right=True),
        Column("raised"),
        Column("cleared"),
        Column("state"),
        Column("priority", styles={"high": "red", "medium": "yellow"}),
        Column("equipment"),
        Column("figure"),
        Column("message"),
    ]
    rows = [
        (
            str(a.alarm_id),
            local(a.raised, zone),
            local(a.cleared, zone),
            a.state,
            a.priority,
            a.subject,
            a.figure,
            a.message,
        )
        for a in alarms
    ]
    print_table(columns, rows)


def _plain(alarm: AlarmRecord) -> dict[str, object]:
    times = ("raised", "cleared", "acknowledged", "shelved_until")
    return vars(alarm) | {name: utc_text(getattr(alarm, name)) for name in times}
