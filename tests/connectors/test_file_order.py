"""A reading that stands after a later one of its tag is marked, whatever window asks for it."""

from __future__ import annotations

import itertools
import random

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import connectors.csv_index
import connectors.parquet_file
from connectors import open_source
from connectors.base import Mark, Window
from connectors.csv_options import CsvOptions
from connectors.csv_source import CsvSource
from connectors.parquet_options import ParquetOptions
from connectors.parquet_source import ParquetSource

START = pd.Timestamp("2026-01-31", tz="UTC")
TAGS = ["a", "b", "c"]
QUIET = settings(
    max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)


def window(low, high):
    return Window(START + pd.Timedelta(minutes=low), START + pd.Timedelta(minutes=high))


def text_of(rows):
    lines = [f"{START + pd.Timedelta(minutes=m):%Y-%m-%d %H:%M:%S},{tag},{m}\n" for m, tag in rows]
    return "time,tag,value\n" + "".join(lines)


def late_ones(readings):
    if "marks" not in readings:
        return set()
    late = readings[(readings["marks"].to_numpy() & Mark.OUT_OF_ORDER) > 0]
    return {(int(v), str(tag)) for tag, v in zip(late["tag"], late["value"], strict=True)}


def by_hand(rows):
    """The same in plain words: is there an earlier row of the tag with a later time?"""
    return {
        (minute, tag)
        for at, (minute, tag) in enumerate(rows)
        if any(other == tag and m > minute for m, other in rows[:at])
    }


@QUIET
@given(
    seed=st.integers(0, 999),
    swaps=st.integers(0, 30),
    block=st.sampled_from([80, 700, 4 << 20]),
    edges=st.lists(st.integers(1, 59), max_size=4),
    grows=st.lists(st.integers(0, 4000), max_size=3),
    memory=st.sampled_from([0, 1 << 20]),
)
def test_what_is_out_of_order_is_a_property_of_the_file(
    tmp_path_factory, monkeypatch, seed, swaps, block, edges, grows, memory
):
    monkeypatch.setattr(connectors.csv_index, "BLOCK", block)
    folder = tmp_path_factory.mktemp("order")
    dice = random.Random(seed)  # noqa: S311 - no secret, a test's own dice
    rows = [(minute, tag) for minute in range(60) for tag in TAGS]
    if dice.random() < 0.3:
        rows.sort(key=lambda row: row[1])  # one tag after the other: in order
    for _ in range(swaps):
        one, other = dice.randrange(len(rows)), dice.randrange(len(rows))
        rows[one], rows[other] = rows[other], rows[one]
    whole = text_of(rows)
    source = CsvSource(CsvOptions(path="x.csv"), folder, cache_limit=memory)
    header = len("time,tag,value\n")
    for size in sorted({header, *(min(header + g, len(whole)) for g in grows), len(whole)}):
        (folder / "x.csv").write_text(whole[:size])
        source.read(dice.sample(TAGS, 2), window(0, 60))
    found = set()
    for ends in itertools.pairwise(sorted({0, 60, *edges})):
        found |= late_ones(source.read(TAGS, window(*ends)).readings)
    assert found == by_hand(rows)


@QUIET
@given(
    seed=st.integers(0, 999),
    swaps=st.sampled_from([0, 0, 1, 5, 30]),
    by_tag=st.booleans(),
    group=st.sampled_from([7, 20, 45, 1000]),
    batch=st.sampled_from([11, 1 << 18]),
    edges=st.lists(st.integers(1, 59), max_size=4),
    memory=st.sampled_from([0, 1 << 20]),
    stated=st.booleans(),
)
def test_what_is_out_of_order_in_a_parquet_file_is_a_property_of_the_file(
    tmp_path_factory, monkeypatch, seed, swaps, by_tag, group, batch, edges, memory, stated
):
    monkeypatch.setattr(connectors.parquet_file, "_BATCH", batch)
    folder = tmp_path_factory.mktemp("order")
    dice = random.Random(seed)  # noqa: S311 - no secret, a test's own dice
    rows = [(minute, tag) for minute in range(60) for tag in TAGS]
    if by_tag:
        rows.sort(key=lambda row: row[1])
    for _ in range(swaps):
        one, other = dice.randrange(len(rows)), dice.randrange(len(rows))
        rows[one], rows[other] = rows[other], rows[one]
    write_parquet(folder, rows, group, write_statistics=stated)
    source = ParquetSource(ParquetOptions(path="x.parquet"), folder, cache_limit=memory)
    spans = list(itertools.pairwise(sorted({0, 60, *edges})))
    dice.shuffle(spans)
    found = set()
    for ends in spans:
        found |= late_ones(source.read(TAGS, window(*ends)).readings)
    assert found == by_hand(rows)
    assert found == late_ones(source.read(TAGS, window(0, 60)).readings)


