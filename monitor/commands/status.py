"""``lostwork status``: is it running, is it up to date, is anything open."""

from __future__ import annotations

import time
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Annotated, Any

import typer

from monitor.commands.arguments import Json, Site  # noqa: TC001 - typer reads them
from monitor.commands.exits import ExitCode
from monitor.commands.group import write_json
from monitor.commands.opening import Opened, opened_to_read
from monitor.commands.times import duration_seconds, local, utc_text
from monitor.health import heartbeat_path, read_heartbeat

if TYPE_CHECKING:
    from monitor.store.runs import Run

__all__ = ["status"]

_LOOKED_AT = 50
_SILENT = 120
"""[s] A daemon writes its heartbeat many times in this."""


@dataclass(frozen=True)
class _Status:
    newest: int | None
    lag_s: int | None
    allowed_lag_s: int
    holder: str | None
    last_run: Run | None
    failures: int
    """Runs that failed since the last one that did not."""
    open_alarms: int
    behind: dict[str, int]
    """Sources whose newest reading is before the figures' end, and its time."""
    beat: dict[str, Any] | None
    """The heartbeat of the daemon that runs."""
    unhealthy: tuple[str, ...]


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
    last run failed, or a job of the daemon fails. The jobs are those of the heartbeat file (see
    [daemon] in config/README.md).

    Example: lostwork status site.toml --max-lag 30min
    """
    with opened_to_read(site) as at:
        found = _status(at, duration_seconds(allowed, "--max-lag") if allowed else None)
        zone = at.site.file.site.time_zone
    if as_json:
        run = None if found.last_run is None else asdict(found.last_run)
        write_json(
            {
                "healthy": not found.unhealthy,
                "unhealthy": found.unhealthy,
                "newest": utc_text(found.newest),
                "lag_s": found.lag_s,
                "allowed_lag_s": found.allowed_lag_s,
                "instance": found.holder,
                "last_run": run,
                "failures": found.failures,
                "open_alarms": found.open_alarms,
                "heartbeat": found.beat,
                "sources_behind": {s: utc_text(mark) for s, mark in found.behind.items()},
            }
        )
    else:
        _print(found, zone)
    if found.unhealthy:
        raise typer.Exit(ExitCode.FOUND_WRONG)


def _status(at: Opened, allowed: int | None) -> _Status:
    general = at.site.file.site
    limit = allowed if allowed is not None else int(3 * general.interval + general.settle)
    edge = at.store.newest()
    newest = None if edge is None else int(edge.timestamp()) + at.store.interval_s
    lag = None if newest is None else max(0, int(time.time()) - newest)
    runs = at.store.runs(_LOOKED_AT)
    over = [run for run in runs if run.status != "running"]
    failures = next((n for n, run in enumerate(over) if run.status == "done"), len(over))
    holder = _holder(at)
    beat = (
        None
        if holder is None
        else read_heartbeat(heartbeat_path(at.site.folder, at.site.file.daemon.heartbeat))
    )
    unhealthy = []
    if lag is None or newest is None:
        unhealthy.append("there are no figures yet")
    elif lag > limit:
        unhealthy.append(f"the newest figure is {_span(lag)} old, more than {_span(limit)}")
    else:
        unhealthy += _silent_sources(at, newest, limit)
    if failures:
        unhealthy.append(f"the last run failed ({failures} in a row): {over[0].message}")
    unhealthy += _faults(beat)
    if beat is not None and time.time() - beat["time"] > _SILENT:
        unhealthy.append(f"no sign of life for {_span(int(time.time() - beat['time']))}")
    return _Status(
        newest,
        lag,
        limit,
        holder,
        runs[0] if runs else None,
        failures,
        len(at.store.open_alarms()),
        {s: mark for s, mark in at.store.watermarks().items() if newest and mark < newest},
        beat,
        tuple(unhealthy),
    )


def _silent_sources(at: Opened, newest: int, limit: int) -> list[str]:
    """Sources whose readings ended long before the figures, which are there but empty since."""
    return [
        f"source {source} has given no reading since {local(mark, at.site.file.site.time_zone)}"
        for source, mark in at.store.watermarks().items()
        if mark < newest and time.time() - mark > limit
    ]


def _faults(beat: dict[str, Any] | None) -> list[str]:
    """What lasts of the faults that a daemon has told."""
    jobs = {} if beat is None else beat["jobs"]
    return [f"{name} fails: {job['cause']}" for name, job in jobs.items() if job["failing_since"]]


def _job_rows(beat: dict[str, Any] | None, zone: str) -> list[tuple[str, str]]:
    jobs = {} if beat is None else beat["jobs"]

    def at(seconds: float | None) -> str:
        return "-" if seconds is None else local(int(seconds), zone)

    rows = []
    for name, job in jobs.items():
        text = f"last {at(job['last'])}, next {at(job['next'])}"
        if job["failing_since"]:
            text += f", fails since {at(job['failing_since'])}: {job['cause']}"
        rows.append((name, text))
    return rows


def _holder(at: Opened) -> str | None:
    """Who computes the site, None when nobody does: by trying the lock, which cannot be stale."""
    from monitor.store.errors import InstanceRunning  # noqa: PLC0415
    from monitor.store.lock import lock_site  # noqa: PLC0415

    try:
        # Not `instance_lock`: a look must not close other processes' runs.
        with lock_site(at.database.engine, at.store.site_id, at.site.id, "lostwork status"):
            return None
    except InstanceRunning as running:
        text = str(running)
        return text.partition("computed by ")[2].partition(";")[0] or text


def _print(found: _Status, zone: str) -> None:
    lag = "-" if found.lag_s is None else f"{_span(found.lag_s)} ago"
    run = found.last_run
    rows = [
        ("newest figure", f"{local(found.newest, zone)} ({lag})"),
        ("instance", found.holder or "none"),
        (
            "last run",
            "-" if run is None else f"{run.job} {run.run_id}: {run.status}; {run.message}",
        ),
        ("failures since", str(found.failures)),
        ("open alarms", str(found.open_alarms)),
        *_job_rows(found.beat, zone),
        *(("behind", f"source {s}, to {local(t, zone)}") for s, t in found.behind.items()),
        ("health", "; ".join(found.unhealthy) or "good"),
    ]
    for label, text in rows:
        typer.echo(f"{label:16} {text}")


def _span(seconds: int) -> str:
    if seconds < 120:  # noqa: PLR2004
        return f"{seconds} s"
    if seconds < 7200:  # noqa: PLR2004
        return f"{seconds // 60} min"
    return f"{seconds // 3600} h" if seconds < 172800 else f"{seconds // 86400} days"  # noqa: PLR2004
