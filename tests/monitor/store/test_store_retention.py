"""What is old goes, and nothing that was made of it does; another site is not touched."""

from __future__ import annotations

from datetime import UTC, datetime

import pandas as pd
import pytest
import store_samples as samples
from store_samples import at, window

from monitor.store.drift_points import DriftPoints
from monitor.store.retention import SLACK_S, Keep, apply_retention, oldest_writable

DAY = 86400
START = at("2025-03-20")
DAYS = 60
KEEP = Keep(cells=20 * DAY, hours=30 * DAY, drift=40 * DAY)
NOW = START + DAYS * DAY
FINE = ("streams", "equipment", "conditions", "ledger")
LASTING = ("shift", "day", "month")


def fill(store, name, days=DAYS):
    site = samples.register(store, name)
    for day in range(0, days, 5):
        run_id = site.begin_run("test", "0", "hash", START + day * DAY, START + (day + 5) * DAY)
        site.write(window(START + day * DAY, START + (day + 5) * DAY), run_id)
        site.finish_run(run_id, "done")
    return site


@pytest.fixture
def both(store):
    return fill(store, "mill", 60), fill(store, "other", 30)


def age_runs(store):
    """Runs of long ago: each began when its window ended."""
    with store.engine.begin() as connection:
        connection.exec_driver_sql("update runs set started = window_end")


def lasting(dump):
    return {name: rows for name, rows in dump.items() if name.endswith(LASTING)}


def test_old_figures_go_and_shifts_days_and_months_stay(both):
    site, other = both
    before, others = samples.dump(site), samples.dump(other)
    dropped = apply_retention(site, KEEP, NOW)
    after = samples.dump(site)
    samples.assert_same(lasting(before), lasting(after))
    samples.assert_same(others, samples.dump(other))
    cells, hours = (
        pd.Timestamp(NOW - k - SLACK_S, unit="s", tz="UTC") for k in (20 * DAY, 30 * DAY)
    )
    for table, column, since in (
        *((name, "time", cells) for name in FINE),
        *((f"{kind} hour", "start", hours) for kind in ("stream", "equipment", "site")),
        ("tag_quality", "hour", hours),
    ):
        was = before[table].reset_index()
        expected = was[was[column] >= since].reset_index(drop=True)
        left = after[table].reset_index()
        samples.assert_same(
            {table: expected.drop(columns="index", errors="ignore")},
            {table: left.drop(columns="index", errors="ignore")},
        )
        assert 0 < len(expected) < len(was)
    assert dropped["ledger_figures"] == len(before["ledger"]) - len(after["ledger"])


def test_done_again_it_drops_nothing(both):
    site, _ = both
    assert apply_retention(site, KEEP, NOW)
    after = samples.dump(site)
    assert apply_retention(site, KEEP, NOW) == {}
    samples.assert_same(after, samples.dump(site))


def test_without_a_limit_nothing_expires(both):
    site, _ = both
    before = samples.dump(site)
    assert apply_retention(site, Keep(), NOW + 10000 * DAY) == {}
    samples.assert_same(before, samples.dump(site))


def test_runs_stay_while_anything_they_made_is_there(store, both):
    site, other = both
    age_runs(store)
    apply_retention(site, KEEP, NOW)
    left = {run.run_id for run in site.runs(100)}
    with store.engine.connect() as connection:
        for table in ("stream_figures", "equipment_figures", "condition_figures", "tag_quality"):
            used = connection.exec_driver_sql(
                f"select distinct run_id from {table} where run_id in "
                f"(select run_id from runs where site_id = {site.site_id}) "
                "or run_id not in (select run_id from runs)"
            )
            assert {row[0] for row in used} <= left
    assert 0 < len(left) < DAYS / 5
    assert len(other.runs(100)) == 6


def test_a_window_at_the_edge_of_what_is_kept_changes_no_rollup(both):
    site, _ = both
    everything = samples.dump(site)
    equal = Keep(cells=20 * DAY, hours=20 * DAY)
    apply_retention(site, equal, NOW)
    edge = oldest_writable(equal, NOW)
    for first in (edge, edge + DAY):
        run_id = site.begin_run("backfill", "0", "other hash")
        assert site.write(window(first, first + DAY), run_id).changed == 0
    samples.assert_same(lasting(everything), lasting(samples.dump(site)))


def test_other_shifts_after_an_expiry_keep_the_days_of_what_has_expired(store, both):
    site, _ = both
    everything = samples.dump(site)
    apply_retention(site, KEEP, NOW)
    changed = samples.register(store, "mill", samples.calendar(starts=("05:00", "13:00", "21:00")))
    found = samples.dump(changed)
    for name in ("stream day", "equipment day", "site day", "equipment month", "site month"):
        samples.assert_same({name: everything[name]}, {name: found[name]})


def test_points_of_the_charts_go_by_their_own_limit(store, both):
    site, _ = both
    assert isinstance(site, DriftPoints)
    with store.engine.begin() as connection:
        subject, figure = connection.exec_driver_sql(
            "select subject_id, figure_id from figures order by 1, 2"
        ).first()
        for day in range(DAYS):
            connection.exec_driver_sql(
                f"insert into drift_points values ({subject}, {figure}, {START + day * DAY}, "
                "1, 1, 0, 0, 3, 4, 1, null)"
            )
    # Of 60 days the newest 40, and the slack before them.
    assert apply_retention(site, Keep(drift=40 * DAY), NOW) == {"drift_points": 20 - SLACK_S // DAY}


def test_what_may_be_computed_begins_on_a_midnight_after_what_is_dropped():
    now = datetime(2026, 5, 4, 13, 7, tzinfo=UTC).timestamp()
    assert oldest_writable(Keep(), now) is None
    assert oldest_writable(Keep(drift=DAY), now) is None
    assert oldest_writable(Keep(cells=40 * DAY, hours=90 * DAY), now) == at("2026-03-25")
