"""A cycle that leaves out hours without a new reading stores what one that computes them does."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from small_site import readings, times_of, write_site

from connectors.base import ReadResult
from monitor.backfill import catch_up
from monitor.commands.opening import register
from monitor.seen import Seen
from monitor.site.load import load_site
from monitor.store.open import open_store

START = 1_771_200_000  # 2026-02-16 00:00 UTC
HOUR = 3600
KEYS = {
    "stream_figures": "subject_id, time",
    "equipment_figures": "subject_id, time",
    "condition_figures": "subject_id, time, figure_id",
    "ledger_figures": "site_id, time",
    "tag_quality": "tag_id, hour",
    "rollups": "resolution, subject_id, start, figure_id",
}


class Historian:
    """A source whose readings come when they come."""

    def __init__(self, table, arrives):
        self._table, self._arrives = table, arrives
        self.now = 0.0

    def read(self, tags, window):
        here = self._table[self._arrives <= self.now]
        inside = (here["time"] >= window.start) & (here["time"] < window.end)
        here = here[inside & here["tag"].isin(list(tags))]
        return ReadResult(here.reset_index(drop=True))


def historian(site, seed, hours, *, late=0.01):
    """Noisy readings a minute, a few of them changed, up to some hours late, or on the hour."""
    rng = np.random.default_rng(seed)
    times = times_of(site, START, START + hours * HOUR)
    read = readings(times, {"WG": 20.5 + 0.1 * rng.standard_normal(len(times))}).readings
    seconds = read["time"].astype("int64") // 10**6
    delay = np.where(rng.random(len(read)) < late, rng.uniform(0, 5 * HOUR, len(read)), 0.0)
    delay += (seconds % HOUR == 0) * 400.0
    return Historian(read, seconds + delay)


def stored(store):
    with store.engine.connect() as connection:
        return {
            table: pd.read_sql_query(f"select * from {table} order by {keys}", connection).drop(
                columns="run_id", errors="ignore"
            )
            for table, keys in KEYS.items()
        }


@pytest.mark.parametrize("seed", [1, 2])
def test_leaving_out_hours_without_news_changes_no_row(tmp_path, seed):
    site = load_site(write_site(tmp_path, ('"5 min"', '"5 min"\nsettle = "0 s"')))
    source, seen = historian(site, seed, 9), Seen()
    rng = np.random.default_rng(seed)
    cells = {True: 0, False: 0}
    with (
        open_store("sqlite:///whole.sqlite", tmp_path) as whole,
        open_store("sqlite:///news.sqlite", tmp_path) as news,
    ):
        stores = {False: register(site, whole), True: register(site, news)}
        source.now = START + 6 * HOUR
        while source.now < START + 8.5 * HOUR:
            for sparing, store in stores.items():
                done = catch_up(
                    site, store, {"dcs": source}, source.now, seen=seen if sparing else None
                )
                cells[sparing] += sum(d.batch.end - d.batch.start for d in done)
            source.now += int(rng.choice([300, 900]))
        one, other = (stored(store) for store in stores.values())
        marks = [store.watermarks() for store in stores.values()]
    for table, rows in one.items():
        assert len(rows)
        pd.testing.assert_frame_equal(rows, other[table], check_exact=True, obj=table)
    assert marks[0] == marks[1]
    assert cells[True] < cells[False]


def caught_up(site, store, source, seen):
    """The day that an empty store begins with, then a cycle that has seen what it read."""
    for source.now in (START + 7.5 * HOUR, START + 7.6 * HOUR):
        catch_up(site, store, {"dcs": source}, source.now, seen=seen)
    source.now += 300


def test_only_the_hour_that_is_not_over_is_computed_where_nothing_comes_late(tmp_path):
    site = load_site(write_site(tmp_path))
    source, seen = historian(site, 0, 8, late=0.0), Seen()
    with open_store("sqlite:///news.sqlite", tmp_path) as database:
        store = register(site, database)
        caught_up(site, store, source, seen)
        (done,) = catch_up(site, store, {"dcs": source}, source.now, seen=seen)
    assert done.batch.start == START + 7 * HOUR


def test_a_changed_site_file_is_news_of_every_hour(tmp_path):
    site = load_site(write_site(tmp_path))
    source, seen = historian(site, 0, 8, late=0.0), Seen()
    with open_store("sqlite:///news.sqlite", tmp_path) as database:
        store = register(site, database)
        caught_up(site, store, source, seen)
        changed = load_site(write_site(tmp_path, ("0.97", "0.96")))
        (done,) = catch_up(changed, store, {"dcs": source}, source.now, seen=seen)
    assert done.batch.start == START + 5 * HOUR
