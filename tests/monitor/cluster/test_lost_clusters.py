"""A cluster that loses its workers again and again, or its scheduler, ends the work in words."""

from __future__ import annotations

import logging
import os
import signal
import sqlite3
import subprocess
import sys

import cloudpickle
import dask
import pytest
from distributed import LocalCluster

from monitor import ahead
from monitor.ahead import WorkersError
from monitor.backfill import backfill
from monitor.commands.opening import opened
from monitor.log import configure

DAY = 86400
DAYS = 6

CLUSTER = """
import sys
from distributed import LocalCluster

if __name__ == "__main__":
    with LocalCluster(
        n_workers=1, threads_per_worker=1, dashboard_address="127.0.0.1:0", host="127.0.0.1"
    ) as made:
        print(made.scheduler_address, flush=True)
        sys.stdin.read()
"""


@pytest.fixture(autouse=True)
def _open_log():
    configure()
    # Its threads log until after pytest has closed the outputs.
    logging.getLogger("distributed").propagate = False


@pytest.fixture
def plant(make_plant, tmp_path):
    return make_plant(tmp_path / "site", days=DAYS, every="30min", interval=60)


def compute(plant, address, progress=None):
    start = int(plant.start.timestamp())
    with opened(plant.path) as at:
        backfill(at.site, at.store, start, start + DAYS * DAY, progress=progress, cluster=address)


def stored(plant):
    with sqlite3.connect(plant.folder / "figures.sqlite") as database:
        (cells,) = database.execute("select count(*) from ledger_figures").fetchone()
        runs = database.execute("select status, message from runs").fetchall()
    database.close()
    return cells, runs


def die(*_arguments):
    os.kill(os.getpid(), signal.SIGKILL)


def test_a_window_that_kills_every_worker_is_given_up_with_a_sentence(plant, monkeypatch):
    # The workers cannot import this file.
    cloudpickle.register_pickle_by_value(sys.modules[__name__])
    monkeypatch.setattr(ahead, "compute_job", die)
    try:
        with (
            dask.config.set({"distributed.scheduler.allowed-failures": 1}),
            LocalCluster(
                n_workers=1,
                threads_per_worker=1,
                dashboard_address="127.0.0.1:0",
                host="127.0.0.1",
            ) as cluster,
            pytest.raises(WorkersError, match="workers died again and again over one window"),
        ):
            compute(plant, cluster.scheduler_address)
    finally:
        cloudpickle.unregister_pickle_by_value(sys.modules[__name__])
    cells, ((status, message),) = stored(plant)
    assert cells == 0
    assert status == "failed"
    assert "died again and again" in message


def test_a_scheduler_that_is_gone_ends_the_work_and_keeps_what_is_done(
    plant, monkeypatch, tmp_path
):
    monkeypatch.setattr(ahead, "_PATIENCE_S", 0.5)
    monkeypatch.setattr(ahead, "_ALONE_S", 20.0)
    script = tmp_path / "made_cluster.py"
    script.write_text(CLUSTER)
    with subprocess.Popen(
        [sys.executable, script], stdin=subprocess.PIPE, stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL, text=True, start_new_session=True,
    ) as process:  # fmt: skip
        try:
            address = process.stdout.readline().strip()

            def lose(done, _of, _computed):
                if done == 1:
                    # Scheduler and workers alike: the session's processes.
                    os.killpg(process.pid, signal.SIGKILL)

            with pytest.raises(WorkersError, match=r"scheduler is gone|has had no worker"):
                compute(plant, address, lose)
        finally:
            if process.poll() is None:
                os.killpg(process.pid, signal.SIGKILL)
    cells, ((status, message),) = stored(plant)
    # A window is stored whole: the first day, and whatever had come from the cluster by then.
    assert cells >= 24
    assert cells % 24 == 0
    assert status == "failed"
    assert "windows before that are stored" in message
