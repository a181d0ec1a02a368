"""Many simulated days of live cycles: nothing grows, and nothing is left open.

``LOSTWORK_SOAK_DAYS=90`` lives so long; two days are the default. ``LOSTWORK_SOAK_INTERVAL=10``
makes a cycle of each ten minutes instead of each hour, ``LOSTWORK_SOAK_LOG=FILE`` writes a line a
simulated day.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[3]
DAYS = float(os.environ.get("LOSTWORK_SOAK_DAYS", "2"))
INTERVAL = int(os.environ.get("LOSTWORK_SOAK_INTERVAL", "60"))
LOG = os.environ.get("LOSTWORK_SOAK_LOG")
LONGEST = 4 * 3600
GROWTH = 0.05


@pytest.mark.slow
@pytest.mark.skipif(not Path("/proc/self/statm").exists(), reason="measures as Linux does")
def test_many_days_of_cycles_grow_neither_memory_nor_handles_nor_threads(make_plant, tmp_path):
    plant = make_plant(
        tmp_path / "site",
        days=DAYS + 1.2,
        every=f"{min(20, INTERVAL)}min",
        interval=INTERVAL,
        worse_after_days=DAYS / 2,
    )
    # What the pages draw is as long as this, and not as old as the store, from early on.
    plant.edit("[economics]", f"[pages]\ndays = {min(14.0, DAYS / 5)}\n\n[economics]")
    done = subprocess.run(
        [
            sys.executable, Path(__file__).with_name("soak.py"), plant.path, str(DAYS),
            *([LOG] if LOG else []),
        ],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True, text=True, check=False, timeout=LONGEST,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr[-3000:]
    found = json.loads(done.stdout.splitlines()[-1])
    print(found)  # noqa: T201 - with -s: what was measured
    assert found["failing"] == {}
    early, late = found["early"], found["late"]
    assert late["handles"] <= early["handles"]
    assert late["threads"] <= early["threads"]
    assert late["kb"] < early["kb"] * (1 + GROWTH)
