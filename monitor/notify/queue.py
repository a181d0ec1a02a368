"""What is to be told to whom: alarms' steps and failed jobs into the outbox, each once.

Nothing is remembered between two calls but what the outbox holds: every call looks at the steps of
the last while (``not_older_than``, by plant time) and queues those that are not queued yet. So a
crash forgets nothing, and a backfill of last year tells nobody of last year's alarms.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING
from urllib.parse import quote, unquote

import sqlalchemy as sa

from monitor.drift.alarms import Action, AlarmState
from monitor.notify.message import Message, alarm_message, job_message
from monitor.notify.outbox import Entry, Outbox
from monitor.store import schema
from monitor.store.alarms import AlarmRecord
from monitor.store.engine import reading

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

    from monitor.site.load import Site
    from monitor.site.notify import Notify
    from monitor.store.site import SiteStore

__all__ = ["JobState", "job_entry", "queue_alarms", "queue_jobs"]

_RANK = {"low": 0, "medium": 1, "high": 2}
_OPEN = (AlarmState.UNACKNOWLEDGED, AlarmState.ACKNOWLEDGED)
_OVER = (AlarmState.RETURNED, AlarmState.NORMAL)


@dataclass(frozen=True)
class JobState:
    """How a job of the daemon is doing.

    Attributes:
        failing: whether it failed the last time.
        since: when that began, integer UTC seconds.
        cause: of the failure.
    """

    failing: bool
    since: int
    cause: str = ""


@dataclass(frozen=True)
class _Step:
    alarm: AlarmRecord
    event: str
    time: int

    @property
    def about(self) -> str:
        return _about(self.alarm)

    @property
    def key(self) -> str:
        return f"{self.about}/{self.alarm.raised}/{self.event}/{self.time}"


def queue_alarms(site: Site, store: SiteStore, now: int) -> None:
    """Queue what alarms did, for every target that asks for it.

    Args:
        site: the site.
        store: its part of the store.
        now: the wall clock, integer UTC seconds.

    Raises:
        StoreError: the database refuses.
    """
    wanting = [n for n in site.file.notify if {"alarm", "return"} & set(n.on)]
    if not wanting:
        return
    oldest = now - int(max(n.not_older_than for n in wanting))
    steps = _steps(store, oldest)
    for notify in wanting:
        _Queueing(site, store, notify, now).take(steps)


@dataclass(frozen=True)
class _Queueing:
    """Queueing for one target."""

    site: Site
    store: SiteStore
    notify: Notify
    now: int

    def take(self, steps: Iterable[_Step]) -> None:
        oldest = self.now - self.notify.not_older_than
        events = {"alarm": "raised", "return": "returned"}
        wanted = {events[on] for on in self.notify.on if on in events}
        new = {s.key: s for s in steps if s.time > oldest and s.event in wanted}
        box = Outbox(self.store)
        for key in box.known(self.notify.id, list(new)):
            del new[key]
        # One after the other: whether one was moved depends on what was queued before it.
        for step in sorted(new.values(), key=lambda s: s.time):
            box.add([self._entry(step, self._state(step, box))])
        self._promote(box)
        if "return" in self.notify.on:
            self._withdraw(box, int(oldest))

    def _state(self, step: _Step, box: Outbox) -> str:
        if not self._ranks(step.alarm):
            return "below"
        last = box.last_told(self.notify.id, step.about)
        gone = (
            step.event == "raised"
            and last is not None
            and last.event == "raised"
            and last.began not in _present(self.store, step.about)
        )
        return "moved" if gone else "waiting"

    def _ranks(self, alarm: AlarmRecord) -> bool:
        # A priority in words of the site's own is told: too much is better than too little.
        return _RANK.get(alarm.priority, len(_RANK)) >= _RANK[self.notify.least_priority]

    def _entry(self, step: _Step, state: str) -> Entry:
        message = alarm_message(self.site, self.notify, step.alarm, step.event, step.time, step.key)
        return Entry(
            target=self.notify.id,
            key=step.key,
            about=step.about,
            event=step.event,
            began=step.alarm.raised,
            time=step.time,
            queued=self.now,
            state=state,
            due=self.now,
            content=message.as_json(),
        )

    def _promote(self, box: Outbox) -> None:
        """Queue alarms that were below the target's priority and have risen to it."""
        for held in box.entries(self.notify.id, ("below",)):
            if held.event != "raised":
                continue
            alarm = _present(self.store, held.about).get(held.began)
            if alarm is None or alarm.state in _OVER:
                box.change({held.notification_id: {"state": "superseded", "ended": self.now}})
            elif alarm.state in _OPEN and self._ranks(alarm):
                entry = self._entry(_Step(alarm, held.event, held.time), "waiting")
                names = ("state", "queued", "due", "content")
                box.change({held.notification_id: {n: getattr(entry, n) for n in names}})

    def _withdraw(self, box: Outbox, oldest: int) -> None:
        """Take back what was told of an alarm that later readings have judged away."""
        for told in box.told_last(self.notify.id, "raised", oldest):
            present = _present(self.store, told.about)
            if told.began in present or any(raised > oldest for raised in present):
                continue
            if told.state == "failed":
                continue
            if told.state == "waiting":
                box.change({told.notification_id: {"state": "superseded", "ended": self.now}})
                continue
            was = _as_told(told)
            box.add([self._entry(_Step(was, "withdrawn", self.now), "waiting")])


