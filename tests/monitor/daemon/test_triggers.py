"""When jobs come due: on the grid, and at the ends of local shifts."""

from __future__ import annotations

import datetime as dt
import itertools

import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.site.shifts import ShiftCalendar
from monitor.triggers import GridTrigger, ShiftTrigger, last_shifts

UTC = dt.UTC
SHIFTS = ShiftCalendar(
    (dt.time(6), dt.time(14), dt.time(22)), ("early", "late", "night"), "Europe/Berlin"
)


def at(text):
    return dt.datetime.fromisoformat(text).replace(tzinfo=UTC)


def fires(trigger, now, count):
    previous = None
    for _ in range(count):
        previous = trigger.get_next_fire_time(previous, now)
        yield previous


def test_a_cycle_comes_due_when_a_cell_has_settled():
    trigger = GridTrigger(300, 120)
    assert list(fires(trigger, at("2026-01-10T12:03:00"), 3)) == [
        at("2026-01-10T12:07:00"),
        at("2026-01-10T12:12:00"),
        at("2026-01-10T12:17:00"),
    ]


def test_a_time_that_is_due_right_now_is_not_passed_over():
    assert GridTrigger(300, 120).get_next_fire_time(None, at("2026-01-10T12:07:00")) == at(
        "2026-01-10T12:07:00"
    )


@given(
    now=st.datetimes(
        min_value=dt.datetime(2000, 1, 1),  # noqa: DTZ001 - hypothesis adds the zone
        max_value=dt.datetime(2040, 1, 1),  # noqa: DTZ001
        timezones=st.just(UTC),
    ),
    interval=st.sampled_from([60, 300, 900, 3600]),
    offset=st.integers(0, 7200),
)
def test_fire_times_are_on_the_grid_and_one_interval_apart(now, interval, offset):
    times = list(fires(GridTrigger(interval, offset), now, 4))
    assert times[0] >= now
    assert (times[0] - now).total_seconds() < interval
    assert all((t.timestamp() - offset) % interval == 0 for t in times)
    assert {(b - a).total_seconds() for a, b in itertools.pairwise(times)} == {interval}


@pytest.mark.parametrize(
    ("day", "ends"),
    [
        # A winter day: Berlin is UTC+1.
        ("2026-01-10", ["05:00", "13:00", "21:00"]),
        # The clock goes from 02:00 to 03:00 (29 March 2026): the night shift has seven hours.
        ("2026-03-29", ["04:00", "12:00", "20:00"]),
        # And back (25 October 2026): nine hours.
        ("2026-10-25", ["05:00", "13:00", "21:00"]),
    ],
)
def test_a_report_comes_due_at_each_local_end_of_shift(day, ends):
    trigger = ShiftTrigger(SHIFTS, 120)
    expected = [at(f"{day}T{end}") + dt.timedelta(seconds=120) for end in ends]
    assert list(fires(trigger, at(f"{day}T01:00"), 3)) == expected


def test_the_night_in_which_the_clock_goes_back_is_reported_once():
    # From 22:00 local summer time to 06:00 local winter time.
    times = list(fires(ShiftTrigger(SHIFTS, 0), at("2026-10-24T19:00"), 2))
    assert times == [at("2026-10-24T20:00"), at("2026-10-25T05:00")]


def test_the_last_shift_is_the_one_that_is_over():
    before = last_shifts(SHIFTS, at("2026-01-10T04:59:59").timestamp())[-1]
    after = last_shifts(SHIFTS, at("2026-01-10T05:00:00").timestamp())[-1]
    assert (before.name, str(before.day)) == ("late", "2026-01-09")
    assert (after.name, str(after.day)) == ("night", "2026-01-09")
