"""Write readings as three historians would: long CSV, wide local-time CSV, and a database.

Each writer appends the readings of a range of rows, so that a whole export and a live feed are the
same code, and a file's bytes do not depend on how its rows were portioned.
"""

from __future__ import annotations

import io
import itertools
import sqlite3
from typing import TYPE_CHECKING, Any, Protocol
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
from pyarrow import csv as arrow_csv

from monitor.demo.readings import BAD, NO_VALUE, Column, Readings

if TYPE_CHECKING:
    from pathlib import Path

    import numpy.typing as npt

__all__ = ["LOCAL_ZONE", "Writer", "open_writers"]

LOCAL_ZONE = ZoneInfo("Europe/Berlin")
# In the order of the quality codes of `readings`.
DCS_WORDS = ("Good", "Uncertain", "Bad", "Comm Fail")
HISTORIAN_CODES = (192, 64, 0, 0)
_NEEDED = arrow_csv.WriteOptions(include_header=False, quoting_style="none")
_WIDE = arrow_csv.WriteOptions(include_header=False, quoting_style="none", delimiter=";")


class Writer(Protocol):
    """One source's exports."""

    def append(self, first: int, last: int) -> int:
        """Append readings number ``first`` to ``last`` (not included) of every tag.

        Returns:
            Readings written.
        """


def open_writers(readings: Readings, folder: Path) -> tuple[Writer, ...]:
    """Make the three sources' writers; files go under ``folder``."""
    return (
        _DcsFiles(readings, folder / "dcs"),
        _UtilitiesFiles(readings, folder / "utilities"),
        _HistorianDatabase(readings, folder / "historian.sqlite"),
    )


def _runs(keys: npt.NDArray[np.int64], first: int, last: int) -> list[tuple[int, int]]:
    """Split a range where its key changes: the rows of each file."""
    if last <= first:
        return []
    cuts = np.flatnonzero(np.diff(keys[first:last])) + 1 + first
    edges = [first, *cuts.tolist(), last]
    return list(itertools.pairwise(edges))


def _append(path: Path, head: str, table: pa.Table, options: arrow_csv.WriteOptions) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    rows = io.BytesIO()
    arrow_csv.write_csv(table, rows, options)
    with path.open("ab") as file:
        if file.tell() == 0:
            file.write(head.encode())
        file.write(rows.getbuffer())


