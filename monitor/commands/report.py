"""``lostwork report`` and ``pages``: what the figures say, for people."""

from __future__ import annotations

import datetime as dt
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands.arguments import Json, Site  # noqa: TC001 - typer reads them
from monitor.commands.group import say, write_json
from monitor.commands.opening import Opened, opened_to_read
from monitor.commands.progress import Progress
from monitor.errors import WrongUseError
from monitor.log import printable

if TYPE_CHECKING:
    from monitor.site.shifts import Span

__all__ = ["pages", "report"]


def report(
    site: Site,
    shift: Annotated[
        str,
        typer.Option("--shift", help="A shift's name, or 'latest': the newest one that is over."),
    ] = "latest",
    date: Annotated[
        str,
        typer.Option(
            "--date", help="Local day that the shift starts on, 2026-03-01; left out: the newest."
        ),
    ] = "",
    *,
    write: Annotated[
        bool, typer.Option("--write/--no-write", help="Write the report's page as well.")
    ] = True,
    as_json: Json = False,
) -> None:
    """Print a shift report, and write its page.

    Example: lostwork report site.toml --shift night --date 2026-03-01
    """
    import pandas as pd  # noqa: PLC0415

    from monitor.reports.pages import pages_folder  # noqa: PLC0415
    from monitor.reports.shift import (  # noqa: PLC0415
        shift_text,
        shift_view,
        write_shift_report,
    )

    with opened_to_read(site) as at:
        span = _span(at, shift, date)
        now = pd.Timestamp.now("UTC")
        view = shift_view(at.site, at.store, span, now)
        if as_json:
            write_json(
                {
                    "shift": span.name,
                    "date": str(span.day),
                    "start": view.context.start.isoformat(),
                    "end": view.context.end.isoformat(),
                    "summary": view.summary,
                    "ledger": [vars(line) for line in view.ledger],
                    "equipment": [vars(row) for row in view.equipment],
                    "conditions": [vars(row) for row in view.conditions],
                    "alarms": [vars(row) for row in view.alarms],
                    "quality": [vars(row) for row in view.quality],
                }
            )
        else:
            typer.echo(printable(shift_text(view)))
        if write:
            path = write_shift_report(at.site, at.store, span, now, pages_folder(at.site))
            say(f"page: {path}")


def _span(at: Opened, shift: str, date: str) -> Span:
    """The shift that is meant; without a date, the newest one that the figures cover to its end."""
    calendar = at.site.calendar
    if shift != "latest" and shift not in calendar.names:
        raise WrongUseError(
            f"--shift '{shift}' is not a shift of this site; it has {', '.join(calendar.names)}, "
            "or write latest"
        )
    if date:
        try:
            day = dt.date.fromisoformat(date)
        except ValueError:
            raise WrongUseError(f"--date '{date}' is not a day; write 2026-03-01") from None
        noon = int(dt.datetime.combine(day, dt.time(12), tzinfo=dt.UTC).timestamp())
        on_day = [s for s in calendar.spans(noon - 2 * 86400, noon + 2 * 86400) if s.day == day]
        return next(s for s in reversed(on_day) if shift in {"latest", s.name})
    newest = at.store.newest()
    if newest is None:
        raise WrongUseError(f"site '{at.site.id}' has no figures yet; run lostwork once first")
    end = int(newest.timestamp()) + at.store.interval_s
    spans = [s for s in calendar.spans(end - 8 * 86400, end) if shift in {"latest", s.name}]
    over = [s for s in spans if s.end <= end]
    return (over or spans)[-1]


def pages(site: Site, *, as_json: Json = False) -> None:
    """Write all pages.

    The overview, each piece of equipment, the dead state, the last shift. They open from a folder,
    without a server. Prints the path of the overview.

    Example: lostwork pages site.toml
    """
    import pandas as pd  # noqa: PLC0415

    from monitor.reports.pages import pages_folder, write_pages  # noqa: PLC0415
    from monitor.reports.shift import write_shift_report  # noqa: PLC0415

    with opened_to_read(site) as at, Progress("pages") as progress:
        now = pd.Timestamp.now("UTC")
        count = len(at.site.items) + 3
        written = []
        for path in write_pages(at.site, at.store, now):
            written.append(path)
            progress.at(len(written) / count, path.name)
        span = _span(at, "latest", "")
        written.append(write_shift_report(at.site, at.store, span, now, pages_folder(at.site)))
    if as_json:
        write_json({"pages": [str(path) for path in written]})
    else:
        typer.echo(str(written[0]))
