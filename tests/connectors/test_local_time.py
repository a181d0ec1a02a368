"""The two odd hours of local time.

Transitions (IANA time zone database): Europe/Vienna puts the clock forward on 2026-03-29 at 01:00
UTC (02:00 to 03:00) and back on 2026-10-25 at 01:00 UTC (03:00 to 02:00). Australia/Lord_Howe moves
by half an hour; Europe/Dublin is the zone whose winter time is the shifted one.
"""

from __future__ import annotations

import zoneinfo

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import connectors.csv_index
from connectors import open_source
from connectors.base import Mark, Quality, Window
from connectors.times import TimeReader, resolve_doubled_hour

ZONE = zoneinfo.ZoneInfo("Europe/Vienna")
AUTUMN = pd.Timestamp("2026-10-25", tz="UTC")


def window(start, end):
    return Window(pd.Timestamp(start, tz="UTC"), pd.Timestamp(end, tz="UTC"))


def local_rows(times, tags=("a", "b")):
    """Rows in local time, as an export without offsets writes them; the value is the UTC minute."""
    return [
        f"{t.tz_convert(ZONE):%Y-%m-%d %H:%M:%S},{tag},{t.hour * 60 + t.minute}"
        for t in times
        for tag in tags
    ]


def write(folder, lines, name="export.csv"):
    (folder / name).write_text("\n".join(["time,tag,value", *lines, ""]))


def source(folder, **options):
    return open_source("csv", {"path": "*.csv", "time_zone": "Europe/Vienna", **options}, folder)


def minutes(readings):
    return (readings["time"] - AUTUMN) // pd.Timedelta(minutes=1)


NIGHT = pd.date_range("2026-10-24 23:00", "2026-10-25 03:00", freq="10min", tz="UTC")
WHOLE = window("2026-10-24 22:00", "2026-10-25 04:00")


@pytest.mark.parametrize("block", [64, 4 << 20])
def test_the_hour_that_comes_twice_is_told_apart_by_the_order_of_rows(tmp_path, monkeypatch, block):
    monkeypatch.setattr(connectors.csv_index, "BLOCK", block)
    write(tmp_path, local_rows(NIGHT))
    result = source(tmp_path).read(["a", "b"], WHOLE)
    table = result.readings
    assert result.problems == ()
    assert len(table) == 2 * len(NIGHT)
    assert (table["quality"] == Quality.GOOD).all()
    assert (minutes(table) % 1440 == table["value"]).all()


@pytest.mark.parametrize("start", ["2026-10-25 00:30", "2026-10-25 01:00", "2026-10-25 01:30"])
def test_a_window_that_cuts_the_doubled_hour_sees_the_same_readings(tmp_path, monkeypatch, start):
    monkeypatch.setattr(connectors.csv_index, "BLOCK", 64)
    write(tmp_path, local_rows(NIGHT))
    part = window(start, "2026-10-25 01:40")
    table = source(tmp_path).read(["b"], part).readings
    assert (table["quality"] == Quality.GOOD).all()
    assert list(table["time"]) == [t for t in NIGHT if part.start <= t < part.end]
    assert (minutes(table) == table["value"]).all()


def test_tags_listed_one_after_the_other_are_told_apart_each_by_itself(tmp_path):
    write(tmp_path, [*local_rows(NIGHT, "a"), *local_rows(NIGHT, "b"), *local_rows(NIGHT, "c")])
    table = source(tmp_path).read(["a", "b"], WHOLE).readings
    assert (table["quality"] == Quality.GOOD).all()
    assert (minutes(table) % 1440 == table["value"]).all()


def test_hourly_rows_with_the_same_time_twice_are_two_hours(tmp_path):
    write(tmp_path, local_rows(NIGHT[::6]))
    result = source(tmp_path).read(["a", "b"], WHOLE)
    assert len(result.readings) == 2 * len(NIGHT[::6])
    assert (minutes(result.readings) % 1440 == result.readings["value"]).all()
    assert result.problems == ()


def test_a_wide_export_is_told_apart_as_well(tmp_path):
    lines = [f"{t.tz_convert(ZONE):%Y-%m-%d %H:%M},{t.hour * 60 + t.minute},1" for t in NIGHT]
    (tmp_path / "export.csv").write_text("\n".join(["time,a,b", *lines, ""]))
    table = source(tmp_path, layout="wide").read(["a"], WHOLE).readings
    assert len(table) == len(NIGHT)
    assert (minutes(table) % 1440 == table["value"]).all()


def test_a_file_a_pass_is_told_apart_by_the_order_of_files(tmp_path):
    at = list(NIGHT).index(pd.Timestamp("2026-10-25 01:00", tz="UTC"))
    write(tmp_path, local_rows(NIGHT[:at]), "1.csv")
    write(tmp_path, local_rows(NIGHT[at:]), "2.csv")
    table = source(tmp_path).read(["a", "b"], WHOLE).readings
    assert (table["quality"] == Quality.GOOD).all()
    assert (minutes(table) % 1440 == table["value"]).all()


def test_the_answer_does_not_depend_on_which_tags_are_asked_for(tmp_path):
    lines = local_rows(NIGHT, "a")
    at = next(n for n, t in enumerate(NIGHT) if t == pd.Timestamp("2026-10-25 01:20", tz="UTC"))
    lines.insert(at + 1, "2026-10-25 02:25:00,rare,85")
    write(tmp_path, lines)
    table = source(tmp_path).read(["rare"], WHOLE).readings
    assert list(table["time"]) == [pd.Timestamp("2026-10-25 01:25", tz="UTC")]
    assert list(table["quality"]) == [Quality.GOOD]


