"""A backfill beside the script a user would write, and the library calls that none can avoid.

    python benchmarks/backfill.py [--days 30] [--minutes 5]

Reads the demo site's exports (64 tags a minute in three forms, 46 streams, 18 pieces of equipment)
and stores its figures:

- lostwork: `backfill`, one process and two, into SQLite, roll-ups included.
- plain script: what a user would write by hand: pandas reads everything, pivots, resamples; PropsSI
  with its default engine for enthalpy and entropy of each stream; exergy; to_sql.
- tuned script: the same by an expert: the IF97 backend, one wide table.
- bare calls: pyarrow reads the same bytes, numpy means to the grid, one `fast_evaluate` pass over
  all states, one prepared statement for as many rows as lostwork stores.

Ratios belong to one run on one machine; seconds do not travel.
"""

from __future__ import annotations

import argparse
import contextlib
import resource
import sqlite3
import tempfile
import time
from pathlib import Path

import CoolProp
import numpy as np
import pandas as pd
from CoolProp.CoolProp import PropsSI
from pyarrow import csv

from monitor.backfill import backfill
from monitor.commands.opening import opened
from monitor.demo import copy_site, write_exports
from monitor.demo.plan import DemoPlan
from monitor.demo.simulate import simulate
from monitor.site.load import load_site
from monitor.site.models import Reference

ONE_PROCESS = "lostwork, one process"


def exports(folder, days, minutes):
    """Write the demo's exports and site file; the grid as asked."""
    plan = DemoPlan(days=days, dirt=False)
    write_exports(simulate(plan), plan, folder)
    path = copy_site(folder)
    text = path.read_text(encoding="utf-8").replace(
        'interval = "5 min"', f'interval = "{minutes} min"'
    )
    path.write_text(text, encoding="utf-8")
    return path, int(plan.start.timestamp())


def lostwork(path, start, days, workers):
    """The product: every figure, flag and roll-up."""
    for old in path.parent.glob("lostwork.sqlite*"):
        old.unlink()
    with opened(path) as at:
        begun = time.perf_counter()
        backfill(at.site, at.store, start, start + int(days * 86400), workers=workers)
        return time.perf_counter() - begun


def _read_with_pandas(folder):
    """All readings in one long table, the way a notebook does it."""
    dcs = pd.concat(
        [pd.read_csv(f, parse_dates=["time"]) for f in sorted(folder.glob("exports/dcs/*.csv"))]
    )
    wide = pd.concat(
        [
            pd.read_csv(f, sep=";", decimal=",", skiprows=[1])
            for f in sorted(folder.glob("exports/utilities/*.csv"))
        ]
    )
    stamps = pd.to_datetime(wide.pop("Time"), format="%d.%m.%Y %H:%M:%S")
    wide["time"] = stamps.dt.tz_localize(
        "Europe/Berlin", ambiguous="NaT", nonexistent="NaT"
    ).dt.tz_convert("UTC")
    utilities = wide.melt("time", var_name="tag", value_name="value").dropna()
    with contextlib.closing(sqlite3.connect(folder / "exports/historian.sqlite")) as connection:
        historian = pd.read_sql(
            "select name as tag, stamp as time, reading as value "
            "from reading join tag_list using (tag_id)",
            connection,
        )
    historian["time"] = pd.to_datetime(historian["time"], unit="s", utc=True)
    table = pd.concat([dcs[["time", "tag", "value"]], utilities, historian])
    table["value"] = pd.to_numeric(table["value"], errors="coerce")
    return table.dropna()


def script(path, minutes, *, engine, one_table):
    """What a user writes by hand: the exergy of each stream, and two efficiencies."""
    site = load_site(path)
    own = {t.historian_name: t for t in site.used_tags().values()}
    begun = time.perf_counter()
    long = _read_with_pandas(path.parent)
    wide = (
        long.pivot_table(index="time", columns="tag", values="value")
        .resample(f"{minutes}min")
        .mean()
    )
    si = {own[c].name: own[c].unit.to_si(wide[c].to_numpy()) for c in wide if c in own}
    T0, p0 = si["TT-0001"], si["PT-0001"]
    fluid = "Water" if engine == "HEOS" else "IF97::Water"

    def value(reference):
        if reference.tag is None:
            return np.full(len(wide), reference.fixed)
        return site.tags[reference.tag].unit.absolute(si[reference.tag], p0)

    h0 = PropsSI("H", "P", p0, "T", np.maximum(T0, 273.2), fluid)
    s0 = PropsSI("S", "P", p0, "T", np.maximum(T0, 273.2), fluid)
    columns = {}
    for stream in site.streams.values():
        if stream.medium != "water" or stream.pressure is None or stream.temperature is None:
            continue
        p, T = value(stream.pressure), value(stream.temperature)
        h, s = PropsSI("H", "P", p, "T", T, fluid), PropsSI("S", "P", p, "T", T, fluid)
        e = h - h0 - T0 * (s - s0)
        columns[f"{stream.id}_h"], columns[f"{stream.id}_s"], columns[f"{stream.id}_e"] = h, s, e
        if isinstance(stream.flow, Reference):
            columns[f"{stream.id}_kW"] = value(stream.flow) * e / 1e3
    for before, after in (("tg1_inlet", "tg1_extraction"), ("tg1_extraction", "tg1_exhaust")):
        end = PropsSI(
            "H", "P", value(site.streams[after].pressure), "S", columns[f"{before}_s"], fluid
        )
        drop = columns[f"{before}_h"] - columns[f"{after}_h"]
        columns[f"{after}_eta"] = drop / (columns[f"{before}_h"] - end)
    figures = pd.DataFrame(columns, index=wide.index)
    with (
        tempfile.TemporaryDirectory() as folder,
        contextlib.closing(sqlite3.connect(f"{folder}/x.db")) as db,
    ):
        if one_table:
            figures.to_sql("figures", db)
        else:
            figures.rename_axis("time").reset_index().melt("time").to_sql(
                "figures", db, index=False
            )
    return time.perf_counter() - begun


