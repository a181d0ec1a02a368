"""How the daemon and each of its jobs are doing, for whoever looks from elsewhere."""

# ruff: noqa: S608 - the SQL below is made of constants of this file

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

__all__ = ["down_revision", "revision", "upgrade"]

revision = "0004"
down_revision = "0003"


def upgrade() -> None:
    """Make the two tables, and the view for a person with a SQL client."""
    op.create_table(
        "daemons",
        _site_key(),
        sa.Column("process", sa.Integer, nullable=False),
        *(sa.Column(name, sa.Text, nullable=False) for name in ("host", "version")),
        *(sa.Column(name, sa.BigInteger, nullable=False) for name in ("started", "seen")),
        sa.Column("ended", sa.BigInteger),
    )
    op.create_table(
        "jobs",
        _site_key(),
        sa.Column("job", sa.Text, primary_key=True),
        *(sa.Column(name, sa.BigInteger) for name in ("last", "next", "failing_since")),
        sa.Column("cause", sa.Text, nullable=False),
        sa.Column("failures", sa.Integer, nullable=False),
        sqlite_with_rowid=False,
    )
    times = (
        f"{_iso('f.last')} as last_utc, {_iso('f.next')} as next_utc,"
        f" {_iso('f.failing_since')} as failing_since_utc"
    )
    op.execute(
        f"create view v_jobs as select s.site, f.job, {times}, f.cause, f.failures, d.host,"
        f" d.process, d.version, {_iso('d.seen')} as seen_utc, {_iso('d.ended')} as ended_utc"
        " from jobs f join sites s on s.site_id = f.site_id"
        " join daemons d on d.site_id = f.site_id"
    )


def _site_key() -> sa.Column[int]:
    return sa.Column(
        "site_id", sa.Integer, sa.ForeignKey("sites.site_id"), primary_key=True, autoincrement=False
    )


def _iso(column: str) -> str:
    if op.get_bind().dialect.name == "sqlite":
        return f"strftime('%Y-%m-%dT%H:%M:%SZ', {column}, 'unixepoch')"
    return f"""to_char(to_timestamp({column}) at time zone 'UTC', 'YYYY-MM-DD"T"HH24:MI:SS"Z"')"""
