"""Other processes compute and this one writes: the store is the same, to the last bit."""

from __future__ import annotations

import logging
import multiprocessing
import os
import signal
import sqlite3
import subprocess
import sys
from dataclasses import replace

import pandas as pd
import pytest
from distributed import Client, LocalCluster

from connectors.base import ConnectorError
from monitor import ahead
from monitor.ahead import Job, WorkersError, compute_job, made_with
from monitor.backfill import backfill
from monitor.commands.exits import ExitCode, ended_by
from monitor.commands.opening import open_site, opened
from monitor.log import configure

DAY = 86400
DAYS = 6
TABLES = {
    "stream_figures": "subject_id, time",
    "equipment_figures": "subject_id, time",
    "condition_figures": "subject_id, time, figure_id",
    "ledger_figures": "site_id, time",
    "tag_quality": "tag_id, hour",
    "rollups": "resolution, subject_id, start, figure_id",
}


@pytest.fixture(autouse=True)
def _open_log():
    """A test of commands before these may have left the log on an output that is closed."""
    configure()


@pytest.fixture(scope="module")
def cluster():
    """Two worker processes of two threads each, as on two machines that share a folder."""
    # Its threads log until after pytest has closed the outputs.
    logging.getLogger("distributed").propagate = False
    with LocalCluster(
        n_workers=2,
        threads_per_worker=2,
        processes=True,
        dashboard_address="127.0.0.1:0",
        host="127.0.0.1",
    ) as made:
        yield made


@pytest.fixture
def plant(make_plant, tmp_path):
    return make_plant(tmp_path / "site", days=DAYS)


@pytest.fixture(scope="module")
def alone(make_plant, tmp_path_factory):
    """What one process stores of the same plant."""
    return computed(make_plant(tmp_path_factory.mktemp("alone"), days=DAYS))


def computed(plant, progress=None, **how):
    """Compute all of a plant, and give every row stored."""
    start = int(plant.start.timestamp())
    with opened(plant.path) as at:
        tally = backfill(at.site, at.store, start, start + DAYS * DAY, progress=progress, **how)
    assert tally.windows == (DAYS if how else 1)
    return stored(plant)


def stored(plant):
    with sqlite3.connect(plant.folder / "figures.sqlite") as database:
        return {
            table: pd.read_sql(f"select * from {table} order by {keys}", database)
            for table, keys in TABLES.items()
        }


def assert_equal(one, other):
    for table, rows in one.items():
        assert len(rows)
        pd.testing.assert_frame_equal(rows, other[table], check_exact=True, obj=table)


def test_several_processes_give_the_rows_of_one(plant, alone):
    assert_equal(computed(plant, workers=3), alone)


def test_a_cluster_gives_the_rows_of_one_process(plant, alone, cluster):
    assert_equal(computed(plant, cluster=cluster.scheduler_address), alone)


def test_windows_are_written_in_order_of_time(plant, cluster):
    ends = []
    computed(plant, lambda _n, _of, c: ends.append(c.batch.end), cluster=cluster.scheduler_address)
    assert ends == sorted(ends)


def test_the_windows_of_a_killed_process_are_computed_again(plant, alone):
    killed = []

    def kill(done, _of, _computed):
        if done == 2:
            own = [c for c in multiprocessing.active_children() if "Dask" not in c.name]
            for child in own:
                os.kill(child.pid, signal.SIGKILL)
                killed.append(child.pid)

    assert_equal(computed(plant, kill, workers=3), alone)
    assert len(killed) == 2


def test_the_windows_of_a_killed_cluster_worker_are_computed_again(plant, alone, cluster):
    killed = []

    def kill(done, _of, _computed):
        # The first window is here: the rest is on its way, or waits to be fetched.
        if done == 1:
            with Client(cluster.scheduler_address, set_as_default=False) as client:
                pid = min(client.run(os.getpid).values())
            os.kill(pid, signal.SIGKILL)
            killed.append(pid)

    assert_equal(computed(plant, kill, cluster=cluster.scheduler_address), alone)
    with Client(cluster.scheduler_address, set_as_default=False) as client:
        client.wait_for_workers(2, timeout=60)
        assert killed[0] not in client.run(os.getpid).values()


def die(*_arguments):
    os.kill(os.getpid(), signal.SIGKILL)


def test_a_process_that_dies_each_time_ends_the_work_with_a_sentence(plant, monkeypatch):
    monkeypatch.setattr(ahead, "_compute_to_file", die)
    with pytest.raises(WorkersError, match="died 3 times in a row"):
        computed(plant, workers=2)


def test_a_cluster_without_workers_is_told_and_not_waited_for(plant, monkeypatch):
    monkeypatch.setattr(ahead, "_PATIENCE_S", 0.2)
    monkeypatch.setattr(ahead, "_ALONE_S", 0.6)
    with (
        LocalCluster(n_workers=0, dashboard_address="127.0.0.1:0", host="127.0.0.1") as empty,
        pytest.raises(WorkersError, match="has had no worker"),
    ):
        computed(plant, cluster=empty.scheduler_address)


def test_a_source_that_fails_on_a_worker_fails_the_run_with_its_own_words(plant, cluster):
    (plant.folder / "exports" / "day.csv").write_text("when,what\n1,2\n")
    with pytest.raises(ConnectorError, match=r"day\.csv"):
        computed(plant, cluster=cluster.scheduler_address)
    with sqlite3.connect(plant.folder / "figures.sqlite") as database:
        ((status, message),) = database.execute("select status, message from runs")
    assert status == "failed"
    assert "day.csv" in message


def test_workers_close_the_exports_when_the_work_is_done(plant, cluster):
    computed(plant, cluster=cluster.scheduler_address)
    with Client(cluster.scheduler_address, set_as_default=False) as client:
        assert set(client.run(_kept).values()) == {""}


def _kept():
    return ahead._Kept.key


def test_an_address_where_nothing_listens_is_told(plant, monkeypatch):
    monkeypatch.setattr(ahead, "_CONNECT_S", 0.5)
    with pytest.raises(WorkersError, match=r"tcp://127\.0\.0\.1:1: cannot be reached") as told:
        computed(plant, cluster="tcp://127.0.0.1:1")
    assert ended_by(told.value) == (ExitCode.WORKERS, str(told.value))


def test_the_command_computes_on_a_cluster(plant, cluster):
    # A process of its own: the cluster's threads would go on logging to a closed output.
    ran = subprocess.run(
        [sys.executable, "-c", "from monitor.cli import main; main()", "backfill", plant.path,
         "--from", "2026-01-10T00:00Z", "--to", "2026-01-12T00:00Z",
         "--cluster", cluster.scheduler_address],
        capture_output=True, text=True, check=False, timeout=120,
    )  # fmt: skip
    assert ran.returncode == 0, ran.stderr
    assert "2 windows" in ran.stdout


def test_a_worker_of_other_versions_refuses(plant):
    job = Job.of(open_site(plant.path))
    other = replace(job, made_with=("lostwork 0.0.1", *made_with()[1:]))
    with pytest.raises(WorkersError, match=r"not lostwork 0\.0\.1; install the same"):
        compute_job(other, (0, 3600))


def test_a_job_shows_nothing_of_the_site_file_where_dask_prints_it(plant, monkeypatch):
    monkeypatch.setenv("HISTORIAN_PASSWORD", "planted-secret")
    plant.edit('name = "Mill Race Works"', 'name = "${HISTORIAN_PASSWORD}"')
    job = Job.of(open_site(plant.path))
    assert b"planted-secret" in job.site
    assert "planted" not in f"{job!r} {job}"