def bare(path, days, minutes):
    """Library calls on as many bytes, states and rows as lostwork handles."""
    site = load_site(path)
    folder = path.parent
    begun = time.perf_counter()
    semicolons = csv.ParseOptions(delimiter=";")
    tables = [csv.read_csv(file) for file in sorted(folder.glob("exports/dcs/*.csv"))]
    tables += [
        csv.read_csv(file, parse_options=semicolons)
        for file in sorted(folder.glob("exports/utilities/*.csv"))
    ]
    with contextlib.closing(sqlite3.connect(folder / "exports/historian.sqlite")) as connection:
        rows = connection.execute("select tag_id, stamp, reading, quality from reading").fetchall()
    read = time.perf_counter()
    cells = int(days * 1440 / minutes)
    values = np.random.default_rng(1).random((64, cells * minutes))
    values.reshape(64, cells, minutes).mean(axis=2)
    grid = time.perf_counter()
    states = sum(1 for s in site.streams.values() if s.medium == "water") * cells
    p, T = np.full(states, 12e5), np.linspace(500.0, 700.0, states)
    out, status = np.empty((states, 3)), np.empty(states, dtype=np.int32)
    wanted = np.array([CoolProp.iHmass, CoolProp.iSmass, CoolProp.iDmass], dtype=np.int32)
    engine = CoolProp.AbstractState("IF97", "Water")
    engine.fast_evaluate(CoolProp.PT_INPUTS, p, T, wanted, out, status)
    ends = 3 * cells
    engine.fast_evaluate(
        CoolProp.PT_INPUTS, p[:ends], T[:ends], wanted, out[:ends].copy(), status[:ends].copy()
    )
    evaluated = time.perf_counter()
    stored = (len(site.streams) + len(site.items)) * cells
    table = np.random.default_rng(2).random((stored, 14)).tolist()
    with (
        tempfile.TemporaryDirectory() as place,
        contextlib.closing(sqlite3.connect(f"{place}/x.db")) as db,
    ):
        names = ", ".join(f"c{i}" for i in range(14))
        db.execute(f"create table t (k integer primary key, {names})")
        with db:
            db.executemany(
                f"insert into t values (?, {', '.join('?' * 14)})",
                ((k, *row) for k, row in enumerate(table)),
            )
    done = time.perf_counter()
    del rows, tables
    parts = {
        "read": read - begun,
        "mean": grid - read,
        "states": evaluated - grid,
        "write": done - evaluated,
    }
    return done - begun, parts


def main():
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawTextHelpFormatter
    )
    parser.add_argument("--days", type=float, default=10.0)
    parser.add_argument("--minutes", type=int, default=5)
    arguments = parser.parse_args()
    with tempfile.TemporaryDirectory() as place:
        path, start = exports(Path(place), arguments.days, arguments.minutes)
        # The first use fits a few polynomials and builds an index; that is not the question here.
        times = {ONE_PROCESS: lostwork(path, start, arguments.days, 1)}
        times["lostwork, two processes"] = lostwork(path, start, arguments.days, 2)
        times["tuned script"] = script(path, arguments.minutes, engine="IF97", one_table=True)
        times["plain script"] = script(path, arguments.minutes, engine="HEOS", one_table=False)
        times["bare calls"], parts = bare(path, arguments.days, arguments.minutes)
    print(f"{arguments.days:g} days, {arguments.minutes}-minute figures")
    for name, seconds in times.items():
        ratio = seconds / times[ONE_PROCESS]
        print(f"{name:26s} {seconds:8.1f} s   {ratio:6.2f} x lostwork in one process")
    print("bare calls: " + ", ".join(f"{k} {v:.2f} s" for k, v in parts.items()))
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"largest memory of this process, scripts included: {peak:.0f} MB")


if __name__ == "__main__":
    main()
