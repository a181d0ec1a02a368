"""Kill a computing process again and again at random moments; started by the tests beside it.

Everything is imported once, and each attempt is a fork of this process, so that an attempt takes a
fraction of a second. A page of shared memory tells what a process was doing when it died.

    kill_loop.py SITE SEED KILLS_IN_BACKFILL KILLS_IN_LIVE BACKFILL_FROM BACKFILL_TO LIVE_TO

Times are UTC seconds. With no kills this is the undisturbed run. The last line is JSON: what was
hit.
"""

from __future__ import annotations

import json
import mmap
import os
import random
import signal
import sys
import time
import traceback
from contextlib import contextmanager
from pathlib import Path

import alembic.command
import numpy as np
import psycopg
import sqlalchemy as sa

import connectors.csv_source
import monitor.store.open
from monitor.backfill import backfill
from monitor.commands.opening import open_site, opened
from monitor.daemon import Daemon
from monitor.drift.charts import ewma_limit_width
from monitor.judging import judge_site, plant_now
from monitor.store.errors import InstanceRunning
from monitor.thermo.water import state_pt

OPENING, COMPUTING, WRITING = 1, 2, 3
DOING = mmap.mmap(-1, 1)
DOING_WHAT = {0: "starting", OPENING: "opening", COMPUTING: "computing", WRITING: "writing"}
LOCK_PATIENCE = 30.0
EARLY = 0.2
"""The share of kills that may fall before a process has the site's lock."""
AIMED = 0.3
"""The share of kills that wait for a write transaction, and fall within the next moments of it."""
MOMENTS = 0.008
"""[s] What a small window's write takes, about."""
# Read by name only when they are needed, which in every fork would be anew.
IMPORTED = (alembic.command, psycopg, connectors.csv_source, monitor.store.open)


def doing(what):
    DOING[0] = what


@sa.event.listens_for(sa.Engine, "begin")
def _begun(connection):
    if DOING[0] == COMPUTING and connection.get_execution_options().get("lostwork_write"):
        doing(WRITING)


@sa.event.listens_for(sa.Engine, "rollback")
def _undone(_connection):
    if DOING[0] == WRITING:
        doing(COMPUTING)


# The event "commit" comes before the commit itself, which is a part of the writing.
@sa.event.listens_for(sa.pool.Pool, "checkin")
def _written(_raw, _record):
    _undone(None)


@contextmanager
def alone(path):
    """The site open, and locked: PostgreSQL lets go of a dead process's lock a moment later."""
    doing(OPENING)
    with opened(path) as at:
        deadline = time.monotonic() + LOCK_PATIENCE
        while True:
            try:
                with at.database.instance_lock(at.site.id, "kill loop"):
                    doing(COMPUTING)
                    yield at
                    return
            except InstanceRunning:
                if time.monotonic() > deadline:
                    raise
                time.sleep(0.01)


def past(path, start, end):
    """What ``lostwork backfill`` does."""
    with alone(path) as at:
        backfill(at.site, at.store, start, end)
        judge_site(at.site, at.store, start, end, plant_now(at.store, end))


def live(path, end):
    """What ``lostwork run`` does, cell after cell, with a clock that runs as fast as it can."""
    with alone(path) as at:
        interval, settle = at.store.interval_s, at.site.file.site.settle
        now = [0.0]
        daemon = Daemon(at.site, at.store, lambda: now[0])
        while True:
            newest = int(at.store.newest().timestamp()) + interval
            now[0] = min(newest + interval, end) + settle
            daemon.cycle()
            if (now[0] - settle) % 3600 == 0:
                daemon.judge()
            if daemon._failing:
                raise SystemExit(str(daemon._failing))
            if newest >= end:
                return


def attempt(work, delay, *, early=False, then=None):
    """Run the work in a fork, and kill it after a time unless it is over: (died, doing what).

    The time counts from when the work has the site's lock, or if ``early`` from the fork. With
    ``then``, the next write transaction is waited for, and so much time after its begin.
    """
    doing(0)
    child = os.fork()
    if child == 0:
        code = 1
        try:
            work()
            code = 0
        except BaseException:  # noqa: BLE001 - shown by the test
            traceback.print_exc()
        finally:
            os._exit(code)
    if delay is not None:
        while not early and DOING[0] < COMPUTING and not _over(child):
            time.sleep(0.001)
        time.sleep(delay)
        if then is not None:
            while DOING[0] != WRITING and not _over(child):
                time.sleep(0.0002)
            time.sleep(then)
        os.kill(child, signal.SIGKILL)
    _, status = os.waitpid(child, 0)
    if os.WIFSIGNALED(status):
        return True, DOING_WHAT[DOING[0]]
    if os.WEXITSTATUS(status):
        raise SystemExit("the work failed by itself; its traceback is above")
    return False, ""


def _over(child):
    # Left as it is, for `waitpid` to find.
    return os.waitid(os.P_PID, child, os.WEXITED | os.WNOHANG | os.WNOWAIT) is not None


def disturbed(work, kills, longest, dice, hit):
    """Kill the work so many times, then let it end."""
    while kills:
        early = dice.random() < EARLY
        then = dice.uniform(0.0, MOMENTS) if dice.random() < AIMED else None
        died, what = attempt(work, dice.uniform(0.0, longest), early=early, then=then)
        if died:
            kills -= 1
            hit[what] = hit.get(what, 0) + 1
        else:
            # Too little was left to do for so long a time.
            longest *= 0.8
    attempt(work, None)


def warm_up(path):
    """Do once what takes each new process seconds: units, the steam tables, a chart's limits.

    Nothing here starts a thread, which a fork would lose.
    """
    drift = open_site(path).file.drift
    state_pt(np.array([1e6]), np.array([500.0]))
    for side in ("low", "high", "both"):
        ewma_limit_width(drift.weight, drift.false_alarm_every / 3600, side)


def main():
    path = Path(sys.argv[1])
    seed, in_backfill, in_live, start, end, live_end = map(int, sys.argv[2:])
    warm_up(path)
    dice, hit = random.Random(seed), {}  # noqa: S311 - moments, not secrets
    disturbed(lambda: past(path, start, end), in_backfill, 0.6, dice, hit)
    disturbed(lambda: live(path, live_end), in_live, 0.4, dice, hit)
    sys.stdout.write(json.dumps(hit) + "\n")


if __name__ == "__main__":
    main()
