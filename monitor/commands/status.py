"""``lostwork status``: is it running, is it up to date, is anything open."""

from __future__ import annotations

from dataclasses import asdict
from typing import TYPE_CHECKING, Annotated, Any

import typer

from monitor.commands.arguments import Json, Site  # noqa: TC001 - typer reads them
from monitor.commands.exits import ExitCode
from monitor.commands.group import write_json
from monitor.commands.opening import open_site, opened_to_read
from monitor.commands.times import duration_seconds, local, utc_text
from monitor.log import printable
from monitor.standing import span, standing, standing_without_store
from monitor.store.errors import StoreError

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from monitor.standing import Standing

__all__ = ["status"]


def status(
    site: Site,
    allowed: Annotated[
        str,
        typer.Option(
            "--max-lag",
            help="Figures or sources older than this are unhealthy; left out: 3 intervals.",
        ),
    ] = "",
    *,
    as_json: Json = False,
) -> None:
    """Say how a site's figures stand.

    For a person, or for a watchdog by its exit code.

    Exit code 1 when the newest figure is too old, there is none, a source has fallen silent, the
    last run failed, a job of the daemon fails, the daemon has died, or a message could not be
    handed over. The jobs are those of the heartbeat file (see [daemon] in config/README.md), or
    those that the store knows, when the daemon runs elsewhere or has died. When the store cannot
    be read, the heartbeat alone says what it can.

    Example: lostwork status site.toml --max-lag 30min
    """
    found, zone = _found(site, duration_seconds(allowed, "--max-lag") if allowed else None)
    if as_json:
        write_json(_document(found))
    else:
        for label, text in _rows(found, zone):
            typer.echo(printable(f"{label:16} {text}"))
    if found.unhealthy:
        raise typer.Exit(ExitCode.FOUND_WRONG)


def _found(path: Path, allowed: int | None) -> tuple[Standing, str]:
    try:
        with opened_to_read(path) as at:
            return standing(at, allowed), at.site.file.site.time_zone
    except StoreError as error:
        site = open_site(path)
        found = standing_without_store(site, error)
        if found is None:
            raise
        return found, site.file.site.time_zone


def _document(found: Standing) -> dict[str, Any]:
    daemon = found.daemon
    return {
        "healthy": not found.unhealthy,
        "unhealthy": found.unhealthy,
        "newest": utc_text(found.newest),
        "lag_s": found.lag_s,
        "allowed_lag_s": found.allowed_lag_s,
        "instance": found.holder,
        "last_run": None if found.last_run is None else asdict(found.last_run),
        "same_site_file": found.same_file,
        "failures": found.failures,
        "open_alarms": found.open_alarms,
        "heartbeat": found.beat,
        "daemon": None if daemon is None else {
            **asdict(daemon),
            "started": utc_text(int(daemon.started)),
            "seen": utc_text(int(daemon.seen)),
            "ended": None if daemon.ended is None else utc_text(int(daemon.ended)),
        },
        "sources_behind": {s: utc_text(mark) for s, mark in found.behind.items()},
        "failed_messages": found.failed_messages,
        "undelivered": {target: entry.error for target, entry in found.undelivered.items()},
    }  # fmt: skip


def _rows(found: Standing, zone: str) -> Iterator[tuple[str, str]]:
    lag = "-" if found.lag_s is None else f"{span(found.lag_s)} ago"
    yield "newest figure", f"{local(found.newest, zone)} ({lag})"
    yield "instance", found.holder or "none"
    run, daemon = found.last_run, found.daemon
    if run is not None:
        yield "last run", f"{run.job} {run.run_id}: {run.status}; {run.message}"
        changed = "" if found.same_file else "; the site file has changed since"
        yield "made with", f"lostwork {run.version}, site file {run.site_hash[:12]}{changed}"
    else:
        yield "last run", "-"
    yield "failures since", str(found.failures)
    yield "open alarms", str(found.open_alarms)
    if daemon is not None and found.beat is None:
        ended = "" if daemon.ended is None else f", ended {local(int(daemon.ended), zone)}"
        seen = local(int(daemon.seen), zone)
        yield "daemon", f"process {daemon.process} on {daemon.host}, seen {seen}{ended}"
    yield from _job_rows(found, zone)
    for source, mark in found.behind.items():
        yield "behind", f"source {source}, to {local(mark, zone)}"
    if found.failed_messages:
        yield "notifications", f"{found.failed_messages} given up in the last 24 hours"
    yield "health", "; ".join(found.unhealthy) or "good"


def _job_rows(found: Standing, zone: str) -> Iterator[tuple[str, str]]:
    def at(seconds: float | None) -> str:
        return "-" if seconds is None else local(int(seconds), zone)

    for name, job in found.jobs.items():
        text = f"last {at(job['last'])}, next {at(job['next'])}"
        if job["failing_since"]:
            text += f", fails since {at(job['failing_since'])}: {job['cause']}"
        yield name, text