def queue_jobs(site: Site, store: SiteStore, jobs: Mapping[str, JobState], now: int) -> None:
    """Queue jobs that fail and were not told, and jobs that work and were last told to fail.

    Args:
        site: the site.
        store: its part of the store.
        jobs: how each job is doing, by its name.
        now: the wall clock, integer UTC seconds.

    Raises:
        StoreError: the database refuses.
    """
    box = Outbox(store)
    for notify in (n for n in site.file.notify if "job" in n.on):
        for name, job in jobs.items():
            last = box.last_told(notify.id, f"job/{name}")
            told_failing = last is not None and last.event == "failed"
            if job.failing != told_failing:
                box.add([job_entry(site, notify, name, job, now)])


def job_entry(site: Site, notify: Notify, name: str, job: JobState, now: int) -> Entry:
    """The message that a job fails or works again, for one target."""
    event = "failed" if job.failing else "recovered"
    key = f"job/{name}/{event}/{job.since}"
    message = job_message(site, notify, name, event, job.since, job.cause, key)
    return Entry(
        target=notify.id,
        key=key,
        about=f"job/{name}",
        event=event,
        began=job.since,
        time=job.since,
        queued=now,
        state="waiting",
        due=now,
        content=message.as_json(),
    )


def _steps(store: SiteStore, oldest: int) -> list[_Step]:
    """What alarms did after a time, as far as it is told at all."""
    owner, step = schema.alarms, schema.alarm_transitions
    query = (
        sa.select(
            *(c for c in owner.columns if c.name != "site_id"),
            step.c.time.label("at"),
            step.c.action,
            step.c.from_state,
            step.c.to_state,
        )
        .join(step, step.c.alarm_id == owner.c.alarm_id)
        .where(owner.c.site_id == store.site_id, step.c.time > oldest)
        .order_by(step.c.time, step.c.alarm_id, step.c.seq)
    )
    with reading(store.engine, "read alarms' steps") as connection:
        rows = [dict(row) for row in connection.execute(query).mappings()]
    found = []
    for row in rows:
        at, action, before, after = (
            row.pop(name) for name in ("at", "action", "from_state", "to_state")
        )
        event = _event(action, before, after)
        if event:
            found.append(_Step(AlarmRecord(**row), event, int(at)))
    return found


def _event(action: str, before: str, after: str) -> str:
    """What a step means to those who are told, empty where it means nothing to them.

    Only what asks for attention, or no longer does: not what people did themselves, and nothing of
    an alarm that somebody has put aside.
    """
    if after == AlarmState.UNACKNOWLEDGED and before != after:
        return "raised"
    if action == Action.CLEAR and after in {AlarmState.RETURNED, AlarmState.NORMAL}:
        return "returned"
    return ""


def _about(alarm: AlarmRecord) -> str:
    # A tag's name may hold a slash.
    parts = (quote(part, safe=" ") for part in (alarm.subject, alarm.figure, alarm.kind))
    return "/".join(("alarm", *parts))


def _named(about: str) -> tuple[str, str, str]:
    """Subject, figure and kind again."""
    _, subject, figure, kind = (unquote(part) for part in about.split("/"))
    return subject, figure, kind


def _present(store: SiteStore, about: str) -> dict[int, AlarmRecord]:
    """The stored alarms of a figure by when they were raised."""
    table = schema.alarms
    subject, figure, kind = _named(about)
    columns = [c for c in table.columns if c.name != "site_id"]
    query = sa.select(*columns).where(
        table.c.site_id == store.site_id,
        table.c.subject == subject,
        table.c.figure == figure,
        table.c.kind == kind,
    )
    with reading(store.engine, "read its alarms") as connection:
        found = [AlarmRecord(**row) for row in connection.execute(query).mappings()]
    return {alarm.raised: alarm for alarm in found}


def _as_told(entry: Entry) -> AlarmRecord:
    """The alarm of a message, which the store no longer has."""
    subject, figure, kind = _named(entry.about)
    document = Message.read(entry.content).document
    return AlarmRecord(
        subject,
        figure,
        kind,
        AlarmState.NORMAL,
        str(document["priority"]),
        entry.began,
        str(document["message"]),
    )
