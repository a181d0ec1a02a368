"""once, backfill: figures into the store, from the command line."""

from __future__ import annotations

import sqlite3

import pandas as pd
import pytest


def rows(plant, table="equipment_figures", columns="*"):
    with sqlite3.connect(plant.folder / "figures.sqlite") as database:
        return database.execute(f"select {columns} from {table} order by 1, 2, 3").fetchall()


def figures(plant):
    """Every stored figure without the number of the run that wrote it."""
    found = {}
    with sqlite3.connect(plant.folder / "figures.sqlite") as database:
        for table in (
            "stream_figures",
            "equipment_figures",
            "condition_figures",
            "ledger_figures",
            "tag_quality",
            "rollups",
        ):
            frame = pd.read_sql(f"select * from {table}", database)
            found[table] = frame.drop(columns="run_id", errors="ignore")
    return found


def test_backfill_stores_every_cell_of_the_stretch(plant, lostwork):
    ran = lostwork(
        "backfill", plant.path, "--from", "2026-01-10T00:00Z", "--to", "2026-01-11T06:00Z"
    )
    assert ran.code == 0, ran.err
    # 30 hours of four cells for three pieces of equipment.
    assert len(rows(plant)) == 30 * 4 * 3
    assert "2 windows" in ran.out
    # 30 hours of twelve readings of eleven tags.
    assert f"{30 * 12 * 11} readings, 0 bad" in ran.out


def test_times_without_an_offset_are_the_sites_local_time(plant, lostwork):
    ran = lostwork(
        "backfill", plant.path, "--from", "2026-01-10 06:00", "--to", "2026-01-10 08:00", "--json"
    )
    # Berlin is an hour ahead of UTC in January.
    assert ran.json()["from"] == "2026-01-10T05:00:00Z"
    assert ran.json()["to"] == "2026-01-10T07:00:00Z"
    assert {row[0] for row in rows(plant, columns="time, 1, 2")} == {
        int(t.timestamp()) for t in pd.date_range("2026-01-10T05:00Z", periods=8, freq="15min")
    }


def test_two_processes_give_the_rows_of_one(make_plant, lostwork, tmp_path):
    stored = []
    for workers in ("1", "2"):
        plant = make_plant(tmp_path / workers, days=4.5)
        ran = lostwork(
            "backfill", plant.path, "--from", "2026-01-10T00:00Z",
            "--to", "2026-01-14T12:00Z", "--workers", workers,
        )  # fmt: skip
        assert ran.code == 0, ran.err
        stored.append(figures(plant))
    for table in stored[0]:
        pd.testing.assert_frame_equal(stored[0][table], stored[1][table])


def test_a_backfill_done_again_changes_nothing(computed, lostwork):
    before = figures(computed)
    ran = lostwork(
        "backfill", computed.path, "--from", "2026-01-12T00:00Z", "--to", "2026-01-14T00:00Z"
    )
    assert ran.code == 0, ran.err
    after = figures(computed)
    for table in before:
        pd.testing.assert_frame_equal(before[table], after[table])


def test_a_backfill_of_the_past_does_not_send_the_next_catch_up_back(computed, lostwork):
    mark = rows(computed, "watermarks", "time, source, site_id")
    lostwork("backfill", computed.path, "--from", "2026-01-10T00:00Z", "--to", "2026-01-11T00:00Z")
    assert rows(computed, "watermarks", "time, source, site_id") == mark


def test_once_on_an_empty_store_takes_the_last_day_and_says_so(plant, lostwork):
    ran = lostwork("once", plant.path, "--until", "2026-01-12T00:01Z")
    assert ran.code == 0, ran.err
    assert "use backfill for older" in ran.err
    times = [row[0] for row in rows(plant, "ledger_figures", "time, 1, 1")]
    assert min(times) == pd.Timestamp("2026-01-11T00:00Z").timestamp()
    assert max(times) == pd.Timestamp("2026-01-11T23:45Z").timestamp()


