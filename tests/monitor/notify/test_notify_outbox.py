"""What is queued, when it is sent, and what happens when something breaks on the way."""

from __future__ import annotations

import json

import pytest
import sqlalchemy as sa
from notify_samples import HOUR, NOW, PASSWORD, alarm_of, step
from structlog.testing import capture_logs

from monitor.notify.deliver import wait_after
from monitor.notify.notifier import Notifier
from monitor.notify.queue import JobState, queue_alarms, queue_jobs
from monitor.store import schema
from monitor.store.errors import StoreError

DAY = 24 * HOUR


def posted(web):
    return [json.loads(body) for _, _, body in web.requests]


def events(web):
    return [(m["event"], m["subject"]) for m in posted(web)]


def test_an_alarm_is_told_once_when_raised_and_once_when_it_returns(
    told, web_server, hook_table, store_url
):
    web = web_server()
    at = told(hook_table(web.url), store=store_url)
    number = at.raise_alarm()
    for _ in range(3):
        at.minute()
    assert events(web) == [("raised", "TG1")]
    at.return_alarm(number, NOW - 600)
    for _ in range(3):
        at.minute()
    assert events(web) == [("raised", "TG1"), ("returned", "TG1")]
    assert at.states() == [("hook", "raised", "sent"), ("hook", "returned", "sent")]
    assert len({m["id"] for m in posted(web)}) == 2
    assert posted(web)[1]["raised"] == "2026-05-28T19:26:40Z"


def test_every_target_is_told_what_it_asked_for(told, web_server, hook_table):
    webs = [web_server(), web_server()]
    tables = [
        hook_table(web.url, f"on = {on}\n").replace('"hook"', f'"{name}"')
        for web, on, name in zip(webs, ('["alarm"]', '["return"]'), ("a", "b"), strict=True)
    ]
    at = told(*tables)
    at.return_alarm(at.raise_alarm(), NOW - 600)
    at.minute()
    assert [events(web) for web in webs] == [[("raised", "TG1")], [("returned", "TG1")]]


def test_a_backfill_of_last_year_tells_nobody(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    at.return_alarm(at.raise_alarm(NOW - 300 * DAY), NOW - 299 * DAY)
    still_open = at.raise_alarm(NOW - DAY - 1, figure="steam_rate")
    at.minute()
    assert posted(web) == []
    # What is new about an old alarm is told.
    at.return_alarm(still_open, NOW - 60)
    at.minute()
    assert [(m["event"], m["figure"]) for m in posted(web)] == [("returned", "steam_rate")]


def test_an_alarm_below_the_least_priority_is_told_when_it_rises(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url, 'least_priority = "medium"\n'))
    at.raise_alarm(priority="low")
    at.minute()
    assert at.states() == [("hook", "raised", "below")]
    # Days later: the rise itself is what is new.
    at.now += 5 * DAY
    at.store.put_alarm(alarm_of(NOW - HOUR, priority="high", message="Much worse."))
    for _ in range(2):
        at.minute()
    assert [(m["priority"], m["message"]) for m in posted(web)] == [("high", "Much worse.")]


def test_an_alarm_that_returns_below_the_least_priority_is_never_told(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url, 'least_priority = "high"\n'))
    number = at.raise_alarm()
    at.minute()
    at.return_alarm(number, NOW - 60)
    at.minute()
    at.minute()
    assert at.states() == [("hook", "raised", "superseded"), ("hook", "returned", "below")]
    assert posted(web) == []


