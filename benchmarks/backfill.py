"""A backfill beside the script a user would write, and the library calls that none can avoid.

    python benchmarks/backfill.py [--days 30] [--minutes 5]

The benchmarks' site (`plant.py`: 60 tags a minute in a CSV file a day, 25 streams, 12 pieces of
equipment, 161 figures and their roll-ups) is read, computed and stored in SQLite by:

- lostwork: `backfill` as the command runs it, with one process and with two;
- plain script: what a user would write by hand (`byhand.py`): pandas reads, pivots, resamples;
  PropsSI with its default engine; a row a figure by `to_sql`;
- tuned script: the same by an expert: pyarrow's reader, the IF97 backend, one wide table;
- bare calls: pyarrow reads the same bytes, numpy means to the grid, one `fast_evaluate` pass over
  all states and one over the end states, one prepared statement for as many rows of figures as
  lostwork stores (roll-ups, qualities and uncertainties, which it stores too, not counted).

lostwork stores more than the scripts do: states, flags, uncertainties, the quality of every tag,
roll-ups by shift and month. Where both have a figure, they are compared. Each runs in a process of
its own; wall and CPU seconds are those after the imports, the children's whole; the memory is the
largest of the process + that of its child. lostwork's seconds hold reading the site file, making
the store, and the fits that the steam tables make at first use: a second or two, however long the
stretch.

Ratios belong to one run on one machine: seconds do not travel, and beside other work two processes
are not twice as fast as one. Measured last on two shared cores, CPU seconds beside lostwork's in
one process: 90 days of 5-minute figures, plain script 4.4, tuned 0.8, bare calls 0.4; 30 days of
1-minute figures 6.7, 0.8 and 0.6.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import multiprocessing
import os
import resource
import sqlite3
import subprocess
import sys
import tempfile
import time
import warnings
from pathlib import Path

import byhand
import numpy as np
import pandas as pd
import plant
from CoolProp import CoolProp
from pyarrow import csv

from monitor.backfill import backfill
from monitor.commands.opening import opened, opened_to_read
from monitor.flags import Flag

WAYS = {
    "one": "lostwork, one process",
    "two": "lostwork, two processes",
    "tuned": "tuned script",
    "plain": "plain script",
    "bare": "bare calls",
}
DAY = plant.DAY
# The scripts drop a bad reading where lostwork holds the one before it; the rest must agree. HEOS
# is another formulation of water (IAPWS-95), whose enthalpies differ by a kJ/kg or less.
TOLERANCE = {"tuned": 2e-3, "plain": 2e-2}


def lostwork(folder, days, workers):
    """The product: every figure, flag and roll-up."""
    with opened(folder / "site.toml") as at:
        backfill(at.site, at.store, plant.START, plant.START + int(days * DAY), workers=workers)


def script(folder, minutes, name):
    """What a user, or an expert, writes by hand; the figures are kept to be compared."""
    quick = name == "tuned"
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        wide = byhand.gridded(byhand.read(folder, quick=quick), minutes)
        figures = byhand.figures(wide, "IF97::Water" if quick else "Water")
    byhand.store(figures, folder / f"{name}.sqlite", one_wide_table=quick)
    return figures


def bare(folder, days, minutes):
    """Library calls on as many bytes, states and rows as lostwork handles."""
    times = {"begun": time.process_time()}
    for file in sorted(folder.glob("exports/*.csv")):
        csv.read_csv(file)
    times["read"] = time.process_time()
    cells = int(days * 1440 / minutes)
    tags, streams, items = plant.counted()
    values = np.random.default_rng(1).random((tags, cells * minutes))
    values.reshape(tags, cells, minutes).mean(axis=2)
    times["mean"] = time.process_time()
    water = len(plant.WATER) * cells
    p, T = np.full(water, 12e5), np.linspace(500.0, 700.0, water)
    out, status = np.empty((water, 3)), np.empty(water, dtype=np.int32)
    wanted = np.array([CoolProp.iHmass, CoolProp.iSmass, CoolProp.iDmass], dtype=np.int32)
    engine = CoolProp.AbstractState("IF97", "Water")
    ends = 5 * cells  # four sections of turbines and let-down, one pump
    for count in (water, ends):
        engine.fast_evaluate(
            CoolProp.PT_INPUTS, p[:count], T[:count], wanted, out[:count], status[:count]
        )
    times["states"] = time.process_time()
    with contextlib.closing(sqlite3.connect(folder / "bare.sqlite")) as db:
        for name, rows, columns in (
            ("streams", streams * cells, 14),
            ("equipment", items * cells, 21),
            ("conditions", 30 * cells, 6),
        ):
            names = ", ".join(f"c{i}" for i in range(columns))
            marks = ", ".join("?" * columns)
            db.execute(f"create table {name} (k integer primary key, {names})")
            table = np.random.default_rng(2).random((min(rows, 100_000), columns)).tolist()
            with db:
                db.executemany(
                    f"insert into {name} values (?, {marks})",
                    ((k, *table[k % len(table)]) for k in range(rows)),
                )
    times["write"] = time.process_time()
    marks = list(times.values())
    return {
        name: round(b - a, 2) for name, a, b in zip(list(times)[1:], marks, marks[1:], strict=False)
    }


def one_way(name, folder, days, minutes):
    """Run one way in this process; give its seconds and its memory."""
    begun, busy = time.perf_counter(), time.process_time()
    parts = {}
    if name in {"one", "two"}:
        lostwork(folder, days, 1 if name == "one" else 2)
    elif name == "bare":
        parts = bare(folder, days, minutes)
    else:
        script(folder, minutes, name).to_pickle(folder / f"{name}.pkl")
    wall = time.perf_counter() - begun
    used = [resource.getrusage(w) for w in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)]
    return {
        "wall": wall,
        "cpu": time.process_time() - busy + used[1].ru_utime + used[1].ru_stime,
        "memory": [round(u.ru_maxrss / 1024) for u in used],
        "parts": parts,
    }


def measured(name, folder, days, minutes):
    """The same in a process of its own, so that nobody pays for another's imports or memory."""
    if name in {"one", "two"}:
        for old in folder.glob("lostwork.sqlite*"):
            old.unlink()
    asked = [sys.executable, __file__, "--way", name, "--folder", str(folder)]
    ran = subprocess.run(
        [*asked, "--days", str(days), "--minutes", str(minutes)],
        stdout=subprocess.PIPE, check=True, text=True, env={**os.environ, "OMP_NUM_THREADS": "1"},
    )  # fmt: skip
    return json.loads(ran.stdout.splitlines()[-1])


