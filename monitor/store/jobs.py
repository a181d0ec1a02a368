"""How the daemon of a site and each of its jobs are doing: the heartbeat, for other machines.

The daemon keeps it up to date once a minute. It outlives the process, so that a restart knows what
was done last, and whoever looks finds what a daemon that died had to say.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import sqlalchemy as sa

from monitor.store import schema
from monitor.store.engine import reading, writing
from monitor.store.handle import SiteHandle
from monitor.store.upsert import upsert

if TYPE_CHECKING:
    from collections.abc import Mapping

__all__ = ["DaemonState", "JobHealth", "Jobs"]


@dataclass(frozen=True)
class JobHealth:
    """One job, or one thing that can go wrong beside the jobs; times in UTC seconds.

    Attributes:
        last: when it last did its work, None when it has not yet.
        next: when it is due, None when it is not scheduled.
        failing_since: when its fault began, None while there is none.
        cause: what is wrong, in words.
        failures: how often it has failed since the daemon started.
    """

    last: float | None = None
    next: float | None = None
    failing_since: float | None = None
    cause: str = ""
    failures: int = 0


@dataclass(frozen=True)
class DaemonState:
    """A daemon, and its jobs by name; times in UTC seconds.

    Attributes:
        process, host, version: which program, where.
        started: when it began.
        seen: its last sign of life.
        ended: when it ended in order, None when it runs, or died.
        jobs: by name.
    """

    process: int
    host: str
    version: str
    started: float
    seen: float
    ended: float | None = None
    jobs: Mapping[str, JobHealth] = field(default_factory=dict)


class Jobs(SiteHandle):
    """The site's daemon and its jobs."""

    def keep_daemon(self, state: DaemonState) -> None:
        """Put the state of the daemon that runs in the place of what was known.

        Raises:
            StoreError: the database refuses.
        """
        own = {"site_id": self.site_id}
        daemon = {
            "process": state.process,
            "host": state.host,
            "version": state.version,
            "started": int(state.started),
            "seen": int(state.seen),
            "ended": _whole(state.ended),
        }
        jobs = [
            {
                "job": name,
                "last": _whole(job.last),
                "next": _whole(job.next),
                "failing_since": _whole(job.failing_since),
                "cause": job.cause,
                "failures": job.failures,
            }
            for name, job in sorted(state.jobs.items())
        ]
        table = schema.jobs
        gone = sa.delete(table).where(
            table.c.site_id == self.site_id, table.c.job.not_in(list(state.jobs))
        )
        with writing(self.engine, "keep the state of its jobs") as connection:
            upsert(connection, schema.daemons, [own | daemon], ("site_id",))
            connection.execute(gone)
            upsert(connection, table, [own | job for job in jobs], ("site_id", "job"))

    def daemon(self) -> DaemonState | None:
        """The daemon that last computed the site, whether it still runs or not; None for none.

        Raises:
            StoreError: the database refuses.
        """
        daemons, jobs = schema.daemons, schema.jobs
        with reading(self.engine, "read the state of its jobs") as connection:
            found = connection.execute(
                sa.select(*_but_site(daemons)).where(daemons.c.site_id == self.site_id)
            ).mappings()
            daemon = found.first()
            if daemon is None:
                return None
            rows = connection.execute(
                sa.select(*_but_site(jobs)).where(jobs.c.site_id == self.site_id)
            ).mappings()
            own = {row["job"]: {k: v for k, v in row.items() if k != "job"} for row in rows}
        return DaemonState(**daemon, jobs={name: JobHealth(**row) for name, row in own.items()})


def _but_site(table: sa.Table) -> list[sa.Column[object]]:
    return [column for column in table.columns if column.name != "site_id"]


def _whole(seconds: float | None) -> int | None:
    return None if seconds is None else int(seconds)
