"""status of a daemon that runs elsewhere, has died, or has lost its store; undelivered messages."""

from __future__ import annotations

import json
import os
import socket
import time
from dataclasses import replace

import pandas as pd
import pytest

from monitor import log
from monitor.commands.opening import opened
from monitor.daemon import Daemon
from monitor.notify.outbox import Entry, Outbox
from monitor.store.jobs import DaemonState, JobHealth


@pytest.fixture
def plant(make_plant, tmp_path):
    start = pd.Timestamp(time.time() - 86400, unit="s", tz="UTC").floor("h")
    return make_plant(tmp_path / "site", start=start, days=1.1, every="10min", interval=60)


@pytest.fixture
def fresh(plant, lostwork):
    assert lostwork("once", plant.path).code == 0
    return plant


def kept(**changes):
    now = time.time()
    jobs = {"cycle": JobHealth(now - 60, now + 240), "pages": JobHealth(now - 60, now + 840)}
    return replace(DaemonState(os.getpid(), "elsewhere", "1.0", now - 9000, now, None, jobs),
                   **changes)  # fmt: skip


def keep(plant, state):
    with opened(plant.path) as at:
        at.store.keep_daemon(state)


def status(lostwork, plant, *options):
    return lostwork("status", plant.path, "--max-lag", "3h", *options)


def test_a_daemon_that_died_is_told_with_its_last_word(fresh, lostwork):
    assert status(lostwork, fresh).code == 0
    failing = JobHealth(time.time() - 900, None, time.time() - 600, "the historian is away", 4)
    # `seen` is after the last `once`: nobody has turned to that instead.
    keep(fresh, kept(seen=time.time() + 5, jobs={"cycle": failing}))
    ran = status(lostwork, fresh)
    assert ran.code == 1
    assert f"the daemon (process {os.getpid()} on elsewhere) has died" in ran.out
    assert "cycle fails: the historian is away" in ran.out
    told = status(lostwork, fresh, "--json").json()
    assert told["daemon"]["jobs"]["cycle"]["failures"] == 4
    assert told["daemon"]["ended"] is None


def test_a_daemon_that_ended_in_order_or_was_given_up_is_no_fault(fresh, lostwork):
    now = time.time()
    keep(fresh, kept(ended=now, seen=now + 5))
    ran = status(lostwork, fresh)
    assert ran.code == 0, ran.out
    assert "on elsewhere, seen" in ran.out
    # It died long before somebody ran `once` instead.
    keep(fresh, kept(seen=now - 7200))
    assert status(lostwork, fresh).code == 0


@pytest.mark.postgres
def test_a_daemon_on_another_machine_is_shown_from_the_store(plant, lostwork, postgres_url):
    plant.edit("sqlite:///figures.sqlite", postgres_url)
    assert lostwork("once", plant.path).code == 0
    with opened(plant.path) as at, at.database.instance_lock(at.site.id, "lostwork run"):
        at.store.keep_daemon(kept(host=socket.gethostname()))
        # No heartbeat beside this site file: the daemon writes it on its own machine.
        ran = status(lostwork, plant)
        assert ran.code == 0, ran.out
        assert "instance         lostwork run, process" in ran.out
        assert "\npages " in ran.out
        at.store.keep_daemon(kept(host=socket.gethostname(), seen=time.time() - 3000))
        assert "no sign of life for 50 min" in status(lostwork, plant).out
        failing = {"pages": JobHealth(failing_since=time.time(), cause="no room", failures=1)}
        at.store.keep_daemon(kept(host=socket.gethostname(), jobs=failing))
        assert "pages fails: no room" in status(lostwork, plant).out


def test_without_the_store_the_heartbeat_tells_what_fails(fresh, lostwork):
    beat = {
        "site": "mill_race", "process": 4711, "host": "here", "time": time.time(),
        "newest": int(time.time()) - 7200,
        "jobs": {"cycle": {"last": None, "next": None, "failing_since": time.time() - 60,
                           "cause": "store: disk I/O error", "failures": 3}},
    }  # fmt: skip
    store = fresh.folder / "figures.sqlite"
    store.write_bytes(b"no database any more" * 100)
    without = status(lostwork, fresh)
    assert without.code == 5
    (fresh.folder / "lostwork-heartbeat.json").write_text(json.dumps(beat))
    ran = status(lostwork, fresh)
    assert ran.code == 1
    assert "file is not a database" in ran.out
    assert "cycle fails: store: disk I/O error" in ran.out
    assert "(120 min ago)" in ran.out or "(2 h ago)" in ran.out
    told = status(lostwork, fresh, "--json").json()
    assert told["healthy"] is False
    assert told["heartbeat"]["process"] == 4711


def message(target, state, ended, number, error=""):
    return Entry(target, f"key{number}", "job/cycle", "failed", 0, 0, 0, state, 0, "{}",
                 ended=ended, error=error)  # fmt: skip


def test_a_message_that_could_not_be_handed_over_is_shown_until_one_arrives(fresh, lostwork):
    fresh.path.write_text(
        fresh.path.read_text()
        + '\n[[notify]]\nid = "office"\nkind = "command"\ncommand = ["true"]\n'
    )
    now = int(time.time())
    with opened(fresh.path) as at:
        box = Outbox(at.store)
        box.add([message("office", "sent", now - 60, 1)])
        box.add([message("office", "failed", now - 30, 2, "refused (550)")])
        # Of a target that the site file has no more, nobody needs to know.
        box.add([message("gone", "failed", now - 30, 3, "refused")])
        ran = status(lostwork, fresh)
        assert ran.code == 1
        assert "a message to 'office' could not be handed over: refused (550)" in ran.out
        assert "gone" not in ran.out
        assert status(lostwork, fresh, "--json").json()["undelivered"] == {
            "office": "refused (550)"
        }
        box.add([message("office", "sent", now - 10, 4)])
    ran = status(lostwork, fresh)
    assert ran.code == 0, ran.out
    assert "2 given up in the last 24 hours" in ran.out


def test_a_restarted_daemon_knows_what_was_done_last(fresh):
    keep(fresh, kept(jobs={"housekeeping": JobHealth(last=1000.0)}))
    log.configure()
    with opened(fresh.path) as at:
        daemon = Daemon(at.site, at.store, time.time)
        daemon.start()
        # Three o'clock came while nothing ran: caught up with at once.
        assert daemon.health.jobs["housekeeping"].last > time.time() - 60
        daemon.notify()
        assert at.store.daemon().jobs["cycle"].last > time.time() - 60
        daemon.end()
        daemon.close()
        assert at.store.daemon().ended is not None


def test_status_says_what_made_the_figures_and_whether_the_site_file_changed(fresh, lostwork):
    before = status(lostwork, fresh)
    assert "has changed since" not in before.out
    assert "made with        lostwork " in before.out
    fresh.edit("exergy_price = 50", "exergy_price = 60")
    assert "the site file has changed since" in status(lostwork, fresh).out
    assert status(lostwork, fresh, "--json").json()["same_site_file"] is False
