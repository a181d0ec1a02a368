"""Alarms as they stand, every step they took, and what people did to them.

When an alarm is raised, and which step is allowed, is decided elsewhere. Judging the same data
again may move alarms: these and their steps are replaced. What people did is kept apart and is
never replaced, so that it can be played on top again.
"""

from __future__ import annotations

import time
from dataclasses import dataclass
from typing import TYPE_CHECKING

import sqlalchemy as sa

from monitor.store import schema
from monitor.store.engine import reading, writing
from monitor.store.errors import NoSuchAlarm, StoreError
from monitor.store.handle import Instant, SiteHandle, seconds
from monitor.store.upsert import upsert

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["NORMAL", "AlarmAction", "AlarmRecord", "AlarmTransition", "Alarms"]

NORMAL = "normal"
"""The state in which an alarm needs nobody; every other state is open."""

_KEY = ("site_id", "subject", "figure", "kind", "raised")


@dataclass(frozen=True)
class AlarmRecord:
    """One alarm; times in integer UTC seconds of plant time.

    Subject, figure, kind and ``raised`` tell it from all others.

    Attributes:
        subject, figure: what it is about; the subject is an equipment or a tag.
        kind: for example ``drift``.
        state: in the words of ISA-18.2 / IEC 62682.
        priority: in the site's words.
        raised, cleared, acknowledged: None where it has not come to that.
        shelved_until: None unless it is shelved.
        message: a sentence for the operator.
        value, unit: what the figure was, None where that makes no sense.
        cost_per_day: in the site's currency, None where unknown.
        alarm_id: its number in the store; 0 before it is there.
    """

    subject: str
    figure: str
    kind: str
    state: str
    priority: str
    raised: int
    message: str
    cleared: int | None = None
    acknowledged: int | None = None
    shelved_until: int | None = None
    value: float | None = None
    unit: str = ""
    cost_per_day: float | None = None
    alarm_id: int = 0


@dataclass(frozen=True)
class AlarmTransition:
    """One step of an alarm.

    Attributes:
        time: plant time, integer UTC seconds.
        action: what happened.
        from_state, to_state: before and after.
        who: who did it.
        note: why.
        until: end of a shelving.
        recorded: wall clock when it was stored; 0 before it is there.
    """

    time: int
    action: str
    from_state: str
    to_state: str
    who: str
    note: str = ""
    until: int | None = None
    recorded: int = 0


@dataclass(frozen=True)
class AlarmAction:
    """What somebody did to a figure's alarm; times in integer UTC seconds.

    Attributes:
        subject, figure, kind: whose alarm.
        time: when it was done.
        action: for example ``acknowledge``.
        who: by whom.
        note: why.
        until: end of a shelving.
        recorded: wall clock when it was stored; 0 before it is there.
    """

    subject: str
    figure: str
    kind: str
    time: int
    action: str
    who: str
    note: str = ""
    until: int | None = None
    recorded: int = 0


