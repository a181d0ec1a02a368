"""The daemon's jobs under a clock that the test sets."""

from __future__ import annotations

import threading
import time

import pandas as pd
import pytest
import sqlalchemy as sa
from structlog.testing import capture_logs

from monitor.backfill import backfill
from monitor.commands.opening import opened
from monitor.housekeeping import keep_house
from monitor.running import run_daemon
from monitor.store import schema
from monitor.store.errors import InstanceRunning, StoreError
from monitor.store.lock import InstanceLock


@pytest.fixture
def plant(make_plant, tmp_path):
    return make_plant(tmp_path / "site")


def newest(driven):
    return driven.at.store.newest()


def test_figures_follow_the_clock_cell_by_cell(plant, drive):
    driven = drive(plant, "2026-01-11T12:01Z")
    driven.daemon.cycle()
    assert newest(driven) == pd.Timestamp("2026-01-11T11:45Z")
    driven.clock.set("2026-01-11T12:15:59Z")
    driven.daemon.cycle()
    assert newest(driven) == pd.Timestamp("2026-01-11T11:45Z")
    driven.clock.set("2026-01-11T12:16Z")
    driven.daemon.cycle()
    assert newest(driven) == pd.Timestamp("2026-01-11T12:00Z")


def test_cycles_and_a_backfill_give_the_same_rows(make_plant, drive, stored, tmp_path, store_url):
    followed = make_plant(tmp_path / "a", store=store_url)
    driven = drive(followed, "2026-01-11T00:01Z")
    for minutes in range(1, 12 * 60, 45):
        driven.clock.set(f"2026-01-11T{minutes // 60:02d}:{minutes % 60:02d}Z")
        driven.daemon.cycle()
    driven.clock.set("2026-01-11T12:01Z")
    driven.daemon.cycle()
    at_once = make_plant(tmp_path / "b")
    with opened(at_once.path) as at:
        start, end = (
            int(pd.Timestamp(t).timestamp()) for t in ("2026-01-10T00:00Z", "2026-01-11T12:00Z")
        )
        backfill(at.site, at.store, start, end)
    live, past = stored(followed, store_url), stored(at_once)
    for table in live:
        pd.testing.assert_frame_equal(live[table], past[table], check_dtype=False)


def test_a_gap_in_the_daemons_life_is_caught_up(plant, drive):
    driven = drive(plant, "2026-01-10T12:01Z")
    driven.daemon.cycle()
    driven.daemon.close()
    # A new process, a day later.
    later = drive(plant, "2026-01-11T18:01Z")
    later.daemon.cycle()
    ledger = later.at.store.ledger(plant.start, plant.end)
    assert ledger.index.is_unique
    gaps = pd.Series(ledger.index).diff().dropna().unique()
    assert list(gaps) == [pd.Timedelta("15min")]
    assert newest(later) == pd.Timestamp("2026-01-11T17:45Z")


def test_a_month_without_a_reading_is_not_filled_with_nothing(make_plant, drive, tmp_path):
    plant = make_plant(tmp_path / "site", days=40.0, every="30min", interval=60)
    rows = plant.readings
    gap = (rows["time"] >= "2026-01-12T00:00Z") & (rows["time"] < "2026-02-15T00:00Z")
    plant.write(rows[~gap])
    drive(plant, "2026-01-11T12:01Z").daemon.cycle()
    driven = drive(plant, "2026-02-15T06:01Z")
    with capture_logs() as lines:
        driven.daemon.cycle()
    # Of 34 empty days the first is kept.
    assert [line["days"] for line in lines if "days" in line] == [33]
    assert newest(driven) == pd.Timestamp("2026-02-15T05:00Z")
    found = driven.at.store.ledger(plant.start, pd.Timestamp("2026-02-15T06:00Z"))
    days = found.index.normalize().unique()
    assert list(days.strftime("%m-%d")) == ["01-10", "01-11", "01-12", "02-15"]
    with capture_logs() as lines:
        driven.daemon.cycle()
    assert lines == []


