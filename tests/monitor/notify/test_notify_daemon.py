"""The daemon notifies beside its other jobs, and the command shows what became of it."""

from __future__ import annotations

import json
import os
import threading

import pytest
from notify_samples import HOUR, NOW, PASSWORD
from typer.testing import CliRunner

from monitor.cli import app
from monitor.commands.opening import opened
from monitor.daemon import Daemon
from monitor.running import Runner, new_scheduler


def lostwork(*arguments):
    return CliRunner().invoke(app, [str(a) for a in arguments], prog_name="lostwork")


def posted(web):
    return [json.loads(body) for _, _, body in web.requests]


def test_a_source_that_is_away_is_told_by_the_daemon_and_so_is_its_return(
    told, web_server, hook_table
):
    web = web_server()
    at = told(hook_table(web.url))
    export = at.site.folder / "exports" / "day.csv"
    at.now = int(export.stat().st_mtime)
    aside = export.rename(at.site.folder / "aside.csv")
    daemon = Daemon(at.site, at.store, at)
    for _ in range(3):
        daemon.cycle()
        daemon.notify()
        at.now += 60
    aside.rename(export)
    for _ in range(3):
        daemon.cycle()
        daemon.notify()
        at.now += 60
    daemon.close()
    assert [(m["event"], m["job"]) for m in posted(web)] == [
        ("failed", "cycle"),
        ("recovered", "cycle"),
    ]
    assert "exports" in posted(web)[0]["cause"]


WAITS = "import pathlib, sys; pathlib.Path('begun').touch(); open(sys.argv[1]).read()"


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="holds a command up with a named pipe")
def test_a_target_that_hangs_holds_up_no_figures(told, command_table, tmp_path):
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    at = told(command_table(WAITS, str(pipe), more='timeout = "60 s"\n'))
    at.raise_alarm()
    daemon = Daemon(at.site, at.store, at)
    notifying = threading.Thread(target=daemon.notify)
    notifying.start()
    try:
        while not (at.site.folder / "begun").exists():
            assert notifying.is_alive()
        # The command waits for the pipe, and the figures come.
        at.now = 1_768_010_400  # 2026-01-10T02:00Z
        daemon.cycle()
        assert at.store.newest() is not None
        assert notifying.is_alive()
    finally:
        pipe.write_text("go on")
        notifying.join()
        daemon.close()
    assert at.states() == [("pager", "raised", "sent")]


def test_the_daemon_notifies_each_minute_in_a_thread_of_its_own(told):
    at = told()
    scheduler = new_scheduler()
    runner = Runner("site", lambda: opened(at.site.path), scheduler)
    runner.begin()
    # By thread: the scheduler has not been started, so nothing runs.
    jobs = [(job.executor, job.func.__name__) for job in scheduler.get_jobs()]
    runner.end()
    assert [name for thread, name in jobs if thread != "site"] == ["notify"]
    assert len(jobs) == 7
    assert scheduler.get_jobs() == []


def test_a_daemon_that_has_to_end_sends_nothing_more(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    at.raise_alarm()
    daemon = Daemon(at.site, at.store, at)
    daemon.stop.set()
    daemon.notify()
    assert web.requests == []


def test_a_test_message_goes_to_every_target_or_to_one(
    told, mail_server, mail_table, web_server, hook_table
):
    box, web = mail_server(), web_server()
    at = told(mail_table(box.port), hook_table(web.url))
    ran = lostwork("notify", "test", at.site.path)
    assert (ran.exit_code, ran.stdout) == (0, "office: sent\nhook: sent\n")
    assert b"nothing has happened" in box.messages[0][0].content
    assert posted(web)[0]["event"] == "test"
    ran = lostwork("notify", "test", at.site.path, "hook")
    assert ran.stdout == "hook: sent\n"
    assert len({m["id"] for m in posted(web)}) == 2
    assert len(box.messages) == 1
    # A test is not part of what happened.
    assert at.states() == []


def test_a_test_that_fails_says_why_without_the_password(told, mail_server, mail_table):
    box = mail_server()
    box.password = "changed"  # noqa: S105 - made up
    ran = lostwork("notify", "test", told(mail_table(box.port)).site.path)
    assert ran.exit_code == 1
    assert "the login was refused (535)" in ran.stderr
    assert PASSWORD not in ran.output


def test_a_test_of_nothing_is_answered(told, hook_table):
    at = told(hook_table("http://127.0.0.1:9/"))
    ran = lostwork("notify", "test", at.site.path, "hok")
    assert ran.exit_code == 2
    assert "no [[notify]] 'hok'; did you mean 'hook'?" in ran.stderr
    at.site.path.write_text(at.site.path.read_text().split("[[notify]]")[0])
    ran = lostwork("notify", "test", at.site.path)
    assert ran.exit_code == 2
    assert "has no [[notify]] table" in ran.stderr


def test_the_list_shows_what_became_of_each(told, web_server, hook_table):
    web = web_server()
    web.answers = [200, 500]
    at = told(hook_table(web.url))
    assert lostwork("notify", "list", at.site.path).stdout == "no notifications\n"
    at.raise_alarm(NOW - HOUR)
    at.minute()
    at.raise_alarm(NOW - 60, figure="steam_rate")
    at.minute()
    lines = lostwork("notify", "list", at.site.path).stdout.splitlines()
    assert [line.split()[4] for line in lines[1:]] == ["sent", "waiting"]
    assert "answered 500" in lines[2]
    assert lines[1].endswith("-")
    (newest,) = json.loads(lostwork("notify", "list", at.site.path, "--last", 1, "--json").stdout)
    assert (newest["to"], newest["state"], newest["tries"]) == ("hook", "waiting", 1)
    assert newest["message"]["figure"] == "steam_rate"
    assert newest["due"] is not None