class Alarms(SiteHandle):
    """The site's alarms."""

    def put_alarm(self, alarm: AlarmRecord) -> int:
        """Insert an alarm, or bring the one with the same key up to date.

        Returns:
            Its number, which stays the same.
        """
        with writing(self.engine, "store an alarm") as connection:
            return self._put(connection, alarm)

    def record_transition(self, alarm_id: int, transition: AlarmTransition) -> None:
        """Append a step and set the alarm's state; a step that is stored already adds nothing.

        Raises:
            NoSuchAlarm: the site has no such alarm.
        """
        table = schema.alarms
        with writing(self.engine, "record an alarm's step") as connection:
            change = (
                sa.update(table)
                .where(table.c.alarm_id == alarm_id, table.c.site_id == self.site_id)
                .values(state=transition.to_state)
            )
            known = self._steps(connection, alarm_id)
            if any(_same(transition, step) for step in known):
                return
            if connection.execute(change).rowcount != 1:
                raise NoSuchAlarm(f"site '{self.site}' has no alarm {alarm_id}")
            self._append(connection, alarm_id, [transition], first=len(known))

    def replace_alarms(
        self,
        subject: str,
        figure: str,
        kind: str,
        since: int,
        alarms: Sequence[tuple[AlarmRecord, Sequence[AlarmTransition]]],
    ) -> list[int]:
        """Make a figure's alarms raised at or after a time exactly these, with all their steps.

        An alarm with the same key keeps its number, and a step that was there keeps the time at
        which it was recorded.

        Returns:
            The alarms' numbers, in the order given.

        Raises:
            StoreError: an alarm is of another figure or was raised before ``since``.
        """
        for alarm, _ in alarms:
            if (alarm.subject, alarm.figure, alarm.kind) != (subject, figure, kind):
                raise StoreError(f"alarm of '{alarm.subject}' {alarm.figure} in another's place")
            if alarm.raised < since:
                raise StoreError(
                    f"alarm of '{subject}' {figure} raised before the stretch replaced"
                )
        table = schema.alarms
        with writing(self.engine, "replace alarms") as connection:
            numbers = [self._put(connection, alarm) for alarm, _ in alarms]
            gone = sa.delete(table).where(
                *self._alarms_of(subject, figure, kind),
                table.c.raised >= since,
                table.c.alarm_id.not_in(numbers),
            )
            connection.execute(gone)
            for number, (_, steps) in zip(numbers, alarms, strict=True):
                self._replace_steps(connection, number, steps)
        return numbers

    def open_alarms(self) -> list[AlarmRecord]:
        """Alarms in any state but normal, newest first."""
        return self._alarms(schema.alarms.c.state != NORMAL)

    def alarm_history(
        self, start: Instant, end: Instant, subject: str | None = None
    ) -> list[AlarmRecord]:
        """Alarms that were raised before ``end`` and not over by ``start``, newest first."""
        table = schema.alarms
        first, last = seconds(start), seconds(end)
        over = sa.and_(
            table.c.state == NORMAL, table.c.cleared.is_not(None), table.c.cleared < first
        )
        of = [] if subject is None else [table.c.subject == subject]
        return self._alarms(table.c.raised < last, sa.not_(over), *of)

    def alarm(self, alarm_id: int) -> AlarmRecord:
        """One alarm.

        Raises:
            NoSuchAlarm: the site has no such alarm.
        """
        found = self._alarms(schema.alarms.c.alarm_id == alarm_id)
        if not found:
            raise NoSuchAlarm(f"site '{self.site}' has no alarm {alarm_id}")
        return found[0]

    def alarm_transitions(self, alarm_id: int) -> list[AlarmTransition]:
        """Every step of an alarm, in order."""
        with reading(self.engine, "read an alarm's steps") as connection:
            return self._steps(connection, alarm_id)

    def record_action(self, action: AlarmAction) -> None:
        """Keep what somebody did; the same again adds nothing."""
        row = {**vars(action), "site_id": self.site_id, "recorded": int(time.time())}
        keys = ("site_id", "subject", "figure", "kind", "time", "action", "who")
        with writing(self.engine, "record an action") as connection:
            upsert(connection, schema.alarm_actions, [row], keys)

    def alarm_actions(
        self, subject: str | None = None, figure: str | None = None
    ) -> list[AlarmAction]:
        """What people did, oldest first; of all figures when none is named."""
        table = schema.alarm_actions
        columns = [c for c in table.columns if c.name not in {"site_id", "action_id"}]
        query = sa.select(*columns).where(table.c.site_id == self.site_id)
        if subject is not None:
            query = query.where(table.c.subject == subject)
        if figure is not None:
            query = query.where(table.c.figure == figure)
        query = query.order_by(table.c.time, table.c.action_id)
        with reading(self.engine, "read actions") as connection:
            return [AlarmAction(**row) for row in connection.execute(query).mappings()]

    def _alarms_of(self, subject: str, figure: str, kind: str) -> list[sa.ColumnElement[bool]]:
        table = schema.alarms
        return [
            table.c.site_id == self.site_id,
            table.c.subject == subject,
            table.c.figure == figure,
            table.c.kind == kind,
        ]

    def _put(self, connection: sa.Connection, alarm: AlarmRecord) -> int:
        row = {**vars(alarm), "site_id": self.site_id}
        del row["alarm_id"]
        upsert(connection, schema.alarms, [row], _KEY)
        table = schema.alarms
        query = sa.select(table.c.alarm_id).where(
            *self._alarms_of(alarm.subject, alarm.figure, alarm.kind),
            table.c.raised == alarm.raised,
        )
        return int(connection.execute(query).scalar_one())

    def _alarms(self, *conditions: sa.ColumnElement[bool]) -> list[AlarmRecord]:
        table = schema.alarms
        columns = [c for c in table.columns if c.name != "site_id"]
        query = (
            sa.select(*columns)
            .where(table.c.site_id == self.site_id, *conditions)
            .order_by(table.c.raised.desc(), table.c.alarm_id.desc())
        )
        with reading(self.engine, "read its alarms") as connection:
            return [AlarmRecord(**row) for row in connection.execute(query).mappings()]

    def _steps(self, connection: sa.Connection, alarm_id: int) -> list[AlarmTransition]:
        table, owner = schema.alarm_transitions, schema.alarms
        columns = [c for c in table.columns if c.name not in {"alarm_id", "seq"}]
        query = (
            sa.select(*columns)
            .join(owner, owner.c.alarm_id == table.c.alarm_id)
            .where(table.c.alarm_id == alarm_id, owner.c.site_id == self.site_id)
            .order_by(table.c.seq)
        )
        return [AlarmTransition(**row) for row in connection.execute(query).mappings()]

    def _replace_steps(
        self, connection: sa.Connection, alarm_id: int, steps: Sequence[AlarmTransition]
    ) -> None:
        known = self._steps(connection, alarm_id)
        if len(known) == len(steps) and all(map(_same, known, steps)):
            return
        table = schema.alarm_transitions
        connection.execute(sa.delete(table).where(table.c.alarm_id == alarm_id))
        kept = [next((old for old in known if _same(old, step)), step) for step in steps]
        self._append(connection, alarm_id, kept, first=0)

    def _append(
        self,
        connection: sa.Connection,
        alarm_id: int,
        steps: Sequence[AlarmTransition],
        first: int,
    ) -> None:
        now = int(time.time())
        rows = [
            {
                **vars(step),
                "alarm_id": alarm_id,
                "seq": first + position,
                "recorded": step.recorded or now,
            }
            for position, step in enumerate(steps)
        ]
        if rows:
            connection.execute(sa.insert(schema.alarm_transitions), rows)


def _same(one: AlarmTransition, other: AlarmTransition) -> bool:
    """Whether two steps are one and the same, whenever each was recorded."""
    return all(getattr(one, n) == getattr(other, n) for n in vars(one) if n != "recorded")