def own_figures(at, end):
    """lostwork's figures under the scripts' names: value and flag."""
    store, own = at.store, {}
    states = ("live", "reference")
    for stream in at.site.streams:
        table = store.streams(stream, plant.START, end)
        own |= {f"{stream} exergy_{s}": table[[f"exergy_{s}_kw", "flag"]] for s in states}
    for item in at.site.items.values():
        table = store.equipment(item.id, plant.START, end)
        for key, column in (("in", "exergy_in"), ("out", "exergy_out"), ("destroyed",) * 2):
            own |= {f"{item.id} {key}_{s}": table[[f"{column}_{s}_kw", "flag"]] for s in states}
        for figure in item.kind.figures(item):
            found = store.conditions(item.id, figure.name, plant.START, end)
            own[f"{item.id} {figure.name}"] = found[["value", "flag"]]
    ledger = store.ledger(plant.START, end)
    for key in ("supplied", "used", "lost", "destroyed", "imbalance"):
        own |= {f"ledger {key}_{s}": ledger[[f"{key}_{s}_kw", "flag"]] for s in states}
    return own


def compared(folder, days):
    """The largest difference of each script's figures from lostwork's, beside the figure's size."""
    worst = {}
    with opened_to_read(folder / "site.toml") as at:
        own = own_figures(at, plant.START + int(days * DAY))
    doubtful = int(Flag.BAD | Flag.HELD | Flag.MISSING)
    for way in TOLERANCE:
        theirs = pd.read_pickle(folder / f"{way}.pkl")  # noqa: S301 - written by this script
        differ = {}
        # The passing flow of a valve that is never closed is in lostwork's store alone.
        for name, mine in ((name, own[name]) for name in theirs):
            clean = (mine["flag"].to_numpy() & doubtful) == 0
            both = mine.iloc[:, 0].to_numpy()[clean], theirs[name].to_numpy()[clean]
            differ[name] = np.nanmax(np.abs(both[0] - both[1])) / np.nanmean(np.abs(both[1]))
        worst[way] = max(differ.items(), key=lambda found: found[1])
    return worst, len(differ)


def main():
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawTextHelpFormatter
    )
    parser.add_argument("--days", type=float, default=10.0)
    parser.add_argument("--minutes", type=int, default=5)
    parser.add_argument("--way", choices=WAYS, help=argparse.SUPPRESS)
    parser.add_argument("--folder", type=Path, help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.way:
        print(json.dumps(one_way(asked.way, asked.folder, asked.days, asked.minutes)))
        return
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        size = plant.write_days(folder / "exports", asked.days)
        text = plant.site_text(asked.minutes)
        (folder / "site.toml").write_text(text, encoding="utf-8")
        found = {name: measured(name, folder, asked.days, asked.minutes) for name in WAYS}
        worst, count = compared(folder, asked.days)
    tags, streams, items = plant.counted()
    print(
        f"{asked.days:g} days, {asked.minutes}-minute figures: {tags} tags ({size / 1e6:.0f} MB), "
        f"{streams} streams, {items} pieces of equipment; load {os.getloadavg()[0]:.1f} on "
        f"{multiprocessing.cpu_count()} cores"
    )
    print(f"{'':26s} {'wall':>8s} {'CPU':>8s}   CPU / lostwork's in one process, memory [MB]")
    base = found["one"]["cpu"]
    for name, title in WAYS.items():
        one = found[name]
        memory = " + ".join(str(m) for m in one["memory"] if m > 20)
        print(
            f"{title:26s} {one['wall']:6.1f} s {one['cpu']:6.1f} s   "
            f"{one['cpu'] / base:5.2f}   {memory}"
        )
    print("bare calls: " + ", ".join(f"{k} {v:.2f} s" for k, v in found["bare"]["parts"].items()))
    for way, (figure, difference) in worst.items():
        verdict = "agree" if difference < TOLERANCE[way] else "DIFFER"
        print(
            f"{WAYS[way]}: {count} figures {verdict}; the furthest is {figure}, by "
            f"{difference:.1e} of its size"
        )


if __name__ == "__main__":
    main()
