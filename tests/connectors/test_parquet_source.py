from __future__ import annotations

import itertools
import os

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import connectors.parquet_file
from connectors import open_source
from connectors.base import READING_COLUMNS, ConnectorError, Quality, Window
from connectors.parquet_options import ParquetOptions
from connectors.parquet_source import ParquetSource

DAY = Window(pd.Timestamp("2026-01-31", tz="UTC"), pd.Timestamp("2026-02-01", tz="UTC"))
MINUTES = pd.date_range("2026-01-31 06:00", periods=60, freq="min", tz="UTC")


def window(start, end):
    return Window(pd.Timestamp(start, tz="UTC"), pd.Timestamp(end, tz="UTC"))


def source(folder, path="*.parquet", **options):
    return open_source("parquet", {"path": path, **options}, folder)


def write(folder, name="export.parquet", group=10, **columns):
    path = folder / name
    pq.write_table(pa.table(columns), path, row_group_size=group)
    return path


def write_minutes(folder, **more):
    values = np.arange(60, dtype=float)
    return write(folder, time=MINUTES, tag=["a", "b"] * 30, value=values, **more)


def rows(result):
    return [
        (str(tag), f"{t:%H:%M}", None if np.isnan(v) else v, Quality(q).name)
        for tag, t, v, q in result.readings[list(READING_COLUMNS)].itertuples(index=False)
    ]


def counts(result):
    return {problem.what.split(":")[0]: problem.count for problem in result.problems}


@pytest.fixture
def read_groups(monkeypatch):
    """The row groups and columns that were read."""
    seen = []
    original = pq.ParquetFile.iter_batches

    def spy(self, batch_size, row_groups, columns):
        seen.append((list(row_groups), list(columns)))
        return original(self, batch_size, row_groups=row_groups, columns=columns)

    monkeypatch.setattr(pq.ParquetFile, "iter_batches", spy)
    return seen


def test_a_window_reads_only_the_row_groups_and_columns_that_it_needs(tmp_path, read_groups):
    write_minutes(tmp_path, comment=["x"] * 60)
    reader = source(tmp_path)
    result = reader.read(["a"], window("2026-01-31 06:12", "2026-01-31 06:23"))
    assert rows(result) == [("a", f"06:{m}", float(m), "GOOD") for m in range(12, 23, 2)]
    assert read_groups == [([1], ["time", "tag", "value"]), ([2], ["time", "tag", "value"])]


def test_row_groups_of_other_tags_are_not_read(tmp_path, read_groups):
    tags = [f"T{n}" for n in range(6) for _ in range(10)]
    write(tmp_path, time=list(MINUTES[:10]) * 6, tag=tags, value=np.arange(60.0))
    assert len(source(tmp_path).read(["T3", "absent"], DAY).readings) == 10
    assert [groups for groups, _ in read_groups] == [[3]]


def test_times_kept_as_texts_are_indexed_once(tmp_path, read_groups):
    texts = [t.strftime("%Y-%m-%d %H:%M:%S") for t in MINUTES]
    write(tmp_path, time=texts, tag=["a"] * 60, value=np.arange(60.0))
    reader = ParquetSource(ParquetOptions(path="*.parquet"), tmp_path, cache_limit=0)
    for _ in range(2):
        read_groups.clear()
        assert len(reader.read(["a"], window("2026-01-31 06:12", "2026-01-31 06:13")).readings) == 1
    assert [groups for groups, _ in read_groups] == [[1]]


def test_wrong_rows_are_counted(tmp_path):
    write(
        tmp_path,
        time=[*MINUTES[:5].to_pydatetime(), None],
        tag=["a", "a", "a", None, "a", "a"],
        value=[1.0, np.inf, None, 4.0, 5.0, 6.0],
        quality=["Good", "Good", "Good", "Good", "so so", "Good"],
    )
    reader = source(tmp_path, quality_column="quality")
    result = reader.read(["a"], DAY)
    assert rows(result) == [
        ("a", "06:00", 1.0, "GOOD"),
        ("a", "06:01", None, "BAD"),
        ("a", "06:02", None, "BAD"),
        ("a", "06:04", 5.0, "UNCERTAIN"),
    ]
    assert [(p.what.split(" (")[0], p.count) for p in result.problems] == [
        ("row dropped: its time cannot be read", 1),
        ("row dropped: it names no tag", 1),
        ("value is not a number: the reading is kept as bad", 1),
        ("quality word is in no list: the reading counts as uncertain", 1),
    ]
    assert not any(p.what.startswith("row dropped") for p in reader.read(["a"], DAY).problems)


