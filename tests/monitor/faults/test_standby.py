"""A standby takes over when the instance that runs is killed: two real processes."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from contextlib import ExitStack

import pandas as pd
import pytest

from monitor.commands.opening import opened_to_read
from monitor.store.errors import StoreError

pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(os.name == "nt", reason="signals as Unix has them"),
]
PATIENCE = 150


def wait_until(true, *logs):
    deadline = time.monotonic() + PATIENCE
    while not true():
        assert time.monotonic() < deadline, "\n".join(log.read_text() for log in logs)
        time.sleep(0.3)


def newest(plant):
    try:
        with opened_to_read(plant.path) as at:
            return at.store.newest()
    except StoreError:
        return None


def test_a_standby_takes_over_from_a_killed_instance_within_two_cycles(
    make_plant, tmp_path, store_url
):
    start = pd.Timestamp.now("UTC").floor("h") - pd.Timedelta("2h")
    plant = make_plant(
        tmp_path / "site", start=start, days=0.2, every="20s", interval=1, settle=2,
        store=store_url,
    )  # fmt: skip
    logs = tmp_path / "first.log", tmp_path / "second.log"
    with ExitStack() as stack:

        def run(log, *options):
            out = stack.enter_context(log.open("wb"))
            command = [sys.executable, "-m", "monitor.cli", "run", str(plant.path), *options]
            child = subprocess.Popen(command, stdout=out, stderr=out)
            stack.callback(child.wait, 30)
            stack.callback(child.kill)
            return child

        first = run(logs[0])
        wait_until(lambda: "figures stored" in logs[0].read_text(), *logs)
        second = run(logs[1], "--standby")
        wait_until(lambda: "standing by" in logs[1].read_text(), *logs)
        assert f"process {first.pid}" in logs[1].read_text()
        first.send_signal(signal.SIGKILL)
        first.wait(30)
        died = pd.Timestamp.now("UTC")
        wait_until(lambda: "figures stored" in logs[1].read_text(), *logs)
        # Two cycles of a minute after the death, its cell is there.
        wait_until(lambda: newest(plant) >= died.floor("min"), *logs)
        second.send_signal(signal.SIGTERM)
        assert second.wait(60) == 0, logs[1].read_text()
    said = logs[1].read_text()
    assert said.count("standing by") == 1
    assert "taking over" in said
    assert "level=error" not in said
    with opened_to_read(plant.path) as at:
        times = at.store.ledger(plant.start, newest(plant) + pd.Timedelta("1min")).index
    assert times.is_unique
    assert (pd.Series(times).diff().dropna() == pd.Timedelta("1min")).all()
