"""Heartbeat, metrics and the service manager's socket."""

from __future__ import annotations

import json
import re
import socket

import pytest
from structlog.testing import capture_logs

from monitor.health import Health, read_heartbeat, tell_systemd

# A sample line of the OpenMetrics text format 1.0 (its ABNF, from memory): name, labels, number.
SAMPLE = re.compile(
    r'[a-zA-Z_:][a-zA-Z0-9_:]*\{[a-z_]+="(\\[\\n"]|[^"\\\n])*"'
    r'(,[a-z_]+="(\\[\\n"]|[^"\\\n])*")*\} -?[0-9.e+]+'
)
HEAD = re.compile(r"# (TYPE [a-z_]+ (gauge|counter)|UNIT [a-z_]+_seconds seconds|HELP [a-z_]+ .+)")


@pytest.fixture
def health(tmp_path):
    return Health("mill", lambda: 1000.0, tmp_path / "beat.json", tmp_path / "lostwork.prom")


def test_the_heartbeat_tells_what_fails_and_since_when(health):
    health.worked("pages")
    health.failed("cycle", "the historian is away")
    health.failed("cycle", "the historian is away")
    health.due({"cycle": 1300.0})
    health.beat()
    jobs = read_heartbeat(health.heartbeat)["jobs"]
    assert jobs["cycle"] == {
        "last": None, "next": 1300.0, "failing_since": 1000.0,
        "cause": "the historian is away", "failures": 2,
    }  # fmt: skip
    assert jobs["pages"]["last"] == 1000.0
    health.end()
    assert read_heartbeat(health.heartbeat) is None


def test_metrics_are_openmetrics_whatever_a_job_is_called(health):
    health.failed('odd "job"\n\\', "x")
    health.stored(900, 50, 2)
    health.beat()
    text = health.metrics.read_text()
    assert text.endswith("\n# EOF\n")
    *lines, last = text.splitlines()
    assert last == "# EOF"
    assert all(HEAD.fullmatch(x) if x.startswith("#") else SAMPLE.fullmatch(x) for x in lines), text
    assert 'lostwork_readings_total{site="mill"} 50' in lines
    assert 'lostwork_job_failing{site="mill",job="odd \\"job\\"\\n\\\\"} 1' in lines
    # A counter's samples end in _total, its family's name does not.
    assert "# TYPE lostwork_readings counter" in lines


def test_a_heartbeat_that_cannot_be_written_is_told_once_and_when_it_can(health):
    health.heartbeat.mkdir()
    with capture_logs() as lines:
        health.beat()
        health.beat()
        health.heartbeat.rmdir()
        health.beat()
    assert [line["log_level"] for line in lines] == ["error", "info"]
    assert json.loads(health.heartbeat.read_text())["site"] == "mill"


@pytest.mark.skipif(not hasattr(socket, "AF_UNIX"), reason="a socket of Unix")
@pytest.mark.parametrize("abstract", [False, True])
def test_the_service_manager_is_told_on_its_socket(tmp_path, monkeypatch, abstract):
    name = f"@{tmp_path.name}" if abstract else str(tmp_path / "s")
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as manager:
        manager.bind("\0" + name[1:] if abstract else name)
        monkeypatch.setenv("NOTIFY_SOCKET", name)
        assert tell_systemd("READY=1")
        assert manager.recv(100) == b"READY=1"
    assert not tell_systemd("WATCHDOG=1")
    monkeypatch.delenv("NOTIFY_SOCKET")
    assert not tell_systemd("READY=1")
