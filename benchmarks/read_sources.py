"""What reading databases and Parquet costs beside their own drivers, and memory as files grow.

Run ``python benchmarks/read_sources.py [days]``. Speeds are the best of three, as ratios to the
driver's own fetch of the same rows; the machine's own speed drops out. Memory is the peak of a
process of its own that reads day windows with little room for parsed rows.
"""

from __future__ import annotations

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


def write_database(path, frame):
    epoch = frame["time"].dt.as_unit("s").astype("int64").tolist()
    with sqlite3.connect(path) as connection:
        connection.execute("create table readings (time integer, tag text, value real)")
        rows = zip(epoch, frame["tag"].tolist(), frame["value"].tolist(), strict=True)
        connection.executemany("insert into readings values (?, ?, ?)", rows)
        connection.execute("create index by_time on readings (time)")
    connection.close()


def fetch(path):
    """The driver's own fetch of all rows."""
    connection = sqlite3.connect(path)
    cursor, count = connection.execute("select time, tag, value from readings"), 0
    while rows := cursor.fetchmany(50_000):
        count += len(rows)
    connection.close()
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


def speeds(folder, days):
    frame = frame_of(days)
    write_database(folder / "r.sqlite", frame)
    pq.write_table(pa.Table.from_pandas(frame, preserve_index=False), folder / "r.parquet")
    sql = {"url": "sqlite:///r.sqlite", "table": "readings", "time_kind": "epoch_s"}
    parquet = {"path": "r.parquet"}
    for kind, options in (("sql", sql), ("parquet", parquet)):
        if read_days(kind, options, folder, days, 7) != len(frame):
            raise SystemExit(f"{kind} lost readings: nothing is measured")
    driver = best(fetch, folder / "r.sqlite")
    bare = best(pq.read_table, folder / "r.parquet")
    print(f"{days} days of minutes, {len(frame) / 1e6:.2f} million readings")
    print(f"{'':44}{'s':>8}{'/ own':>8}   the same in processor time")
    for name, took, own in (
        ("SQLite, the driver's own fetch of all rows", driver, driver),
        ("sql, week windows", best(read_days, "sql", sql, folder, days, 7), driver),
        ("sql, day windows", best(read_days, "sql", sql, folder, days, 1), driver),
        ("Parquet, its own read of all rows", bare, bare),
        ("parquet, week windows", best(read_days, "parquet", parquet, folder, days, 7), bare),
        ("parquet, day windows", best(read_days, "parquet", parquet, folder, days, 1), bare),
    ):
        columns = zip(took, took / own, strict=True)
        print(f"{name:44}" + "   ".join(f"{s:8.3f}{o:8.2f}" for s, o in columns))


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
    days = int(sys.argv[1]) if len(sys.argv) > 1 else 28
    with tempfile.TemporaryDirectory() as name:
        speeds(Path(name), days)
        memory(Path(name))


if __name__ == "__main__":
    main()
