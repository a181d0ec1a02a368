"""Keep a digest of each tag's readings by hour, which tells when values alone have changed."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

__all__ = ["down_revision", "revision", "upgrade"]

revision = "0006"
down_revision = "0005"


def upgrade() -> None:
    """Add the column; of older hours it is not known."""
    op.add_column(
        "tag_quality", sa.Column("digest", sa.BigInteger, nullable=False, server_default="0")
    )
