"""Live for many simulated days in one process, and print what it grew by; started by its test.

    soak.py SITE DAYS

The last line is JSON: memory, open files and threads after the first day and at the end.
"""

from __future__ import annotations

import gc
import json
import sys
import threading
from pathlib import Path

import pandas as pd

from monitor import log
from monitor.commands.opening import opened
from monitor.daemon import Daemon
from monitor.holding import SiteLock

PAGE_KB = 4


def resident_kb():
    return int(Path("/proc/self/statm").read_text().split()[1]) * PAGE_KB


def measured():
    gc.collect()
    handles = len(list(Path("/proc/self/fd").iterdir()))
    return {"kb": resident_kb(), "handles": handles, "threads": threading.active_count()}


def main():
    path, days = Path(sys.argv[1]), float(sys.argv[2])
    log.configure()
    now = [pd.Timestamp("2026-01-11T00:00Z").timestamp()]
    with opened(path) as at:
        lock = SiteLock(at.database, at.site.id, "soak")
        daemon = Daemon(at.site, at.store, lambda: now[0], lock=lock, database=at.database)
        end, settle = now[0] + days * 86400, at.site.file.site.settle
        early, quarter = None, now[0] + days * 86400 / 4
        while now[0] < end:
            now[0] += at.store.interval_s
            for job in (daemon.beat, daemon.cycle, daemon.notify):
                moment = now[0]
                now[0] += settle
                job()
                now[0] = moment
            if now[0] % 3600 == 0:
                daemon.judge()
            if now[0] % 86400 == 0:
                daemon.housekeeping()
            if early is None and now[0] >= quarter:
                early = measured()
        late = measured()
        failing = {n: j.cause for n, j in daemon.health.jobs.items() if j.failures}
        daemon.close()
        lock.release()
    sys.stdout.write(json.dumps({"early": early, "late": late, "failing": failing}) + "\n")


if __name__ == "__main__":
    main()