@pytest.mark.parametrize("group", [1, 3, 100])
def test_of_each_problem_the_first_few_are_named_with_tag_and_time(tmp_path, group):
    write(
        tmp_path,
        group=group,
        time=["2026-01-31 06:00", "never", "2026-01-31 06:01", "2026-01-31 06:02", "soon"],
        tag=["a", "a", None, "b", "b"],
        value=["about 3", "1", "1", "41,5", "2"],
        quality=["Good", "Good", "Good", "so so", "Good"],
    )
    problems = source(tmp_path, quality_column="quality").read(["a", "b"], DAY).problems
    first = "2026-01-31 06:00:00 UTC"
    found = {(p.what.split(":")[0], *((e.place, e.text) for e in p.examples)) for p in problems}
    assert found == {
        ("value is not a number", (f"a {first}", "about 3")),
        ("value has a decimal comma", ("b 2026-01-31 06:02:00 UTC", "41,5")),
        ("row dropped", ("row 2", "never"), ("row 5", "soon")),
        ("row dropped", ("row 3", "")),
        ("quality word is in no list", ("b 2026-01-31 06:02:00 UTC", "so so")),
    }


def test_of_a_wide_file_the_column_and_time_of_a_problem_are_named(tmp_path):
    write(tmp_path, time=MINUTES[:3], a=["1", "2", "x"], b=["1,5", "2", "3"])
    problems = source(tmp_path, layout="wide").read(["a", "b"], DAY).problems
    assert {p.where for p in problems} == {
        "export.parquet:a 2026-01-31 06:02:00 UTC",
        "export.parquet:b 2026-01-31 06:00:00 UTC",
    }


def test_a_file_of_null_times_alone_is_counted(tmp_path):
    write(tmp_path, time=pa.nulls(3, pa.timestamp("us", "UTC")), tag=["a"] * 3, value=[1.0] * 3)
    result = source(tmp_path).read(["a"], DAY)
    assert len(result.readings) == 0
    assert counts(result) == {"row dropped": 3}


def test_a_half_written_file_waits_and_is_counted_once(tmp_path):
    path = write_minutes(tmp_path)
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])
    write(tmp_path, "zero.parquet", time=MINUTES[:1], tag=["c"], value=[0.0])
    reader = source(tmp_path)
    result = reader.read(["a", "c"], DAY)
    assert rows(result) == [("c", "06:00", 0.0, "GOOD")]
    assert counts(result) == {"file passed over": 1}
    assert "may still be being written" in result.problems[0].what
    assert reader.read(["a"], DAY).problems == ()
    path.write_bytes(whole)
    os.utime(path, ns=(1, 1))
    assert len(reader.read(["a"], DAY).readings) == 30
    path.write_bytes(b"PAR1")
    with pytest.raises(ConnectorError, match="no whole Parquet file"):
        source(tmp_path, "export.parquet").read(["a"], DAY)


def test_a_replaced_file_is_read_anew_and_one_taken_away_takes_its_readings_along(tmp_path):
    path = write_minutes(tmp_path)
    reader = source(tmp_path)
    assert len(reader.read(["a"], DAY).readings) == 30
    new = write(tmp_path, "new.tmp", time=MINUTES[:1], tag=["a"], value=[7.0])
    new.replace(path)
    assert rows(reader.read(["a"], DAY)) == [("a", "06:00", 7.0, "GOOD")]
    write(tmp_path, "more.parquet", time=MINUTES[1:2], tag=["a"], value=[8.0])
    assert len(reader.read(["a"], DAY).readings) == 2
    path.unlink()
    assert rows(reader.read(["a"], DAY)) == [("a", "06:01", 8.0, "GOOD")]


def test_of_readings_given_twice_the_last_file_counts(tmp_path):
    write(tmp_path, "export 9.parquet", time=MINUTES[:2], tag=["a"] * 2, value=[1.0, 2.0])
    write(tmp_path, "export 10.parquet", time=MINUTES[:1], tag=["a"], value=[99.0])
    result = source(tmp_path).read(["a"], DAY)
    assert [v for _, _, v, _ in rows(result)] == [99.0, 2.0]
    assert counts(result) == {"reading given again for the same tag and time": 1}


@pytest.mark.parametrize(
    ("columns", "message"),
    [
        ({"Time": [1], "tag": ["a"], "value": [1.0]}, r"'time' \(time_column\) is there not; near"),
        ({"time": [1], "tag": ["a"], "value": [1.0]}, "holds numbers .* set time_format"),
        ({"time": [True], "tag": ["a"], "value": [1.0]}, "holds no times but bool"),
        ({"time": ["2026-01-31"], "tag": ["a"], "value": [[1.0]]}, "holds no values but list"),
    ],
)
def test_columns_that_do_not_fit_are_told(tmp_path, columns, message):
    write(tmp_path, **columns)
    with pytest.raises(ConnectorError, match=message):
        source(tmp_path).read(["a"], DAY)


def test_no_file_and_no_rows(tmp_path):
    with pytest.raises(ConnectorError, match="no file matches"):
        source(tmp_path).probe()
    write(tmp_path, time=MINUTES[:0], tag=pa.array([], pa.string()), value=pa.array([], "f8"))
    assert len(source(tmp_path).read(["a"], DAY).readings) == 0
    probe = source(tmp_path).probe()
    assert (probe.tags, probe.first, probe.last) == ((), None, None)


