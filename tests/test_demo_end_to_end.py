"""The main job on the demo site as README promises it: sixty days, both events, no false alarm."""

from __future__ import annotations

import json
import os
import resource
import sqlite3
import subprocess
import sys

import pandas as pd
import pytest

from monitor.demo import read_truth
from monitor.demo.plan import DemoPlan
from monitor.demo.simulate import simulate
from monitor.demo.truth import write_truth

pytestmark = pytest.mark.slow

GIB = 2**30


@pytest.fixture(scope="module")
def demo(tmp_path_factory):
    """Run the command as a user does, in a process of its own, and keep what it printed."""
    folder = tmp_path_factory.mktemp("run") / "demo"
    before = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss
    done = subprocess.run(
        [sys.executable, "-m", "monitor.cli", "demo", "--folder", str(folder), "--json"],
        capture_output=True,
        text=True,
        check=False,
        env={**os.environ, "LOSTWORK_TEST": "1"},
    )
    assert done.returncode == 0, done.stderr
    memory = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss * 1024
    return folder, json.loads(done.stdout), max(memory, before)


@pytest.fixture(scope="module")
def events(tmp_path_factory):
    folder = tmp_path_factory.mktemp("truth")
    write_truth(simulate(DemoPlan()), folder)
    return read_truth(folder).events


@pytest.fixture
def store(demo):
    connection = sqlite3.connect(demo[0] / "lostwork.sqlite")
    yield connection
    connection.close()


def test_the_two_machine_events_are_alarmed_and_nothing_else(store, events):
    alarms = pd.read_sql("select subject, figure, raised from alarms order by raised", store)
    assert list(zip(alarms["subject"], alarms["figure"], strict=True)) == [
        ("TG1", "eta_s_1"),
        ("LD62", "passing_flow"),
    ]
    raised = pd.to_datetime(alarms["raised"], unit="s", utc=True)
    machine = events[events["is_fault"]].sort_values("start")
    assert machine["equipment"].tolist() == ["TG1", "LD62"]
    late = raised.to_numpy() - machine["start"].to_numpy()
    # Not before the fault begins, and within two days of it.
    assert (late > pd.Timedelta(0)).all()
    assert (late < pd.Timedelta(days=2)).all()


def test_the_heat_wave_moves_the_ledger_at_the_live_dead_state_and_alarms_nothing(store, events):
    wave = events[events["what"] == "heat wave"].iloc[0]
    span = (int(wave["start"].timestamp()), int(wave["end"].timestamp()))
    raised = pd.read_sql(
        "select count(*) as n from alarms where raised between ? and ?", store, params=span
    )
    assert raised["n"].item() == 0
    means = pd.read_sql(
        "select avg(t0_degc) as t0, avg(destroyed_live_kw) as live, "
        "avg(destroyed_reference_kw) as reference from ledger_figures where time between ? and ?",
        store,
        params=span,
    ).iloc[0]
    assert means["t0"] > 20
    # Destruction is T0 S_gen: above the reference of 15 degC by the ratio of temperatures.
    expected = (means["t0"] + 273.15) / 288.15
    assert means["live"] / means["reference"] == pytest.approx(expected, rel=0.005)


def test_the_stored_ledger_closes_in_every_cell(store):
    for state in ("live", "reference"):
        left = pd.read_sql(
            f"select max(abs(supplied_{state}_kw - used_{state}_kw - lost_{state}_kw "
            f"- destroyed_{state}_kw - stored_rate_{state}_kw - imbalance_{state}_kw) "
            f"/ supplied_{state}_kw) as worst from ledger_figures",
            store,
        )
        assert left["worst"].item() < 1e-9


def test_the_summary_tells_readings_ledger_and_alarms(demo):
    _, summary, _ = demo
    assert summary["readings"] > 5_000_000
    assert summary["bad"] > 1_000
    assert summary["missing"] > 0
    assert len(summary["alarms"]) == 2
    assert summary["closure_share"] > 0.99
    ledger = summary["ledger_kw"]
    parts = ("used", "lost", "destroyed", "stored_rate", "imbalance")
    assert sum(ledger[k] for k in parts) == pytest.approx(ledger["supplied"], rel=1e-9)


def test_the_pages_stand_where_the_summary_says(demo):
    folder, summary, _ = demo
    assert summary["index"] == str(folder / "pages" / "index.html")
    names = {p.name for p in (folder / "pages").iterdir()}
    assert {"index.html", "equipment-TG1.html", "dead-state.html", "shift-latest.html"} <= names


def test_memory_stays_under_one_gibibyte(demo):
    """The largest process of the run: simulation, backfill and pages together."""
    assert demo[2] < GIB
