"""What an exported CSV holds is text to a spreadsheet, whatever a historian calls its things."""

from __future__ import annotations

import csv
import io

import pytest

from monitor.commands.opening import opened
from monitor.export import export
from monitor.store.alarms import AlarmRecord

START = 1_768_000_000
# What spreadsheets take for formulas: OWASP, "CSV Injection" (from memory).
HOSTILE = [
    '=HYPERLINK("http://example.invalid","x")',
    "+1+cmd|' /C calc'!A0",
    "-2+3",
    "@SUM(1)",
    "\t=1",
    "\r=1",
]


@pytest.mark.parametrize("text", HOSTILE)
def test_no_text_is_a_formula(make_plant, tmp_path, text):
    plant = make_plant(tmp_path / "site", days=0.1)
    out = io.BytesIO()
    with opened(plant.path) as at:
        at.store.put_alarm(
            AlarmRecord(text, text, "drift", "unacknowledged", "low", START, text, unit=text)
        )
        export(at.store, "alarms", START - 10, START + 10, "csv", out)
    (row,) = csv.DictReader(io.StringIO(out.getvalue().decode(), newline=""))
    for name in ("subject", "figure", "message", "unit"):
        assert row[name] == "'" + text.replace("\r", "\n")
    # Numbers stay numbers, a negative one too.
    assert row["priority"] == "low"


def test_numbers_keep_their_sign(make_plant, tmp_path):
    plant = make_plant(tmp_path / "site", days=0.1)
    out = io.BytesIO()
    with opened(plant.path) as at:
        at.store.put_alarm(
            AlarmRecord("TG1", "eta", "drift", "unacknowledged", "low", START, "x", value=-2.5)
        )
        export(at.store, "alarms", START - 10, START + 10, "csv", out)
    (row,) = csv.DictReader(io.StringIO(out.getvalue().decode()))
    assert row["value"] == "-2.5"
