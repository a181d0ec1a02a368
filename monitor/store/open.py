"""Open a store, and the sites in it."""

from __future__ import annotations

import re
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Self

import sqlalchemy as sa

from monitor.store import schema
from monitor.store.batch import EQUIPMENT_COLUMNS
from monitor.store.engine import make_engine, place, reading, writing
from monitor.store.errors import StoreError
from monitor.store.handle import RATED_FIGURES, SITE_SUBJECT
from monitor.store.lock import lock_site
from monitor.store.migrate import migrate
from monitor.store.runs import abandon_running
from monitor.store.site import SiteStore
from monitor.store.spans import calendar_key
from monitor.store.upsert import pairs, upsert

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence
    from pathlib import Path
    from types import TracebackType

    from monitor.store.lock import InstanceLock
    from monitor.store.spans import Calendar

__all__ = ["Store", "open_store"]

_SITE = re.compile(r"[\w-]{1,64}")


def open_store(url: str, folder: Path) -> Store:
    """Open a store and bring its tables up to date.

    Args:
        url: ``sqlite:///file`` (relative to ``folder``, or absolute) or ``postgresql://...``.
        folder: where a relative path is taken from: the site file's folder.

    Raises:
        StoreError: the store cannot be reached or written, or is newer than this program.
    """
    engine = make_engine(url, folder)
    try:
        migrate(engine)
    except BaseException:
        engine.dispose()
        raise
    return Store(engine)


@dataclass(frozen=True)
class Store:
    """An open store; may hold several sites. Use it as a context manager, or call `close`."""

    engine: sa.Engine

    def register(
        self,
        site: str,
        name: str,
        interval_s: int,
        time_zone: str,
        calendar: Calendar,
        *,
        streams: Sequence[tuple[str, str, str]] = (),
        equipment: Sequence[tuple[str, str, str]] = (),
        figures: Sequence[tuple[str, str, str, str, str]] = (),
    ) -> SiteStore:
        """Make a site, its subjects and its condition figures known, and give its store.

        Doing it again brings names up to date; nothing is ever removed. When the shifts or the
        time zone have changed, all roll-ups of the site are made anew.

        Args:
            site: the site's id.
            name: its name.
            interval_s: the grid's interval in seconds; cannot change once there are figures.
            time_zone: its time zone.
            calendar: its shifts, days and months (`monitor.site.shifts.ShiftCalendar`).
            streams: (id, name, medium) of each.
            equipment: (id, name, kind) of each.
            figures: (equipment, figure, label, unit, worse) of each condition figure.

        Raises:
            StoreError: an id that cannot name a file, another interval, a figure of unknown
                equipment or with the name of a column that all equipment has.
        """
        if not _SITE.fullmatch(site):
            raise StoreError(f"'{site}' cannot name a site: use letters, digits, '_' and '-'")
        taken = sorted({figure for _, figure, *_ in figures} & set(EQUIPMENT_COLUMNS))
        if taken:
            raise StoreError(f"a condition figure cannot be called '{taken[0]}': a column is")
        row = {"site": site, "name": name, "interval_s": interval_s, "time_zone": time_zone}
        with writing(self.engine, f"register site '{site}'") as connection:
            site_id = self._put_site(connection, row)
            subjects = [("site", SITE_SUBJECT, name, "")]
            subjects += [("stream", *stream) for stream in streams]
            subjects += [("equipment", *piece) for piece in equipment]
            _put_subjects(connection, site_id, subjects)
            _put_figures(connection, site_id, figures)
        return self._with_calendar(site, calendar)

    def site(self, site: str, calendar: Calendar | None = None) -> SiteStore:
        """Give the store of a site that is registered.

        Args:
            site: the site's id.
            calendar: needed to write; must be the one it was registered with.

        Raises:
            StoreError: there is no such site, or its calendar has changed.
        """
        table = schema.sites
        with reading(self.engine, "read its sites") as connection:
            row = connection.execute(sa.select(table).where(table.c.site == site)).first()
        if row is None:
            raise StoreError(
                f"{place(self.engine)}: there is no site '{site}' in it; it has "
                f"{', '.join(self.sites()) or 'none yet'}"
            )
        if calendar is not None and row.calendar != calendar_key(calendar):
            raise StoreError(
                f"{place(self.engine)}: site '{site}' was stored with other shifts or another time "
                "zone; register it again"
            )
        return SiteStore(
            self.engine, row.site_id, site, row.interval_s, row.time_zone, row.calendar, calendar
        )

    def sites(self) -> tuple[str, ...]:
        """Ids of the sites in the store."""
        table = schema.sites
        with reading(self.engine, "read its sites") as connection:
            return tuple(
                connection.execute(sa.select(table.c.site).order_by(table.c.site)).scalars()
            )

    @contextmanager
    def instance_lock(self, site: str, owner: str) -> Iterator[InstanceLock]:
        """Be the one instance that computes a site; runs that a dead one left are closed.

        Args:
            site: the site's id, registered.
            owner: who asks, in words, for example ``lostwork run``.

        Raises:
            InstanceRunning: another one does; the message says who.
            StoreError: there is no such site, or the lock cannot be tried.
        """
        site_id = self.site(site).site_id
        with lock_site(self.engine, site_id, site, owner) as lock:
            abandon_running(self.engine, site_id)
            yield lock

    def close(self) -> None:
        """Close all connections."""
        self.engine.dispose()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        self.close()

    def _put_site(self, connection: sa.Connection, row: dict[str, Any]) -> int:
        table = schema.sites
        query = sa.select(table.c.site_id, table.c.interval_s).where(table.c.site == row["site"])
        known = connection.execute(query).first()
        if known is None:
            # Not a plain insert: another process may register the same site at the same time.
            upsert(connection, table, [{**row, "calendar": ""}], ("site",))
            return int(connection.execute(query).one().site_id)
        if known.interval_s != row["interval_s"] and _has_figures(connection, known.site_id):
            raise StoreError(
                f"{place(self.engine)}: the figures of site '{row['site']}' are every "
                f"{known.interval_s} s, not every {row['interval_s']} s; keep the interval, or "
                "name another store or site id"
            )
        connection.execute(sa.update(table).where(table.c.site == row["site"]).values(row))
        return int(known.site_id)

    def _with_calendar(self, site: str, calendar: Calendar) -> SiteStore:
        known, key = self.site(site), calendar_key(calendar)
        handle = SiteStore(**{**vars(known), "calendar_key": key, "calendar": calendar})
        if known.calendar_key != key:
            handle.rebuild_rollups()
        return handle