def test_a_pass_that_the_order_does_not_tell_is_uncertain_and_counted(tmp_path):
    once = [t for t in NIGHT if not AUTUMN <= t < AUTUMN + pd.Timedelta(hours=1)]
    write(tmp_path, local_rows(once, "a"))
    reader = source(tmp_path)
    for _ in range(2):
        result = reader.read(["a"], WHOLE)
        uncertain = result.readings["quality"] == Quality.UNCERTAIN
        assert uncertain.sum() == 6
        assert list(result.readings.loc[uncertain, "time"]) == list(
            pd.date_range(AUTUMN, periods=6, freq="10min")
        )
        marked = result.readings["marks"].to_numpy() == int(Mark.AMBIGUOUS_TIME)
        assert (marked == uncertain).all()
        (problem,) = result.problems
        assert problem.count == 6
        assert "comes twice" in problem.what


def test_two_tags_with_one_pass_each_do_not_pass_for_two_passes():
    minute = 60_000_000
    first = np.array([0, 10, 20, 0, 10, 20]) * minute
    tags = np.array([0, 0, 0, 1, 1, 1], dtype=np.int32)
    part = np.zeros(6, dtype=np.int32)
    assert list(resolve_doubled_hour(first, tags, part)) == [-1] * 6
    both = np.zeros(6, dtype=np.int32)
    assert list(resolve_doubled_hour(first, both, part)) == [0, 0, 0, 1, 1, 1]


def test_a_live_file_settles_once_the_second_pass_begins(tmp_path):
    at = list(NIGHT).index(pd.Timestamp("2026-10-25 01:00", tz="UTC"))
    write(tmp_path, local_rows(NIGHT[:at]))
    reader = source(tmp_path)
    assert (reader.read(["a"], WHOLE).readings["quality"] == Quality.UNCERTAIN).sum() == 6
    with (tmp_path / "export.csv").open("a") as file:
        file.write("\n".join([*local_rows(NIGHT[at:]), ""]))
    table = reader.read(["a"], WHOLE).readings
    assert (table["quality"] == Quality.GOOD).all()
    assert (minutes(table) % 1440 == table["value"]).all()


def test_times_in_the_missing_hour_are_dropped_and_counted(tmp_path):
    lines = [f"2026-03-29 0{h}:30:00,a,{h}" for h in (1, 2, 3)]
    write(tmp_path, lines)
    result = source(tmp_path).read(["a"], window("2026-03-28", "2026-03-30"))
    assert result.readings["value"].tolist() == [1, 3]
    assert list(result.readings["time"]) == [
        pd.Timestamp("2026-03-29 00:30", tz="UTC"),
        pd.Timestamp("2026-03-29 01:30", tz="UTC"),
    ]
    (problem,) = result.problems
    assert (problem.where, problem.count) == ("export.csv:line 3", 1)
    assert "does not exist" in problem.what


def test_times_with_an_offset_need_no_zone(tmp_path):
    lines = ["2026-10-25T02:30:00+02:00,a,1", "2026-10-25T02:30:00+01:00,a,2"]
    write(tmp_path, lines)
    table = source(tmp_path).read(["a"], WHOLE).readings
    assert table["value"].tolist() == [1, 2]
    assert minutes(table).tolist() == [30, 90]
    assert (table["quality"] == Quality.GOOD).all()


def test_mixed_times_are_each_read_by_what_they_carry(tmp_path):
    write(tmp_path, ["2026-10-24T12:00:00Z,a,1", "2026-10-24 15:00:00,a,2", "2026-10-24,a,3"])
    table = source(tmp_path).read(["a"], window("2026-10-23", "2026-10-25")).readings
    assert [f"{t:%d %H:%M}" for t in table["time"]] == ["23 22:00", "24 12:00", "24 13:00"]


@given(
    zone=st.sampled_from(
        [
            "Europe/Vienna",
            "Europe/Dublin",
            "Australia/Lord_Howe",
            "America/New_York",
            "Asia/Kolkata",
        ]
    ),
    minute=st.integers(0, 366 * 24 * 60),
)
def test_local_times_agree_with_the_standard_library(zone, minute):
    # An independent reading of the same transitions: datetime's `fold` and zoneinfo.
    moment = pd.Timestamp("2026-01-01", tz="UTC") + pd.Timedelta(minutes=minute)
    local = moment.to_pydatetime().astimezone(zoneinfo.ZoneInfo(zone))
    naive = np.array([pd.Timestamp(local.replace(tzinfo=None)).as_unit("us").asm8]).view(np.int64)
    parsed = TimeReader("iso", zone).local(naive)
    candidates = {
        pd.Timestamp(local.replace(fold=fold)).tz_convert("UTC").timestamp() for fold in (0, 1)
    }
    assert {parsed.first[0] / 1e6, parsed.second[0] / 1e6} == candidates
    assert bool(parsed.doubled[0]) == (len(candidates) == 2)


@given(
    steps=st.lists(st.integers(1, 25), min_size=8, max_size=40),
    tags=st.lists(st.sampled_from("abc"), min_size=40, max_size=40),
)
def test_rows_in_the_order_of_time_are_never_put_into_the_wrong_hour(steps, tags):
    # Whatever is thinned out, a row's settled time is either the true one or said to be unknown.
    offsets = np.cumsum(steps)
    true = (offsets[offsets < 120]).astype(np.int64) * 60_000_000
    first = true % 3_600_000_000
    codes = np.array([ord(tag) for tag in tags[: len(true)]], dtype=np.int32)
    passes = resolve_doubled_hour(first, codes, np.zeros(len(true), dtype=np.int32)).astype(int)
    known = passes >= 0
    assert (first + passes * 3_600_000_000)[known].tolist() == true[known].tolist()