def write_parquet(folder, rows, group, **options):
    table = {
        "time": [START + pd.Timedelta(minutes=minute) for minute, _ in rows],
        "tag": [tag for _, tag in rows],
        "value": [float(minute) for minute, _ in rows],
    }
    pq.write_table(pa.table(table), folder / "x.parquet", row_group_size=group, **options)


@pytest.mark.parametrize("group", [10, 200])
def test_a_parquet_file_that_lists_the_newest_first_is_in_order(tmp_path, group):
    rows = [(minute, tag) for minute in reversed(range(40)) for tag in TAGS]
    rows[60], rows[66] = rows[66], rows[60]  # (19, a) and (17, a)
    write_parquet(tmp_path, rows, group)
    source = open_source("parquet", {"path": "x.parquet"}, tmp_path)
    late = late_ones(source.read(TAGS, window(0, 60)).readings)
    assert late == {(18, "a"), (19, "a")}
    assert late_ones(source.read(TAGS, window(19, 20)).readings) == {(19, "a")}


def test_rows_of_a_wide_parquet_file_are_in_order_or_not_as_a_whole(tmp_path):
    minutes = (0, 1, 5, 3, 4, 6)
    cells = {tag: [float(m) for m in minutes] for tag in ("a", "b")}
    table = pa.table({"time": [START + pd.Timedelta(minutes=m) for m in minutes], **cells})
    pq.write_table(table, tmp_path / "x.parquet", row_group_size=3)
    source = open_source("parquet", {"path": "x.parquet", "layout": "wide"}, tmp_path)
    late = {(3, "a"), (3, "b"), (4, "a"), (4, "b")}
    assert late_ones(source.read(["a", "b"], window(3, 5)).readings) == late
    assert late_ones(source.read(["a", "b"], window(0, 60)).readings) == late


def test_rows_of_a_wide_export_are_in_order_or_not_as_a_whole(tmp_path):
    lines = ["time,a,b", *(f"2026-01-31 00:{m:02d},{m},{m}" for m in (0, 1, 5, 3, 4, 6))]
    (tmp_path / "x.csv").write_text("\n".join(lines) + "\n")
    source = open_source("csv", {"path": "x.csv", "layout": "wide"}, tmp_path)
    late = {(3, "a"), (3, "b"), (4, "a"), (4, "b")}
    assert late_ones(source.read(["a", "b"], window(0, 60)).readings) == late
    assert late_ones(source.read(["a", "b"], window(2, 5)).readings) == late


@pytest.mark.parametrize("minutes", [15, 60])
def test_the_hour_that_comes_twice_is_not_out_of_order(tmp_path, minutes):
    utc = pd.date_range("2026-10-24T22:00Z", "2026-10-25T04:00Z", freq=f"{minutes}min")
    local = utc.tz_convert("Europe/Berlin")
    lines = [f"{t:%Y-%m-%d %H:%M},a,{n}\n" for n, t in enumerate(local)]
    (tmp_path / "x.csv").write_text("time,tag,value\n" + "".join(lines))
    options = {"path": "x.csv", "time_zone": "Europe/Berlin"}
    source = open_source("csv", options, tmp_path)
    readings = source.read(["a"], Window(utc[0], utc[-1] + pd.Timedelta(minutes=1))).readings
    assert list(readings["time"]) == list(utc)
    assert late_ones(readings) == set()
    assert np.array_equal(readings["value"], np.arange(len(utc)))


def test_an_export_that_lists_the_newest_first_is_in_order(tmp_path):
    rows = [(minute, tag) for minute in reversed(range(40)) for tag in TAGS]
    rows[60], rows[90] = rows[90], rows[60]  # (19, a) and (9, a)
    (tmp_path / "x.csv").write_text(text_of(rows))
    source = open_source("csv", {"path": "x.csv"}, tmp_path)
    late = late_ones(source.read(TAGS, window(0, 60)).readings)
    assert late == {(minute, "a") for minute in range(10, 20)}
    assert late_ones(source.read(TAGS, window(12, 14)).readings) == {(12, "a"), (13, "a")}
