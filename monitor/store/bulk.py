"""Replace many rows of one table through the driver; rows that are equal stay as they are.

One mechanism for every big table: plain inserts where nothing is stored yet; else an upsert that
leaves equal rows alone, then removal of what the rows no longer hold. SQLite takes a prepared
statement; PostgreSQL takes COPY, for an upsert into a staging table and one statement from there,
because an upsert that rewrites equal rows doubles the table.
"""

from __future__ import annotations

import io
from dataclasses import dataclass, field
from functools import cache
from itertools import chain, islice
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.csv
import sqlalchemy as sa

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

__all__ = ["Changes", "Scope", "fetch", "listed_ids", "replace_rows"]

Values = npt.NDArray[Any]

_ID_CHUNK = 5000
"""Ids in one statement: far below both databases' limit on a statement's length."""
_ROWS_CHUNK = 10_000
_ROWS_A_STATEMENT = 20
"""Starting and ending a statement of SQLite costs a sixth of a row's time and more. More rows are
hardly faster; with the widest table's columns these stay below SQLite's old limit, 999 numbers."""
_PROVENANCE = "run_id"
"""Not compared: a row keeps the run that last changed it."""


@dataclass(frozen=True)
class Changes:
    """What a replacement did: rows handed over, rows inserted or changed, rows removed."""

    rows: int = 0
    changed: int = 0
    removed: int = 0

    def __add__(self, other: Changes) -> Changes:
        return Changes(
            self.rows + other.rows, self.changed + other.changed, self.removed + other.removed
        )


@dataclass(frozen=True)
class Scope:
    """The part of a table that the rows stand for: these ids, times in [start, end).

    Attributes:
        id_column: name of the key column that ``ids`` are of.
        ids: the ids.
        time_column: name of the key column of time.
        start, end: integer UTC seconds.
        fixed: other key columns and the one value they have.
    """

    id_column: str
    ids: Sequence[int]
    time_column: str
    start: int
    end: int
    fixed: Mapping[str, int] = field(default_factory=dict)

    def conditions(self, alias: str) -> Iterator[str]:
        """Yield SQL conditions; all of them together cover the scope. Only integers go in."""
        fixed = [f"{alias}.{name} = {int(value)}" for name, value in self.fixed.items()]
        time = f"{alias}.{self.time_column}"
        span = [f"{time} >= {int(self.start)}", f"{time} < {int(self.end)}"]
        for owned in listed_ids(f"{alias}.{self.id_column}", self.ids):
            yield " and ".join([*fixed, owned, *span])


def listed_ids(column: str, ids: Sequence[int]) -> Iterator[str]:
    """Yield SQL conditions ``column in (...)`` that together cover the ids."""
    for first in range(0, len(ids), _ID_CHUNK):
        listed = ", ".join(str(int(i)) for i in ids[first : first + _ID_CHUNK])
        yield f"{column} in ({listed})"


def replace_rows(
    connection: sa.Connection, table: sa.Table, columns: Mapping[str, Values], scope: Scope
) -> Changes:
    """Make the rows of ``scope`` exactly these.

    Args:
        connection: in a write transaction, which the caller commits.
        table: one of the store's big tables.
        columns: an array for every column of the table, all of one length, keys unique, every row
            inside the scope. NaN and None are stored as NULL.
        scope: rows in here that are not among ``columns`` are removed.
    """
    names = [column.name for column in table.columns]
    keys = [columns[name] for name in _keys(table)]
    order = np.lexsort(keys[::-1])
    ordered = {name: columns[name][order] for name in names}
    if connection.dialect.name == "sqlite":
        return _replace_sqlite(connection, table, ordered, scope)
    return _replace_postgres(connection, table, ordered, scope)


@cache
def _keys(table: sa.Table) -> tuple[str, ...]:
    return tuple(column.name for column in table.primary_key.columns)


