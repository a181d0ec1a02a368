"""``lostwork once``, ``run`` and ``backfill``: figures into the store."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING, Annotated

import typer

from monitor.commands.arguments import Json, Site, Sites  # noqa: TC001 - typer reads them
from monitor.commands.group import say, write_json
from monitor.commands.names import count
from monitor.commands.opening import opened
from monitor.commands.progress import Progress
from monitor.commands.times import local, read_time, utc_text

if TYPE_CHECKING:
    from monitor.backfill import Tally
    from monitor.site.load import Site as ReadSite
    from monitor.store.site import SiteStore

__all__ = ["backfill", "once", "run"]

_SHOWN_PROBLEMS = 8


def once(
    site: Site,
    until: Annotated[
        str,
        typer.Option("--until", help="Catch up to this time instead of now (see backfill --from)."),
    ] = "now",
    *,
    as_json: Json = False,
) -> None:
    """Catch up with the sources, and stop.

    Figures and alarms up to now, from where the last run ended, less the site's look-back; an empty
    store gets the last 24 hours.

    Example: lostwork once site.toml --until "2026-03-01 06:00"
    """
    from monitor.backfill import Tally, catch_up, recorded_sources  # noqa: PLC0415
    from monitor.judging import judge_site, plant_now  # noqa: PLC0415

    with opened(site) as at:
        zone = at.site.file.site.time_zone
        now = read_time(until, zone, int(time.time()), "--until")
        with at.database.instance_lock(at.site.id, "lostwork once"):
            with recorded_sources(at.site, at.store, "once") as sources:
                done = catch_up(at.site, at.store, sources, now, run_kind="once")
            tally = Tally()
            for computed in done:
                tally.add(computed)
            if done:
                first, last = done[0].batch.start, done[-1].batch.end
                judge_site(at.site, at.store, first, last, plant_now(at.store))
                _report(at.site, tally, first, last, as_json=as_json)
            elif as_json:
                write_json({"windows": 0})
            else:
                typer.echo("nothing new")


def run(
    sites: Sites,
    *,
    standby: Annotated[
        bool,
        typer.Option("--standby", help="While another instance runs, wait and take over from it."),
    ] = False,
) -> None:
    """Run as a daemon, until it is stopped.

    Figures each interval, alarms each hour, pages and shift reports as they come due.

    Of several sites, one that cannot begin (a bad site file, a store that is away, another instance
    that runs) is told and tried again, and holds up no other. A site file is read again when it
    changes. Log lines go to stderr (--log-json for a machine), and to a file if [daemon] names one;
    how a site is doing is told by 'lostwork status' and the files of [daemon]. SIGTERM and Ctrl-C
    finish the window in hand.

    Example: lostwork run site.toml
    """
    from monitor.running import run_sites  # noqa: PLC0415

    run_sites(sites, standby=standby)


def backfill(
    site: Site,
    start: Annotated[
        str,
        typer.Option(
            "--from",
            help="First time: 2026-03-01, '2026-03-01 06:00' (site-local), 2026-03-01T05:00Z "
            "or with an offset, yesterday. Begins at the full hour at or before it.",
        ),
    ],
    end: Annotated[
        str, typer.Option("--to", help="End, written like --from; left out: now.")
    ] = "now",
    workers: Annotated[
        int,
        typer.Option(
            "--workers",
            min=1,
            max=64,
            help="Processes: with 2 or more one writes, the others read and compute ahead.",
        ),
    ] = 2,
    cluster: Annotated[
        str,
        typer.Option(
            "--cluster",
            help="Compute on a Dask cluster instead: its scheduler's address, tcp://host:8786.",
        ),
    ] = "",
    *,
    as_json: Json = False,
) -> None:
    """Compute a stretch of the past.

    A day at a time; then it is judged. Not while another instance runs (exit code 6). Doing it
    again gives the same figures; what is done when it is interrupted is kept.

    Example: lostwork backfill site.toml --from 2026-03-01 --to "2026-04-01 06:00"
    """
    from monitor import backfill as work  # noqa: PLC0415
    from monitor.judging import judge_site, plant_now  # noqa: PLC0415

    with opened(site) as at:
        zone, now = at.site.file.site.time_zone, int(time.time())
        first = read_time(start, zone, now, "--from")
        last = min(read_time(end, zone, now, "--to"), now)
        with at.database.instance_lock(at.site.id, "lostwork backfill"):
            with Progress("figures") as progress:
                tally = work.backfill(
                    at.site,
                    at.store,
                    first,
                    last,
                    workers=workers,
                    cluster=cluster,
                    progress=lambda n, of, c: progress.at(n / of, local(c.batch.end, zone)),
                )
            newest = max(last, _newest_end(at.store))
            judge_site(at.site, at.store, first, newest, plant_now(at.store))
        _report(at.site, tally, first, last, as_json=as_json)


def _newest_end(store: SiteStore) -> int:
    newest = store.newest()
    return 0 if newest is None else int(newest.timestamp()) + store.interval_s


def _report(site: ReadSite, tally: Tally, first: int, last: int, *, as_json: bool) -> None:
    problems = sorted(tally.problems.items(), key=lambda found: -found[1].count)
    if as_json:
        write_json(
            {
                "from": utc_text(first),
                "to": utc_text(last),
                "windows": tally.windows,
                "readings": tally.readings,
                "bad": tally.bad,
                "missing": tally.missing,
                "passed_over": [
                    {
                        "where": where,
                        "what": what,
                        "count": problem.count,
                        "examples": [{"place": e.place, "text": e.text} for e in problem.examples],
                    }
                    for (where, what), problem in problems
                ],
            }
        )
        return
    zone = site.file.site.time_zone
    typer.echo(
        f"{local(first, zone)} to {local(last, zone)}: {count(tally.windows, 'window')}, "
        f"{count(tally.readings, 'reading')}, {tally.bad} bad, "
        f"{count(tally.missing, 'cell')} without a value"
    )
    for (where, _), problem in problems[:_SHOWN_PROBLEMS]:
        say(f"passed over {problem.count}: {problem} ({where})")
    if len(problems) > _SHOWN_PROBLEMS:
        say(f"and {len(problems) - _SHOWN_PROBLEMS} other kinds; --json lists them all")