def test_an_alarm_that_judging_again_moves_is_not_told_twice(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    judged(at, NOW - 2 * HOUR)
    at.minute()
    judged(at, NOW - HOUR)
    at.minute()
    judged(at, NOW - 3 * HOUR)
    at.minute()
    assert events(web) == [("raised", "TG1")]
    assert [state for *_, state in at.states()] == ["sent", "moved", "moved"]


def test_an_alarm_that_judging_again_takes_back_is_withdrawn(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    judged(at, NOW - HOUR)
    at.minute()
    judged(at)
    for _ in range(3):
        at.minute()
    assert events(web) == [("raised", "TG1"), ("withdrawn", "TG1")]
    assert "it is no alarm" in posted(web)[1]["text"]


def test_an_alarm_taken_back_before_it_was_told_is_not_told(told, hook_table, web_server):
    web = web_server()
    at = told(hook_table(web.url))
    judged(at, NOW - HOUR)
    queue_alarms(at.site, at.store, at.now)
    judged(at)
    at.minute()
    assert posted(web) == []
    assert at.states() == [("hook", "raised", "superseded")]


def judged(at, *raised):
    """What judging stores: exactly these alarms of the figure."""
    at.store.replace_alarms(
        "TG1", "eta_s_1", "drift", NOW - 10 * DAY,
        [(alarm_of(t), [step(t, "raise", "normal", "unacknowledged")]) for t in raised],
    )  # fmt: skip


def test_a_shelved_alarm_is_told_when_it_comes_back(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    number = at.store.put_alarm(alarm_of(NOW - HOUR, state="shelved"))
    at.store.record_transition(number, step(NOW - HOUR, "raise", "shelved", "shelved"))
    at.minute()
    assert posted(web) == []
    at.store.record_transition(number, step(NOW - 60, "unshelve", "shelved", "unacknowledged"))
    # Somebody has seen it: nothing more to tell.
    at.store.record_transition(number, step(NOW, "acknowledge", "unacknowledged", "acknowledged"))
    at.minute()
    assert events(web) == [("raised", "TG1")]


def test_another_site_in_the_same_store_is_left_alone(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    other = at.at.database.register("other", "", 900, "UTC", at.site.calendar)
    number = other.put_alarm(alarm_of(NOW - HOUR))
    other.record_transition(number, step(NOW - HOUR, "raise", "normal", "unacknowledged"))
    at.minute()
    assert posted(web) == []


def test_a_server_that_was_down_gets_everything_once_and_in_order(
    told, web_server, hook_table, store_url
):
    first = web_server()
    at = told(hook_table(first.url), store=store_url)
    first.answers = [503] * 5
    number = at.raise_alarm()
    tried = []
    for minute in range(40):
        if minute == 5:
            at.return_alarm(number, at.now)
        before = len(first.requests)
        at.minute()
        tried += [minute] * (len(first.requests) > before)
    # After 1, 2, 4 and 8 minutes; and at once when something new comes up.
    assert tried == [0, 1, 3, 5, 6, 8]
    delivered = posted(first)[5:]
    assert [m["event"] for m in delivered] == ["raised", "returned"]
    assert at.states() == [("hook", "raised", "sent"), ("hook", "returned", "sent")]
    assert len({m["id"] for m in posted(first)}) == 2


def test_nothing_listens_and_then_something_does(told, web_server, hook_table):
    gone = web_server()
    at = told(hook_table("http://127.0.0.1:9/hook"), hook_table(gone.url).replace('"hook"', '"b"'))
    at.raise_alarm()
    done = at.minute()
    # One target that is away leaves the others alone.
    assert [(d.target, d.outcome) for d in done] == [("hook", "waiting"), ("b", "sent")]
    assert "cannot be used" in done[0].error


def test_waits_grow_and_end_at_six_hours(told, hook_table):
    (notify,) = told(hook_table("http://127.0.0.1:9/")).site.file.notify
    waits = [wait_after(notify, tries) / 60 for tries in range(1, 13)]
    assert waits == [1, 2, 4, 8, 16, 32, 64, 128, 256, 360, 360, 360]
    assert wait_after(notify, 10_000) == 6 * HOUR


def test_after_the_stated_tries_a_message_is_given_up_and_kept(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url, "retries = 2\n"))
    web.answers = [500] * 3
    at.raise_alarm()
    outcomes = [d.outcome for _ in range(60) for d in at.minute()]
    assert outcomes == ["waiting", "waiting", "failed"]
    assert len(web.requests) == 3
    (kept,) = at.box.entries()
    assert (kept.state, kept.tries) == ("failed", 3)
    assert "answered 500" in kept.error
    with at.store.engine.connect() as connection:
        row = connection.execute(
            sa.text("select site, target, event, state, tries, time_utc from v_notifications")
        ).one()
    assert tuple(row) == ("mill_race", "hook", "raised", "failed", 3, "2026-05-28T19:26:40Z")


def test_a_message_that_is_refused_holds_up_no_other(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    web.answers = [422]
    at.raise_alarm()
    at.raise_alarm(figure="steam_rate")
    at.minute()
    assert [state for *_, state in at.states()] == ["failed", "sent"]


class Dies:
    """A real sender whose process dies right after the message went out."""

    def __init__(self, sender):
        self.sender = sender

    def send(self, message, now):
        self.sender.send(message, now)
        raise KeyboardInterrupt


def test_a_crash_between_sending_and_marking_sends_again_with_the_same_id(
    told, web_server, hook_table, store_url
):
    web = web_server()
    at = told(hook_table(web.url), store=store_url)
    at.raise_alarm()
    with pytest.raises(KeyboardInterrupt):
        at.minute({"hook": Dies(at.senders()["hook"])})
    # The new process waits before it tries again.
    at.now = NOW + 30
    at.minute()
    assert len(web.requests) == 1
    at.now = NOW + 61
    for _ in range(3):
        at.minute()
    one, other = posted(web)
    assert one == other
    assert at.states() == [("hook", "raised", "sent")]


def test_a_process_that_always_dies_ends_with_the_stated_tries(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url, "retries = 2\n"))
    at.raise_alarm()
    for _ in range(30):
        try:
            at.minute({"hook": Dies(at.senders()["hook"])})
        except KeyboardInterrupt:
            at.now += 60
    assert len(web.requests) == 3
    (kept,) = at.box.entries()
    assert (kept.state, kept.error) == (
        "failed",
        "the program ended while it was sent for the last time",
    )


class Broken:
    def send(self, message, now):
        raise ZeroDivisionError(f"{message.id} at {now}")


def test_a_fault_in_a_sender_is_told_and_holds_up_nothing(told, hook_table):
    at = told(hook_table("http://127.0.0.1:9/"))
    at.raise_alarm()
    at.raise_alarm(figure="steam_rate")
    notifier = Notifier(at.site, at.store, at, {"hook": Broken()})
    with capture_logs() as lines:
        notifier.run()
    assert [state for *_, state in at.states()] == ["failed", "failed"]
    assert isinstance(lines[0]["exc_info"], ZeroDivisionError)


def test_a_store_that_cannot_be_written_sends_nothing(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    at.raise_alarm()
    queue_alarms(at.site, at.store, at.now)
    with at.store.engine.begin() as connection:
        connection.exec_driver_sql(
            "create trigger full before update on notifications "
            "begin select raise(abort, 'database or disk is full'); end"
        )
    for _ in range(3):
        with pytest.raises(StoreError, match="disk is full"):
            at.minute()
    assert web.requests == []
    with at.store.engine.begin() as connection:
        connection.exec_driver_sql("drop trigger full")
    at.minute()
    assert len(web.requests) == 1


def test_a_wrong_password_is_told_once_and_not_tried_every_minute(told, mail_server, mail_table):
    box = mail_server()
    box.password = "changed-since"  # noqa: S105 - made up
    at = told(mail_table(box.port))
    at.raise_alarm()
    notifier = Notifier(at.site, at.store, at)
    with capture_logs() as lines:
        for _ in range(180):
            notifier.run()
            at.now += 60
    # Now, and after 1, 3, 7, 15, 31, 63 and 127 minutes.
    assert len(box.logins) == 8
    told_lines = [line for line in lines if line["event"] == "cannot notify"]
    assert len(told_lines) == 1
    assert "the login was refused" in told_lines[0]["cause"]
    assert PASSWORD not in json.dumps(lines)
    assert PASSWORD not in json.dumps([vars(e) for e in at.box.entries()])
    box.password = PASSWORD
    with capture_logs() as lines:
        for _ in range(120):
            notifier.run()
            at.now += 60
    assert len(box.messages) == 1
    own = [line["event"] for line in lines if "library" not in line]
    assert own == ["notified", "notifications go out again"]


def test_in_a_quiet_period_only_the_newest_is_kept_for_its_end(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url, 'quiet = "1 h"\n'))
    flapping = [at.raise_alarm(NOW - 60)]
    at.minute()
    for minute in range(1, 50):
        if minute % 10 == 5:
            at.return_alarm(flapping[-1], at.now)
        if minute % 10 == 0:
            flapping.append(at.raise_alarm(at.now))
        if minute == 3:
            # Another figure is not held back.
            at.raise_alarm(at.now, figure="steam_rate")
        at.minute()
    assert [(m["event"], m["figure"]) for m in posted(web)] == [
        ("raised", "eta_s_1"),
        ("raised", "steam_rate"),
    ]
    for _ in range(30):
        at.minute()
    assert [(m["event"], m["figure"]) for m in posted(web)][2:] == [("returned", "eta_s_1")]
    assert [s for *_, s in at.states()].count("superseded") == 8


def test_what_waited_while_no_daemon_ran_is_given_up_when_it_is_old(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    at.raise_alarm()
    queue_alarms(at.site, at.store, at.now)
    at.now += 3 * DAY
    (done,) = at.minute()
    assert done.outcome == "failed"
    assert "too old" in done.error
    assert web.requests == []


def test_old_messages_are_dropped_and_those_to_be_sent_are_not(told, hook_table, web_server):
    web = web_server()
    at = told(hook_table(web.url))
    at.raise_alarm()
    at.minute()
    at.now += 200 * DAY
    at.raise_alarm(at.now - 60)
    queue_alarms(at.site, at.store, at.now)
    Notifier(at.site, at.store, at).run()
    assert at.states() == [("hook", "raised", "sent")]
    assert len(web.requests) == 2


def test_a_failing_job_is_told_once_and_so_is_its_recovery(told, web_server, hook_table, store_url):
    web = web_server()
    at = told(hook_table(web.url), store=store_url)
    notifier = Notifier(at.site, at.store, at)
    for _ in range(5):
        notifier.job_failed("cycle", "exports/*.csv: no such file\r\nX: y")
        notifier.run()
        at.now += 60
    # A new process, in which it goes on failing, and then works.
    notifier = Notifier(at.site, at.store, at)
    notifier.job_failed("cycle", "exports/*.csv: no such file")
    notifier.run()
    notifier.job_worked("cycle")
    notifier.job_worked("pages")
    for _ in range(3):
        notifier.run()
    assert [(m["event"], m["job"], m["cause"]) for m in posted(web)] == [
        ("failed", "cycle", "exports/*.csv: no such file X: y"),
        ("recovered", "cycle", None),
    ]


def test_a_job_that_works_again_after_a_restart_is_told(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    queue_jobs(at.site, at.store, {"cycle": JobState(True, NOW, "away")}, NOW)
    at.deliver()
    again = Notifier(at.site, at.store, at)
    again.run()
    again.job_worked("cycle")
    again.run()
    assert [m["event"] for m in posted(web)] == ["failed", "recovered"]


def test_a_store_that_is_away_is_told_from_memory_and_not_again(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    web.answers = [503]
    notifier = Notifier(at.site, at.store, at)
    rename(at, "notifications", "away")
    notifier.job_failed("cycle", "store figures.sqlite: cannot write")
    for _ in range(5):
        with pytest.raises(StoreError):
            notifier.run()
        at.now += 60
    # Once in vain, once taken.
    assert len(web.requests) == 2
    rename(at, "away", "notifications")
    notifier.run()
    notifier.job_worked("cycle")
    notifier.run()
    assert [m["event"] for m in posted(web)[1:]] == ["failed", "recovered"]
    assert at.states() == [("hook", "failed", "sent"), ("hook", "recovered", "sent")]


def rename(at, before, after):
    with at.store.engine.begin() as connection:
        # The view would hold on to the table's name.
        connection.exec_driver_sql("drop view if exists v_notifications")
        connection.exec_driver_sql(f"alter table {before} rename to {after}")


def test_a_fault_in_a_sender_while_the_store_is_away_is_told_with_its_cause(told, hook_table):
    at = told(hook_table("http://127.0.0.1:9/"))
    notifier = Notifier(at.site, at.store, at, {"hook": Broken()})
    rename(at, "notifications", "away")
    notifier.job_failed("cycle", "away")
    with capture_logs() as lines, pytest.raises(StoreError):
        notifier.run()
    assert isinstance(lines[0]["exc_info"], ZeroDivisionError)


def test_without_targets_nothing_is_queued(told):
    at = told()
    at.raise_alarm()
    notifier = Notifier(at.site, at.store, at)
    notifier.job_failed("cycle", "away")
    assert notifier.run() == ()
    with at.store.engine.connect() as connection:
        assert connection.execute(sa.select(schema.notifications)).all() == []


def test_a_stop_ends_between_two_messages(told, web_server, hook_table):
    web = web_server()
    at = told(hook_table(web.url))
    for figure in ("eta_s_1", "steam_rate", "x"):
        at.raise_alarm(figure=figure)
    Notifier(at.site, at.store, at).run(lambda: len(web.requests) >= 2)
    assert len(web.requests) == 2
