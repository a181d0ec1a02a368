"""What is said of figures that are not kept for ever."""

from __future__ import annotations

import pytest

from monitor.commands.exits import ExitCode


def test_a_stretch_that_has_expired_is_refused_and_nothing_is_computed(plant, lostwork):
    plant.edit("[store]\n", '[store]\nkeep_cells = "40 day"\n')
    ran = lostwork("backfill", plant.path, "--from", "2020-01-10", "--to", "2020-01-11")
    assert ran.code == ExitCode.WRONG_USE
    assert "have expired" in ran.err
    assert "keep_cells" in ran.err


@pytest.mark.parametrize(
    ("keys", "said"),
    [
        ('keep_cells = "20 day"', "35 days at least"),
        ('keep_hours = "400 day"', "as long as keep_cells"),
        ('keep_cells = "400 day"\nkeep_hours = "100 day"', "as long as keep_cells"),
        ("keep_cells = 400", "has no unit"),
    ],
)
def test_limits_that_cannot_hold_are_told(plant, lostwork, keys, said):
    plant.edit("[store]\n", f"[store]\n{keys}\n")
    ran = lostwork("check", plant.path)
    assert ran.code == ExitCode.SITE_FILE
    assert said in ran.err + ran.out
