"""Events that people record: a wash, an overhaul, a calibration."""

from __future__ import annotations

from dataclasses import dataclass

import sqlalchemy as sa

from monitor.store import schema
from monitor.store.engine import reading, writing
from monitor.store.handle import Instant, SiteHandle, seconds
from monitor.store.upsert import inserted_id

__all__ = ["Event", "Events"]


@dataclass(frozen=True)
class Event:
    """Something done at a time.

    Attributes:
        subject: the equipment's or tag's id, empty for the whole site.
        kind: for example ``wash``, ``overhaul`` or ``calibration``.
        time: integer UTC seconds.
        who: who recorded it.
        note: in their words.
        event_id: its number in the store; 0 before it is there.
    """

    subject: str
    kind: str
    time: int
    who: str
    note: str = ""
    event_id: int = 0


class Events(SiteHandle):
    """The site's events."""

    def add_event(self, event: Event) -> int:
        """Store an event.

        Returns:
            Its number.
        """
        row = {**vars(event), "site_id": self.site_id}
        del row["event_id"]
        with writing(self.engine, "record an event") as connection:
            return inserted_id(connection, schema.events, row)

    def events(
        self, start: Instant | None = None, end: Instant | None = None, subject: str | None = None
    ) -> list[Event]:
        """Events in [start, end), oldest first; all subjects when none is named."""
        table = schema.events
        columns = [c for c in table.columns if c.name != "site_id"]
        query = sa.select(*columns).where(table.c.site_id == self.site_id)
        if start is not None:
            query = query.where(table.c.time >= seconds(start))
        if end is not None:
            query = query.where(table.c.time < seconds(end))
        if subject is not None:
            query = query.where(table.c.subject == subject)
        query = query.order_by(table.c.time, table.c.event_id)
        with reading(self.engine, "read its events") as connection:
            return [Event(**row) for row in connection.execute(query).mappings()]
