"""Times and durations as people write them."""

from __future__ import annotations

import datetime as dt
import zoneinfo

import pytest
from hypothesis import given
from hypothesis import strategies as st

from monitor.commands.times import duration_seconds, local, read_time, utc_text
from monitor.errors import WrongUseError

BERLIN = "Europe/Berlin"
NOW = 1_768_046_400  # 2026-01-10 12:00 UTC
SECONDS = st.integers(0, 4_102_444_800)
ZONES = st.sampled_from(
    ["UTC", BERLIN, "America/St_Johns", "Asia/Kathmandu", "Australia/Lord_Howe", "Pacific/Apia"]
)


@given(at=SECONDS)
def test_a_time_written_in_utc_is_read_back(at):
    assert read_time(utc_text(at), BERLIN, NOW, "--at") == at


@given(at=SECONDS, zone=ZONES)
def test_a_time_written_with_its_offset_is_read_back_to_the_minute(at, zone):
    whole = at // 60 * 60
    assert read_time(local(whole, zone), "UTC", NOW, "--at") == whole


@given(at=SECONDS, zone=ZONES)
def test_a_local_time_is_read_back_as_the_first_of_its_two_where_it_comes_twice(at, zone):
    whole = at // 60 * 60
    moment = dt.datetime.fromtimestamp(whole, tz=zoneinfo.ZoneInfo(zone))
    read = read_time(moment.strftime("%Y-%m-%d %H:%M"), zone, NOW, "--at")
    if moment.fold == 0:
        assert read == whole
    else:
        assert 0 < whole - read <= 86400


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("now", NOW),
        ("today", NOW - 13 * 3600),
        ("yesterday", NOW - 37 * 3600),
        ("2026-01-10", NOW - 13 * 3600),
        ("2026-01-10 13:00", NOW),
        ("2026-01-10T12:00Z", NOW),
        ("2026-01-10T17:45+05:45", NOW),
    ],
)
def test_ways_to_write_a_time(text, expected):
    # In Berlin the day begins at 23:00 UTC in January.
    assert read_time(text, BERLIN, NOW, "--at") == expected


@pytest.mark.parametrize("text", ["", "noon", "10.01.2026", "2026-13-01", "2026-01-10 25:00"])
def test_what_is_no_time_is_refused_with_the_option_and_an_example(text):
    with pytest.raises(WrongUseError, match=r"--at .* is not a time; write 2026-03-01"):
        read_time(text, BERLIN, NOW, "--at")


@pytest.mark.parametrize(
    ("text", "seconds"),
    [("8h", 28800), ("30 min", 1800), ("2days", 172800), ("1.5 h", 5400), ("90s", 90)],
)
def test_ways_to_write_a_duration(text, seconds):
    assert duration_seconds(text, "--for") == seconds