def _put_subjects(
    connection: sa.Connection, site_id: int, subjects: Sequence[tuple[str, str, str, str]]
) -> None:
    rows = [
        {"site_id": site_id, "kind": kind, "subject": subject, "name": name, "detail": detail}
        for kind, subject, name, detail in subjects
    ]
    upsert(connection, schema.subjects, rows, ("site_id", "kind", "subject"))


def _put_figures(
    connection: sa.Connection, site_id: int, figures: Sequence[tuple[str, str, str, str, str]]
) -> None:
    names, owners = schema.figure_names, schema.subjects
    # In one order for all sites: two that register at once must not wait for each other in turn.
    wanted = sorted({*RATED_FIGURES, *(figure for _, figure, *_ in figures)})
    known = pairs(connection.execute(sa.select(names.c.figure, names.c.figure_id)))
    upsert(connection, names, [{"figure": f} for f in wanted if f not in known], ("figure",))
    known = pairs(connection.execute(sa.select(names.c.figure, names.c.figure_id)))
    query = sa.select(owners.c.subject, owners.c.subject_id).where(
        owners.c.site_id == site_id, owners.c.kind == "equipment"
    )
    pieces = pairs(connection.execute(query))
    absent = sorted({equipment for equipment, *_ in figures} - set(pieces))
    if absent:
        raise StoreError(f"figures of '{absent[0]}', which is not among the equipment")
    rows = [
        {
            "subject_id": pieces[equipment],
            "figure_id": known[figure],
            "label": label,
            "unit": unit,
            "worse": worse,
        }
        for equipment, figure, label, unit, worse in figures
    ]
    upsert(connection, schema.figures, rows, ("subject_id", "figure_id"))


def _has_figures(connection: sa.Connection, site_id: int) -> bool:
    owned = sa.select(schema.subjects.c.subject_id).where(schema.subjects.c.site_id == site_id)
    checks = [sa.exists().where(schema.ledger_figures.c.site_id == site_id)]
    checks += [
        sa.exists().where(table.c.subject_id.in_(owned))
        for table in (
            schema.stream_figures,
            schema.equipment_figures,
            schema.condition_figures,
        )
    ]
    return bool(connection.execute(sa.select(sa.or_(*checks))).scalar())
