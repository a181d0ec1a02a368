"""The schedule when the clock jumps, and on the two odd nights of the year."""

from __future__ import annotations

import datetime as dt
import itertools
from datetime import UTC

import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor import log
from monitor.commands.opening import opened
from monitor.running import Runner, new_scheduler
from monitor.site.shifts import ShiftCalendar
from monitor.triggers import GridTrigger, ShiftTrigger

SHIFTS = ShiftCalendar(
    (dt.time(6), dt.time(14), dt.time(22)), ("early", "late", "night"), "Europe/Berlin"
)


def at(text):
    return dt.datetime.fromisoformat(text).replace(tzinfo=UTC)


def follow(trigger, start, end, tick):
    """Fire times under a clock that moves on by ticks: what the scheduler does."""
    now, due, found = start, trigger.get_next_fire_time(None, start), []
    while now < end:
        if due <= now:
            found.append(due)
            due = trigger.get_next_fire_time(due, now)
        now += tick
    return found


@pytest.mark.parametrize(
    ("begin", "end", "hours"),
    [
        # EU summer time 2026 begins on 29 March and ends on 25 October, at 01:00 UTC.
        ("2026-03-28T00:00:00", "2026-03-30T22:00:00", [8, 8, 7, 8, 8, 8]),
        ("2026-10-24T00:00:00", "2026-10-26T23:00:00", [8, 8, 9, 8, 8, 8]),
    ],
)
def test_each_shift_around_a_clock_change_is_reported_once(begin, end, hours):
    trigger = ShiftTrigger(SHIFTS, 123)
    fired = follow(trigger, at(begin), at(end), dt.timedelta(minutes=10))
    lengths = [(b - a).total_seconds() / 3600 for a, b in itertools.pairwise(fired)]
    assert lengths[: len(hours)] == hours


def test_cycles_come_each_interval_through_both_clock_changes():
    trigger = GridTrigger(900, 60)
    for day in ("2026-03-29T00:00:00", "2026-10-25T00:00:00"):
        fired = follow(trigger, at(day), at(day) + dt.timedelta(hours=4), dt.timedelta(minutes=1))
        assert len(fired) == 16
        assert {b - a for a, b in itertools.pairwise(fired)} == {dt.timedelta(minutes=15)}


@given(
    jump=st.timedeltas(dt.timedelta(seconds=1), dt.timedelta(days=400)),
    interval=st.sampled_from([60, 300, 900, 3600]),
)
def test_a_clock_that_jumps_forward_skips_to_the_present_at_once(jump, interval):
    trigger, now = GridTrigger(interval, 30), at("2026-05-01T12:00:00")
    due = trigger.get_next_fire_time(None, now)
    # As the scheduler asks after the late job: one further time, not one for each missed interval.
    later = now + jump
    following = trigger.get_next_fire_time(due, later)
    assert following > due
    assert following >= later or following - due == dt.timedelta(seconds=interval)
    assert following - max(later, due) <= dt.timedelta(seconds=interval)


def test_a_clock_that_was_a_year_ahead_leaves_no_job_waiting_for_a_year(make_plant, tmp_path):
    # Another test's stderr, which the log may still go to, is closed.
    log.configure()
    plant = make_plant(tmp_path / "site", days=0.5)
    scheduler = new_scheduler()
    runner = Runner("site", lambda: opened(plant.path), scheduler)
    # Paused, so that nothing runs: what is looked at is when jobs are due.
    scheduler.start(paused=True)
    runner.begin()
    try:
        start = [job for job in scheduler.get_jobs() if job.func.__name__ == "start"]
        jobs = [job for job in scheduler.get_jobs() if job not in start]
        assert len(jobs) == 6
        for job in jobs:
            job.modify(next_run_time=dt.datetime.now(UTC) + dt.timedelta(days=365))
        runner.beat()
        soon = dt.datetime.now(UTC) + dt.timedelta(days=1, minutes=1)
        assert all(job.next_run_time <= soon for job in scheduler.get_jobs())
        due = runner.daemon.health.jobs["cycle"].next
        assert due < soon.timestamp()
    finally:
        runner.end()
        scheduler.shutdown()


def test_a_clock_that_jumped_a_week_ahead_and_back_loses_and_doubles_nothing(
    make_plant, drive, stored, tmp_path
):
    jumped, calm = (make_plant(tmp_path / name, days=1.5, interval=60) for name in "ab")
    driven = drive(jumped, "2026-01-10T12:01Z")
    driven.daemon.cycle()
    driven.clock.set("2026-01-17T12:01Z")
    driven.daemon.beat()
    driven.daemon.cycle()
    for hour in range(13, 24):
        driven.clock.set(f"2026-01-10T{hour}:01Z")
        driven.daemon.beat()
        driven.daemon.cycle()
        assert driven.daemon.health.jobs["cycle"].cause == ""
    assert "set back" in driven.daemon.health.jobs["clock"].cause
    straight = drive(calm, "2026-01-10T12:01Z")
    straight.daemon.cycle()
    straight.clock.set("2026-01-10T23:01Z")
    straight.daemon.cycle()
    last = int(pd.Timestamp("2026-01-10T23:00Z").timestamp())
    for table, column in (("ledger_figures", "time"), ("stream_figures", "time")):
        found, expected = stored(jumped)[table], stored(calm)[table]
        pd.testing.assert_frame_equal(
            found[found[column] < last].reset_index(drop=True), expected, obj=table
        )
