"""Stored figures out of the store, as CSV or Parquet, a day at a time."""

from __future__ import annotations

import io
from typing import TYPE_CHECKING, Literal

import pandas as pd
import pyarrow as pa
from pyarrow import parquet

from monitor.flags import describe
from monitor.store.alarms import AlarmRecord
from monitor.store.batch import (
    CONDITION_COLUMNS,
    EQUIPMENT_COLUMNS,
    LEDGER_COLUMNS,
    STREAM_COLUMNS,
)
from monitor.store.runs import Run

if TYPE_CHECKING:
    from collections.abc import Iterator
    from typing import BinaryIO

    from monitor.store.site import SiteStore

__all__ = ["Format", "What", "columns_of", "export", "tables"]

What = Literal["streams", "equipment", "conditions", "ledger", "alarms", "runs"]
Format = Literal["csv", "parquet"]
DAY = 86400
_ALL = 1_000_000_000

_COLUMNS: dict[str, tuple[str, ...]] = {
    "streams": ("time", "subject", *STREAM_COLUMNS, "flag", "rests_on", "run_id"),
    "equipment": ("time", "subject", *EQUIPMENT_COLUMNS, "flag", "rests_on", "run_id"),
    "conditions": ("time", "subject", "figure", *CONDITION_COLUMNS, "flag", "rests_on", "run_id"),
    "ledger": ("time", *LEDGER_COLUMNS, "flag", "rests_on", "run_id"),
    "alarms": ("alarm_id", *(n for n in AlarmRecord.__dataclass_fields__ if n != "alarm_id")),
}
_COLUMNS["runs"] = tuple(Run.__dataclass_fields__)
_RUN_TIMES = ("started", "ended", "window_start", "window_end")
_KEYS = ("time", "subject", "figure")
# What a spreadsheet takes for the begin of a formula.
_FORMULA = ("=", "+", "-", "@", "\t", "\n")
_ALARM_TIMES = ("raised", "cleared", "acknowledged", "shelved_until")


def columns_of(what: What) -> tuple[str, ...]:
    """The columns of an export; the unit stands in each name, times are UTC."""
    return _COLUMNS[what]


def export(store: SiteStore, what: What, start: int, end: int, kind: Format, out: BinaryIO) -> int:
    """Write stored figures to an open file.

    Args:
        store: the site's part of the store.
        what: which figures.
        start: integer UTC seconds.
        end: integer UTC seconds, not included.
        kind: CSV has times as ISO 8601 in UTC and nothing where a figure is absent; text that a
            spreadsheet would take for a formula has an apostrophe before it.
        out: a binary file; is not closed.

    Returns:
        Rows written.

    Raises:
        StoreError: the store cannot be read.
    """
    rows = 0
    if kind == "csv":
        out.write((",".join(columns_of(what)) + "\n").encode())
        for table in tables(store, what, start, end):
            text = io.StringIO()
            _no_formulas(table).to_csv(
                text, index=False, header=False, date_format="%Y-%m-%dT%H:%M:%SZ"
            )
            out.write(text.getvalue().encode())
            rows += len(table)
        return rows
    writer: parquet.ParquetWriter | None = None
    try:
        for table in tables(store, what, start, end):
            arrow = pa.Table.from_pandas(table, preserve_index=False)
            if writer is None:
                writer = parquet.ParquetWriter(out, arrow.schema)
            writer.write_table(arrow)
            rows += len(table)
    finally:
        if writer is not None:
            writer.close()
    return rows


def tables(store: SiteStore, what: What, start: int, end: int) -> Iterator[pd.DataFrame]:
    """Give stored figures in pieces of a day, the last piece at least; columns as `columns_of`."""
    if what == "alarms":
        yield _alarms(store, start, end)
        return
    if what == "runs":
        yield _runs(store, start, end)
        return
    first = start
    while True:
        last = min(first + DAY, end)
        frame = _with_runs(store, what, first, last)
        yield frame[list(columns_of(what))].astype(
            {name: "str" for name in ("subject", "figure") if name in frame.columns}
        )
        first = last
        if first >= end:
            return


def _with_runs(
    store: SiteStore,
    what: Literal["streams", "equipment", "conditions", "ledger"],
    start: int,
    end: int,
) -> pd.DataFrame:
    """Figures with the number of the run that made each: see the runs for program and site file."""
    frame = _figures(store, what, start, end).reset_index()
    frame["rests_on"] = _in_words(frame["flag"])
    keys = [key for key in _KEYS if key in frame.columns]
    runs = store.run_numbers(what, start, end)
    # As text on both sides: the store deals in categories.
    named = {key: "str" for key in keys if key != "time"}
    return frame.astype(named).merge(runs.astype(named), how="left", on=keys)


def _in_words(flags: pd.Series[int]) -> pd.Series[str]:
    """Say what each row rests on; there are few different flags."""
    words = {flag: describe(int(flag)) for flag in flags.unique()}
    return flags.map(words).astype("str")


def _no_formulas(table: pd.DataFrame) -> pd.DataFrame:
    """Put an apostrophe before text that would be a formula: names come from historians."""
    text = {
        # The writer does not quote a lone carriage return, which would begin another row.
        name: table[name].str.replace("\r\n?", "\n", regex=True)
        for name in table.columns
        if pd.api.types.is_string_dtype(table[name].dtype)
    }
    begins = {
        name: cells.str.startswith(_FORMULA).fillna(value=False) for name, cells in text.items()
    }
    return table.assign(**{n: cells.where(~begins[n], "'" + cells) for n, cells in text.items()})


def _runs(store: SiteStore, start: int, end: int) -> pd.DataFrame:
    """Runs that began in a stretch, or computed a part of it."""
    runs = [
        run for run in store.runs(_ALL)
        if start <= run.started < end
        or (run.window_start is not None and run.window_end is not None
            and run.window_start < end and start < run.window_end)
    ]  # fmt: skip
    frame = pd.DataFrame([vars(run) for run in reversed(runs)], columns=list(columns_of("runs")))
    for name in _RUN_TIMES:
        frame[name] = pd.to_datetime(frame[name].astype("Int64"), unit="s", utc=True)
    return frame


def _figures(store: SiteStore, what: What, start: int, end: int) -> pd.DataFrame:
    if what == "streams":
        return store.streams(None, start, end)
    if what == "equipment":
        return store.equipment(None, start, end)
    if what == "ledger":
        return store.ledger(start, end)
    return store.conditions(None, None, start, end)


def _alarms(store: SiteStore, start: int, end: int) -> pd.DataFrame:
    records = sorted(store.alarm_history(start, end), key=lambda a: (a.raised, a.alarm_id))
    frame = pd.DataFrame([vars(record) for record in records], columns=list(columns_of("alarms")))
    for name in _ALARM_TIMES:
        frame[name] = pd.to_datetime(frame[name].astype("Int64"), unit="s", utc=True)
    return frame.astype({"value": "float64", "cost_per_day": "float64", "alarm_id": "int64"})
