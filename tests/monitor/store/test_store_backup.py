"""The ways to back a store up that config/sizing.md names give the same store back."""

from __future__ import annotations

import shutil
import sqlite3
import subprocess
from pathlib import Path

import psycopg
import pytest
import store_samples as samples
from store_samples import at, window

from monitor.store.open import open_store

DAY = 86400
START = at("2025-06-01")


def filled(url, folder):
    with open_store(url, folder) as store:
        site = samples.register(store)
        site.write(window(START, START + DAY), site.begin_run("test", "0", "hash"))
        return samples.dump(site)


def dumped(url, folder):
    with open_store(url, folder) as store:
        return samples.dump(store.site("mill"))


def test_vacuum_into_beside_a_running_writer_gives_the_last_whole_window(tmp_path):
    url = f"sqlite:///{tmp_path / 'store.sqlite'}"
    before = filled(url, tmp_path)
    writer = sqlite3.connect(tmp_path / "store.sqlite", isolation_level=None)
    writer.execute("begin immediate")
    writer.execute("delete from ledger_figures")
    reader = sqlite3.connect(tmp_path / "store.sqlite", isolation_level=None)
    reader.execute("vacuum into ?", (str(tmp_path / "copy.sqlite"),))
    reader.close()
    writer.execute("rollback")
    writer.close()
    samples.assert_same(before, dumped(f"sqlite:///{tmp_path / 'copy.sqlite'}", tmp_path))


@pytest.mark.postgres
def test_pg_dump_and_pg_restore_give_the_same_store(postgres_server, postgres_url, tmp_path):
    binaries = max(Path("/usr/lib/postgresql").glob("*/bin/pg_dump"), default=None)
    dump = shutil.which("pg_dump") or binaries
    if dump is None:
        pytest.skip("no pg_dump on the path or packaged")
    restore = Path(dump).with_name("pg_restore")
    before = filled(postgres_url, tmp_path)
    source, target = postgres_url.rsplit("/", 1)[1], "restored_store"
    file = tmp_path / "store.dump"
    subprocess.run([dump, "-Fc", "-f", file, postgres_server.dsn(source)], check=True, timeout=60)
    with psycopg.connect(postgres_server.dsn("postgres"), autocommit=True) as server:
        server.execute(f"create database {target}")
        try:
            into = postgres_server.dsn(target)
            subprocess.run([restore, "-d", into, file], check=True, timeout=60)
            samples.assert_same(before, dumped(postgres_server.url(target), tmp_path))
        finally:
            server.execute(f"drop database {target} with (force)")
