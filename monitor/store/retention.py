"""Retention: fine figures, hourly ones and drift points go when they are old; days stay for ever.

What is dropped is older than what may still be written by `SLACK_S`, so that a window at the very
edge finds every hour that its days and shifts are made of. Roll-ups over shifts, days and months
are never touched. SQLite does not give the room back to the disk; it fills it again.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import sqlalchemy as sa

from monitor.store import schema
from monitor.store.bulk import listed_ids
from monitor.store.engine import reading, writing

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.store.site import SiteStore

__all__ = ["SLACK_S", "Keep", "apply_retention", "oldest_writable"]

DAY = 86400
SLACK_S = 3 * DAY
"""More than any local day or shift is long, with its offset from UTC."""
_BATCH_S = 30 * DAY
"""Time dropped in one transaction: others may write between two."""


@dataclass(frozen=True)
class Keep:
    """How long each resolution is kept, in seconds; None is for ever.

    Attributes:
        cells: figures on the grid.
        hours: roll-ups by hour, and the quality of readings, which is by hour.
        drift: points of the control charts.
    """

    cells: float | None = None
    hours: float | None = None
    drift: float | None = None


@dataclass(frozen=True)
class _Part:
    """Rows of one table that are dropped together: these ids, older than ``before``."""

    table: str
    id_column: str
    ids: list[int]
    time_column: str
    before: int
    fixed: str = ""

    def conditions(self) -> Iterator[str]:
        for owned in listed_ids(self.id_column, self.ids):
            yield f"{self.fixed}{owned} and {self.time_column} < "


def oldest_writable(keep: Keep, now: float) -> int | None:
    """From when on figures may be computed, integer UTC seconds on a midnight; None: from ever.

    Older ones would not last, and the hours that their days are made of may be gone.
    """
    kept = [k for k in (keep.cells, keep.hours) if k is not None]
    return int((now - min(kept)) // DAY) * DAY if kept else None


def apply_retention(store: SiteStore, keep: Keep, now: float) -> dict[str, int]:
    """Drop one site's rows that are older than they are to be kept, a month a transaction.

    Done again it drops nothing more; ended half-way it has dropped the oldest, and goes on the next
    time. A run stays as long as any figure or count that it made may be there.

    Args:
        store: the site's part of the store.
        keep: how long.
        now: the wall clock, UTC seconds.

    Returns:
        Rows dropped by table, where any were.

    Raises:
        StoreError: the database refuses.
    """
    dropped: dict[str, int] = {}
    for part in _parts(store, keep, now):
        count = sum(_drop(store, part, condition) for condition in part.conditions())
        if count:
            dropped[part.table] = dropped.get(part.table, 0) + count
    if keep.cells is not None and keep.hours is not None:
        count = _drop_runs(store, _before(max(keep.cells, keep.hours), now))
        if count:
            dropped["runs"] = count
    return dropped


def _before(keep: float, now: float) -> int:
    return int((now - keep) // DAY) * DAY - SLACK_S


def _parts(store: SiteStore, keep: Keep, now: float) -> Iterator[_Part]:
    with reading(store.engine, "read its subjects") as connection:
        subjects, tags = schema.subjects, schema.tags
        of_site = sa.select(subjects.c.subject_id).where(subjects.c.site_id == store.site_id)
        ids = sorted(connection.execute(of_site).scalars())
        of_tags = sa.select(tags.c.tag_id).where(tags.c.site_id == store.site_id)
        tag_ids = sorted(connection.execute(of_tags).scalars())
    if keep.cells is not None:
        before = _before(keep.cells, now)
        for table in ("stream_figures", "equipment_figures", "condition_figures"):
            yield _Part(table, "subject_id", ids, "time", before)
        yield _Part("ledger_figures", "site_id", [store.site_id], "time", before)
    if keep.hours is not None:
        before, hour = _before(keep.hours, now), schema.RESOLUTIONS["hour"]
        yield _Part("rollups", "subject_id", ids, "start", before, f"resolution = {hour} and ")
        yield _Part("tag_quality", "tag_id", tag_ids, "hour", before)
    if keep.drift is not None:
        yield _Part("drift_points", "subject_id", ids, "hour", _before(keep.drift, now))


def _drop(store: SiteStore, part: _Part, condition: str) -> int:
    dropped = 0
    while True:
        oldest = f"select min({part.time_column}) from {part.table} where {condition}{part.before}"  # noqa: S608
        with reading(store.engine, "look for expired rows") as connection:
            first = connection.exec_driver_sql(oldest).scalar()
        if first is None:
            return dropped
        before = min(first + _BATCH_S, part.before)
        delete = f"delete from {part.table} where {condition}{before}"  # noqa: S608
        with writing(store.engine, "drop expired rows") as connection:
            dropped += connection.exec_driver_sql(delete).rowcount


def _drop_runs(store: SiteStore, before: int) -> int:
    table = schema.runs
    expired = sa.delete(table).where(
        table.c.site_id == store.site_id,
        table.c.status != "running",
        table.c.started < before,
        sa.func.coalesce(table.c.window_end, table.c.started) < before,
    )
    with writing(store.engine, "drop expired runs") as connection:
        return connection.execute(expired).rowcount
