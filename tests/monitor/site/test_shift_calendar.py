from __future__ import annotations

import datetime as dt
import itertools
import zoneinfo

from hypothesis import given
from hypothesis import strategies as st

from monitor.site.models import Shifts
from monitor.site.shifts import ShiftCalendar

BERLIN = ShiftCalendar.of(Shifts(), "Europe/Berlin")


def _utc(text):
    return int(dt.datetime.fromisoformat(text).timestamp())


def test_three_shifts_of_an_ordinary_day():
    spans = BERLIN.spans(_utc("2026-02-10T06:00+01:00"), _utc("2026-02-11T06:00+01:00"))
    assert [(s.name, (s.end - s.start) // 3600) for s in spans] == [
        ("early", 8),
        ("late", 8),
        ("night", 8),
    ]
    assert spans[0].start == _utc("2026-02-10T05:00+00:00")


def test_the_night_of_the_spring_change_has_seven_hours_and_autumn_nine():
    """EU summer time 2026: 29 March and 25 October at 01:00 UTC (Directive 2000/84/EC)."""
    spring = BERLIN.spans(_utc("2026-03-29T00:00+00:00"), _utc("2026-03-29T00:30+00:00"))
    autumn = BERLIN.spans(_utc("2026-10-25T00:00+00:00"), _utc("2026-10-25T00:30+00:00"))
    assert [(s.name, (s.end - s.start) // 3600) for s in spring] == [("night", 7)]
    assert [(s.name, (s.end - s.start) // 3600) for s in autumn] == [("night", 9)]


def test_days_and_months_follow_local_midnight():
    days = BERLIN.days(_utc("2026-03-29T10:00+00:00"), _utc("2026-03-29T11:00+00:00"))
    assert [(d.name, (d.end - d.start) // 3600) for d in days] == [("2026-03-29", 23)]
    months = BERLIN.months(_utc("2026-03-05T00:00+00:00"), _utc("2026-04-05T00:00+00:00"))
    assert [m.name for m in months] == ["2026-03", "2026-04"]
    assert (months[0].end - months[0].start) // 3600 == 31 * 24 - 1


@given(
    st.sampled_from(["Europe/Berlin", "America/St_Johns", "Australia/Lord_Howe", "UTC"]),
    st.integers(1577836800, 1893456000),
    st.integers(1, 40 * 86400),
)
def test_every_instant_belongs_to_exactly_one_shift(zone, start, length):
    calendar = ShiftCalendar.of(Shifts(), zone)
    spans = calendar.spans(start, start + length)
    assert spans[0].start <= start < spans[0].end
    assert spans[-1].start < start + length <= spans[-1].end
    for before, after in itertools.pairwise(spans):
        assert before.end == after.start


def test_a_start_that_the_clock_skips_begins_when_the_clock_has_moved():
    calendar = ShiftCalendar.of(
        Shifts(starts=(dt.time(2, 30), dt.time(14, 30)), names=("day", "night")), "Europe/Berlin"
    )
    (span,) = [
        s
        for s in calendar.spans(_utc("2026-03-29T01:00+00:00"), _utc("2026-03-29T02:00+00:00"))
        if s.name == "day"
    ]
    local = dt.datetime.fromtimestamp(span.start, tz=zoneinfo.ZoneInfo("Europe/Berlin"))
    assert (local.hour, local.minute) == (3, 30)
