"""The log file of a daemon: put aside when it has grown, and told of when it cannot be written."""

from __future__ import annotations

import json

import pytest
import structlog
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from monitor import log
from monitor.site.load import load_site
from monitor.store.errors import StoreError
from monitor.store.site import SiteStore


@pytest.fixture(autouse=True)
def quiet_again():
    yield
    structlog.reset_defaults()


def test_a_file_that_has_grown_is_put_aside_and_old_ones_go(tmp_path):
    log.configure(json=True)
    path = tmp_path / "site.log"
    with log.also_to(path, "north", 2000, 2):
        for number in range(200):
            log.logger().info("figures stored", site="north", number=number)
    names = sorted(p.name for p in tmp_path.iterdir())
    assert names == ["site.log", "site.log.1", "site.log.2"]
    assert all(p.stat().st_size <= 2000 for p in tmp_path.iterdir())
    # Whole lines, in order, and the newest at the end.
    kept = [p.read_text().splitlines() for p in map(tmp_path.joinpath, reversed(names))]
    numbers = [json.loads(line)["number"] for lines in kept for line in lines]
    assert numbers == list(range(numbers[0], 200))


def test_lines_go_to_the_file_of_their_site_and_those_of_none_to_all(tmp_path, capsys):
    log.configure()
    north, south = tmp_path / "north.log", tmp_path / "south.log"
    with log.also_to(north, "north", 10**6, 1), log.also_to(south, "south", 10**6, 1):
        log.logger().info("one", site="north")
        log.logger().info("both")
    log.logger().info("late", site="north")
    assert [x.split("event=")[1] for x in north.read_text().splitlines()] == [
        "one site=north",
        "both",
    ]
    assert south.read_text().count("\n") == 1
    # Standard error has them all.
    assert capsys.readouterr().err.count("\n") == 3


def test_a_file_that_cannot_be_written_is_named_with_the_key(tmp_path):
    with (
        pytest.raises(log.LogFileError, match=r"\[daemon\] log_file: .*nowhere"),
        log.also_to(tmp_path / "nowhere" / "site.log", "north", 1000, 1),
    ):
        pass


def test_a_disk_that_fills_up_is_told_once_and_ends_nothing(tmp_path, capsys):
    log.configure()
    full = tmp_path / "site.log"
    full.symlink_to("/dev/full")
    with log.also_to(full, "north", 10**6, 1):
        for _ in range(3):
            log.logger().info("figures stored", site="north")
    said = capsys.readouterr().err
    assert said.count('event="figures stored"') == 3
    assert said.count("No space left on device") == 1


def test_each_line_of_a_cycle_names_its_run_and_site(make_plant, drive, tmp_path, monkeypatch):
    plant = make_plant(tmp_path / "site", days=1.0, every="30min", interval=60)
    driven = drive(plant, "2026-01-10T12:01Z")
    log.configure(json=True)

    write = SiteStore.write

    def telling(*arguments, **options):
        log.logger().info("in a window")
        return write(*arguments, **options)

    monkeypatch.setattr(SiteStore, "write", telling)
    path = tmp_path / "site.log"
    with log.also_to(path, "mill_race", 10**6, 1):
        driven.daemon.cycle()
    lines = [json.loads(x) for x in path.read_text().splitlines()]
    (line, *_) = [x for x in lines if x["event"] == "in a window"]
    assert line["run"] == driven.at.store.runs()[0].run_id
    assert line["site"] == "mill_race"


@pytest.mark.parametrize("json_lines", [False, True])
def test_a_hostile_name_makes_no_line_of_its_own_and_moves_no_cursor(capsys, json_lines):
    log.configure(json=json_lines)
    # A line break that fakes an entry, escape sequences, a bell, a right-to-left override.
    name = "a\nlevel=error event=fake\r\x1b[2J\x1b]0;title\x07\u202egnp.csv"
    log.logger().warning("passed over in a source", where=name)
    (line,) = capsys.readouterr().err.split("\n")[:-1]
    assert line.isprintable()
    if json_lines:
        assert json.loads(line)["where"] == name


@settings(suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(text=st.text())
def test_what_is_printable_stays_and_nothing_else_does(text):
    shown = log.printable(text)
    assert all(c.isprintable() or c == "\n" for c in shown)
    assert shown == text or not text.replace("\n", "").isprintable()


@pytest.mark.parametrize("size", ['"10"', "10", '"0 MB"', '"ten MB"', '"10 MiB"'])
def test_a_size_that_is_none_is_refused_with_an_example(make_plant, tmp_path, size):
    plant = make_plant(tmp_path / "site", days=0.1)
    plant.edit("[economics]", f"[daemon]\nlog_size = {size}\n\n[economics]")
    with pytest.raises(Exception, match=r"10 MB") as caught:
        load_site(plant.path)
    assert not isinstance(caught.value, StoreError)
    assert "log_size" in str(caught.value)