def with_a_late_export(plant):
    """Put the let-down's tags into a source of their own, whose file comes when the test says."""
    plant.edit(
        'quality_column = "quality"\n',
        'quality_column = "quality"\n\n[[source]]\nid = "logger"\nkind = "csv"\n'
        'path = "logger/*.csv"\nquality_column = "quality"\n',
    )
    for tag in ("PT-1201", "TT-1201"):
        plant.edit(f'name = "{tag}"\nsource = "dcs"', f'name = "{tag}"\nsource = "logger"')
    own = plant.readings["tag"].isin(["PT-1201", "TT-1201"])
    plant.write(plant.readings[~own])
    (plant.folder / "logger").mkdir()
    return plant.readings[own]


def deliver(plant, rows, before):
    rows[rows["time"] < pd.Timestamp(before)].to_csv(
        plant.folder / "logger" / "all.csv", index=False, date_format="%Y-%m-%dT%H:%M:%SZ"
    )


def test_an_export_that_comes_half_a_day_late_is_computed_when_it_comes(
    make_plant, drive, stored, tmp_path
):
    plant = make_plant(tmp_path / "late")
    rows = with_a_late_export(plant)
    deliver(plant, rows, "2026-01-11T00:00Z")
    driven = drive(plant, "2026-01-11T00:01Z")
    driven.daemon.cycle()
    for hour in range(1, 13):
        driven.clock.set(f"2026-01-11T{hour:02d}:01Z")
        driven.daemon.cycle()
    waiting = driven.at.store.runs()[0]
    # Nothing late has come: the cycle goes back by the look-back of one hour only.
    assert waiting.window_start == pd.Timestamp("2026-01-11T10:00Z").timestamp()
    noon = driven.at.store.equipment(
        "LD62", *(pd.Timestamp(f"2026-01-11T{t}Z") for t in ("03", "12"))
    )
    assert noon["destroyed_live_kw"].isna().all()
    deliver(plant, rows, "2026-01-11T12:00Z")
    driven.clock.set("2026-01-11T12:16Z")
    with capture_logs() as lines:
        driven.daemon.cycle()
    assert lines[0]["event"] == "late readings"
    assert lines[0]["source"] == "logger"
    at_once = make_plant(tmp_path / "once")
    deliver(at_once, with_a_late_export(at_once), "2026-01-11T12:00Z")
    with opened(at_once.path) as at:
        start, end = (
            int(pd.Timestamp(t).timestamp()) for t in ("2026-01-10T00:00Z", "2026-01-11T12:15Z")
        )
        backfill(at.site, at.store, start, end)
    live, past = stored(plant), stored(at_once)
    for table in live:
        pd.testing.assert_frame_equal(live[table], past[table])


def test_a_source_that_goes_away_is_told_once_and_when_it_is_back(plant, drive):
    driven = drive(plant, "2026-01-11T12:01Z")
    driven.daemon.cycle()
    export = plant.folder / "exports" / "day.csv"
    kept = export.read_bytes()
    export.unlink()
    with capture_logs() as lines:
        for minute in ("12:16", "12:31", "12:46"):
            driven.clock.set(f"2026-01-11T{minute}Z")
            driven.daemon.cycle()
        export.write_bytes(kept)
        driven.clock.set("2026-01-11T13:01Z")
        driven.daemon.cycle()
    told = [line for line in lines if line["log_level"] == "error"]
    assert len(told) == 1
    assert "exports" in told[0]["cause"]
    assert told[0]["exc_info"] is None
    assert [line["event"] for line in lines][-1] == "cycle works again"
    assert newest(driven) == pd.Timestamp("2026-01-11T12:45Z")
    runs = driven.at.store.runs()
    assert [run.status for run in runs] == ["done", "failed", "failed", "failed", "done"]
    assert "exports" in runs[1].message


