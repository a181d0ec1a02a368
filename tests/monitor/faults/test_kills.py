"""Kill -9 at random moments over a backfill and a live run: nothing lost, nothing doubled.

``LOSTWORK_KILLS=200`` kills so many times on SQLite and on PostgreSQL each (the default is enough
to find a fault that is not rare).
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest

from monitor.store.engine import make_engine

pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(not hasattr(os, "fork"), reason="kills forked processes"),
]

SCRIPT = Path(__file__).with_name("kill_loop.py")
ROOT = Path(__file__).parents[3]
KILLS = int(os.environ.get("LOSTWORK_KILLS", "25"))
A_ROUND = 25
ROUNDS = range(max(1, KILLS // A_ROUND))
PATIENCE = 600


def run(plant, seed, in_backfill, in_live):
    """Backfill two days, follow eight hours live, with so many kills; what they hit."""
    start = int(plant.start.timestamp())
    times = [start, start + 2 * 86400, start + 56 * 3600]
    done = subprocess.run(
        [sys.executable, SCRIPT, plant.path, *map(str, [seed, in_backfill, in_live, *times])],
        env={**os.environ, "PYTHONPATH": str(ROOT), "OPENBLAS_NUM_THREADS": "1"},
        capture_output=True,
        text=True,
        check=False,
        timeout=PATIENCE,
    )
    assert done.returncode == 0, done.stderr[-3000:]
    return json.loads(done.stdout.splitlines()[-1])


def tiny(make_plant, folder, store="sqlite:///figures.sqlite"):
    # It gets worse before the live hours, so that an alarm is among the rows.
    return make_plant(folder, days=2.5, every="5min", worse_after_days=1.9, store=store)


@pytest.fixture(scope="module")
def undisturbed(make_plant, tmp_path_factory):
    plant = tiny(make_plant, tmp_path_factory.mktemp("undisturbed") / "site")
    assert run(plant, 0, 0, 0) == {}
    return plant


def statuses(plant, store):
    engine = make_engine(store, plant.folder)
    with engine.connect() as connection:
        found = pd.read_sql_query(
            "select status, count(*) as runs from runs group by 1", connection
        )
    engine.dispose()
    return dict(zip(found["status"], found["runs"], strict=True))


@pytest.mark.parametrize("seed", ROUNDS)
def test_a_store_after_many_kills_equals_an_undisturbed_one(
    make_plant, undisturbed, whole_store, tmp_path, store_url, seed, record_property
):
    plant = tiny(make_plant, tmp_path / "site", store_url)
    kills = min(KILLS, A_ROUND)
    hit = run(plant, seed, kills // 2, kills - kills // 2)
    for what, times in hit.items():
        record_property(what, times)
    print(hit)  # noqa: T201 - with -s: where the kills fell
    assert sum(hit.values()) == kills
    ended = statuses(plant, store_url)
    # Some died with a run under way; the next process closed each of these.
    assert 0 < ended["abandoned"] <= kills
    assert set(ended) == {"abandoned", "done"}
    expected, found = whole_store(undisturbed), whole_store(plant, store_url)
    assert len(expected["alarms"])
    assert len(expected["ledger_figures"]) == 56 * 4
    for table, rows in expected.items():
        pd.testing.assert_frame_equal(found[table], rows, check_dtype=False, obj=table)
