"""One instance a site, and none that is dead."""

from __future__ import annotations

import subprocess
import sys
from contextlib import contextmanager

import pytest
import store_samples as samples

from monitor.store.errors import InstanceRunning, StoreError
from monitor.store.open import open_store

HOLD = """
import sys
from pathlib import Path
from monitor.store.open import open_store
store = open_store({url!r}, Path())
with store.instance_lock("mill", "the other instance"):
    store.site("mill").begin_run("cycle", "0", "hash")
    print("held", flush=True)
    sys.stdin.read()
"""


@contextmanager
def another_process(url):
    """A second process that holds the lock, with a run under way."""
    command = [sys.executable, "-c", HOLD.format(url=url)]
    with subprocess.Popen(
        command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    ) as process:
        try:
            assert process.stdout.readline() == "held\n"
            yield process
        finally:
            process.kill()


@pytest.mark.usefixtures("site")
def test_a_second_process_is_refused_and_told_who_holds_the_lock(store, store_url):
    with another_process(store_url) as other:
        said = rf"'mill' is already being computed by the other instance, process {other.pid} on "
        with (
            pytest.raises(InstanceRunning, match=said),
            store.instance_lock("mill", "lostwork run"),
        ):
            pass
        # Neither the refused one nor its ending frees the lock.
        with pytest.raises(InstanceRunning), store.instance_lock("mill", "lostwork run"):
            pass


def test_a_killed_process_frees_the_lock_and_its_run_is_closed(store, site, store_url):
    with another_process(store_url) as other:
        assert [run.status for run in site.runs()] == ["running"]
        other.kill()
        other.wait(timeout=30)
    wait_until_free(store)
    with store.instance_lock("mill", "lostwork run") as lock:
        assert "lostwork run, process" in lock.holder
        lock.check()
        (run,) = site.runs()
        assert run.status == "abandoned"
        assert run.ended >= run.started
    # Given back in order, it is free for anybody.
    with another_process(store_url):
        pass


def wait_until_free(store):
    # A server notices that its client is gone a moment after the client is.
    for _ in range(200):
        try:
            with store.instance_lock("mill", "waiting"):
                return
        except InstanceRunning:
            subprocess.run([sys.executable, "-c", "import time; time.sleep(0.05)"], check=True)
    pytest.fail("the lock of a killed process is not freed")


@pytest.mark.usefixtures("site")
def test_one_process_cannot_hold_a_lock_twice(store, store_url, tmp_path):
    with (
        store.instance_lock("mill", "first"),
        open_store(store_url, tmp_path) as second,
        pytest.raises(InstanceRunning),
        second.instance_lock("mill", "second"),
    ):
        pass
    with store.instance_lock("mill", "third"):
        pass


def test_sites_are_locked_each_by_itself(store):
    samples.register(store, "one")
    samples.register(store, "two")
    with store.instance_lock("one", "a"), store.instance_lock("two", "b"):
        pass


def test_an_unknown_site_cannot_be_locked(store):
    with pytest.raises(StoreError, match="no site 'mill'"), store.instance_lock("mill", "a"):
        pass


@pytest.mark.postgres
def test_a_lock_whose_connection_broke_says_so(postgres_url, tmp_path):
    with open_store(postgres_url, tmp_path) as store:
        samples.register(store)
        with store.instance_lock("mill", "a") as lock:
            lock.check()
            with store.engine.connect() as other:
                other.exec_driver_sql(
                    "select pg_terminate_backend(pid) from pg_locks where locktype = 'advisory'"
                )
            with pytest.raises(StoreError, match="start again"):
                lock.check()
