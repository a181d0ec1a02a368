"""The outbox in the store: every message queued once for each target, and how it went.

A message goes from ``waiting`` to ``sent`` or ``failed``. Others are never sent, and say why:
``below`` (its alarm has not the priority that the target asked for; it may still rise), ``moved``
(the same alarm was told, and judging again gave it another beginning), ``superseded`` (something
newer about the same thing was sent instead, or there is nothing to tell any more).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa

from monitor.store import schema
from monitor.store.engine import reading, writing

if TYPE_CHECKING:
    from collections.abc import Collection, Iterable, Mapping

    from monitor.store.site import SiteStore

__all__ = ["Entry", "Outbox"]

_TABLE = schema.notifications
_TOLD = ("waiting", "sent", "failed")


@dataclass(frozen=True)
class Entry:
    """One message for one target; times in integer UTC seconds.

    Attributes:
        target: id of the [[notify]] table.
        key: what happened to what, and when: queued once for a target.
        about: what it is about: an alarm's figure, or a job.
        event: what happened, see `monitor.notify.message`.
        began: when the alarm was raised, or the job began to fail.
        time: when it happened.
        queued: when it was queued.
        state: see above.
        tries: how often sending it was begun.
        due: when it is tried next.
        ended: when it was sent or given up.
        error: why the last try failed.
        content: the JSON document.
        notification_id: its number; 0 before it is stored.
    """

    target: str
    key: str
    about: str
    event: str
    began: int
    time: int
    queued: int
    state: str
    due: int
    content: str
    tries: int = 0
    ended: int | None = None
    error: str = ""
    notification_id: int = 0


@dataclass(frozen=True)
class Outbox:
    """A site's part of the outbox."""

    store: SiteStore

    def add(self, entries: Iterable[Entry]) -> None:
        """Queue messages; one that is there already stays as it is."""
        rows = [
            {k: v for k, v in vars(entry).items() if k != "notification_id"}
            | {"site_id": self.store.site_id}
            for entry in entries
        ]
        if not rows:
            return
        with writing(self.store.engine, "queue notifications") as connection:
            for row in rows:
                known = sa.select(_TABLE.c.notification_id).where(
                    *self._of(row["target"]), _TABLE.c.key == row["key"]
                )
                if connection.execute(known).first() is None:
                    connection.execute(sa.insert(_TABLE).values(row))

    def known(self, target: str, keys: Collection[str]) -> set[str]:
        """Those of the keys that are queued for a target already, in whatever state."""
        if not keys:
            return set()
        query = sa.select(_TABLE.c.key).where(*self._of(target), _TABLE.c.key.in_(keys))
        with reading(self.store.engine, "read notifications") as connection:
            return set(connection.execute(query).scalars())

    def entries(
        self, target: str | None = None, states: Collection[str] = (), *, limit: int | None = None
    ) -> list[Entry]:
        """Messages, oldest first; with a limit, the newest ones.

        Args:
            target: of this target; of all when left out.
            states: in these states; in all when empty.
            limit: so many at most.
        """
        wanted = [_TABLE.c.state.in_(states)] if states else []
        return self._entries(*self._of(target), *wanted, limit=limit)

    def last_told(self, target: str, about: str) -> Entry | None:
        """The newest message about a thing that was, or is to be, handed over."""
        found = self._entries(
            *self._of(target), _TABLE.c.about == about, _TABLE.c.state.in_(_TOLD), limit=1
        )
        return found[0] if found else None

    def told_last(self, target: str, event: str, since: int) -> list[Entry]:
        """Things of which the newest message handed over tells of an event since a time."""
        newest = (
            sa.select(sa.func.max(_TABLE.c.notification_id))
            .where(*self._of(target), _TABLE.c.state.in_(_TOLD))
            .group_by(_TABLE.c.about)
        )
        return self._entries(
            _TABLE.c.notification_id.in_(newest),
            _TABLE.c.event == event,
            _TABLE.c.time > since,
        )

    def last_sent(self, target: str) -> dict[str, int]:
        """When something about each thing was last handed over to a target."""
        query = (
            sa.select(_TABLE.c.about, sa.func.max(_TABLE.c.ended))
            .where(*self._of(target), _TABLE.c.state == "sent")
            .group_by(_TABLE.c.about)
        )
        with reading(self.store.engine, "read notifications") as connection:
            return {about: int(ended) for about, ended in connection.execute(query)}

    def undelivered(self) -> dict[str, Entry]:
        """Targets whose newest message that came to an end was given up, and that message."""
        ended = ("sent", "failed")
        newest = (
            sa.select(_TABLE.c.target, sa.func.max(_TABLE.c.ended).label("ended"))
            .where(*self._of(None), _TABLE.c.state.in_(ended))
            .group_by(_TABLE.c.target)
            .subquery()
        )
        same = sa.and_(_TABLE.c.target == newest.c.target, _TABLE.c.ended == newest.c.ended)
        found = self._entries(*self._of(None), _TABLE.c.state.in_(ended), sa.exists().where(same))
        # Of two that ended in the same second, one that arrived says that messages do.
        arrived = {entry.target for entry in found if entry.state == "sent"}
        return {entry.target: entry for entry in found if entry.target not in arrived}

    def failed_since(self, time: int) -> int:
        """How many messages were given up since a time (UTC seconds)."""
        query = sa.select(sa.func.count()).where(
            *self._of(None), _TABLE.c.state == "failed", _TABLE.c.ended > time
        )
        with reading(self.store.engine, "read notifications") as connection:
            return int(connection.execute(query).scalar_one())

    def change(self, changes: Mapping[int, Mapping[str, Any]]) -> None:
        """Set columns of messages, by their numbers, all or none."""
        with writing(self.store.engine, "keep notifications up to date") as connection:
            for number, values in changes.items():
                connection.execute(
                    sa.update(_TABLE)
                    .where(*self._of(None), _TABLE.c.notification_id == number)
                    .values(**values)
                )

    def prune(self, before: int) -> int:
        """Drop messages of what happened before a time, but those that are still to be sent.

        Returns:
            How many.
        """
        old = sa.delete(_TABLE).where(
            *self._of(None), _TABLE.c.time < before, _TABLE.c.state != "waiting"
        )
        with writing(self.store.engine, "drop old notifications") as connection:
            return connection.execute(old).rowcount

    def _of(self, target: str | None) -> list[sa.ColumnElement[bool]]:
        own = [_TABLE.c.site_id == self.store.site_id]
        return own if target is None else [*own, _TABLE.c.target == target]

    def _entries(
        self, *conditions: sa.ColumnElement[bool], limit: int | None = None
    ) -> list[Entry]:
        columns = [c for c in _TABLE.columns if c.name != "site_id"]
        query = sa.select(*columns).where(*conditions).order_by(_TABLE.c.notification_id.desc())
        with reading(self.store.engine, "read notifications") as connection:
            rows = connection.execute(query.limit(limit)).mappings()
            return [Entry(**row) for row in rows][::-1]