def _replace_sqlite(
    connection: sa.Connection, table: sa.Table, columns: dict[str, Values], scope: Scope
) -> Changes:
    driver: Any = connection.connection.driver_connection
    count = len(next(iter(columns.values())))
    rows = _rows(list(columns.values()), count)
    if not any(driver.execute(_any(table, where)).fetchone() for where in scope.conditions("t")):
        _insert(driver, table, rows, count)
        return Changes(count, count, 0)
    before = driver.total_changes
    _insert(driver, table, rows, count, _on_conflict(table))
    changed = driver.total_changes - before
    held = sum(
        driver.execute(_count(table, where)).fetchone()[0] for where in scope.conditions("t")
    )
    removed = _remove_sqlite(driver, table, columns, scope) if held != count else 0
    return Changes(count, changed, removed)


def _remove_sqlite(
    driver: Any,  # noqa: ANN401 - sqlite3's own connection
    table: sa.Table,
    columns: dict[str, Values],
    scope: Scope,
) -> int:
    keys = _keys(table)
    wanted = set(zip(*(columns[name].tolist() for name in keys), strict=True))
    listed = ", ".join(keys)
    held = [
        row
        for where in scope.conditions("t")
        for row in driver.execute(f"select {listed} from {table.name} t where {where}")  # noqa: S608
    ]
    gone = [row for row in held if row not in wanted]
    matched = " and ".join(f"{name} = ?" for name in keys)
    driver.executemany(f"delete from {table.name} where {matched}", gone)  # noqa: S608
    return len(gone)


def _insert(
    driver: Any,  # noqa: ANN401 - sqlite3's own connection
    table: sa.Table,
    rows: Iterator[tuple[Any, ...]],
    count: int,
    on_conflict: str = "",
) -> None:
    """Insert rows, many a statement, and those that are left over one by one."""
    many = count // _ROWS_A_STATEMENT * _ROWS_A_STATEMENT
    numbers = chain.from_iterable(islice(rows, many))
    # The same iterator as often as a statement has numbers: each takes the next one.
    statements = zip(*[numbers] * (_ROWS_A_STATEMENT * len(table.columns)), strict=True)
    driver.executemany(_sqlite_insert(table, _ROWS_A_STATEMENT) + on_conflict, statements)
    driver.executemany(_sqlite_insert(table, 1) + on_conflict, rows)


def _rows(columns: Sequence[Values], count: int) -> Iterator[tuple[Any, ...]]:
    """Rows of Python numbers for the driver, which stores NaN as NULL by itself.

    A part at a time, since a Python number takes five times the room of one in an array.
    """
    parts = (slice(start, start + _ROWS_CHUNK) for start in range(0, count, _ROWS_CHUNK))
    return chain.from_iterable(
        zip(*(values[part].tolist() for values in columns), strict=True) for part in parts
    )


@cache
def _sqlite_insert(table: sa.Table, count: int) -> str:
    names = [_quoted(column.name) for column in table.columns]
    row = f"({', '.join('?' for _ in names)})"
    listed = ", ".join([row] * count)
    return f"insert into {table.name} as t ({', '.join(names)}) values {listed}"  # noqa: S608


@cache
def _on_conflict(table: sa.Table) -> str:
    keys = ", ".join(_keys(table))
    differs = " or ".join(f"t.{name} is not excluded.{name}" for name in _compared(table))
    return f" on conflict ({keys}) do update set {_assignments(table)} where {differs}"


@cache
def _compared(table: sa.Table) -> tuple[str, ...]:
    others = [c.name for c in table.columns if not c.primary_key and c.name != _PROVENANCE]
    return tuple(_quoted(name) for name in others)


def _assignments(table: sa.Table) -> str:
    others = [_quoted(c.name) for c in table.columns if not c.primary_key]
    return ", ".join(f"{name} = excluded.{name}" for name in others)


def _quoted(name: str) -> str:
    # Names are this program's own; some are words of SQL ("limit").
    return f'"{name}"'


