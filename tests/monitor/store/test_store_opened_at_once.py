"""Several processes and threads may open one new store at the same instant.

``LOSTWORK_OPENINGS=50`` opens so many new stores on each database; a few are the default.
"""

from __future__ import annotations

import json
import os
import sqlite3
import subprocess
import sys
import threading
import uuid
from pathlib import Path

import psycopg
import pytest
import store_samples as samples

from monitor.store.open import open_store

ROOT = Path(__file__).parents[3]
OPENINGS = int(os.environ.get("LOSTWORK_OPENINGS", "6"))


def raced(folder, urls):
    script = Path(__file__).with_name("opening_race.py")
    done = subprocess.run(
        [sys.executable, script, folder, *urls],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True, text=True, check=False, timeout=600,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr[-3000:]
    return json.loads(done.stdout.splitlines()[-1])


def is_whole(url, folder):
    with open_store(url, folder) as store:
        assert store.sites() == ("mill", "works")
        for name in store.sites():
            site = samples.register(store, name)
            start = samples.at("2025-06-01")
            site.write(samples.window(start, start + 3600), site.begin_run("test", "0", "hash"))
            assert site.newest() is not None


@pytest.mark.skipif(not hasattr(os, "fork"), reason="races forked processes")
def test_a_new_file_is_made_once_whoever_opens_it(tmp_path):
    urls = [f"sqlite:///{tmp_path / f'{n}.sqlite'}" for n in range(OPENINGS)]
    assert raced(tmp_path, urls) == []
    is_whole(urls[0], tmp_path)


@pytest.mark.postgres
@pytest.mark.skipif(not hasattr(os, "fork"), reason="races forked processes")
def test_a_new_database_is_made_once_whoever_opens_it(tmp_path, postgres_server):
    names = [f"race_{uuid.uuid4().hex}" for _ in range(OPENINGS)]
    urls = [postgres_server.url(name) for name in names]
    with psycopg.connect(postgres_server.dsn("postgres"), autocommit=True) as server:
        for name in names:
            server.execute(f"create database {name}")
        try:
            assert raced(tmp_path, urls) == []
            is_whole(urls[0], tmp_path)
        finally:
            for name in names:
                server.execute(f"drop database {name} with (force)")


def test_a_file_that_another_is_about_to_switch_to_its_write_ahead_log_is_waited_for(tmp_path):
    # SQLite refuses the switch at once while another has the write lock, whatever the time-out.
    other = sqlite3.connect(tmp_path / "s.sqlite", isolation_level=None, check_same_thread=False)
    other.execute("begin immediate")
    release = threading.Timer(0.5, other.execute, ["rollback"])
    release.start()
    try:
        with open_store("sqlite:///s.sqlite", tmp_path) as store:
            assert store.sites() == ()
    finally:
        release.join()
        other.close()


def test_two_stores_may_be_made_at_once_in_one_process(tmp_path):
    wrong, start = [], threading.Barrier(4)

    def make(number):
        start.wait(30)
        try:
            with open_store(f"sqlite:///{number}.sqlite", tmp_path) as store:
                samples.register(store)
        except Exception as error:  # noqa: BLE001 - shown below
            wrong.append(error)

    threads = [threading.Thread(target=make, args=(number,)) for number in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert wrong == []
