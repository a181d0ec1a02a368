"""What reading exports costs, beside what a user would write by hand.

Run ``python benchmarks/read_exports.py [days]``. Every figure is the best of three, as a ratio to
one plain read of all bytes; the machine's own speed drops out.
"""

from __future__ import annotations

import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv as pacsv

from connectors import open_source
from connectors.base import Window
from connectors.csv_options import CsvOptions
from connectors.csv_source import CsvSource

TAGS = [f"62-FT-{n:03d}" for n in range(60)]
PER_DAY = 720
START = pd.Timestamp("2026-01-01", tz="UTC")


def write_long(path, days, *, words=False):
    times = pd.date_range(START, periods=days * PER_DAY, freq="2min")
    values = np.random.default_rng(1).normal(100, 5, len(times) * len(TAGS)).round(3)
    frame = pd.DataFrame(
        {
            "time": np.repeat(times.strftime("%Y-%m-%d %H:%M:%S").to_numpy(), len(TAGS)),
            "tag": np.tile(TAGS, len(times)),
            "value": values,
            "quality": "Good",
        }
    )
    if words:
        frame["value"] = frame["value"].astype(str)
        frame.loc[::500, "value"] = "Out of use"  # a word in no list: the column is read as text
    frame.to_csv(path, index=False)
    return len(frame)


def write_wide(path, days):
    times = pd.date_range(START, periods=days * PER_DAY, freq="2min")
    values = np.random.default_rng(1).normal(100, 5, (len(times), len(TAGS))).round(3)
    frame = pd.DataFrame(values, columns=TAGS)
    frame.insert(0, "time", times.strftime("%Y-%m-%d %H:%M:%S"))
    frame.to_csv(path, index=False)
    return values.size


def typed_read(path):
    """One read of all bytes by the parser alone, times included."""
    text = pa.dictionary(pa.int32(), pa.string())
    types = {"time": pa.timestamp("us"), "tag": text, "quality": text}
    return pacsv.read_csv(path, convert_options=pacsv.ConvertOptions(column_types=types)).num_rows


def read_by_hand(path):
    """One read of all bytes, then times parsed as one would in a script."""
    options = pacsv.ConvertOptions(column_types={"time": pa.string()})
    frame = pacsv.read_csv(path, convert_options=options).to_pandas()
    frame["time"] = pd.to_datetime(frame["time"], utc=True)
    return len(frame)


def backfill(path, days, *, cache_limit=None, **options):
    """Day windows over the export, as a backfill asks for them."""
    source = open_source("csv", {"path": str(path), **options}, path.parent)
    if cache_limit is not None:
        stated = CsvOptions(path=str(path), **options)
        source = CsvSource(stated, path.parent, cache_limit=cache_limit)
    count = 0
    for day in range(days):
        start = START + pd.Timedelta(days=day)
        count += len(source.read(TAGS, Window(start, start + pd.Timedelta(days=1))).readings)
    return count


def live(source, path):
    """One minute of a daemon: the file grows, two hours are read again."""
    end = START + pd.Timedelta(days=1)
    with path.open("a") as file:
        file.writelines(f"2026-01-01 23:59:30,{tag},1.5,Good\n" for tag in TAGS)
    return len(source.read(TAGS, Window(end - pd.Timedelta(hours=2), end)).readings)


def best(work, *arguments, **options):
    """Return the least wall-clock and processor time; the second counts all threads."""
    times = []
    for _ in range(3):
        begin, busy = time.perf_counter(), time.process_time()
        work(*arguments, **options)
        times.append((time.perf_counter() - begin, time.process_time() - busy))
    return np.min(times, axis=0)


def main():
    days = int(sys.argv[1]) if len(sys.argv) > 1 else 60
    with tempfile.TemporaryDirectory() as folder:
        clean, words, wide = (Path(folder) / name for name in ("long.csv", "words.csv", "wide.csv"))
        count = write_long(clean, days)
        write_long(words, days, words=True)
        write_wide(wide, days)
        quality = {"quality_column": "quality"}
        if (
            backfill(clean, days, **quality) != count
            or backfill(wide, days, layout="wide") != count
        ):
            raise SystemExit("a backfill lost readings: nothing is measured")
        by_hand, typed = best(read_by_hand, clean), best(typed_read, clean)
        size = clean.stat().st_size / 1e6
        print(f"{days} days, {count / 1e6:.2f} million readings, {size:.0f} MB")
        print(f"{'':44}{'s':>8}{'/ by hand':>11}{'/ parser':>10}   the same in processor time")
        small = {"cache_limit": count * 21 // 10, **quality}
        source = open_source("csv", {"path": str(clean), **quality}, clean.parent)
        live(source, clean)
        for name, took in (
            ("plain read, then times parsed by pandas", by_hand),
            ("plain read, times typed by the parser", typed),
            ("backfill in day windows, long", best(backfill, clean, days, **quality)),
            ("backfill, long, memory for a tenth of it", best(backfill, clean, days, **small)),
            ("backfill, long, local time", best(backfill, clean, days, time_zone="Europe/Vienna")),
            ("backfill, long, words among the values", best(backfill, words, days, **quality)),
            ("backfill, wide", best(backfill, wide, days, layout="wide")),
            ("one live minute on the grown file", best(live, source, clean)),
        ):
            columns = zip(took, took / by_hand, took / typed, strict=True)
            print(f"{name:44}" + "   ".join(f"{s:8.3f}{h:11.2f}{p:10.2f}" for s, h, p in columns))


if __name__ == "__main__":
    main()