def test_a_store_that_cannot_be_written_is_told_and_nothing_is_lost(plant, drive):
    driven = drive(plant, "2026-01-11T12:01Z")
    driven.daemon.cycle()
    engine = driven.at.store.engine
    with engine.connect() as connection:
        # As a disk does that has no room for one more page.
        pages = connection.exec_driver_sql("pragma page_count").scalar_one()
    full = sa.event.listens_for(engine, "checkout")

    @full
    def no_room(raw, _record, _proxy):
        raw.execute(f"pragma max_page_count = {pages}")

    with capture_logs() as lines:
        driven.clock.set("2026-01-11T23:46Z")
        driven.daemon.cycle()
        driven.daemon.cycle()
    assert sum(line["log_level"] == "error" for line in lines) == 1
    assert "full" in lines[-1].get("cause", lines[0]["cause"])
    assert newest(driven) == pd.Timestamp("2026-01-11T11:45Z")
    sa.event.remove(engine, "checkout", no_room)

    @sa.event.listens_for(engine, "checkout")
    def room(raw, _record, _proxy):
        raw.execute("pragma max_page_count = 1073741823")

    driven.daemon.cycle()
    assert newest(driven) == pd.Timestamp("2026-01-11T23:30Z")


def test_a_fault_in_a_job_is_told_with_its_traceback_and_the_daemon_lives(
    plant, drive, monkeypatch
):
    driven = drive(plant, "2026-01-11T12:01Z")

    def broken(*_arguments, **_options):
        raise ZeroDivisionError("in the judgement")

    driven.daemon.cycle()
    monkeypatch.setattr("monitor.daemon.judge_site", broken)
    with capture_logs() as lines:
        driven.daemon.judge()
    assert isinstance(lines[0]["exc_info"], ZeroDivisionError)
    monkeypatch.undo()
    with capture_logs() as lines:
        driven.daemon.judge()
    assert [line["event"] for line in lines] == ["judged", "judgement works again"]


def test_the_first_thing_is_to_catch_up_judge_draw_and_report(plant, drive):
    driven = drive(plant, "2026-01-11T14:05Z")
    with capture_logs() as lines:
        driven.daemon.start()
    assert not [line for line in lines if line["log_level"] == "error"]
    pages = plant.folder / "pages"
    assert (pages / "index.html").is_file()
    assert (pages / "equipment-TG1.html").is_file()
    # 15:05 in Berlin: the early shift, to 14:00, is the last that is over. The figures begin at
    # 15:00 the day before, so the night between is the only other that is whole.
    assert sorted(p.name for p in pages.glob("shift-2*")) == [
        "shift-2026-01-10-night.html",
        "shift-2026-01-11-early.html",
    ]


def test_alarms_are_raised_as_the_hours_go_by(make_plant, drive, tmp_path):
    plant = make_plant(tmp_path / "site", days=5.0, worse_after_days=3.0)
    driven = drive(plant, "2026-01-11T00:01Z")
    with capture_logs() as lines:
        for hours in range(24, 24 * 5, 6):
            moment = plant.start + pd.Timedelta(hours=hours, minutes=1)
            driven.clock.now = moment.timestamp()
            driven.daemon.cycle()
            driven.daemon.judge()
    assert not [line for line in lines if line["log_level"] == "error"]
    (alarm,) = driven.at.store.open_alarms()
    assert (alarm.subject, alarm.figure) == ("TG1", "eta_s_1")
    assert lines[-1]["drifting"] == "TG1.eta_s_1"


def test_judging_without_new_figures_lets_a_shelving_run_out(make_plant, drive, tmp_path):
    from monitor.store.alarms import AlarmAction  # noqa: PLC0415

    plant = make_plant(tmp_path / "site", days=5.0, worse_after_days=3.0)
    driven = drive(plant, "2026-01-15T00:01Z")
    store = driven.at.store
    backfill(driven.at.site, store, int(plant.start.timestamp()), int(driven.clock.now) - 60)
    driven.daemon.judge()
    driven.daemon._stale_from = int(plant.start.timestamp())
    driven.daemon.judge()
    now = int(driven.clock.now)
    store.record_action(AlarmAction("TG1", "eta_s_1", "drift", now, "shelve", "me", "", now + 3600))
    driven.clock.now += 60
    driven.daemon.judge()
    assert [a.state for a in store.open_alarms()] == ["shelved"]
    driven.clock.now += 3600
    driven.daemon.judge()
    assert [a.state for a in store.open_alarms()] == ["unacknowledged"]


