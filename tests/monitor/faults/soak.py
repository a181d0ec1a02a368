"""Live for many simulated days in one process, and print what it grew by; started by its test.

    soak.py SITE DAYS [LOG]

Every job of the daemon has its turn: figures each interval, notifications too, judgement each
hour, pages each day, shift reports at each end of a shift, housekeeping at midnight. With LOG, a
line a simulated day tells memory, open files and threads, for whoever watches a long run.

The last line is JSON: memory, open files and threads after a quarter of the time and at the end.
"""

from __future__ import annotations

import gc
import json
import sys
import threading
import time
from pathlib import Path

import pandas as pd

from monitor import log
from monitor.commands.opening import opened
from monitor.daemon import Daemon
from monitor.holding import SiteLock
from monitor.triggers import last_shifts

PAGE_KB = 4
DAY = 86400


def resident_kb():
    return int(Path("/proc/self/statm").read_text().split()[1]) * PAGE_KB


def measured():
    gc.collect()
    handles = len(list(Path("/proc/self/fd").iterdir()))
    return {"kb": resident_kb(), "handles": handles, "threads": threading.active_count()}


class DayBook:
    """A line a simulated day, if a file for it is named."""

    def __init__(self, path):
        self._path, self._begun = path, time.monotonic()

    def note(self, day, found):
        if self._path is None:
            return
        seconds = round(time.monotonic() - self._begun)
        with self._path.open("a") as out:
            out.write(json.dumps({"day": day, **found, "seconds": seconds}) + "\n")


def live_a_cell(daemon, now, reported):
    """The jobs that are due at the end of one cell; the end of the last shift reported."""
    settle = daemon.site.file.site.settle
    now[0] += daemon.store.interval_s
    moment = now[0]
    now[0] += settle
    for job in (daemon.beat, daemon.cycle, daemon.notify):
        job()
    if moment % 3600 == 0:
        daemon.judge()
    if (end := last_shifts(daemon.site.calendar, moment)[-1].end) != reported:
        daemon.shift_report()
    if moment % DAY == 0:
        daemon.pages()
        daemon.housekeeping()
    now[0] = moment
    return end


def main():
    path, days = Path(sys.argv[1]), float(sys.argv[2])
    book = DayBook(Path(sys.argv[3]) if sys.argv[3:] else None)
    log.configure()
    now = [pd.Timestamp("2026-01-11T00:00Z").timestamp()]
    with opened(path) as at:
        lock = SiteLock(at.database, at.site.id, "soak")
        daemon = Daemon(at.site, at.store, lambda: now[0], lock=lock, database=at.database)
        begin = now[0]
        end, quarter = begin + days * DAY, begin + days * DAY / 4
        early, reported = None, None
        while now[0] < end:
            reported = live_a_cell(daemon, now, reported)
            if (now[0] - begin) % DAY == 0:
                book.note(round((now[0] - begin) / DAY), measured())
            if early is None and now[0] >= quarter:
                early = measured()
        late = measured()
        failing = {n: j.cause for n, j in daemon.health.jobs.items() if j.failures}
        daemon.close()
        lock.release()
    sys.stdout.write(json.dumps({"early": early, "late": late, "failing": failing}) + "\n")


if __name__ == "__main__":
    main()
