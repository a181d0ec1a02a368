"""The outbox: what is to be told to whom, and how that went."""

# ruff: noqa: S608 - the SQL below is made of constants of this file

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

__all__ = ["down_revision", "revision", "upgrade"]

revision = "0002"
down_revision = "0001"


def upgrade() -> None:
    """Make the table, its index, and the view for a person with a SQL client."""
    op.create_table(
        "notifications",
        sa.Column("notification_id", sa.Integer, primary_key=True),
        sa.Column("site_id", sa.Integer, sa.ForeignKey("sites.site_id"), nullable=False),
        *(sa.Column(name, sa.Text, nullable=False) for name in ("target", "key", "about", "event")),
        sa.Column("began", sa.BigInteger, nullable=False),
        sa.Column("time", sa.BigInteger, nullable=False),
        sa.Column("queued", sa.BigInteger, nullable=False),
        sa.Column("state", sa.Text, nullable=False),
        sa.Column("tries", sa.Integer, nullable=False),
        sa.Column("due", sa.BigInteger, nullable=False),
        sa.Column("ended", sa.BigInteger),
        sa.Column("error", sa.Text, nullable=False),
        sa.Column("content", sa.Text, nullable=False),
        sa.UniqueConstraint("site_id", "target", "key", name="notifications_once"),
    )
    op.create_index("notifications_by_state", "notifications", ["site_id", "target", "state"])
    op.execute(
        "create view v_notifications as select s.site, f.notification_id, f.target, f.event,"
        f" f.about, {_iso('f.time')} as time_utc, f.state, f.tries, {_iso('f.due')} as due_utc,"
        f" {_iso('f.ended')} as ended_utc, f.error"
        " from notifications f join sites s on s.site_id = f.site_id"
    )


def _iso(column: str) -> str:
    if op.get_bind().dialect.name == "sqlite":
        return f"strftime('%Y-%m-%dT%H:%M:%SZ', {column}, 'unixepoch')"
    return f"""to_char(to_timestamp({column}) at time zone 'UTC', 'YYYY-MM-DD"T"HH24:MI:SS"Z"')"""
