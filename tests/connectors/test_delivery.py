"""However an export is delivered, the readings are those of one clean pass."""

from __future__ import annotations

import gzip
import itertools
import os
import random
import zipfile

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import connectors.csv_index
from connectors import open_source
from connectors.base import Window

START = pd.Timestamp("2026-01-31", tz="UTC")
TAGS = ("a", "b", "c")
HEADER = "time,tag,value,quality\n"
QUALITIES = ("Good", "Uncertain", "Bad")
QUIET = settings(
    max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)

# A reading's value follows from its tag and time: a duplicate says the same, as a historian's does.
READINGS = [
    (minute, tag, f"{minute * 3.25 + place:.3f}" if (minute + place) % 7 else "Comm Fail",
     QUALITIES[(minute // 5) % 3])
    for minute in range(60)
    for place, tag in enumerate(TAGS)
]  # fmt: skip


def line(reading):
    minute, tag, value, quality = reading
    return f"{START + pd.Timedelta(minutes=minute):%Y-%m-%d %H:%M:%S},{tag},{value},{quality}\n"


def window(low, high):
    return Window(START + pd.Timedelta(minutes=low), START + pd.Timedelta(minutes=high))


def unmarked(readings):
    """Readings without the remark that some stood out of order: that belongs to the files."""
    return readings.drop(columns="marks", errors="ignore")


def read(folder, kind="csv", path="*.csv", edges=(0, 60)):
    source = open_source(kind, {"path": path, "quality_column": "quality"}, folder)
    parts = [
        unmarked(source.read(TAGS, window(*ends)).readings) for ends in itertools.pairwise(edges)
    ]
    source.close()
    return pd.concat(parts).sort_values(["tag", "time"]).reset_index(drop=True)


@pytest.fixture(scope="module")
def clean(tmp_path_factory):
    folder = tmp_path_factory.mktemp("clean")
    (folder / "all.csv").write_text(HEADER + "".join(map(line, READINGS)))
    table = read(folder)
    assert len(table) == len(READINGS)
    return table


@st.composite
def deliveries(draw):
    """Pieces of the readings, in any order, some rows more than once, at least once each."""
    order = draw(st.randoms(use_true_random=False))
    rows = READINGS + draw(st.lists(st.sampled_from(READINGS), max_size=60))
    if draw(st.booleans()):
        order.shuffle(rows)
    cuts = draw(st.lists(st.integers(0, len(rows)), max_size=5))
    bounds = sorted({0, len(rows), *cuts})
    return [rows[low:high] for low, high in itertools.pairwise(bounds)]


def write(folder, number, rows, form):
    text = (HEADER + "".join(map(line, rows))).encode()
    name = f"piece {number}.csv"
    if form == "plain":
        (folder / name).write_bytes(text)
    elif form == "gzip":
        (folder / f"{name}.gz").write_bytes(gzip.compress(text))
    else:
        with zipfile.ZipFile(folder / f"{name}.zip", "w") as archive:
            archive.writestr(name, text)


@QUIET
@given(
    pieces=deliveries(),
    forms=st.lists(st.sampled_from(["plain", "gzip", "zip"]), min_size=6, max_size=6),
    edges=st.lists(st.integers(1, 59), max_size=4),
    block=st.sampled_from([60, 700, 4 << 20]),
)
def test_any_pieces_orders_and_duplicates_are_read_as_one_clean_pass(
    tmp_path_factory, clean, monkeypatch, pieces, forms, edges, block
):
    folder = tmp_path_factory.mktemp("pieces")
    monkeypatch.setattr(connectors.csv_index, "BLOCK", block)
    for number, (rows, form) in enumerate(zip(pieces, forms, strict=False)):
        write(folder, number, rows, form)
    table = read(folder, path="piece*", edges=sorted({0, 60, *edges}))
    pd.testing.assert_frame_equal(table, clean)


@QUIET
@given(pieces=deliveries(), group=st.integers(1, 70), edges=st.lists(st.integers(1, 59)))
def test_the_same_holds_for_parquet(tmp_path_factory, clean, pieces, group, edges):
    folder = tmp_path_factory.mktemp("pieces")
    for number, rows in enumerate(pieces):
        columns = {
            "time": [START + pd.Timedelta(minutes=minute) for minute, *_ in rows],
            "tag": [tag for _, tag, *_ in rows],
            "value": [None if value == "Comm Fail" else float(value) for *_, value, _ in rows],
            "quality": [quality for *_, quality in rows],
        }
        pq.write_table(pa.table(columns), folder / f"{number}.parquet", row_group_size=group)
    table = read(folder, "parquet", "*.parquet", sorted({0, 60, *edges}))
    pd.testing.assert_frame_equal(table, clean)


@QUIET
@given(
    pieces=deliveries(),
    chunks=st.lists(st.integers(1, 400), min_size=1, max_size=8),
    seed=st.integers(0, 99),
)
def test_a_living_folder_ends_with_the_readings_of_one_clean_pass(
    tmp_path_factory, clean, pieces, chunks, seed
):
    """Files that appear late and in any order, grow by odd bytes, and are replaced by rename."""
    folder = tmp_path_factory.mktemp("living")
    chance = random.Random(seed)  # noqa: S311 - no secret, a test's own dice
    numbers = list(range(len(pieces)))
    chance.shuffle(numbers)
    source = open_source("csv", {"path": "*.csv", "quality_column": "quality"}, folder)
    (folder / "none.csv").write_text(HEADER)
    for number in numbers:
        data = (HEADER + "".join(map(line, pieces[number]))).encode()
        path = folder / f"piece {number}.csv"
        at, sizes = 0, itertools.cycle(chunks)
        while at < len(data) and chance.random() < 0.9:
            size = next(sizes)
            with path.open("ab") as file:
                file.write(data[at : at + size])
            at += size
            seen = source.read(TAGS, window(0, 60)).readings
            # What has come so far is never more, nor other, than what will be there in the end.
            both = seen.merge(clean, on=["tag", "time"], suffixes=("", "_clean"))
            assert len(both) == len(seen)
            pd.testing.assert_series_equal(both["value"], both["value_clean"], check_names=False)
        (folder / "new.tmp").write_bytes(data)
        (folder / "new.tmp").replace(path)
    table = unmarked(source.read(TAGS, window(0, 60)).readings)
    source.close()
    pd.testing.assert_frame_equal(table, clean)


def test_a_file_that_arrives_late_brings_its_older_rows(tmp_path, clean):
    late, rest = READINGS[:90], READINGS[90:]
    write(tmp_path, 2, rest, "plain")
    source = open_source("csv", {"path": "*.csv", "quality_column": "quality"}, tmp_path)
    assert len(source.read(TAGS, window(0, 60)).readings) == len(rest)
    write(tmp_path, 1, late, "plain")
    pd.testing.assert_frame_equal(source.read(TAGS, window(0, 60)).readings, clean)
    assert source.read(TAGS, window(0, 60)).problems == ()


def test_rows_that_come_again_in_another_file_are_counted(tmp_path, clean):
    write(tmp_path, 1, READINGS, "plain")
    write(tmp_path, 2, READINGS[30:50], "plain")
    source = open_source("csv", {"path": "*.csv", "quality_column": "quality"}, tmp_path)
    result = source.read(TAGS, window(0, 60))
    pd.testing.assert_frame_equal(result.readings, clean)
    (problem,) = result.problems
    assert problem.what.startswith("reading given again for the same tag and time")
    assert problem.count == 20


def test_an_archive_still_being_written_waits(tmp_path, clean):
    write(tmp_path, 1, READINGS[:90], "plain")
    write(tmp_path, 2, READINGS[90:], "zip")
    path = tmp_path / "piece 2.csv.zip"
    whole = path.read_bytes()
    path.write_bytes(whole[:-40])
    source = open_source("csv", {"path": "piece*", "quality_column": "quality"}, tmp_path)
    result = source.read(TAGS, window(0, 60))
    assert len(result.readings) == 90
    assert "not a whole zip archive" in result.problems[0].what
    assert source.read(TAGS, window(0, 60)).problems == ()
    path.write_bytes(whole)
    os.utime(path, ns=(1, 1))
    pd.testing.assert_frame_equal(source.read(TAGS, window(0, 60)).readings, clean)


def test_a_damaged_member_gives_what_stands_before_and_says_so(tmp_path):
    lines = "".join(f"2026-01-31 00:00:{n % 60:02d}.{n:06d},a,{n},Good\n" for n in range(50_000))
    with zipfile.ZipFile(tmp_path / "x.zip", "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("x.csv", HEADER + lines)
    data = bytearray((tmp_path / "x.zip").read_bytes())
    middle = len(data) // 2
    data[middle : middle + 64] = bytes(64)
    (tmp_path / "x.zip").write_bytes(data)
    result = open_source("csv", {"path": "x.zip"}, tmp_path).read(TAGS, window(0, 60))
    assert 0 < len(result.readings) < 50_000
    assert any("packed file ends early or is damaged" in p.what for p in result.problems)
