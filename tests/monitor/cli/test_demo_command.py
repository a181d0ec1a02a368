"""demo: everything in one go, in a folder of its own."""

from __future__ import annotations

import re

import pytest


@pytest.mark.slow
def test_the_demo_runs_through_and_says_what_it_found(lostwork, tmp_path):
    folder = tmp_path / "demo"
    ran = lostwork("demo", "--folder", folder, "--days", "2", "--seed", "7", "--truth", "--json")
    assert ran.code == 0, ran.err
    assert (folder / "truth" / "events.csv").is_file()
    told = ran.json()
    assert told["readings"] > 100_000
    ledger = told["ledger_kw"]
    spent = sum(v for k, v in ledger.items() if k != "supplied")
    # The account closes by construction; what the readings do not explain is its own line.
    assert ledger["supplied"] == pytest.approx(spent, rel=1e-6)
    assert told["closure_share"] > 0.98
    assert sum(e["share"] for e in told["equipment"]) == pytest.approx(1)
    assert set(told["seconds"]) == {
        "simulation", "exports", "truth", "figures", "drift", "pages",
    }  # fmt: skip
    assert (folder / "pages" / "index.html").is_file()
    assert list((folder / "pages").glob("shift-*.html"))
    again = lostwork("demo", "--folder", folder, "--days", "2", "--keep")
    assert again.code == 0, again.err
    assert "exports:" not in again.err
    assert re.search(r"closes to 9\d\.\d\d %", again.out)
    assert str(folder / "pages" / "index.html") in again.out


def test_the_demo_does_not_touch_a_folder_that_holds_something_else(lostwork, tmp_path):
    (tmp_path / "thesis.txt").write_text("years of work")
    ran = lostwork("demo", "--folder", tmp_path, "--days", "1")
    assert ran.code == 2
    assert "holds something that is not a demo" in ran.err
    assert (tmp_path / "thesis.txt").read_text() == "years of work"
    assert [p.name for p in tmp_path.iterdir()] == ["thesis.txt"]


def test_the_truth_of_kept_exports_is_not_made_up(lostwork, tmp_path):
    ran = lostwork("demo", "--folder", tmp_path / "demo", "--truth", "--keep")
    assert ran.code == 2
    assert "leave out --keep" in ran.err
