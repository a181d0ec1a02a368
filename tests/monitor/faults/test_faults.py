"""What goes wrong around a daemon: told once, shown in status, and nothing lost or doubled."""

from __future__ import annotations

import os
import shlex
import shutil
import sqlite3
import subprocess
import threading
import uuid
from pathlib import Path

import pandas as pd
import psycopg
import pytest
import sqlalchemy as sa

ONE_FAULT = ["error", "info"]
BEGIN, END = "2026-01-11T00:01:00Z", "2026-01-11T12:01:00Z"


@pytest.fixture(scope="module")
def build(make_plant):
    def make(folder, **options):
        return make_plant(folder, days=2.0, interval=30, **options)

    return make


@pytest.fixture
def same(build, watch, whole_store, tmp_path):
    """Compare a store with that of a daemon that lived through the same hours undisturbed."""

    def check(plant, until, store="sqlite:///figures.sqlite", make=build):
        calm = make(tmp_path / "calm")
        watch(calm).follow(until)
        expected, found = whole_store(calm), whole_store(plant, store)
        assert len(expected["ledger_figures"])
        for table, rows in expected.items():
            if table == "watermarks":
                # A source that was behind says so until its next reading.
                continue
            pd.testing.assert_frame_equal(found[table], rows, check_dtype=False, obj=table)

    return check


def fails(watched, job):
    return watched.status()["heartbeat"]["jobs"][job]["cause"]


# --- historian -----------------------------------------------------------------------------------


def historian(plant, url):
    """Move a plant's readings from its CSV file into a database of a historian's kind."""
    engine = sa.create_engine(url)
    plant.readings.to_sql("readings", engine, index=False, chunksize=5000, method="multi")
    engine.dispose()
    plant.edit('kind = "csv"\npath = "exports/*.csv"', f'kind = "sql"\nurl = "{url}"\n'
               'table = "readings"')  # fmt: skip


def test_a_historian_that_is_away_for_three_days_is_caught_up_with(
    make_plant, watch, same, tmp_path
):
    def make(folder):
        return make_plant(folder, days=5.5, interval=60)

    plant = make(tmp_path / "site")
    database = plant.folder / "history.sqlite"
    historian(plant, f"sqlite:///{database}")
    watched = watch(plant)
    watched.follow("2026-01-11T06:01:00Z")
    # The next one to open it finds nothing, and what is open already is of no use.
    watched.daemon.close()
    away = database.rename(tmp_path / "away")
    watched.follow("2026-01-14T06:01:00Z")
    assert "history.sqlite" in fails(watched, "cycle")
    away.rename(database)
    watched.follow("2026-01-15T00:01:00Z")
    assert watched.told("cycle") == ONE_FAULT
    same(plant, "2026-01-15T00:01:00Z", make=make)


def test_a_file_that_cannot_be_read_holds_up_nothing_for_good(build, watch, same, tmp_path):
    plant = build(tmp_path / "site")
    watched = watch(plant)
    odd = plant.folder / "exports" / "odd.csv"
    odd.write_bytes(b"\x89PNG\r\n\x1a\n" + bytes(2000))
    watched.follow("2026-01-11T04:01:00Z")
    told = [line for line in watched.lines if "odd.csv" in str(line.get("where"))]
    assert len(told) == 1, watched.lines
    assert told[0]["log_level"] == "warning"
    odd.unlink()
    watched.follow(END)
    assert watched.told("cycle") == []
    same(plant, END)


# --- store ---------------------------------------------------------------------------------------


class Server:
    """The tests' PostgreSQL server, stopped and started again with the options that it has."""

    def __init__(self, server):
        self.data = server.socket_folder / "data"
        # What the server may write: it is not always this user.
        self.log = server.socket_folder / "server.log"
        command = shlex.split((self.data / "postmaster.opts").read_text())
        self.control = Path(command[0]).with_name("pg_ctl")
        self.options = shlex.join(o for o in command[1:] if o not in {"-D", str(self.data)})

    def run(self, *arguments):
        owner = self.data.stat()
        me = os.geteuid() == owner.st_uid
        # A file, not a pipe, which the server would keep open.
        with (self.data.parent / "commands.log").open("a") as out:
            subprocess.run(
                [self.control, "-D", self.data, "-w", *arguments],
                user=None if me else owner.st_uid,
                group=None if me else owner.st_gid,
                extra_groups=None if me else [],
                cwd=self.data.parent,
                stdout=out,
                stderr=out,
                check=True,
                timeout=60,
            )

    def stop(self):
        self.run("-m", "immediate", "stop")

    def start(self):
        self.run("-l", self.log, "-o", self.options, "start")


