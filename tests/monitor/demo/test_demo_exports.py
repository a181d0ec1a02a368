"""The exports look like three real historians, dirt included; the same seed, the same bytes."""

from __future__ import annotations

import dataclasses
import datetime as dt
import sqlite3
from contextlib import closing

import numpy as np
import pandas as pd
import pytest

from monitor.demo import DemoError, DemoPlan, live_feed, simulate, write_exports
from monitor.demo.files import read_tags
from monitor.demo.instruments import GAUGES, true_value
from monitor.demo.readings import take_readings


def _files(folder):
    return {
        str(path.relative_to(folder)): path.read_bytes()
        for path in sorted((folder / "exports").rglob("*"))
        if path.is_file()
    }


def _dcs(folder):
    files = sorted((folder / "exports" / "dcs").glob("*.csv"))
    return pd.concat([pd.read_csv(f, dtype=str, keep_default_na=False) for f in files])


def _utilities_lines(folder):
    (file,) = (folder / "exports" / "utilities").glob("*.csv")
    return file.read_text(encoding="utf-8").splitlines()


@pytest.fixture(scope="module")
def exported(eventful_plant, eventful_plan, tmp_path_factory):
    folder = tmp_path_factory.mktemp("exported")
    write_exports(eventful_plant, eventful_plan, folder)
    return folder


@pytest.fixture(scope="module")
def readings(eventful_plant, eventful_plan):
    return take_readings(eventful_plant, eventful_plan)


def test_the_same_seed_gives_the_same_bytes(exported, eventful_plan, tmp_path):
    write_exports(simulate(eventful_plan), eventful_plan, tmp_path)
    assert _files(tmp_path) == _files(exported)


def test_another_seed_gives_other_bytes(tmp_path):
    plans = [DemoPlan(days=0.1, seed=seed) for seed in (1, 2)]
    for plan in plans:
        write_exports(simulate(plan), plan, tmp_path / str(plan.seed))
    first, second = (_files(tmp_path / str(plan.seed)) for plan in plans)
    assert first.keys() == second.keys()
    assert all(first[name] != second[name] for name in first)


def test_a_live_feed_in_odd_portions_writes_the_same_bytes(
    eventful_plant, eventful_plan, exported, tmp_path
):
    begun = eventful_plan.start + dt.timedelta(hours=23, minutes=17)
    write_exports(eventful_plant, eventful_plan, tmp_path, until=begun)
    feed = live_feed(eventful_plant, eventful_plan, tmp_path, begun)
    written, time = 0, begun
    for minutes in (1, 1, 4, 55, 0, 601, 2000):
        time += dt.timedelta(minutes=minutes)
        written += feed(time)
    assert feed.done
    assert written > 0
    assert feed(time) == 0
    now, whole = _files(tmp_path), _files(exported)
    database = "exports/historian.sqlite"
    # A database's pages depend on how often it was written to; its rows do not.
    now.pop(database)
    whole.pop(database)
    assert now == whole
    rows = []
    for folder in (tmp_path, exported):
        with closing(sqlite3.connect(folder / database)) as connection:
            rows.append(connection.execute("select * from reading").fetchall())
    assert rows[0] == rows[1]


def test_a_time_without_a_zone_is_refused(eventful_plant, eventful_plan, tmp_path):
    feed = live_feed(eventful_plant, eventful_plan, tmp_path)
    with pytest.raises(DemoError, match="time zone"):
        feed(dt.datetime(2026, 2, 24, 12))  # noqa: DTZ001 - what is refused


def test_exports_are_never_written_over(eventful_plant, eventful_plan, exported):
    with pytest.raises(DemoError, match="not empty"):
        write_exports(eventful_plant, eventful_plan, exported)


def test_progress_rises_to_one(tmp_path):
    plan = DemoPlan(days=1.5, seed=3)
    shares = []
    write_exports(simulate(plan), plan, tmp_path, progress=shares.append)
    assert shares == sorted(shares)
    assert shares[-1] == 1.0


def test_clean_instruments_show_the_truth_to_their_last_digit(eventful_plant, eventful_plan):
    plan = dataclasses.replace(eventful_plan, noise=False, dirt=False)
    for tag in read_tags():
        column = take_readings(eventful_plant, plan).columns[tag.name]
        error = np.abs(column.value - true_value(eventful_plant, tag))
        assert error.max() <= 0.5001 * 10.0**-tag.decimals, tag.name
        assert column.present.all()
        assert not column.quality.any()


def test_gauge_pressures_follow_the_live_barometer(eventful_plant):
    tag = next(t for t in read_tags() if t.name == "PT-0401")
    absolute = eventful_plant.streams["bm_steam"].pressure
    gauge = true_value(eventful_plant, tag) * 1e5
    np.testing.assert_allclose(absolute - gauge, eventful_plant.signals["barometer"], rtol=1e-9)


def test_instrument_error_is_about_what_the_tag_list_states(eventful_plant, eventful_plan):
    plan = dataclasses.replace(eventful_plan, dirt=False)
    columns = take_readings(eventful_plant, plan).columns
    scaled = []
    for tag in read_tags():
        if tag.name.startswith(("PT", "TT", "JT")):
            error = columns[tag.name].value - true_value(eventful_plant, tag)
            scaled.append(np.sqrt(np.mean(error**2)) / tag.uncertainty)
    assert 0.5 < np.median(scaled) < 1.0
    assert max(scaled) < 2.5