def test_a_probe_of_many_rows_names_the_tags_of_the_newest(tmp_path, monkeypatch):
    write_minutes(tmp_path)
    write(tmp_path, "older.parquet", time=MINUTES[:1], tag=["old"], value=[1.0])
    assert source(tmp_path).probe().tags == ("a", "b", "old")
    (tmp_path / "older.parquet").rename(tmp_path / "a.parquet")
    monkeypatch.setattr("connectors.parquet_source._TAGS_OF", 10)
    probe = source(tmp_path).probe()
    assert probe.tags == ("a", "b")
    assert probe.detail == "2 files, 61 rows, long layout; tags are those of the newest rows"
    assert probe.last == MINUTES[-1]


# Europe/Vienna, 2026-10-25: 02:00 to 03:00 comes twice; 2026-03-29: 02:00 to 03:00 is missing.
AUTUMN = pd.date_range("2026-10-24 22:00", "2026-10-25 04:00", freq="10min", tz="UTC")


def write_autumn(folder, group):
    wall = AUTUMN.tz_convert("Europe/Vienna").tz_localize(None)
    times, tags = np.repeat(wall, 2), ["a", "b"] * len(wall)
    write(folder, group=group, time=times, tag=tags, value=np.arange(2.0 * len(wall)))


@settings(
    max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    group=st.integers(3, 80),
    cuts=st.lists(st.integers(0, 24 * 60), max_size=4),
    tags=st.sampled_from([["a"], ["b"], ["a", "b"]]),
)
def test_the_doubled_hour_is_told_apart_by_the_order_whatever_the_windows(
    tmp_path_factory, group, cuts, tags
):
    folder = tmp_path_factory.mktemp("autumn")
    write_autumn(folder, group)
    start = pd.Timestamp("2026-10-24 18:00", tz="UTC")
    edges = [start + pd.Timedelta(minutes=m) for m in sorted({0, 24 * 60, *cuts})]
    parts = []
    reader = source(folder, time_zone="Europe/Vienna")
    for low, high in itertools.pairwise(edges):
        result = reader.read(tags, Window(low, high))
        assert result.problems == ()
        parts.append(result.readings)
    table = pd.concat(parts).sort_values(["tag", "time"])
    for number, tag in enumerate(["a", "b"]):
        of_tag = table[table["tag"] == tag]
        if tag in tags:
            assert of_tag["time"].tolist() == AUTUMN.tolist()
            assert of_tag["value"].tolist() == [2.0 * n + number for n in range(len(AUTUMN))]
    assert (table["quality"] == Quality.GOOD).all()


def test_times_in_the_missing_hour_are_dropped_and_counted_once(tmp_path):
    times = pd.DatetimeIndex(["2026-03-29 01:30", "2026-03-29 02:30", "2026-03-29 03:30"])
    write(tmp_path, time=times, tag=["a"] * 3, value=[1.0, 2.0, 3.0])
    reader = source(tmp_path, time_zone="Europe/Vienna")
    day = window("2026-03-28", "2026-03-30")
    result = reader.read(["a"], day)
    assert rows(result) == [("a", "00:30", 1.0, "GOOD"), ("a", "01:30", 3.0, "GOOD")]
    assert counts(result) == {"row dropped": 1}
    assert reader.read(["a"], day).problems == ()


def test_large_row_groups_are_turned_piece_by_piece(tmp_path, monkeypatch):
    monkeypatch.setattr(connectors.parquet_file, "_BATCH", 7)
    write_minutes(tmp_path, group=60)
    assert [v for *_, v, _ in rows(source(tmp_path).read(["b"], DAY))] == list(range(1, 60, 2))


@pytest.mark.parametrize("limit", [0, 20_000, 96 << 20])
@pytest.mark.parametrize("layout", ["long", "wide"])
def test_row_groups_kept_in_memory_give_the_readings_of_the_file_as_it_is(tmp_path, layout, limit):
    times = pd.date_range("2026-01-31", periods=1440, freq="1min", tz="UTC")
    path = tmp_path / "x.parquet"

    def write(scale):
        wide = pd.DataFrame({tag: np.arange(1440.0) * scale for tag in "abc"}, index=times)
        wide = wide.rename_axis("time")
        table = wide.reset_index()
        if layout == "long":
            table = table.melt(id_vars="time", var_name="tag").sort_values("time")
        table.to_parquet(path, row_group_size=1000, index=False)

    write(1.0)
    options = ParquetOptions(path="x.parquet", layout=layout)
    source = ParquetSource(options, tmp_path, cache_limit=limit)
    for scale in (1.0, 2.0):
        if scale > 1.0:
            write(scale)
            os.utime(path, ns=(1, 1))
        for tags in (["a", "b"], ["c"], ["a", "b"]):
            for low in range(0, 1440, 180):
                span = Window(times[low], times[low] + pd.Timedelta(hours=3))
                found = source.read(tags, span).readings
                expected = np.tile(np.arange(low, low + 180.0) * scale, len(tags))
                assert list(found["value"]) == list(expected)
                assert list(found["tag"]) == list(np.repeat(tags, 180))
