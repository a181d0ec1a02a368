"""What a store needs once a day so that years of running leave it quick and small."""

from __future__ import annotations

from typing import TYPE_CHECKING

import sqlalchemy as sa

from monitor.log import logger
from monitor.store import schema
from monitor.store.engine import is_sqlite, reading, writing
from monitor.store.retention import apply_retention

if TYPE_CHECKING:
    from monitor.store.retention import Keep
    from monitor.store.site import SiteStore

__all__ = ["keep_house"]

DAY = 86400
_FAILED_RUNS_KEPT = 90 * DAY


def keep_house(store: SiteStore, now: int, keep: Keep | None = None) -> int:
    """Drop what has expired and old runs that stored nothing; keep SQLite quick.

    A run that stored figures is their provenance and stays as long as they do.

    Args:
        store: the site's part of the store.
        now: integer UTC seconds.
        keep: how long figures are kept; left out: for ever.

    Returns:
        Runs dropped.

    Raises:
        StoreError: the database refuses.
    """
    if keep is not None:
        for name, count in apply_retention(store, keep, now).items():
            logger().info("expired rows dropped", table=name, rows=count)
    table = schema.runs
    old = sa.delete(table).where(
        table.c.site_id == store.site_id,
        table.c.status == "failed",
        table.c.readings == 0,
        table.c.started < now - _FAILED_RUNS_KEPT,
    )
    with writing(store.engine, "drop old failed runs") as connection:
        dropped = connection.execute(old).rowcount
    if is_sqlite(store.engine):
        # PostgreSQL looks after itself. A checkpoint must stand outside any transaction.
        with reading(store.engine, "keep house") as connection:
            raw = connection.connection.driver_connection
            if raw is not None:
                connection.exec_driver_sql("commit")
                raw.execute("pragma wal_checkpoint(truncate)").fetchall()
                raw.execute("pragma optimize").fetchall()
                connection.exec_driver_sql("begin")
    return dropped
