"""How fast and how small the store is, beside one row a figure and beside what comes to hand.

    python benchmarks/store.py [--days 10] [--postgres postgresql://user@host/an_empty_database]

Three ways to keep the same windows (30 streams, 15 pieces of equipment, 45 condition figures, a
ledger; every 5 minutes; a window a day):

- ``layout``: this project's tables, a row a subject and time, written by its bulk mechanism;
- ``long``: one row a figure (subject, figure, time, value, flag, run), written by the very same
  mechanism, so that only the layout differs;
- ``to_sql``: one row a figure by pandas' own writer, which most people would try first (it can
  neither replace nor repeat a window).

Then the whole write, with its roll-ups for hours, shifts, days and months, and the same windows
again, which must change nothing.
"""

from __future__ import annotations

import argparse
import datetime as dt
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd
import sqlalchemy as sa

from monitor.site.shifts import ShiftCalendar
from monitor.store import schema
from monitor.store.batch import (
    CONDITION_COLUMNS,
    EQUIPMENT_COLUMNS,
    LEDGER_COLUMNS,
    QUALITY_COLUMNS,
    STREAM_COLUMNS,
    FigureBatch,
)
from monitor.store.bulk import Scope, replace_rows
from monitor.store.engine import is_sqlite, writing
from monitor.store.open import open_store

INTERVAL_S = 300
DAY = 86400
START = 1735689600  # 2025-01-01
STREAMS = [f"stream{n}" for n in range(30)]
EQUIPMENT = [f"equipment{n}" for n in range(15)]
FIGURES = [(e, f"figure{n}", "", "1", "low") for e in EQUIPMENT for n in range(3)]
TAGS = [f"tag{n}" for n in range(60)]

LONG = sa.Table(
    "long_figures",
    sa.MetaData(),
    *(
        sa.Column(name, kind, primary_key=True, autoincrement=False)
        for name, kind in (
            ("subject_id", sa.Integer),
            ("figure_id", sa.Integer),
            ("time", sa.BigInteger),
        )
    ),
    sa.Column("value", sa.Double),
    sa.Column("flag", sa.Integer, nullable=False),
    sa.Column("run_id", sa.Integer, nullable=False),
    sqlite_with_rowid=False,
)


def window(day):
    start = START + day * DAY
    times, rng = np.arange(start, start + DAY, INTERVAL_S), np.random.default_rng(day)

    def table(keys, columns):
        rows = len(keys) * len(times)
        values = {c: rng.normal(50.0, 5.0, rows) for c in columns}
        names = ("subject", "figure")[: len(keys[0])]
        keyed = {
            name: np.repeat([key[place] for key in keys], len(times))
            for place, name in enumerate(names)
        }
        return pd.DataFrame(
            {**keyed, "time": np.tile(times, len(keys)), **values, "flag": np.zeros(rows, np.int32)}
        )

    hours = np.arange(start, start + DAY, 3600)
    quality = {"tag": np.repeat(TAGS, 24), "hour": np.tile(hours, len(TAGS))}
    return FigureBatch(
        start,
        start + DAY,
        table([(s,) for s in STREAMS], STREAM_COLUMNS),
        table([(e,) for e in EQUIPMENT], EQUIPMENT_COLUMNS),
        table([f[:2] for f in FIGURES], CONDITION_COLUMNS).assign(weight=1.0),
        table([("",)], LEDGER_COLUMNS).drop(columns="subject"),
        pd.DataFrame({**quality, **dict.fromkeys(QUALITY_COLUMNS, 12)}),
    )


def parts(batch):
    """The batch's wide tables: name, columns that are figures, ids of the subjects."""
    yield schema.stream_figures, STREAM_COLUMNS, batch.streams
    yield schema.equipment_figures, EQUIPMENT_COLUMNS, batch.equipment


def figures(batch):
    return sum(len(columns) * len(frame) for _, columns, frame in parts(batch))


def subject_ids(frame, first):
    codes, names = pd.factorize(frame["subject"])
    return codes + first, list(range(first, first + len(names)))


def write_layout(engine, batch):
    with writing(engine, "measure") as connection:
        for number, (table, columns, frame) in enumerate(parts(batch)):
            ids, owned = subject_ids(frame, number * 1000)
            arrays = {
                "subject_id": ids,
                "time": frame["time"].to_numpy(),
                **{c: frame[c].to_numpy() for c in columns},
                "flag": frame["flag"].to_numpy(np.int64),
                "run_id": np.ones(len(frame), np.int64),
            }
            scope = Scope("subject_id", owned, "time", batch.start, batch.end)
            replace_rows(connection, table, arrays, scope)


