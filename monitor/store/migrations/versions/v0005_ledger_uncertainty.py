"""Keep the standard uncertainties of the ledger's lines; older figures have none."""

# ruff: noqa: S608 - the SQL below is made of constants of this file

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

__all__ = ["down_revision", "revision", "upgrade"]

revision = "0005"
down_revision = "0004"

_LINES = ("supplied", "used", "lost", "destroyed", "stored_rate", "imbalance")
_BEFORE = (
    "t0_degc", "p0_bar", *(f"{line}_{state}_kw" for state in ("live", "reference")
    for line in _LINES),
)  # fmt: skip
_NEW = tuple(f"u_{line}_live_kw" for line in _LINES if line != "stored_rate")


def upgrade() -> None:
    """Add the columns, and show them."""
    # PostgreSQL holds a table to the views on it; SQLite parses every view when a table changes.
    op.execute("drop view v_ledger")
    for name in _NEW:
        op.add_column("ledger_figures", sa.Column(name, sa.Double))
    time = (
        "strftime('%Y-%m-%dT%H:%M:%SZ', f.time, 'unixepoch')"
        if op.get_bind().dialect.name == "sqlite"
        else """to_char(to_timestamp(f.time) at time zone 'UTC', 'YYYY-MM-DD"T"HH24:MI:SS"Z"')"""
    )
    columns = ", ".join(f"f.{name}" for name in (*_BEFORE, *_NEW, "flag", "run_id"))
    op.execute(
        f"create view v_ledger as select s.site, {time} as time_utc, {columns}"
        " from ledger_figures f join sites s on s.site_id = f.site_id"
    )
