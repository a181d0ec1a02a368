"""Shifts that ended while no daemon ran are reported when one runs again, each once."""

from __future__ import annotations

import pandas as pd
import pytest
from structlog.testing import capture_logs


def reports(plant):
    return sorted(p.name.removesuffix(".html") for p in (plant.folder / "pages").glob("shift-2*"))


def written(lines):
    return [line["shift"] for line in lines if line["event"] == "shift report written"]


@pytest.fixture
def left(make_plant, drive, tmp_path):
    """A plant whose daemon reported the early shift of the second day, and ended."""
    plant = make_plant(tmp_path / "site", days=6.0, every="20min", interval=60)
    driven = drive(plant, "2026-01-11T14:05Z")
    driven.daemon.cycle()
    driven.daemon.shift_report()
    driven.daemon.close()
    assert reports(plant)[-1] == "shift-2026-01-11-early"
    return plant


def test_what_was_missed_in_a_day_is_reported_at_the_next_start(left, drive):
    before = reports(left)
    driven = drive(left, "2026-01-12T14:05Z")
    with capture_logs() as lines:
        driven.daemon.start()
    assert sorted(set(reports(left)) - set(before)) == [
        "shift-2026-01-11-late",
        "shift-2026-01-11-night",
        "shift-2026-01-12-early",
    ]
    # In order of time. The early shift before is written anew, since its last hour was computed
    # again with the look-back.
    assert written(lines)[-3:] == ["late", "night", "early"]
    with capture_logs() as lines:
        driven.daemon.cycle()
        driven.daemon.shift_report()
    assert written(lines) == []


def test_of_a_long_absence_three_days_are_reported(left, drive):
    driven = drive(left, "2026-01-15T23:05Z")
    driven.daemon.start()
    missed = [name for name in reports(left) if name > "shift-2026-01-12"]
    # Nine shifts to 22:00 local time of the 15th; those before can be had with `lostwork report`.
    shifts = ("early", "late", "night")
    every = [f"shift-2026-01-{day}-{shift}" for day in (12, 13, 14, 15) for shift in shifts]
    assert missed == every[2:11]


def test_a_report_that_could_not_be_written_is_written_later(left, drive):
    driven = drive(left, "2026-01-12T14:05Z")
    driven.daemon.cycle()
    pages = left.folder / "pages"
    aside = pages.rename(left.folder / "aside")
    pages.write_text("in the way")
    with capture_logs() as lines:
        driven.daemon.shift_report()
    assert [line["log_level"] for line in lines] == ["error"]
    pages.unlink()
    aside.rename(pages)
    driven.clock.now += pd.Timedelta("15min").total_seconds()
    driven.daemon.shift_report()
    assert reports(left)[-1] == "shift-2026-01-12-early"