def melted(batch):
    tables = []
    for number, (_, columns, frame) in enumerate(parts(batch)):
        ids, _ = subject_ids(frame, number * 1000)
        for figure, column in enumerate(columns):
            tables.append(
                pd.DataFrame(
                    {
                        "subject_id": ids,
                        "figure_id": number * 100 + figure,
                        "time": frame["time"].to_numpy(),
                        "value": frame[column].to_numpy(),
                        "flag": frame["flag"].to_numpy(np.int64),
                        "run_id": 1,
                    }
                )
            )
    return pd.concat(tables, ignore_index=True)


def write_long(engine, frame, batch):
    arrays = {name: frame[name].to_numpy() for name in frame}
    owned = sorted(set(arrays["subject_id"].tolist()))
    with writing(engine, "measure") as connection:
        scope = Scope("subject_id", owned, "time", batch.start, batch.end)
        replace_rows(connection, LONG, arrays, scope)


def write_to_sql(engine, frame):
    with writing(engine, "measure") as connection:
        frame.to_sql("by_pandas", connection, if_exists="append", index=False)


def size(engine, *tables):
    with engine.connect() as connection:
        if is_sqlite(engine):
            pages = connection.exec_driver_sql("pragma page_count").scalar()
            return pages * connection.exec_driver_sql("pragma page_size").scalar()
        sizes = [sa.func.pg_total_relation_size(table) for table in tables]
        return sum(connection.execute(sa.select(s)).scalar() for s in sizes)


def measure_layouts(open_one, days):
    batch = window(0)
    count, results = figures(batch) * days, {}
    for name in ("layout", "long", "to_sql"):
        store = open_one(name)
        engine = store.engine
        LONG.create(engine, checkfirst=True)
        empty = size(engine, "stream_figures", "equipment_figures", "long_figures")
        spent = 0.0
        for day in range(days):
            batch = window(day)
            frame = melted(batch) if name != "layout" else None
            begun = time.perf_counter()
            if name == "layout":
                write_layout(engine, batch)
            elif name == "long":
                write_long(engine, frame, batch)
            else:
                write_to_sql(engine, frame)
            spent += time.perf_counter() - begun
        tables = {
            "layout": ("stream_figures", "equipment_figures"),
            "long": ("long_figures",),
            "to_sql": ("by_pandas",),
        }[name]
        grown = size(engine, *tables) - (empty if is_sqlite(engine) else 0)
        results[name] = (count / spent, grown / count)
        if not is_sqlite(engine):
            with engine.begin() as connection:
                for table in tables:
                    connection.exec_driver_sql(f"truncate {table}")
        store.close()
    return results


def measure_whole(store, days):
    zone = "Europe/Vienna"
    shifts = tuple(dt.time(h) for h in (6, 14, 22))
    site = store.register(
        "measured", "", INTERVAL_S, zone, ShiftCalendar(shifts, ("early", "late", "night"), zone),
        streams=[(s, s, "water") for s in STREAMS],
        equipment=[(e, e, "turbine") for e in EQUIPMENT], figures=FIGURES,
    )  # fmt: skip
    run_id = site.begin_run("measure", "0", "")
    spent = []
    for _ in range(2):
        total, changed = 0.0, 0
        for day in range(days):
            batch = window(day)
            begun = time.perf_counter()
            changed += site.write(batch, run_id).changed
            total += time.perf_counter() - begun
        spent.append((total, changed))
    return spent


def report(place, results, whole, days):
    print(f"\n{place}, {days} days")
    rate, room = results["layout"]
    for name, (speed, size_) in results.items():
        print(
            f"  {name:7} {speed / 1e6:6.2f} million figures/s ({speed / rate:5.2f})"
            f" {size_:7.1f} bytes a figure ({size_ / room:5.2f})"
        )
    (first, _), (second, changed) = whole
    print(f"  whole write with roll-ups: {first / days:.3f} s a day of figures")
    print(f"  the same again: {second / days:.3f} s, {changed} rows changed")


def main():
    options = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    options.add_argument("--days", type=int, default=10)
    options.add_argument("--postgres", help="URL of an empty database")
    asked = options.parse_args()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        results = measure_layouts(
            lambda part: open_store(f"sqlite:///{part}.sqlite", folder), asked.days
        )
        with open_store("sqlite:///whole.sqlite", folder) as store:
            report("SQLite", results, measure_whole(store, asked.days), asked.days)
        if asked.postgres:
            results = measure_layouts(lambda _: open_store(asked.postgres, folder), asked.days)
            with open_store(asked.postgres, folder) as store:
                report("PostgreSQL", results, measure_whole(store, asked.days), asked.days)


if __name__ == "__main__":
    main()
