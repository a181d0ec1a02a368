"""Many simulated days of live cycles: nothing grows, and nothing is left open.

``LOSTWORK_SOAK_DAYS=90`` lives so long (some minutes); two days are the default.
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
GROWTH = 0.05


@pytest.mark.slow
@pytest.mark.skipif(not Path("/proc/self/statm").exists(), reason="measures as Linux does")
def test_many_days_of_cycles_grow_neither_memory_nor_handles_nor_threads(make_plant, tmp_path):
    plant = make_plant(
        tmp_path / "site", days=DAYS + 1.2, every="20min", interval=60, worse_after_days=DAYS / 2
    )
    done = subprocess.run(
        [sys.executable, Path(__file__).with_name("soak.py"), plant.path, str(DAYS)],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True, text=True, check=False, timeout=3600,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr[-3000:]
    found = json.loads(done.stdout.splitlines()[-1])
    print(found)  # noqa: T201 - with -s: what was measured
    assert found["failing"] == {}
    early, late = found["early"], found["late"]
    assert late["handles"] <= early["handles"]
    assert late["threads"] <= early["threads"]
    assert late["kb"] < early["kb"] * (1 + GROWTH)
