"""Runs: which program, with which site file, computed which window, and how it went."""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import Literal

import sqlalchemy as sa

from monitor.store import schema
from monitor.store.engine import reading, writing
from monitor.store.errors import StoreError
from monitor.store.handle import SiteHandle
from monitor.store.upsert import inserted_id

__all__ = ["Run", "Runs", "abandon_running"]

Status = Literal["running", "done", "failed", "abandoned"]


@dataclass(frozen=True)
class Run:
    """One run; times in integer UTC seconds.

    Attributes:
        run_id: its number.
        job: for example ``cycle`` or ``backfill``.
        version: of the program.
        site_hash: of the site file.
        started, ended: by the wall clock; ``ended`` None while it runs.
        status: ``abandoned`` when the process died before it could say how the run went.
        window_start, window_end: what it computes, None where that makes no sense.
        readings, bad, missing: how many came in, were left out, were not there.
        message: a sentence for a person.
    """

    run_id: int
    job: str
    version: str
    site_hash: str
    started: int
    ended: int | None
    status: Status
    window_start: int | None
    window_end: int | None
    readings: int
    bad: int
    missing: int
    message: str


class Runs(SiteHandle):
    """The site's runs."""

    def begin_run(
        self,
        job: str,
        version: str,
        site_hash: str,
        window_start: int | None = None,
        window_end: int | None = None,
    ) -> int:
        """Record that a run starts now.

        Returns:
            The run's number, for `write` and `finish_run`.
        """
        row = {
            "site_id": self.site_id,
            "job": job,
            "version": version,
            "site_hash": site_hash,
            "started": int(time.time()),
            "status": "running",
            "window_start": window_start,
            "window_end": window_end,
            "readings": 0,
            "bad": 0,
            "missing": 0,
            "message": "",
        }
        with writing(self.engine, "record a run") as connection:
            return inserted_id(connection, schema.runs, row)

    def finish_run(
        self,
        run_id: int,
        status: Literal["done", "failed"],
        *,
        readings: int = 0,
        bad: int = 0,
        missing: int = 0,
        message: str = "",
    ) -> None:
        """Record how a run went.

        Raises:
            StoreError: the site has no such run.
        """
        table = schema.runs
        change = (
            sa.update(table)
            .where(table.c.run_id == run_id, table.c.site_id == self.site_id)
            .values(
                status=status,
                ended=int(time.time()),
                readings=readings,
                bad=bad,
                missing=missing,
                message=message,
            )
        )
        with writing(self.engine, "record a run's end") as connection:
            if connection.execute(change).rowcount != 1:
                raise StoreError(f"site '{self.site}' has no run {run_id}")

    def runs(self, limit: int = 20) -> list[Run]:
        """The newest runs, newest first."""
        table = schema.runs
        columns = [c for c in table.columns if c.name != "site_id"]
        query = (
            sa.select(*columns)
            .where(table.c.site_id == self.site_id)
            .order_by(table.c.run_id.desc())
            .limit(limit)
        )
        with reading(self.engine, "read its runs") as connection:
            return [Run(**row) for row in connection.execute(query).mappings()]


def abandon_running(engine: sa.Engine, site_id: int) -> int:
    """Close the runs of processes that died; only for the holder of the site's lock.

    Returns:
        How many there were.
    """
    table = schema.runs
    change = (
        sa.update(table)
        .where(table.c.site_id == site_id, table.c.status == "running")
        .values(
            status="abandoned",
            ended=int(time.time()),
            message="the process ended before the run did",
        )
    )
    with writing(engine, "close abandoned runs") as connection:
        return connection.execute(change).rowcount
