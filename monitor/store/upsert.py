"""Insert a few rows, or update those that are there: for the small tables."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import sqlalchemy as sa
from sqlalchemy.dialects import postgresql, sqlite

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

__all__ = ["inserted_id", "pairs", "upsert"]


def upsert(
    connection: sa.Connection,
    table: sa.Table,
    rows: Sequence[Mapping[str, Any]],
    keys: tuple[str, ...],
) -> None:
    """Insert rows; where the keys are there already, set the other columns.

    Args:
        connection: in a write transaction.
        table: a table with a unique constraint on ``keys``.
        rows: all with the same columns.
        keys: names of the columns that tell rows apart.
    """
    if not rows:
        return
    insert: Any = sqlite.insert if connection.dialect.name == "sqlite" else postgresql.insert
    statement = insert(table)
    others = {name: statement.excluded[name] for name in rows[0] if name not in keys}
    if others:
        statement = statement.on_conflict_do_update(index_elements=list(keys), set_=others)
    else:
        statement = statement.on_conflict_do_nothing(index_elements=list(keys))
    connection.execute(statement, [dict(row) for row in rows])


def inserted_id(connection: sa.Connection, table: sa.Table, row: Mapping[str, Any]) -> int:
    """Insert one row into a table that numbers its rows; give the number."""
    (number,) = table.primary_key.columns
    statement = sa.insert(table).values(dict(row)).returning(number)
    return int(connection.execute(statement).scalar_one())


def pairs(result: sa.Result[str, int]) -> dict[str, int]:
    """Names and their numbers, from a query for both."""
    return {name: int(number) for name, number in result}
