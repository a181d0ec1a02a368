"""On a terminal: tables are ruled, long work shows a bar; Ctrl-C ends in order."""

from __future__ import annotations

import os
import signal
import sqlite3
import subprocess
import sys
import time
from pathlib import Path

import pytest

pytestmark = pytest.mark.skipif(os.name == "nt", reason="pseudo-terminals and signals of Unix")

LOSTWORK = [sys.executable, "-m", "monitor.cli"]


def on_a_terminal(*arguments):
    """Run a command whose stdout and stderr are terminals, and return what it showed."""
    ours, theirs = os.openpty()
    child = subprocess.Popen(
        [*LOSTWORK, *map(str, arguments)],
        stdout=theirs,
        stderr=theirs,
        env={**os.environ, "TERM": "xterm", "COLUMNS": "160"},
    )
    os.close(theirs)
    shown = b""
    while True:
        try:
            more = os.read(ours, 65536)
        except OSError:
            # Linux tells the end of a terminal like this.
            break
        if not more:
            break
        shown += more
    os.close(ours)
    return child.wait(60), shown.decode()


def test_a_terminal_gets_ruled_tables_and_colours(plant):
    code, shown = on_a_terminal("check", plant.path)
    assert code == 0
    assert "───" in shown
    assert "\x1b[32mok" in shown


def test_text_of_a_site_is_never_taken_for_markup(plant):
    plant.edit('name = "TT-0001"', 'name = "[red]TT-0001"')
    plant.edit('temperature = "TT-0001"', 'temperature = "[red]TT-0001"')
    code, shown = on_a_terminal("check", plant.path)
    assert code == 1
    assert "[red]TT-0001" in shown


def test_a_terminal_never_obeys_a_name(plant):
    """A file's or a tag's name that clears the screen or sets the window's title."""
    plant.edit('name = "TT-0001"', 'name = "TT\\u001b[2J\\u001b]0;owned\\u0007"')
    plant.edit('temperature = "TT-0001"', 'temperature = "TT\\u001b[2J\\u001b]0;owned\\u0007"')
    _, shown = on_a_terminal("check", plant.path)
    assert "\x1b[2J" not in shown
    assert "\x1b]0;" not in shown
    assert "TT\\x1b[2J" in shown


def test_a_backfill_shows_a_bar_on_a_terminal(plant):
    code, shown = on_a_terminal(
        "backfill", plant.path, "--from", "2026-01-10T00:00Z", "--to", "2026-01-12T00:00Z"
    )
    assert code == 0
    assert "100 %" in shown
    assert "━" in shown


def children_of(process):
    """Processes that a process started, as the system lists them."""
    listed = Path(f"/proc/{process}/task/{process}/children")
    return [int(child) for child in listed.read_text().split()] if listed.exists() else []


def is_running(process):
    try:
        state = Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()[0]
    except FileNotFoundError:
        return False
    return state != "Z"


def stored_hours(plant):
    try:
        with sqlite3.connect(plant.folder / "figures.sqlite") as database:
            return database.execute("select count(*) from ledger_figures").fetchone()[0] / 4
    except sqlite3.OperationalError:
        return 0


def wait_until(condition, child):
    deadline = time.monotonic() + 120
    while not condition():
        assert child.poll() is None
        assert time.monotonic() < deadline
        time.sleep(0.05)


@pytest.mark.slow
@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="looks processes up in /proc")
@pytest.mark.parametrize("way", [signal.SIGINT, signal.SIGKILL])
def test_a_backfill_that_is_ended_keeps_whole_days_and_leaves_no_process(make_plant, tmp_path, way):
    plant = make_plant(tmp_path / "site", days=60.0)
    # A shell that runs the tests in the background hands an ignored SIGINT on to children.
    before = signal.signal(signal.SIGINT, signal.default_int_handler)
    child = subprocess.Popen(
        [*LOSTWORK, "backfill", plant.path, "--from", "2026-01-10T00:00Z", "--to",
         "2026-03-11T00:00Z", "--workers", "2"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True,
    )  # fmt: skip
    signal.signal(signal.SIGINT, before)
    try:
        wait_until(lambda: stored_hours(plant) >= 48, child)
        workers = children_of(child.pid)
        assert workers
        child.send_signal(way)
        _, said = child.communicate(timeout=60)
    finally:
        child.kill()
    assert "Traceback" not in said
    hours = stored_hours(plant)
    assert 48 <= hours < 60 * 24
    assert hours % 24 == 0
    deadline = time.monotonic() + 30
    while any(map(is_running, workers)):
        assert time.monotonic() < deadline
        time.sleep(0.1)
    with sqlite3.connect(plant.folder / "figures.sqlite") as database:
        ((status, message),) = database.execute("select status, message from runs")
    if way is signal.SIGINT:
        assert child.returncode == 130
        assert (status, message) == ("failed", "interrupted")
    else:
        assert (status, message) == ("running", "")
