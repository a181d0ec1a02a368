"""Writing windows: the same again changes nothing, and a failure leaves nothing behind."""

from __future__ import annotations

import signal
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import sqlalchemy as sa
import store_samples as samples
from store_samples import at, window

from monitor.store import rolling, schema, write
from monitor.store.batch import (
    CONDITION_COLUMNS,
    EQUIPMENT_COLUMNS,
    LEDGER_COLUMNS,
    QUALITY_COLUMNS,
    STREAM_COLUMNS,
)
from monitor.store.errors import StoreError

DAY = 86400
START = at("2025-06-01")


def test_every_number_comes_back_as_it_went_in(site, run_id):
    batch = window(START, START + DAY)
    written = site.write(batch, run_id)
    assert written.changed == written.rows > 800
    for stored, table, keys in (
        (site.streams(None, START, START + DAY), batch.streams, ["subject"]),
        (site.equipment(None, START, START + DAY), batch.equipment, ["subject"]),
        (site.conditions(None, None, START, START + DAY), batch.conditions, ["subject", "figure"]),
        (site.ledger(START, START + DAY), batch.ledger, []),
    ):
        given = table.sort_values([*keys, "time"], ignore_index=True)
        found = stored.astype(dict.fromkeys(keys, "str")).reset_index()
        found = found.sort_values([*keys, "time"], ignore_index=True)
        assert (found["time"] == pd.to_datetime(given["time"], unit="s", utc=True)).all()
        wanted = given.drop(columns="time").astype(dict.fromkeys(keys, "str"))
        pd.testing.assert_frame_equal(
            found[list(wanted)], wanted, check_exact=True, check_dtype=False
        )
    quality = site.tag_quality(START, START + DAY)
    assert quality[list(QUALITY_COLUMNS)].to_numpy().tolist() == (
        batch.tag_quality[list(QUALITY_COLUMNS)].to_numpy().tolist()
    )
    totals = site.tag_quality_totals(START, START + DAY).set_index("tag")
    assert totals["good"].to_dict() == batch.tag_quality.groupby("tag")["good"].sum().to_dict()


def test_one_subject_is_read_without_the_others_and_the_end_is_open(site, run_id):
    site.write(window(START, START + DAY), run_id)
    found = site.streams("lp_steam", pd.Timestamp(START, unit="s", tz="UTC"), START + 3600)
    assert list(found) == [*STREAM_COLUMNS, "flag"]
    assert str(found.index.dtype) == "datetime64[us, UTC]"
    assert len(found) == 4
    assert list(site.equipment("tg1", START, START + 900)) == [*EQUIPMENT_COLUMNS, "flag"]
    assert list(site.conditions("tg1", "eta_s_1", START, START + 900)) == (
        [*CONDITION_COLUMNS, "flag"]
    )
    assert list(site.ledger(START, START + 900)) == [*LEDGER_COLUMNS, "flag"]
    with pytest.raises(StoreError, match="no stream 'mp_steam'; known are hp_steam, lp_steam"):
        site.streams("mp_steam", START, START + DAY)


def test_an_empty_store_gives_empty_tables_and_no_newest_time(site):
    for frame in samples.dump(site).values():
        assert frame.empty
    assert site.newest() is None
    assert site.means("site", START, START + DAY).empty


def test_newest_and_oldest_are_the_ends_of_what_is_stored(site, run_id):
    site.write(window(START, START + DAY), run_id)
    assert site.newest() == pd.Timestamp("2025-06-01T23:45Z")
    assert site.oldest() == pd.Timestamp("2025-06-01T00:00Z")


def test_the_same_window_again_changes_no_row_and_keeps_its_run(site, run_id):
    batch = window(START, START + DAY)
    site.write(batch, run_id)
    before = samples.dump(site)
    second = site.begin_run("again", "0", "hash")
    written = site.write(batch, second)
    assert (written.changed, written.removed) == (0, 0)
    samples.assert_same(before, samples.dump(site))
    assert runs_of(site, schema.stream_figures) == {run_id}
    changed = replace(batch, ledger=batch.ledger.assign(t0_degc=1.5))
    assert site.write(changed, second).changed == len(batch.ledger)
    assert runs_of(site, schema.ledger_figures) == {second}
    assert runs_of(site, schema.stream_figures) == {run_id}


