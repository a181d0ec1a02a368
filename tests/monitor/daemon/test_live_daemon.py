"""The daemon as a process of its own, beside an export that another process keeps writing."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from contextlib import contextmanager

import pandas as pd
import pytest

from monitor.backfill import backfill
from monitor.commands.opening import opened, opened_to_read
from monitor.store.errors import StoreError

pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(os.name == "nt", reason="signals as Unix has them"),
]

# Appends each row when its time has come, as a historian's export job does.
FEEDER = """
import sys, time
plan, export = sys.argv[1:]
with open(plan) as rows, open(export, "a") as out:
    for line in rows:
        due = float(line.partition("|")[0])
        while time.time() < due:
            out.flush()
            time.sleep(0.1)
        out.write(line.partition("|")[2])
"""
PATIENCE = 200


@contextmanager
def process(arguments, log):
    with log.open("ab") as output:
        child = subprocess.Popen(
            [sys.executable, *map(str, arguments)], stdout=output, stderr=output
        )
        try:
            yield child
        finally:
            if child.poll() is None:
                child.kill()
            child.wait(30)


def lostwork(plant, log):
    return process(["-m", "monitor.cli", "run", plant.path, "--log-json"], log)


@contextmanager
def feeding(plant, folder):
    """Write what is past, and let a process append the rest as its time comes."""
    now = pd.Timestamp.now("UTC")
    plant.export(before=now)
    later = plant.readings[plant.readings["time"] >= now]
    plan = folder / "plan.txt"
    lines = later.to_csv(index=False, header=False, date_format="%Y-%m-%dT%H:%M:%SZ").splitlines()
    due = later["time"].map(pd.Timestamp.timestamp)
    plan.write_text("".join(f"{t}|{line}\n" for t, line in zip(due, lines, strict=True)))
    export = plant.folder / "exports" / "day.csv"
    with process(["-c", FEEDER, plan, export], folder / "feeder.log") as feeder:
        yield feeder


def newest(plant):
    try:
        with opened_to_read(plant.path) as at:
            return at.store.newest()
    except StoreError:
        # The daemon has not made its store yet.
        return None


def wait_for_figures(plant, moment, child, log):
    """Wait until the cell that starts at a moment is stored."""
    deadline = time.monotonic() + PATIENCE
    while (found := newest(plant)) is None or found < moment:
        assert child.poll() is None, log.read_text()
        assert time.monotonic() < deadline, (found, moment, log.read_text())
        time.sleep(0.5)


def live_plant(make_plant, folder):
    start = pd.Timestamp.now("UTC").floor("h") - pd.Timedelta("3h")
    return make_plant(folder, start=start, days=0.25, every="20s", interval=1, settle=2)


def test_a_killed_daemon_loses_nothing_and_repeats_nothing(make_plant, stored, tmp_path):
    plant = live_plant(make_plant, tmp_path / "site")
    log = tmp_path / "daemon.log"
    with feeding(plant, tmp_path):
        with lostwork(plant, log) as first:
            # A cell of which not one reading was there when the daemon started.
            live = pd.Timestamp.now("UTC").ceil("min")
            wait_for_figures(plant, live, first, log)
            first.send_signal(signal.SIGKILL)
            first.wait(30)
        with lostwork(plant, log) as second:
            wait_for_figures(plant, live + pd.Timedelta("1min"), second, log)
            second.send_signal(signal.SIGTERM)
            assert second.wait(60) == 0, log.read_text()
    assert '"level": "error"' not in log.read_text()
    last = newest(plant) + pd.Timedelta("1min")
    undisturbed = make_plant(
        tmp_path / "site",
        start=plant.start,
        days=0.25,
        every="20s",
        interval=1,
        settle=2,
        store="sqlite:///undisturbed.sqlite",
    )
    with opened(undisturbed.path) as at:
        first_cell = pd.Timestamp(stored(plant)["ledger_figures"]["time"].min(), unit="s", tz="UTC")
        backfill(at.site, at.store, int(first_cell.timestamp()), int(last.timestamp()))
    killed, whole = stored(plant), stored(plant, "sqlite:///undisturbed.sqlite")
    for table in killed:
        pd.testing.assert_frame_equal(killed[table], whole[table])


def test_a_second_instance_is_refused_and_told_who_runs(make_plant, tmp_path):
    plant = live_plant(make_plant, tmp_path / "site")
    log, other = tmp_path / "first.log", tmp_path / "second.log"
    with lostwork(plant, log) as first:
        wait_for_figures(plant, plant.start, first, log)
        with lostwork(plant, other) as second:
            assert second.wait(60) == 6
        assert f"already being computed by lostwork run, process {first.pid}" in other.read_text()
        first.send_signal(signal.SIGINT)
        assert first.wait(60) == 0, log.read_text()


def test_a_daemon_that_is_killed_in_the_middle_of_a_long_catch_up_goes_on(make_plant, tmp_path):
    # A week behind: a small window done, then days to catch up with.
    now = pd.Timestamp.now("UTC").floor("h")
    plant = make_plant(
        tmp_path / "site", start=now - pd.Timedelta("7D"), days=7.0, every="1min", interval=1
    )
    with opened(plant.path) as at:
        start = int(plant.start.timestamp())
        backfill(at.site, at.store, start, start + 7200)
    log = tmp_path / "daemon.log"
    with lostwork(plant, log) as first:
        wait_for_figures(plant, plant.start + pd.Timedelta("26h"), first, log)
        first.send_signal(signal.SIGKILL)
        first.wait(30)
    reached = newest(plant)
    assert reached < now - pd.Timedelta("1h"), "killed too late to mean anything"
    with lostwork(plant, log) as second:
        wait_for_figures(plant, now - pd.Timedelta("1min"), second, log)
        second.send_signal(signal.SIGTERM)
        assert second.wait(60) == 0, log.read_text()
    with opened_to_read(plant.path) as at:
        statuses = [run.status for run in at.store.runs()]
        times = at.store.ledger(plant.start, newest(plant) + pd.Timedelta("1min")).index
    # The run that died is closed by the next one.
    assert "abandoned" in statuses
    assert "running" not in statuses
    assert times.is_unique
    assert len(times) == (times[-1] - plant.start) / pd.Timedelta("1min") + 1