def _replace_postgres(
    connection: sa.Connection, table: sa.Table, columns: dict[str, Values], scope: Scope
) -> Changes:
    stage = f"stage_{table.name}"
    names = ", ".join(_quoted(column.name) for column in table.columns)
    driver: Any = connection.connection.driver_connection
    count = len(next(iter(columns.values())))
    with driver.cursor() as cursor:
        if not any(cursor.execute(_any(table, w)).fetchone() for w in scope.conditions("t")):
            with cursor.copy(f"copy {table.name} ({names}) from stdin (format csv)") as copy:
                copy.write(_csv(table, columns))
            return Changes(count, count, 0)
        cursor.execute(
            f"create temporary table if not exists {stage} (like {table.name}) "
            "on commit delete rows"
        )
        # A transaction may replace several parts of one table, one after the other.
        cursor.execute(f"truncate {stage}")
        with cursor.copy(f"copy {stage} ({names}) from stdin (format csv)") as copy:
            copy.write(_csv(table, columns))
        # A plan needs to know that the stage is not empty.
        cursor.execute(f"analyze {stage}")
        cursor.execute(_postgres_upsert(table, stage, names))
        changed = cursor.rowcount
        held = 0
        for where in scope.conditions("t"):
            held += cursor.execute(_count(table, where)).fetchone()[0]
        removed = _remove_postgres(cursor, table, stage, scope) if held != count else 0
    return Changes(count, changed, removed)


def _remove_postgres(
    cursor: Any,  # noqa: ANN401 - psycopg's own cursor
    table: sa.Table,
    stage: str,
    scope: Scope,
) -> int:
    same = " and ".join(f"s.{name} = t.{name}" for name in _keys(table))
    # A table that grew since it was last analysed looks small to the planner, which would then go
    # through the stage once a row.
    cursor.execute("set local enable_nestloop = off")
    removed = 0
    for where in scope.conditions("t"):
        cursor.execute(
            f"delete from {table.name} t where {where} "  # noqa: S608
            f"and not exists (select from {stage} s where {same})"
        )
        removed += cursor.rowcount
    cursor.execute("set local enable_nestloop = on")
    return removed


def _any(table: sa.Table, where: str) -> str:
    return f"select 1 from {table.name} t where {where} limit 1"  # noqa: S608


def _count(table: sa.Table, where: str) -> str:
    return f"select count(*) from {table.name} t where {where}"  # noqa: S608


@cache
def _postgres_upsert(table: sa.Table, stage: str, names: str) -> str:
    keys = ", ".join(_keys(table))
    own = ", ".join(f"t.{name}" for name in _compared(table))
    new = ", ".join(f"excluded.{name}" for name in _compared(table))
    return (
        f"insert into {table.name} as t ({names}) select {names} from {stage} order by {keys} "  # noqa: S608
        f"on conflict ({keys}) do update set {_assignments(table)} "
        f"where ({own}) is distinct from ({new})"
    )


def _csv(table: sa.Table, columns: dict[str, Values]) -> bytes:
    """Rows as CSV; numbers in the shortest form that reads back to the same one."""
    whole = {c.name for c in table.columns if isinstance(c.type, sa.Integer)}
    arrays = [
        pa.array(values, type=pa.int64() if name in whole else pa.float64(), from_pandas=True)
        for name, values in columns.items()
    ]
    target = io.BytesIO()
    pyarrow.csv.write_csv(
        pa.table(arrays, names=list(columns)),
        target,
        pyarrow.csv.WriteOptions(include_header=False),
    )
    return target.getvalue()


def fetch(connection: sa.Connection, query: str, width: int) -> npt.NDArray[np.float64]:
    """Read numbers through the driver; NULL becomes NaN, whole numbers stay exact (below 2^53).

    Args:
        connection: inside a transaction.
        query: SQL of this program's own, without parameters.
        width: how many columns it gives.

    Returns:
        Shape (rows, width).
    """
    driver: Any = connection.connection.driver_connection
    if connection.dialect.name == "sqlite":
        rows = driver.execute(query).fetchall()
    else:
        with driver.cursor(binary=True) as cursor:
            rows = cursor.execute(query).fetchall()
    return np.array(rows, dtype=np.float64).reshape(-1, width)
