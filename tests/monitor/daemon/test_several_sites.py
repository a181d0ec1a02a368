"""Several sites in one process: each with its own lock, threads, health and log file."""

from __future__ import annotations

import json
import threading
import time
from contextlib import contextmanager

import pandas as pd
import pytest

from monitor import log
from monitor.commands.opening import opened, opened_to_read
from monitor.errors import LostworkError
from monitor.running import run_sites
from monitor.store.errors import InstanceRunning, StoreError

PATIENCE = 60


def wait_for(true, living=None):
    deadline = time.monotonic() + PATIENCE
    while not true():
        assert time.monotonic() < deadline
        assert living is None or living.is_alive()
        time.sleep(0.1)


@contextmanager
def running(*plants):
    """The process of several sites, in a thread of this one."""
    stop, wrong = threading.Event(), []
    log.configure(json=True)

    def live():
        try:
            run_sites([p.path for p in plants], clock=plants[0].end.timestamp, stop=stop)
        except Exception as error:  # noqa: BLE001 - shown below
            wrong.append(error)

    thread = threading.Thread(target=live)
    thread.start()
    try:
        yield thread
    finally:
        stop.set()
        thread.join(PATIENCE)
    assert not thread.is_alive()
    assert wrong == []


def newest(plant):
    try:
        with opened_to_read(plant.path) as at:
            return at.store.newest()
    except StoreError:
        return None


def caught_up(*plants):
    # The last cell that has settled when the clock stands at the end of the readings.
    return all(newest(plant) == plant.end.floor("h") - pd.Timedelta("1h") for plant in plants)


def small(make_plant, folder, site, store="sqlite:///figures.sqlite"):
    plant = make_plant(folder, days=1.0, every="10min", interval=60, site=site, store=store)
    plant.edit("[economics]", '[daemon]\nlog_file = "site.log"\n\n[economics]')
    return plant


def test_sites_of_two_stores_run_side_by_side_and_each_log_has_its_own(make_plant, tmp_path):
    one, two = (small(make_plant, tmp_path / site, site) for site in ("north", "south"))
    with running(one, two) as thread:
        wait_for(lambda: caught_up(one, two), thread)
        for plant in (one, two):
            with (
                opened(plant.path) as at,
                pytest.raises(InstanceRunning),
                at.database.instance_lock(at.site.id, "second"),
            ):
                pass
    for plant, site in ((one, "north"), (two, "south")):
        lines = [json.loads(x) for x in (plant.folder / "site.log").read_text().splitlines()]
        assert {line.get("site", site) for line in lines} == {site}
        assert any(line["event"] == "figures stored" for line in lines)
        # In order: no heartbeat is left, and the store has the last word.
        assert lines[-1]["event"] == "ended"
        assert not (plant.folder / "lostwork-heartbeat.json").exists()
        with opened_to_read(plant.path) as at:
            daemon = at.store.daemon()
        assert daemon.ended is not None
        assert daemon.jobs["cycle"].last is not None


def test_two_sites_share_one_store(make_plant, tmp_path, store_url):
    one, two = (small(make_plant, tmp_path / site, site, store_url) for site in ("north", "south"))
    with running(one, two) as thread:
        wait_for(lambda: caught_up(one, two), thread)
    with opened_to_read(one.path) as at:
        assert at.database.sites() == ("north", "south")
        north = at.store.ledger(one.start, one.end)
    with opened_to_read(two.path) as at:
        south = at.store.ledger(two.start, two.end)
    assert len(north) > 20
    # The same readings give the same account, each under its own site.
    pd.testing.assert_frame_equal(north, south)
    assert north["destroyed_live_kw"].notna().sum() > 20


def test_a_site_that_cannot_begin_holds_up_no_other_and_begins_when_it_is_mended(
    make_plant, tmp_path
):
    good, bad = (small(make_plant, tmp_path / site, site) for site in ("north", "south"))
    bad.edit("exergy_price", "exergy_prize")
    with running(good, bad) as thread:
        wait_for(lambda: newest(good) is not None, thread)
        assert not (bad.folder / "figures.sqlite").exists()
        bad.edit("exergy_prize", "exergy_price")
        wait_for(lambda: newest(bad) is not None, thread)


def test_a_site_whose_sources_fail_holds_up_no_other(make_plant, tmp_path):
    good, bad = (small(make_plant, tmp_path / site, site) for site in ("north", "south"))
    (bad.folder / "exports" / "day.csv").unlink()
    with running(good, bad) as thread:
        wait_for(lambda: newest(good) is not None, thread)
        beat = bad.folder / "lostwork-heartbeat.json"
        wait_for(lambda: beat.exists() and "exports" in beat.read_text(), thread)
    events = [json.loads(x)["event"] for x in (bad.folder / "site.log").read_text().splitlines()]
    assert "cycle failed" in events
    assert "cycle failed" not in (good.folder / "site.log").read_text()


def test_sites_of_which_none_can_begin_are_an_error(make_plant, tmp_path):
    one, two = (small(make_plant, tmp_path / site, site) for site in ("north", "south"))
    for plant in (one, two):
        plant.edit("exergy_price", "exergy_prize")
    with pytest.raises(LostworkError, match="exergy_prize"):
        run_sites([one.path, two.path], stop=threading.Event())


def test_two_sites_that_would_write_one_file_are_told_and_the_first_runs(make_plant, tmp_path):
    one, two = (small(make_plant, tmp_path / site, site) for site in ("north", "south"))
    shared = tmp_path / "shared.log"
    for plant in (one, two):
        plant.edit('log_file = "site.log"', f'log_file = "{shared}"')
    with running(one, two) as thread:
        wait_for(lambda: newest(one) is not None, thread)
        wait_for(lambda: "files and folders of their own" in shared.read_text(), thread)
        assert newest(two) is None
    assert "[daemon] log_file" in shared.read_text()
