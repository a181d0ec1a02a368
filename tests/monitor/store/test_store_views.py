"""The views for a person with a SQL client: names instead of numbers, times as text."""

from __future__ import annotations

import pytest
import sqlalchemy as sa
from store_samples import at, window

from monitor.store.alarms import AlarmRecord
from monitor.store.jobs import DaemonState, JobHealth

START = at("2025-03-30T01:00:00")


@pytest.fixture
def rows(site, run_id):
    site.write(window(START, START + 7200), run_id)
    site.put_alarm(AlarmRecord("tg1", "eta_s_1", "drift", "normal", "low", START, "text"))

    def query(text):
        with site.engine.connect() as connection:
            return [tuple(row) for row in connection.execute(sa.text(text))]

    return query


def test_figures_carry_names_and_utc_times(rows, site):
    value = site.streams("hp_steam", START, START + 900)["enthalpy_kj_kg"].iloc[0]
    assert value > 0
    assert rows(
        "select site, subject, name, medium, time_utc, enthalpy_kj_kg from v_streams "
        "order by time_utc, subject limit 1"
    ) == [("mill", "hp_steam", "stream hp_steam", "water", "2025-03-30T01:00:00Z", value)]
    assert rows("select kind, count(*) from v_equipment group by kind") == [("turbine", 16)]
    assert rows(
        "select distinct subject, figure, label, unit from v_conditions order by subject, figure"
    )[0] == ("hp_header", "heat_loss_kw_k", "label heat_loss_kw_k", "1")
    assert rows("select site, max(time_utc) from v_ledger group by site") == [
        ("mill", "2025-03-30T02:45:00Z")
    ]


def test_rollups_and_alarms_read_in_words(rows):
    assert rows(
        "select distinct resolution, start_utc from v_rollups where resolution = 'day'"
    ) == [("day", "2025-03-29T23:00:00Z")]
    assert rows("select subject, raised_utc, cleared_utc from v_alarms") == [
        ("tg1", "2025-03-30T01:00:00Z", None)
    ]
    assert rows("select control_limit from v_drift") == []


def test_tag_quality_is_summed_by_day(rows, site):
    total = site.tag_quality_totals(START, START + 7200).set_index("tag").loc["62-FT-001", "good"]
    assert rows(
        "select site, tag, day_utc, good from v_tag_quality_by_day where tag = '62-FT-001'"
    ) == [("mill", "62-FT-001", "2025-03-30", total)]


def test_jobs_read_in_words(rows, site):
    job = JobHealth(START, START + 900, START - 60, "the historian is away", 3)
    site.keep_daemon(DaemonState(17, "north", "1.0", START, START, jobs={"cycle": job}))
    columns = "site, job, last_utc, failing_since_utc, cause, host, seen_utc"
    assert rows(f"select {columns} from v_jobs") == [
        ("mill", "cycle", "2025-03-30T01:00:00Z", "2025-03-30T00:59:00Z", "the historian is away",
         "north", "2025-03-30T01:00:00Z")
    ]  # fmt: skip
