"""What every part of a site's store needs: engine, site, and names as small integers."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Literal

import pandas as pd
import sqlalchemy as sa

from monitor.store import schema
from monitor.store.batch import EQUIPMENT_COLUMNS, LEDGER_COLUMNS, STREAM_COLUMNS
from monitor.store.engine import place, reading
from monitor.store.errors import StoreError

if TYPE_CHECKING:
    from collections.abc import Iterable

    from monitor.store.spans import Calendar

__all__ = ["SITE_SUBJECT", "Instant", "Kind", "SiteHandle", "rated", "seconds", "utc"]

Kind = Literal["stream", "equipment", "site"]
"""What a subject is; the site itself is the subject of the ledger."""

Instant = int | pd.Timestamp
"""Integer UTC seconds, or a timestamp with a time zone."""

SITE_SUBJECT = "ledger"
"""The name of the one subject of kind ``site``."""


def seconds(instant: Instant) -> int:
    """Turn an instant into integer UTC seconds.

    Raises:
        ValueError: a timestamp without a time zone.
    """
    if isinstance(instant, pd.Timestamp):
        if instant.tzinfo is None:
            raise ValueError(f"{instant} has no time zone")
        return int(instant.timestamp() // 1)
    return int(instant)


def utc(times: Iterable[int | None]) -> pd.DatetimeIndex:
    """Turn integer UTC seconds into an index of times; None becomes NaT."""
    values = pd.array(list(times), dtype="Int64")
    return pd.DatetimeIndex(pd.to_datetime(values, unit="s", utc=True)).as_unit("us")


def rated(columns: tuple[str, ...]) -> tuple[str, ...]:
    """The columns that roll up: a mean of standard uncertainties would mean nothing."""
    return tuple(name for name in columns if not name.startswith("u_"))


@dataclass(frozen=True)
class SiteHandle:
    """A site in a store.

    Attributes:
        engine: the store's engine.
        site_id: the site's small integer.
        site: its id in the site file.
        interval_s: the grid's interval in seconds.
        time_zone: the site's time zone.
        calendar_key: what the stored roll-ups were made with.
        calendar: local shifts, days and months; None when the site is only read.
    """

    engine: sa.Engine
    site_id: int
    site: str
    interval_s: int
    time_zone: str
    calendar_key: str
    calendar: Calendar | None

    @cached_property
    def _subjects(self) -> dict[tuple[str, str], int]:
        table = schema.subjects
        query = sa.select(table.c.kind, table.c.subject, table.c.subject_id).where(
            table.c.site_id == self.site_id
        )
        with reading(self.engine, "read its subjects") as connection:
            return {(kind, name): int(number) for kind, name, number in connection.execute(query)}

    @cached_property
    def _figures(self) -> dict[str, int]:
        table = schema.figure_names
        with reading(self.engine, "read its figures") as connection:
            rows = connection.execute(sa.select(table.c.figure, table.c.figure_id))
            return {name: int(number) for name, number in rows}

    @cached_property
    def _condition_figures(self) -> frozenset[tuple[int, int]]:
        table, owner = schema.figures, schema.subjects
        query = (
            sa.select(table.c.subject_id, table.c.figure_id)
            .join(owner, owner.c.subject_id == table.c.subject_id)
            .where(owner.c.site_id == self.site_id)
        )
        with reading(self.engine, "read its figures") as connection:
            return frozenset((int(a), int(b)) for a, b in connection.execute(query))

    @property
    def _ledger_id(self) -> int:
        return self._subjects["site", SITE_SUBJECT]

    def _names(self, kind: Kind) -> dict[int, str]:
        return {number: name for (of, name), number in self._subjects.items() if of == kind}

    def _subject_id(self, kind: Kind, subject: str) -> int:
        try:
            return self._subjects[kind, subject]
        except KeyError:
            raise StoreError(
                f"{place(self.engine)}: site '{self.site}' has no {kind} '{subject}'; known are "
                f"{', '.join(sorted(self._names(kind).values())) or 'none'}"
            ) from None

    def _figure_id(self, figure: str) -> int:
        try:
            return self._figures[figure]
        except KeyError:
            raise StoreError(
                f"{place(self.engine)}: there is no figure '{figure}' in site '{self.site}'"
            ) from None

    def _rated_ids(self, columns: tuple[str, ...]) -> list[int]:
        return [self._figures[name] for name in rated(columns)]


RATED_FIGURES = tuple(
    dict.fromkeys(rated(STREAM_COLUMNS) + rated(EQUIPMENT_COLUMNS) + rated(LEDGER_COLUMNS))
)
"""Every figure that the fixed columns roll up to."""