@pytest.mark.slow
@pytest.mark.postgres
def test_a_store_that_is_away_for_an_hour_is_written_to_when_it_is_back(
    build, watch, same, tmp_path, postgres_url, postgres_server
):
    plant = build(tmp_path / "site", store=postgres_url)
    watched = watch(plant)
    watched.follow("2026-01-11T06:01:00Z")
    server = Server(postgres_server)
    server.stop()
    try:
        watched.follow("2026-01-11T07:01:00Z")
        job = watched.daemon.health.jobs["cycle"]
        assert "store" in job.cause
        assert not watched.daemon.stop.is_set()
        # Without the store `status` still reads the heartbeat.
        beat = (plant.folder / "lostwork-heartbeat.json").read_text()
        assert '"failing_since": null' in beat
        assert job.cause.partition('"')[0][:30] in beat
    finally:
        server.start()
    watched.follow(END)
    assert watched.told("cycle") == ONE_FAULT
    # It has its lock again: nobody else may begin.
    watched.daemon.lock.check()
    same(plant, END, postgres_url)


@pytest.fixture
def small_disk(tmp_path):
    """A disk of 24 MB."""
    folder = tmp_path / "disk"
    folder.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=24m", "tmpfs", str(folder)]
    if os.name == "nt" or os.geteuid() or subprocess.run(
        mount, check=False, capture_output=True
    ).returncode:  # fmt: skip
        pytest.skip("only root mounts a small disk; tests/monitor/daemon has a stand-in")
    yield folder
    subprocess.run([shutil.which("umount"), "--lazy", folder], check=True)


def fill(folder):
    ballast = folder / "ballast"
    with ballast.open("wb", buffering=0) as out:
        try:
            while True:
                out.write(bytes(4096))
        except OSError:
            return ballast


def test_a_full_disk_is_told_and_written_to_when_there_is_room(
    build, watch, same, tmp_path, small_disk
):
    store = f"sqlite:///{small_disk / 'figures.sqlite'}"
    plant = build(tmp_path / "site", store=store)
    watched = watch(plant)
    watched.follow("2026-01-11T02:01:00Z")
    ballast = fill(small_disk)
    watched.follow("2026-01-11T06:01:00Z")
    assert watched.daemon.health.jobs["cycle"].failing_since is not None
    ballast.unlink()
    watched.follow(END)
    assert watched.told("cycle") == ONE_FAULT
    same(plant, END, store)


# --- pages, clock, site file ---------------------------------------------------------------------


def test_a_folder_of_pages_that_cannot_be_written_is_told_once(build, watch, tmp_path):
    plant = build(tmp_path / "site")
    watched = watch(plant)
    in_the_way = plant.folder / "pages"
    in_the_way.write_text("no folder")
    for _ in range(3):
        watched.daemon.pages()
    assert "pages" in fails(watched, "pages")
    in_the_way.unlink()
    watched.daemon.pages()
    assert watched.told("pages") == ONE_FAULT
    assert (plant.folder / "pages" / "index.html").is_file()


def test_a_clock_that_is_set_back_an_hour_doubles_nothing(build, watch, same, tmp_path):
    plant = build(tmp_path / "site")
    watched = watch(plant)
    watched.follow("2026-01-11T06:01:00Z")
    watched.now -= 3600
    watched.follow("2026-01-11T05:31:00Z")
    assert "set back" in fails(watched, "clock")
    watched.follow(END)
    assert watched.told("clock") == ONE_FAULT
    assert watched.told("cycle") == []
    same(plant, END)


def test_a_bad_edit_of_the_site_file_keeps_the_old_one_and_is_told_once(build, watch, tmp_path):
    plant = build(tmp_path / "site")
    watched = watch(plant)
    before = watched.daemon.site
    plant.edit("exergy_price = 50", "exergy_prize = 60")
    watched.follow("2026-01-11T02:01:00Z")
    assert watched.daemon.site is before
    assert "exergy_prize" in watched.daemon.health.jobs["site file"].cause
    plant.edit("exergy_prize = 60", "exergy_price = 60")
    watched.follow("2026-01-11T03:01:00Z")
    assert watched.told("site file") == ONE_FAULT
    assert watched.told("cycle") == []
    assert watched.daemon.site.file.economics.exergy_price == 60
    assert watched.at.store.runs()[0].site_hash == watched.daemon.site.hash != before.hash


