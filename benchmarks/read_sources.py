"""What reading databases and Parquet costs beside their own drivers, and memory as files grow.

    python benchmarks/read_sources.py [--days 28] [--postgres postgresql://user@host/database]

60 tags, a reading a minute; ``--days 365`` is the whole year of 31.5 million readings, some
minutes. Speeds are the best of three, as ratios to the driver's own fetch of the same rows (its
rows in chunks, nothing done with them); the machine's own speed drops out. The database's tables
are dropped afterwards. Memory is the peak of a process of its own that reads day windows with
little room for parsed rows.
"""

from __future__ import annotations

import argparse
import re
import sqlite3
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
from read_exports import START, TAGS, best, write_long, write_wide

from connectors import open_source
from connectors.base import Window
from connectors.csv_options import CsvOptions
from connectors.csv_source import CsvSource

PER_DAY = 1440


def frame_of(days):
    times = pd.date_range(START, periods=days * PER_DAY, freq="1min")
    values = np.random.default_rng(1).normal(100, 5, len(times) * len(TAGS)).round(3)
    return pd.DataFrame(
        {"time": np.repeat(times, len(TAGS)), "tag": np.tile(TAGS, len(times)), "value": values}
    )


def parts(days, most=30):
    """The readings in pieces that fit into memory."""
    for day in range(0, days, most):
        frame = frame_of(min(most, days - day))
        yield frame.assign(time=frame["time"] + pd.Timedelta(days=day))


# A table of each layout and kind of time: what is created, and how a frame becomes its rows.
TIMES = {
    "epoch_s": ("bigint", lambda time: time.dt.as_unit("s").astype("int64")),
    "timestamp_zoned": ("timestamptz", lambda time: time.dt.strftime("%Y-%m-%d %H:%M:%S+00")),
    "timestamp_local": ("timestamp", lambda time: time.dt.strftime("%Y-%m-%d %H:%M:%S")),
    "text_iso": ("text", lambda time: time.dt.strftime("%Y-%m-%d %H:%M:%S")),
}
LAYOUTS = ("long", "looked up", "wide")
CASES = [("epoch_s", "long"), ("epoch_s", "looked up"), ("epoch_s", "wide"), ("text_iso", "long")]


def columns_of(layout, kind):
    if layout == "wide":
        return [f"time {kind}", *(f'"{tag}" double precision' for tag in TAGS)]
    return [f"time {kind}", f"tag {'text' if layout == 'long' else 'integer'}", "value float8"]