def test_every_tag_of_the_list_has_a_gauge():
    names = [tag.name for tag in read_tags()]
    assert sorted(names) == sorted(GAUGES)
    assert len(names) == len(set(names)) == 64


def test_the_promised_dirt_is_there(tmp_path):
    # Twelve days at five minutes: long enough for transmitters to report themselves bad.
    plan = DemoPlan(days=12, interval_s=300, frozen_day=2.0, outage_day=3.0)
    plant = simulate(plan)
    write_exports(plant, plan, tmp_path)
    readings = take_readings(plant, plan)
    counts = readings.dirt.groupby("what")["count"].sum()
    assert set(counts.index) == {
        "bad", "doubled", "frozen", "missing", "outage", "spike", "uncertain",
    }  # fmt: skip
    assert counts["outage"] == 12 * 3 * 12
    dcs, own = _dcs(tmp_path), readings.of("dcs")
    assert len(dcs) == sum(c.present.sum() + c.doubled.sum() for c in own)
    assert dcs.duplicated(["time", "tag"]).sum() == sum(c.doubled.sum() for c in own)
    once = dcs.drop_duplicates(["time", "tag"], keep="last")["quality"].value_counts()
    for code, word in enumerate(("Good", "Uncertain", "Bad", "Comm Fail")):
        expected = sum(((c.quality == code) & c.present).sum() for c in own)
        assert once[word] == expected > 0, word
    no_number = pd.to_numeric(dcs["value"], errors="coerce").isna()
    assert set(dcs["quality"][no_number]) == {"Comm Fail"}
    assert set(dcs["value"][no_number]) == {"No Data"}


def test_spikes_lie_outside_the_range_and_only_spikes_do(readings):
    for column in readings.columns.values():
        outside = (column.value < column.tag.low) | (column.value > column.tag.high)
        assert outside.sum() <= 6, column.tag.name


def test_a_doubled_row_is_right_the_second_time(exported, readings):
    dcs = _dcs(exported)
    doubled = dcs[dcs.duplicated(["time", "tag"], keep="first")]
    assert len(doubled) > 0
    for row in doubled.itertuples():
        second = int(pd.Timestamp(row.time).timestamp())
        column = readings.columns[row.tag]
        at = np.searchsorted(readings.times, second)
        if column.quality[at] <= 1:
            assert float(row.value) == column.value[at]


def test_a_frozen_gauge_stands_still(readings):
    start = int(0.6 * 1440)
    value = readings.columns["FT-7102"].value[start : start + 290]
    ordinary = value[value <= 80]  # spikes aside
    assert np.unique(ordinary).size == 1


def test_the_logger_writes_no_row_in_its_outage(exported):
    times = [line.split(";")[0] for line in _utilities_lines(exported)[2:]]
    assert "24.02.2026 06:59:00" in times  # 05:59 UTC, the last minute before
    assert not [t for t in times if t.startswith(("24.02.2026 07", "24.02.2026 08"))]
    assert "24.02.2026 10:00:00" in times


def test_utilities_are_written_with_semicolons_decimal_commas_units_and_blanks(exported):
    lines = _utilities_lines(exported)
    assert lines[0].startswith("Time;Outdoor air;Barometer;")
    assert lines[1].split(";")[:3] == ["", "degC", "mbar(a)"]
    width = len(lines[0].split(";"))
    assert all(len(line.split(";")) == width for line in lines)
    assert not [line for line in lines[2:] if "." in line.split(";", 1)[1]]
    assert [line for line in lines[2:] if ";;" in line]


def test_the_historian_keys_its_readings_by_a_tag_list(exported):
    with closing(sqlite3.connect(exported / "exports" / "historian.sqlite")) as connection:
        names = {row[0] for row in connection.execute("select name from tag_list")}
        codes = {row[0] for row in connection.execute("select distinct quality from reading")}
        (blank_but_good,) = connection.execute(
            "select count(*) from reading where reading is null and quality <> 0"
        ).fetchone()
    assert "users/FT-7101" in names
    assert codes == {0, 64, 192}
    assert blank_but_good == 0


def _local_times(tmp_path, start):
    plan = DemoPlan(start=start, days=0.25, dirt=False)
    write_exports(simulate(plan), plan, tmp_path)
    files = sorted((tmp_path / "exports" / "utilities").glob("*.csv"))
    return [
        line.split(";")[0][:16]
        for file in files
        for line in file.read_text(encoding="utf-8").splitlines()[2:]
    ]


def test_the_missing_hour_of_spring_is_missing(tmp_path):
    # Europe/Berlin jumps from 02:00 to 03:00 on 29 March 2026 at 01:00 UTC.
    times = _local_times(tmp_path, dt.datetime(2026, 3, 29, tzinfo=dt.UTC))
    assert len(times) == len(set(times)) == 360
    assert times[59:61] == ["29.03.2026 01:59", "29.03.2026 03:00"]


def test_the_doubled_hour_of_autumn_comes_twice(tmp_path):
    # Europe/Berlin falls back from 03:00 to 02:00 on 25 October 2026 at 01:00 UTC.
    times = _local_times(tmp_path, dt.datetime(2026, 10, 25, tzinfo=dt.UTC))
    twice = pd.Series(times).value_counts()
    assert set(twice[twice == 2].index) == {f"25.10.2026 02:{m:02d}" for m in range(60)}
    assert times[59:61] == ["25.10.2026 02:59", "25.10.2026 02:00"]