def test_new_equipment_is_computed_without_a_restart(build, watch, tmp_path):
    plant = build(tmp_path / "site")
    watched = watch(plant)
    plant.edit('id = "LD62"\nkind = "letdown"', 'id = "LD99"\nkind = "letdown"')
    watched.follow("2026-01-11T01:01:00Z")
    assert watched.daemon.health.jobs["cycle"].cause == ""
    last = pd.Timestamp("2026-01-11T01:00Z")
    rows = watched.daemon.store.equipment("LD99", last - pd.Timedelta("1h"), last)
    assert len(rows) == 2
    assert rows["destroyed_live_kw"].notna().all()


@pytest.mark.parametrize(
    ("old", "new", "named"),
    [
        ('interval = "30 min"', 'interval = "15 min"', "interval"),
        ('id = "mill_race"', 'id = "other"', "id"),
        ("figures.sqlite", "others.sqlite", "url"),
    ],
)
def test_what_takes_a_restart_is_said_and_not_taken_up(build, watch, tmp_path, old, new, named):
    plant = build(tmp_path / "site")
    watched = watch(plant)
    plant.edit(old, new)
    watched.follow("2026-01-11T01:31:00Z")
    cause = watched.daemon.health.jobs["site file"].cause
    assert named in cause
    assert "restart" in cause
    plant.edit(new, old)
    watched.follow("2026-01-11T02:31:00Z")
    assert watched.told("site file") == ONE_FAULT


# --- a historian on a server, and copies of a store in use ----------------------------------------


@pytest.mark.slow
@pytest.mark.postgres
def test_a_historian_on_a_server_that_is_stopped_for_three_days_is_caught_up_with(
    make_plant, watch, same, tmp_path, postgres_url, postgres_server, monkeypatch
):
    def make(folder):
        return make_plant(folder, days=5.5, every="10min", interval=60)

    # It is tried three times each hour all the same.
    monkeypatch.setattr("connectors.sql_engine._WAITS", (0.0, 0.0))

    plant = make(tmp_path / "site")
    historian(plant, postgres_url.replace("postgresql://", "postgresql+psycopg://"))
    watched = watch(plant)
    watched.follow("2026-01-11T06:01:00Z")
    server = Server(postgres_server)
    server.stop()
    try:
        watched.follow("2026-01-14T06:01:00Z")
        assert not watched.daemon.stop.is_set()
        cause = watched.daemon.health.jobs["cycle"].cause
        assert "tried 3 times" in cause
        assert fails(watched, "cycle") == cause
    finally:
        server.start()
    watched.follow("2026-01-15T00:01:00Z")
    assert watched.told("cycle") == ONE_FAULT
    same(plant, "2026-01-15T00:01:00Z", make=make)


def copied(plant, store, tmp_path, postgres_server):
    """A copy of a store in use, made as config/sizing.md says; the URL of what it gives back."""
    if store.startswith("sqlite"):
        with sqlite3.connect(plant.folder / "figures.sqlite") as reader:
            reader.execute("vacuum into ?", (str(plant.folder / "copy.sqlite"),))
        reader.close()
        return "sqlite:///copy.sqlite"
    tools = Path(shlex.split((postgres_server.socket_folder / "data" / "postmaster.opts")
                             .read_text())[0]).parent  # fmt: skip
    source, target, dump = store.rsplit("/", 1)[1], f"copy_{uuid.uuid4().hex}", tmp_path / "dump"
    from_ = postgres_server.dsn(source)
    subprocess.run([tools / "pg_dump", "-Fc", "-f", dump, from_], check=True, timeout=60)
    with psycopg.connect(postgres_server.dsn("postgres"), autocommit=True) as server:
        server.execute(f"create database {target}")
    subprocess.run(
        [tools / "pg_restore", "-d", postgres_server.dsn(target), dump], check=True, timeout=60
    )
    return postgres_server.url(target)


@pytest.mark.slow
@pytest.mark.postgres
def test_a_copy_made_while_the_daemon_writes_carries_on_from_where_it_was(
    build, watch, same, tmp_path, store_url, postgres_server
):
    store = "sqlite:///figures.sqlite" if store_url.startswith("sqlite") else store_url
    plant = build(tmp_path / "site", store=store)
    watched = watch(plant)
    writing = threading.Thread(target=watched.follow, args=("2026-01-11T06:01:00Z",))
    writing.start()
    copy = copied(plant, store, tmp_path, postgres_server)
    writing.join()
    # The store is lost, and the copy takes its place.
    watched.daemon.close()
    watched.daemon.lock.release()
    plant.edit(f'url = "{store}"', f'url = "{copy}"')
    restored = watch(plant, "2026-01-11T06:01:00Z")
    restored.follow(END)
    assert restored.told("cycle") == []
    same(plant, END, copy)