def runs_of(site, table):
    with site.engine.connect() as connection:
        return set(connection.execute(sa.select(table.c.run_id).distinct()).scalars())


@pytest.mark.postgres
def test_equal_rows_are_left_where_they_are_on_postgres(postgres_url, tmp_path):
    from monitor.store.open import open_store  # noqa: PLC0415

    def places(site):
        with site.engine.connect() as connection:
            return {
                name: connection.exec_driver_sql(
                    f"select ctid::text, xmin::text from {name} order by 1, 2"
                ).all()
                for name in ("stream_figures", "condition_figures", "rollups", "tag_quality")
            }

    with open_store(postgres_url, tmp_path) as store:
        site = samples.register(store)
        run_id = site.begin_run("test", "0", "hash")
        site.write(window(START, START + DAY), run_id)
        before = places(site)
        site.write(window(START, START + DAY), run_id)
        assert places(site) == before


def test_rows_that_a_window_no_longer_has_are_removed(site, run_id):
    batch = window(START, START + DAY)
    site.write(batch, run_id)
    site.write(window(START + DAY, START + 2 * DAY), run_id)
    half = samples.without(batch, "streams", lambda f: f["time"] < START + DAY // 2)
    half = samples.without(half, "ledger", lambda f: f["time"] < 0)
    assert site.write(half, run_id).removed == 2 * 48 + 96
    assert len(site.streams("hp_steam", START, START + DAY)) == 48
    assert site.ledger(START, START + DAY).empty
    # The day after is not this window's.
    assert len(site.streams("hp_steam", START + DAY, START + 2 * DAY)) == 96
    assert len(site.ledger(START + DAY, START + 2 * DAY)) == 96


def test_subjects_that_a_window_does_not_name_keep_their_rows(site, run_id):
    batch = window(START, START + DAY)
    site.write(batch, run_id)
    before = samples.dump(site)
    part = samples.without(batch, "streams", lambda f: f["subject"] == "hp_steam")
    part = samples.without(part, "equipment", lambda f: f["subject"] == "tg1")
    part = samples.without(part, "conditions", lambda f: f["subject"] == "tg1")
    part = samples.without(part, "tag_quality", lambda f: f["tag"] == samples.TAGS[0])
    written = site.write(part, run_id)
    assert (written.changed, written.removed) == (0, 0)
    samples.assert_same(before, samples.dump(site))


def test_two_sites_in_one_store_do_not_touch_each_other(store):
    one, two = samples.register(store, "one"), samples.register(store, "two")
    one.write(window(START, START + DAY), one.begin_run("test", "0", "hash"), {"dcs": 5})
    before = samples.dump(one)
    two.write(window(START, START + DAY, seed=1), two.begin_run("test", "0", "hash"), {"dcs": 7})
    samples.assert_same(before, samples.dump(one))
    assert one.watermarks() == {"dcs": 5}
    assert two.watermarks() == {"dcs": 7}
    two.set_watermarks({"lab": 9})
    assert two.watermarks() == {"dcs": 7, "lab": 9}


def test_infinite_numbers_are_stored_as_absent_and_counted(site, run_id):
    batch = window(START, START + 3600)
    batch.equipment.loc[[0, 2], "closure_live_kw"] = [np.inf, -np.inf]
    written = site.write(batch, run_id)
    assert written.not_finite == {"equipment.closure_live_kw": 2}
    found = site.equipment("tg1", START, START + 3600)["closure_live_kw"]
    assert found.isna().tolist()[::2] == [True, True]


WRONG = {
    "outside the window": lambda b: replace(b, end=b.start + 3600),
    "off the grid": lambda b: replace(b, ledger=b.ledger.assign(time=b.ledger["time"] + 1)),
    "twice": lambda b: replace(b, streams=pd.concat([b.streams, b.streams[:1]])),
    "no stream 'mp_steam'": lambda b: replace(b, streams=b.streams.assign(subject="mp_steam")),
    "no condition figure 'heat_loss_kw_k'": lambda b: replace(
        b, conditions=b.conditions.assign(subject="tg1")
    ),
    "no figure 'eta'": lambda b: replace(b, conditions=b.conditions.assign(figure="eta")),
    "'dryness' is not there": lambda b: replace(b, streams=b.streams.drop(columns="dryness")),
    "from a full hour": lambda b: replace(b, start=b.start + 900),
    "outside the window's hours": lambda b: replace(
        b, tag_quality=b.tag_quality.assign(hour=b.tag_quality["hour"] + DAY)
    ),
}


@pytest.mark.parametrize("said", WRONG)
def test_a_window_that_breaks_the_contract_is_refused_whole(site, run_id, said):
    with pytest.raises(StoreError, match=said):
        site.write(WRONG[said](window(START, START + DAY)), run_id, {"dcs": 5})
    assert all(frame.empty for frame in samples.dump(site).values())
    assert site.watermarks() == {}


class BrokenError(Exception):
    pass


@pytest.mark.parametrize("after", range(10))
def test_a_failure_between_any_two_statements_leaves_the_store_as_it_was(
    site, run_id, monkeypatch, after
):
    site.write(window(START, START + DAY), run_id, {"dcs": START})
    before = samples.dump(site)
    done = 0
    real = write.replace_rows

    def breaking(*arguments):
        nonlocal done
        if done == after:
            raise BrokenError
        done += 1
        return real(*arguments)

    # Five tables of figures, four resolutions of roll-ups; the last case breaks at the watermark.
    monkeypatch.setattr(write, "replace_rows", breaking)
    monkeypatch.setattr(rolling, "replace_rows", breaking)
    if after == 9:
        monkeypatch.setattr(write.Writes, "_write_watermarks", lambda *_: breaking())
    with pytest.raises(BrokenError):
        site.write(window(START, START + DAY, seed=1), run_id, {"dcs": START + DAY})
    assert done == after
    samples.assert_same(before, samples.dump(site))
    assert site.watermarks() == {"dcs": START}


KILLED = """
import os, signal, sys
from pathlib import Path
sys.path.insert(0, {tests!r})
import store_samples as samples
from monitor.store import write
from monitor.store.open import open_store
site = open_store({url!r}, Path()).site("mill", samples.calendar())
write.Writes._write_watermarks = lambda *_: os.kill(os.getpid(), signal.SIGKILL)
site.write(samples.window({start}, {start} + 86400, seed=1), {run_id}, {{"dcs": {start}}})
"""


@pytest.mark.skipif(sys.platform == "win32", reason="kills a process with a POSIX signal")
def test_a_process_killed_while_it_writes_leaves_nothing_half_written(site, run_id, store_url):
    site.write(window(START, START + DAY), run_id)
    before = samples.dump(site)
    code = KILLED.format(
        tests=str(Path(__file__).parent), url=store_url, start=START, run_id=run_id
    )
    done = subprocess.run([sys.executable, "-c", code], check=False, timeout=60)
    assert done.returncode == -signal.SIGKILL
    samples.assert_same(before, samples.dump(site))
    assert site.watermarks() == {}
    # And the store is free for the next one at once.
    assert site.write(window(START, START + DAY, seed=1), run_id).changed > 0


def test_a_handle_without_a_calendar_reads_and_refuses_to_write(store, run_id):
    reader = store.site("mill")
    assert reader.ledger(START, START + DAY).empty
    with pytest.raises(StoreError, match="opened for reading"):
        reader.write(window(START, START + DAY), run_id)


def test_a_process_with_outdated_shifts_is_refused(store, site, run_id):
    samples.register(store, cal=samples.calendar("Asia/Tokyo"))
    with pytest.raises(StoreError, match="changed by another process"):
        site.write(window(START, START + DAY), run_id)
    with pytest.raises(StoreError, match="register it again"):
        store.site("mill", samples.calendar())


def test_flags_are_counted_by_subject(site, run_id):
    site.write(window(START, START + DAY), run_id)
    found = site.flag_counts("equipment", START, START + 3600)
    assert found.to_numpy().tolist() == [["tg1", 4, 4], ["hp_header", 4, 4]]
