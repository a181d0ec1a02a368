"""Open new stores from several processes and threads at the same instant; run by its test.

    opening_race.py FOLDER URL...

For each store four forks of this process, with all imported, wait for each other; then two threads
in each open the store, register one of two sites, and read it. The last line is JSON: what went
wrong.
"""

from __future__ import annotations

import json
import multiprocessing
import sys
import threading
import traceback
from pathlib import Path

import alembic.command
import psycopg
import store_samples as samples

from monitor.store.open import open_store

PROCESSES, THREADS = 4, 2
PATIENCE = 60.0
# Read by name only when they are needed, which would spread the forks in time.
IMPORTED = (alembic.command, psycopg)


def open_it(url, folder, site, start, wrong):
    try:
        start.wait(PATIENCE)
        with open_store(url, folder) as store:
            assert samples.register(store, site).newest() is None
    except Exception:  # noqa: BLE001 - shown by the test
        wrong.append(traceback.format_exc())


def process(url, folder, start, found):
    wrong = []
    threads = [
        threading.Thread(target=open_it, args=(url, folder, site, start, wrong))
        for site in ("mill", "works")[:THREADS]
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    found.put(wrong)


def race(url, folder):
    """What went wrong in opening one store."""
    fork = multiprocessing.get_context("fork")
    start, found = fork.Barrier(PROCESSES * THREADS), fork.Queue()
    children = [
        fork.Process(target=process, args=(url, folder, start, found)) for _ in range(PROCESSES)
    ]
    for child in children:
        child.start()
    wrong = [text for _ in children for text in found.get(timeout=PATIENCE)]
    for child in children:
        child.join()
    return wrong


def main():
    folder, urls = Path(sys.argv[1]), sys.argv[2:]
    wrong = [text for url in urls for text in race(url, folder)]
    sys.stdout.write(json.dumps(wrong) + "\n")


if __name__ == "__main__":
    main()
