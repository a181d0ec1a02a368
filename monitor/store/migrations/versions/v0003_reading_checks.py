"""Count what the checks on readings found: too fast, spikes, out of order, ambiguous, stuck."""

# ruff: noqa: S608 - the SQL below is made of constants of this file

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

__all__ = ["down_revision", "revision", "upgrade"]

revision = "0003"
down_revision = "0002"

_BEFORE = (
    "readings", "good", "uncertain", "bad", "out_of_range", "cells", "cells_missing", "cells_held",
)  # fmt: skip
_NEW = ("too_fast", "spike", "out_of_order", "ambiguous", "cells_stuck")


def upgrade() -> None:
    """Add the columns, nothing found in what is stored already, and show them by day."""
    # PostgreSQL holds a table to the views on it; SQLite parses every view when a table changes.
    op.execute("drop view v_tag_quality_by_day")
    for name in _NEW:
        op.add_column(
            "tag_quality", sa.Column(name, sa.Integer, nullable=False, server_default="0")
        )
    day = (
        "strftime('%Y-%m-%d', f.hour, 'unixepoch')"
        if op.get_bind().dialect.name == "sqlite"
        else "to_char(to_timestamp(f.hour) at time zone 'UTC', 'YYYY-MM-DD')"
    )
    sums = ", ".join(f"sum(f.{name}) as {name}" for name in (*_BEFORE, *_NEW))
    op.execute(
        f"create view v_tag_quality_by_day as select s.site, t.tag, {day} as day_utc, {sums}"
        " from tag_quality f join tags t on t.tag_id = f.tag_id"
        f" join sites s on s.site_id = t.site_id group by s.site, t.tag, {day}"
    )