def test_a_daemon_that_is_told_to_stop_begins_no_other_window(plant, drive, monkeypatch):
    from monitor import backfill as module  # noqa: PLC0415

    driven = drive(plant, "2026-01-11T23:46Z")
    run = module.run_window

    def stop_after_one(*arguments):
        done = run(*arguments)
        driven.daemon.stop.set()
        return done

    monkeypatch.setattr(module, "run_window", stop_after_one)
    driven.daemon.start()
    # The last 24 hours begin at 23:00 of the day before: the first window is one hour.
    ledger = driven.at.store.ledger(plant.start, plant.end)
    assert list(ledger.index) == list(pd.date_range("2026-01-10T23:00Z", periods=4, freq="15min"))
    assert not (plant.folder / "pages").exists()
    assert driven.at.store.runs()[0].status == "done"


def test_a_daemon_that_lost_its_lock_ends(plant):
    def lost():
        raise StoreError("the connection that holds the lock broke")

    with opened(plant.path) as at:

        class Losing:
            """A store whose lock breaks at once, and is another's then."""

            taken = 0

            def instance_lock(self, _site, _owner):
                from contextlib import nullcontext  # noqa: PLC0415

                self.taken += 1
                if self.taken > 1:
                    raise InstanceRunning("already being computed by the standby")
                return nullcontext(InstanceLock("me", lost))

        with pytest.raises(InstanceRunning, match="computed by the standby"):
            run_daemon(at.site, Losing(), at.store, clock=plant.end.timestamp)
        assert at.store.newest() is None


def test_the_scheduler_starts_at_once_and_lets_go_of_the_lock_at_the_end(plant):
    stop = threading.Event()
    failures = []

    def live():
        try:
            with opened(plant.path) as at:
                run_daemon(at.site, at.database, at.store, clock=plant.end.timestamp, stop=stop)
        except Exception as error:  # noqa: BLE001 - shown by the test
            failures.append(error)

    thread = threading.Thread(target=live)
    thread.start()
    try:
        with opened(plant.path) as at:
            deadline = time.monotonic() + 60
            while not list((plant.folder / "pages").glob("shift-2*")):
                assert thread.is_alive(), failures
                assert time.monotonic() < deadline
                time.sleep(0.1)
            with pytest.raises(InstanceRunning), at.database.instance_lock("mill_race", "second"):
                pass
    finally:
        stop.set()
        thread.join(60)
    assert not thread.is_alive()
    assert failures == []
    with opened(plant.path) as at, at.database.instance_lock("mill_race", "second"):
        assert at.store.newest() == pd.Timestamp("2026-01-11T23:30Z")


def test_housekeeping_drops_old_failures_and_keeps_the_provenance_of_figures(plant, drive):
    driven = drive(plant, "2026-01-11T12:01Z")
    driven.daemon.cycle()
    store = driven.at.store
    empty = store.begin_run("cycle", "1", "hash")
    store.finish_run(empty, "failed", message="away")
    partly = store.begin_run("cycle", "1", "hash")
    store.finish_run(partly, "failed", readings=5, message="away later")
    soon = int(time.time()) + 1000
    assert keep_house(store, soon) == 0
    assert keep_house(store, soon + 91 * 86400) == 1
    assert [run.run_id for run in store.runs()] == [partly, 1]
    driven.clock.now = soon
    with capture_logs() as lines:
        driven.daemon.housekeeping()
    assert lines == []
    # The log file of SQLite is empty again.
    assert (plant.folder / "figures.sqlite-wal").stat().st_size == 0
    with store.engine.connect() as connection:
        assert connection.execute(sa.select(sa.func.count()).select_from(schema.runs)).scalar() == 2


def test_housekeeping_works_on_either_database(make_plant, drive, tmp_path, store_url):
    plant = make_plant(tmp_path / "site", store=store_url)
    driven = drive(plant, "2026-01-11T12:01Z")
    driven.daemon.cycle()
    with capture_logs() as lines:
        driven.daemon.housekeeping()
    assert lines == []
    driven.clock.set("2026-01-11T13:01Z")
    driven.daemon.cycle()
    assert newest(driven) == pd.Timestamp("2026-01-11T12:45Z")
