"""Every figure can say which run, program and site file made it."""

from __future__ import annotations

import csv
import io

import pytest

from monitor.site.load import load_site
from monitor.version import version

STRETCH = ("--from", "2026-01-10T00:00Z", "--to", "2026-01-10T12:00Z")
AT = ("--at", "2026-01-10T06:00Z")


@pytest.fixture
def computed(make_plant, lostwork, tmp_path, store_url):
    plant = make_plant(tmp_path / "site", days=1.0, every="10min", interval=60, store=store_url)
    assert lostwork("backfill", plant.path, *STRETCH).code == 0
    return plant


def exported(lostwork, plant, what):
    ran = lostwork("export", plant.path, *STRETCH, "--what", what)
    assert ran.code == 0, ran.err
    return list(csv.DictReader(io.StringIO(ran.out)))


def runs_of(rows):
    return {row["run_id"] for row in rows}


@pytest.mark.parametrize(
    ("subject", "figure"),
    [("TG1", "eta_s_1"), ("TG1", "destroyed_live_kw"), ("exhaust", "exergy_live_kw"),
     ("ledger", "destroyed_live_kw")],
)  # fmt: skip
def test_explain_names_the_run_the_program_and_the_site_file(computed, lostwork, subject, figure):
    ran = lostwork("explain", computed.path, subject, figure, *AT)
    site = load_site(computed.path)
    assert f"run 1 (backfill), lostwork {version()}, site file {site.hash[:12]}\n" in ran.out
    told = lostwork("explain", computed.path, subject, figure, *AT, "--json").json()
    assert told["made_by"]["site_hash"] == site.hash
    assert told["made_by"]["version"] == version()
    assert told["same_site_file"] is True


def test_a_backfill_over_a_changed_site_file_computes_again_and_says_so(computed, lostwork):
    before = {what: exported(lostwork, computed, what) for what in ("equipment", "streams")}
    assert {*map(tuple, map(runs_of, before.values()))} == {("1",)}
    old = load_site(computed.path).hash
    computed.edit(
        'pressure = "PT-0001"\n', 'pressure = "PT-0001"\nreference_temperature = "25 degC"\n'
    )
    told = lostwork("explain", computed.path, "TG1", "destroyed_reference_kw", *AT)
    assert "the site file has changed since" in told.out
    assert lostwork("backfill", computed.path, *STRETCH).code == 0
    new = load_site(computed.path).hash
    assert new != old
    # What stands at the reference dead state has changed, and is of the second run.
    after = exported(lostwork, computed, "equipment")
    assert runs_of(after) == {"2"}
    changed = [
        new_row["destroyed_reference_kw"] != old_row["destroyed_reference_kw"]
        for new_row, old_row in zip(after, before["equipment"], strict=True)
        if new_row["subject"] == "TG1"
    ]
    assert all(changed)
    assert changed
    runs = {row["run_id"]: row for row in exported(lostwork, computed, "runs")}
    assert [runs[n]["site_hash"] for n in ("1", "2")] == [old, new]
    assert {row["version"] for row in runs.values()} == {version()}
    told = lostwork("explain", computed.path, "TG1", "destroyed_reference_kw", *AT, "--json").json()
    assert told["made_by"]["run_id"] == 2
    assert told["agrees"] is True


@pytest.mark.parametrize("what", ["streams", "equipment", "conditions", "ledger"])
def test_each_exported_figure_has_a_run_that_the_runs_list(computed, lostwork, what):
    rows = exported(lostwork, computed, what)
    assert rows
    known = {row["run_id"] for row in exported(lostwork, computed, "runs")}
    assert runs_of(rows) <= known