class _DcsFiles:
    """One file a UTC day, a row a reading in the order of time."""

    def __init__(self, readings: Readings, folder: Path) -> None:
        self._times = readings.times
        self._columns = readings.of("dcs")
        self._folder = folder
        self._days = readings.times // 86400

    def append(self, first: int, last: int) -> int:
        return sum(self._day(*run) for run in _runs(self._days, first, last))

    def _day(self, first: int, last: int) -> int:
        stamps = _iso(self._times[first:last])
        names = np.array([c.tag.source_name for c in self._columns])
        count, tags = last - first, len(self._columns)
        value = self._stack("value", first, last)
        before = np.stack([c.value[max(first - 1, 0) : last] for c in self._columns], axis=1)
        before = before[-count - 1 : -1] if first else np.vstack([before[:1], before[:-1]])
        quality, present = self._stack("quality", first, last), self._stack("present", first, last)
        # A doubled row stands first with the value before, then as it should be.
        times = present.astype(np.int64) + self._stack("doubled", first, last).astype(np.int64)
        order = np.repeat(np.arange(count * tags), times.ravel())
        is_first = np.append(True, order[1:] != order[:-1])
        is_stale = is_first & (times.ravel()[order] > 1)
        numbers = np.where(is_stale, before.ravel()[order], value.ravel()[order])
        words = quality.ravel()[order]
        text = pc.cast(pa.array(numbers), pa.string())
        text = pc.if_else(pa.array(words == NO_VALUE), "No Data", text)
        table = pa.table(
            {
                "time": pa.array(stamps).take(pa.array(order // tags)),
                "tag": pa.array(names).take(pa.array(order % tags)),
                "value": text,
                "quality": pa.array(DCS_WORDS).take(pa.array(words)),
            }
        )
        day = stamps[0][:10]
        _append(self._folder / f"{day}.csv", "time,tag,value,quality\n", table, _NEEDED)
        return int(table.num_rows)

    def _stack(self, name: str, first: int, last: int) -> npt.NDArray[Any]:
        return np.stack([getattr(c, name)[first:last] for c in self._columns], axis=1)


class _UtilitiesFiles:
    """One file a local week; the wall clock's time, decimal commas, a row of units."""

    def __init__(self, readings: Readings, folder: Path) -> None:
        self._columns = readings.of("utilities")
        self._folder = folder
        utc = pd.to_datetime(readings.times, unit="s", utc=True)
        self._local = utc.tz_convert(LOCAL_ZONE).tz_localize(None)
        calendar = self._local.isocalendar()
        self._weeks = (calendar["year"] * 100 + calendar["week"]).to_numpy(dtype=np.int64)

    def append(self, first: int, last: int) -> int:
        return sum(self._week(*run) for run in _runs(self._weeks, first, last))

    def _week(self, first: int, last: int) -> int:
        present = np.stack([c.present[first:last] for c in self._columns])
        filled = np.stack([_has_number(c, first, last) for c in self._columns])
        # The logger writes a row with blank cells, but no row at all in an outage.
        rows: npt.NDArray[np.bool_] = np.any(present, axis=0)
        stamps = self._local[first:last][rows].strftime("%d.%m.%Y %H:%M:%S")
        columns: dict[str, pa.Array] = {"Time": pa.array(stamps.astype(str).to_numpy(dtype=object))}
        for column, there in zip(self._columns, filled, strict=True):
            text = pc.cast(pa.array(column.value[first:last][rows]), pa.string())
            comma = pc.replace_substring(text, ".", ",")
            columns[column.tag.source_name] = pc.if_else(pa.array(there[rows]), comma, "")
        if not rows.any():
            return 0
        head = ";".join(columns) + "\n" + ";".join(["", *(c.tag.unit.text for c in self._columns)])
        year, week = divmod(int(self._weeks[first]), 100)
        path = self._folder / f"{year}-W{week:02d}.csv"
        _append(path, head + "\n", pa.table(columns), _WIDE)
        return int(filled.sum())


class _HistorianDatabase:
    """A table of readings keyed by tag and time, and a table of tags."""

    def __init__(self, readings: Readings, path: Path) -> None:
        self._times = readings.times
        self._columns = readings.of("historian")
        self._path = path

    def append(self, first: int, last: int) -> int:
        if last <= first:
            return 0
        self._path.parent.mkdir(parents=True, exist_ok=True)
        connection = sqlite3.connect(self._path, timeout=30)
        try:
            with connection:
                self._make_tables(connection)
                return sum(
                    self._insert(connection, number, column, first, last)
                    for number, column in enumerate(self._columns, start=1)
                )
        finally:
            connection.close()

    def _make_tables(self, connection: sqlite3.Connection) -> None:
        connection.execute(
            "create table if not exists tag_list "
            "(tag_id integer primary key, name text not null unique, unit text, description text)"
        )
        connection.execute(
            "create table if not exists reading (tag_id integer not null, stamp integer not null, "
            "reading real, quality integer not null, primary key (tag_id, stamp)) without rowid"
        )
        connection.executemany(
            "insert or ignore into tag_list values (?, ?, ?, ?)",
            [
                (number, c.tag.source_name, c.tag.unit.text, c.tag.description)
                for number, c in enumerate(self._columns, start=1)
            ],
        )

    def _insert(
        self, connection: sqlite3.Connection, number: int, column: Column, first: int, last: int
    ) -> int:
        rows = np.flatnonzero(column.present[first:last]) + first
        values = column.value[rows].astype(object)
        values[column.quality[rows] == NO_VALUE] = None
        codes = np.array(HISTORIAN_CODES)[column.quality[rows]]
        connection.executemany(
            f"insert into reading values ({number}, ?, ?, ?)",  # noqa: S608 - a counter
            zip(self._times[rows].tolist(), values.tolist(), codes.tolist(), strict=True),
        )
        return int(rows.size)


def _has_number(column: Column, first: int, last: int) -> npt.NDArray[np.bool_]:
    return column.present[first:last] & (column.quality[first:last] < BAD)


def _iso(times: npt.NDArray[np.int64]) -> npt.NDArray[np.str_]:
    text = np.datetime_as_string(times.astype("datetime64[s]"), unit="s")
    return np.char.add(text, "Z")