def table_of(frame, layout, kind):
    """A frame as the rows of a table."""
    if layout == "wide":
        wide = frame["value"].to_numpy().reshape(-1, len(TAGS))
        times = TIMES[kind][1](frame["time"].iloc[:: len(TAGS)])
        return pd.DataFrame(wide, columns=TAGS).assign(time=times.to_numpy())[["time", *TAGS]]
    tags = frame["tag"]
    if layout == "looked up":
        tags = np.tile(np.arange(len(TAGS)), len(frame) // len(TAGS))
    return frame.assign(time=TIMES[kind][1](frame["time"]), tag=tags)


def write_sqlite(path, days, layout, kind):
    connection = sqlite3.connect(path)
    connection.execute(f"create table readings ({', '.join(columns_of(layout, TIMES[kind][0]))})")
    for frame in parts(days):
        table = table_of(frame, layout, kind)
        marks = ", ".join("?" * len(table.columns))
        rows = zip(*(table[name].tolist() for name in table), strict=True)
        connection.executemany(f"insert into readings values ({marks})", rows)
    connection.execute("create table tags (id integer primary key, name text)")
    connection.executemany("insert into tags values (?, ?)", enumerate(TAGS))
    connection.execute("create index by_time on readings (time)")
    connection.commit()
    connection.close()


def write_postgres(dsn, days, layout, kind):
    import psycopg  # noqa: PLC0415 - an extra that only this needs

    with psycopg.connect(dsn) as connection:
        connection.execute("drop table if exists readings, tags")
        columns = ", ".join(columns_of(layout, TIMES[kind][0]))
        connection.execute(f"create table readings ({columns})")
        for frame in parts(days):
            text = table_of(frame, layout, kind).to_csv(index=False, header=False)
            with connection.cursor().copy("copy readings from stdin (format csv)") as copy:
                copy.write(text)
        connection.execute("create table tags (id integer primary key, name text)")
        connection.cursor().executemany("insert into tags values (%s, %s)", list(enumerate(TAGS)))
        connection.execute("create index by_time on readings (time)")
        connection.execute("analyze readings")


def fetch(path):
    """The driver's own fetch of all rows."""
    connection = sqlite3.connect(path)
    cursor, count = connection.execute("select * from readings"), 0
    while rows := cursor.fetchmany(50_000):
        count += len(rows)
    connection.close()
    return count


def fetch_postgres(dsn):
    import psycopg  # noqa: PLC0415

    with psycopg.connect(dsn) as connection, connection.cursor("all_rows") as cursor:
        cursor.execute("select * from readings")
        count = 0
        while rows := cursor.fetchmany(50_000):
            count += len(rows)
    return count


def read_days(kind, options, folder, days, step):
    source = open_source(kind, options, folder)
    count = 0
    for day in range(0, days, step):
        start = START + pd.Timedelta(days=day)
        end = START + pd.Timedelta(days=min(day + step, days))
        count += len(source.read(TAGS, Window(start, end)).readings)
    source.close()
    return count


def peak(path, layout, days):
    """Print the peak of memory [MB] of this process after it has read the file by days."""
    options = {"path": path, "layout": layout}
    source = CsvSource(CsvOptions(**options), Path(path).parent, cache_limit=8 << 20)
    for day in range(int(days)):
        start = START + pd.Timedelta(days=day)
        source.read(TAGS, Window(start, start + pd.Timedelta(days=1)))
    # Not getrusage: its peak is that of the parent where the process was forked from a larger one.
    status = Path("/proc/self/status").read_text()
    print(int(re.search(r"VmHWM:\s*(\d+)", status)[1]) / 1024)


def head(days):
    count = days * PER_DAY * len(TAGS)
    print(f"{days} days of minutes, {count / 1e6:.2f} million readings")
    print(f"{'':44}{'s':>8}{'/ own':>8}   the same in processor time", flush=True)


def show(name, took, own):
    columns = zip(took, took / own, strict=True)
    print(f"{name:44}" + "   ".join(f"{s:8.3f}{o:8.2f}" for s, o in columns), flush=True)


def sql_speeds(name, url, bare, folder, days, case):
    kind, layout = case
    options = {"url": url, "table": "readings", "time_kind": kind}
    options |= {"tag_table": "tags"} if layout == "looked up" else {}
    options |= {"layout": "wide"} if layout == "wide" else {}
    if read_days("sql", options, folder, days, 7) != days * PER_DAY * len(TAGS):
        raise SystemExit(f"{name}, {case} lost readings: nothing is measured")
    own = best(*bare)
    show(f"{name}, {layout}, {kind}: own fetch", own, own)
    for step in (7, 1):
        show(
            f"  windows of {step} day(s)", best(read_days, "sql", options, folder, days, step), own
        )


def sqlite_speeds(folder, days, cases):
    for kind, layout in cases:
        path = folder / "r.sqlite"
        write_sqlite(path, days, layout, kind)
        sql_speeds("SQLite", f"sqlite:///{path}", (fetch, path), folder, days, (kind, layout))
        path.unlink()


def postgres_speeds(dsn, folder, days):
    url = dsn.replace("postgresql://", "postgresql+psycopg://")
    for case in (*CASES, ("timestamp_zoned", "long"), ("timestamp_local", "long")):
        write_postgres(dsn, days, case[1], case[0])
        sql_speeds("PostgreSQL", url, (fetch_postgres, dsn), folder, days, case)


def parquet_speeds(folder, days):
    writer = None
    for frame in parts(days):
        table = pa.Table.from_pandas(frame, preserve_index=False)
        writer = writer or pq.ParquetWriter(folder / "r.parquet", table.schema)
        writer.write_table(table)
    writer.close()
    parquet = {"path": "r.parquet"}
    if read_days("parquet", parquet, folder, days, 7) != days * PER_DAY * len(TAGS):
        raise SystemExit("parquet lost readings: nothing is measured")
    bare = best(pq.read_table, folder / "r.parquet")
    show("Parquet, its own read of all rows", bare, bare)
    for step in (7, 1):
        took = best(read_days, "parquet", parquet, folder, days, step)
        show(f"  windows of {step} day(s)", took, bare)


def memory(folder):
    print(f"{'peak of memory, MB':20}" + "".join(f"{f'{days} days':>12}" for days in (5, 20, 80)))
    for layout, write in (("long", write_long), ("wide", write_wide)):
        peaks = []
        for days in (5, 20, 80):
            path = folder / f"{layout}{days}.csv"
            write(path, days)
            command = [sys.executable, __file__, "--peak", str(path), layout, str(days)]
            peaks.append(float(subprocess.run(command, check=True, capture_output=True).stdout))
            path.unlink()
        print(f"csv, {layout:15}" + "".join(f"{size:12.0f}" for size in peaks))


def main():
    if sys.argv[1:2] == ["--peak"]:
        peak(*sys.argv[2:])
        return
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("--days", type=int, default=28)
    parser.add_argument("--postgres", help="address of a database to write the tables into")
    parser.add_argument("--layout", choices=LAYOUTS, help="of SQLite's tables, all by default")
    parser.add_argument("--only-sql", action="store_true", help="leave Parquet and memory out")
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        head(asked.days)
        sqlite_speeds(folder, asked.days, [c for c in CASES if asked.layout in {None, c[1]}])
        if asked.postgres:
            postgres_speeds(asked.postgres, folder, asked.days)
        if not asked.only_sql:
            parquet_speeds(folder, asked.days)
            memory(folder)


if __name__ == "__main__":
    main()
