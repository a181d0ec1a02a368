"""One live cycle of a site with thousands of tags: how much of its minute it takes.

    python benchmarks/live.py [--units 86] [--hours 8] [--cycles 3]

The site is the benchmarks' works many times over in one site file (86 times: 4,990 tags, 2,150
streams, 1,032 pieces of equipment), figures every minute. Half of the units come from CSV files
that grow by a minute's rows, half from a SQL database that does. After the past hours are caught
up with, each cycle appends a minute and computes what is new, with the look-back as a site file
has it by default.
"""

from __future__ import annotations

import argparse
import contextlib
import resource
import sqlite3
import tempfile
import time
from pathlib import Path

import numpy as np
import plant
from pyarrow import csv

from monitor.backfill import catch_up, recorded_sources
from monitor.commands.opening import opened
from monitor.seen import Seen

SQL_KEYS = """kind = "sql"
url = "sqlite:///historian.sqlite"
table = "reading"
time_kind = "epoch_s"
quality_column = "quality" """


class Historians:
    """A folder of CSV files and a database that grow together."""

    def __init__(self, folder, units):
        self._folder, self._units = folder, units
        self._in_csv = 2 + (units + 1) // 2 * len(plant.design())
        (folder / "exports").mkdir()
        self._database = sqlite3.connect(folder / "historian.sqlite")
        self._database.execute(
            "create table reading (tag text, time integer, value real, quality text, "
            "primary key (time, tag)) without rowid"
        )

    def append(self, first, minutes):
        """Add some minutes of every tag."""
        names, values = plant.readings(first, minutes, self._units)
        count = self._in_csv
        path = self._folder / "exports" / "today.csv"
        with path.open("ab") as file:
            options = csv.WriteOptions(include_header=file.tell() == 0, quoting_style="none")
            csv.write_csv(plant.table_of(first, names[:count], values[:, :count]), file, options)
        rows = (
            (name, first + 60 * k, None if np.isnan(value) else value, "Good")
            for k, row in enumerate(values[:, count:].tolist())
            for name, value in zip(names[count:], row, strict=True)
        )
        with self._database:
            self._database.executemany("insert into reading values (?, ?, ?, ?)", rows)

    def close(self):
        self._database.close()


def site_file(folder, units):
    half = (units + 1) // 2
    sources = [
        ("dcs", plant.long_csv("exports/*.csv"), range(half)),
        ("historian", SQL_KEYS, range(half, units)),
    ]
    path = folder / "site.toml"
    path.write_text(plant.site_text(1, units, sources, look_back="2 h"), encoding="utf-8")
    return path


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--units", type=int, default=86)
    parser.add_argument("--hours", type=int, default=8)
    parser.add_argument("--cycles", type=int, default=3)
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        with contextlib.closing(Historians(folder, asked.units)) as historians:
            run(folder, historians, asked)


def run(folder, historians, asked):
    now = plant.START + asked.hours * 3600
    historians.append(plant.START, asked.hours * 60)
    begun = time.perf_counter()
    with opened(site_file(folder, asked.units)) as at:
        tags = len(at.site.used_tags())
        print(f"{tags} tags, {len(at.site.streams)} streams, {len(at.site.items)} equipment")
        print(f"site file and store opened in {time.perf_counter() - begun:.1f} s")
        with recorded_sources(at.site, at.store, "live") as sources:
            begun = time.perf_counter()
            seen = Seen()
            catch_up(at.site, at.store, sources, now, seen=seen)
            print(f"caught up with {asked.hours} h in {time.perf_counter() - begun:.1f} s")
            for _ in range(asked.cycles):
                historians.append(now, 1)
                now += 60
                begun, busy = time.perf_counter(), time.process_time()
                done = catch_up(at.site, at.store, sources, now, seen=seen)
                wall, cpu = time.perf_counter() - begun, time.process_time() - busy
                cells = sum(d.batch.end - d.batch.start for d in done) // 60
                print(
                    f"a cycle: {wall:.1f} s ({wall / 60:.0%} of its minute), CPU {cpu:.1f} s; "
                    f"{cells} cells computed"
                )
    print(f"largest memory: {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MB")


if __name__ == "__main__":
    main()