def test_once_waits_for_a_cell_to_settle(plant, lostwork):
    # Sixty seconds of settling: at 12:00:59 the cell that ended at noon is not complete.
    lostwork("once", plant.path, "--until", "2026-01-11T12:00:59Z")
    last = max(row[0] for row in rows(plant, "ledger_figures", "time, 1, 1"))
    assert last == pd.Timestamp("2026-01-11T11:30Z").timestamp()


def test_once_goes_on_where_it_ended_and_then_has_nothing_new(plant, lostwork):
    lostwork("once", plant.path, "--until", "2026-01-11T12:01Z")
    ran = lostwork("once", plant.path, "--until", "2026-01-11T18:01Z", "--json")
    # From the watermark at 12:00 less an hour of look-back.
    assert ran.json()["from"] == "2026-01-11T11:00:00Z"
    assert ran.json()["to"] == "2026-01-11T18:00:00Z"
    again = lostwork("once", plant.path, "--until", "2026-01-11T18:01Z")
    assert (again.code, again.out) == (0, "nothing new\n")


def test_catching_up_in_steps_gives_the_rows_of_one_backfill(make_plant, lostwork, tmp_path):
    stepwise, at_once = make_plant(tmp_path / "a"), make_plant(tmp_path / "b")
    for hour in ("00:01", "03:01", "07:16", "07:31", "15:46", "23:46"):
        lostwork("once", stepwise.path, "--until", f"2026-01-11T{hour}Z")
    lostwork("backfill", at_once.path, "--from", "2026-01-10T00:00Z", "--to", "2026-01-11T23:45Z")
    a, b = figures(stepwise), figures(at_once)
    for table in a:
        pd.testing.assert_frame_equal(a[table], b[table])


def test_late_readings_are_taken_up_within_the_look_back(plant, lostwork):
    late = plant.readings["time"] >= pd.Timestamp("2026-01-11T11:30Z")
    plant.write(plant.readings[~late])
    lostwork("once", plant.path, "--until", "2026-01-11T12:01Z")
    noon = "select exergy_in_live_kw from equipment_figures where time = ?"
    at = int(pd.Timestamp("2026-01-11T11:45Z").timestamp())
    with sqlite3.connect(plant.folder / "figures.sqlite") as database:
        assert all(v is None for (v,) in database.execute(noon, (at,)))
    plant.export()
    lostwork("once", plant.path, "--until", "2026-01-11T12:16Z")
    with sqlite3.connect(plant.folder / "figures.sqlite") as database:
        assert all(v > 0 for (v,) in database.execute(noon, (at,)))


def test_each_run_is_recorded_with_what_it_read(plant, lostwork):
    lostwork("once", plant.path, "--until", "2026-01-11T12:01Z")
    (run,) = rows(plant, "runs", "job, status, readings, bad, window_start, version, site_hash")
    assert run[:4] == ("once", "done", 24 * 12 * 11, 0)
    assert run[4] == pd.Timestamp("2026-01-10T12:00Z").timestamp()
    assert run[5]
    assert len(run[6]) == 64


@pytest.mark.parametrize(
    ("option", "said"),
    [
        ("yesterdayish", "is not a time"),
        ("2026-03-29 02:30", "is skipped by daylight saving in Europe/Berlin"),
    ],
)
def test_a_time_that_cannot_be_is_answered_with_a_sentence(plant, lostwork, option, said):
    ran = lostwork("backfill", plant.path, "--from", option)
    assert ran.code == 2
    assert said in ran.err
    assert not (plant.folder / "figures.sqlite-wal").exists()


def test_a_stretch_that_ends_before_it_begins_is_refused(plant, lostwork):
    ran = lostwork("backfill", plant.path, "--from", "2026-01-11", "--to", "2026-01-10")
    assert ran.code == 2
    assert "must end after it starts" in ran.err
