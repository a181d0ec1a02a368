"""Write a computed window: all of it in one transaction, again and again with the same result."""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import sqlalchemy as sa

from monitor.store import schema
from monitor.store.batch import (
    CONDITION_COLUMNS,
    EQUIPMENT_COLUMNS,
    LEDGER_COLUMNS,
    QUALITY_COLUMNS,
    STREAM_COLUMNS,
)
from monitor.store.bulk import Changes, Scope, replace_rows
from monitor.store.engine import place, reading, writing
from monitor.store.errors import StoreError
from monitor.store.handle import Kind, SiteHandle, rated
from monitor.store.rolling import Figures, Owners, rebuild, roll_up
from monitor.store.rollup import Cells, condition_partials
from monitor.store.upsert import pairs, upsert

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

    from monitor.store.batch import FigureBatch
    from monitor.store.spans import Calendar

__all__ = ["Writes", "Written"]

Columns = dict[str, npt.NDArray[Any]]
_HOUR = 3600


@dataclass(frozen=True)
class Written:
    """What writing a window did.

    Attributes:
        rows: rows handed over.
        changed: rows that are new or different from what was stored.
        removed: rows of the window that are there no longer.
        not_finite: infinite numbers by column, stored as absent.
    """

    rows: int
    changed: int
    removed: int
    not_finite: dict[str, int] = field(default_factory=dict)


@dataclass(frozen=True)
class _Tables:
    """A batch as the columns of the tables it goes to."""

    streams: Columns
    equipment: Columns
    conditions: Columns
    ledger: Columns
    not_finite: dict[str, int]


class Writes(SiteHandle):
    """Figures in."""

    def write(
        self, batch: FigureBatch, run_id: int, watermarks: Mapping[str, int] | None = None
    ) -> Written:
        """Store a window's figures, roll-ups and watermarks in one transaction.

        The rows of the batch's streams, equipment, tags and of the ledger in [start, end) become
        exactly the batch's. A row that is equal to the stored one stays as it is, with the run that
        wrote it. Subjects that the batch does not name keep their rows.

        Args:
            batch: the window.
            run_id: the run that computed it, from `begin_run`.
            watermarks: for each source the time (integer UTC seconds) up to which it is used up.

        Raises:
            StoreError: a subject or figure is not registered, rows lie outside the window, off the
                grid or twice, or the database refuses. Nothing is stored then.
        """
        calendar = self._own_calendar()
        self._check_window(batch)
        tables = self._tables(batch, run_id)
        owners = self._owners(tables)
        with writing(self.engine, f"write the window from {_iso(batch.start)}") as connection:
            self._check_calendar(connection)
            changes = self._write_figures(connection, tables, owners, batch)
            changes += self._write_quality(connection, batch, run_id)
            figures = self._figures_of(tables, owners)
            roll_up(connection, owners, calendar, figures, batch.start, batch.end)
            self._write_watermarks(connection, watermarks or {})
        return Written(changes.rows, changes.changed, changes.removed, tables.not_finite)

    def rebuild_rollups(self) -> None:
        """Make all of the site's roll-ups anew from its figures, in one transaction.

        Raises:
            StoreError: the handle has no calendar, or the database refuses.
        """
        calendar, owners = self._own_calendar(), self._all_owners()
        table = schema.sites
        change = (
            sa.update(table)
            .where(table.c.site_id == self.site_id)
            .values(calendar=self.calendar_key)
        )
        with writing(self.engine, "rebuild the roll-ups") as connection:
            # Together: a store never says that its roll-ups are of a calendar they are not of.
            connection.execute(change)
            rebuild(connection, owners, calendar)

    def watermarks(self) -> dict[str, int]:
        """Up to when each source is used up, integer UTC seconds."""
        table = schema.watermarks
        query = sa.select(table.c.source, table.c.time).where(table.c.site_id == self.site_id)
        with reading(self.engine, "read the watermarks") as connection:
            return {source: int(until) for source, until in connection.execute(query)}

    def set_watermarks(self, watermarks: Mapping[str, int]) -> None:
        """Set watermarks outside a window; those of other sources stay."""
        with writing(self.engine, "set the watermarks") as connection:
            self._write_watermarks(connection, watermarks)

    def _check_window(self, batch: FigureBatch) -> None:
        interval = self.interval_s
        if batch.start % _HOUR or batch.end % interval or batch.end <= batch.start:
            raise StoreError(
                f"a window goes from a full hour to a grid time of every {interval} s; this one "
                f"goes from {_iso(batch.start)} to {_iso(batch.end)}"
            )

    def _check_calendar(self, connection: sa.Connection) -> None:
        table = schema.sites
        query = sa.select(table.c.calendar).where(table.c.site_id == self.site_id)
        if connection.execute(query).scalar() != self.calendar_key:
            raise StoreError(
                f"{place(self.engine)}: the shifts or the time zone of site '{self.site}' were "
                "changed by another process since this one started; start it again"
            )

    def _tables(self, batch: FigureBatch, run_id: int) -> _Tables:
        not_finite: dict[str, int] = {}

        def columns(
            frame: pd.DataFrame, what: str, names: tuple[str, ...], ids: Columns, keys: Columns
        ) -> Columns:
            _require(frame, what, (*names, "time", "flag"))
            times = self._times(frame["time"], what, batch)
            made = {
                **ids,
                "time": times,
                **keys,
                **{n: _finite(frame[n], f"{what}.{n}", not_finite) for n in names},
                "flag": frame["flag"].to_numpy(np.int64),
                "run_id": np.full(len(frame), run_id),
            }
            _refuse_twice({**ids, "time": times, **keys}, what)
            return made

        streams, equipment, conditions = batch.streams, batch.equipment, batch.conditions
        ledger = {"site_id": np.full(len(batch.ledger), self.site_id)}
        owner = self._subject_ids(conditions, "equipment", "conditions")
        return _Tables(
            columns(
                streams, "streams", STREAM_COLUMNS,
                {"subject_id": self._subject_ids(streams, "stream", "streams")}, {},
            ),
            columns(
                equipment, "equipment", EQUIPMENT_COLUMNS,
                {"subject_id": self._subject_ids(equipment, "equipment", "equipment")}, {},
            ),
            columns(
                conditions, "conditions", CONDITION_COLUMNS,
                {"subject_id": owner}, {"figure_id": self._condition_ids(conditions, owner)},
            ),
            columns(batch.ledger, "ledger", LEDGER_COLUMNS, ledger, {}),
            not_finite,
        )  # fmt: skip

    def _subject_ids(self, frame: pd.DataFrame, kind: Kind, what: str) -> npt.NDArray[np.int64]:
        _require(frame, what, ("subject",))
        codes, names = pd.factorize(frame["subject"])
        ids = [self._subject_id(kind, str(name)) for name in names]
        return np.array(ids, dtype=np.int64)[codes] if ids else np.empty(0, dtype=np.int64)

    def _condition_ids(
        self, frame: pd.DataFrame, owner: npt.NDArray[np.int64]
    ) -> npt.NDArray[np.int64]:
        _require(frame, "conditions", ("figure",))
        codes, names = pd.factorize(frame["figure"])
        if not len(names):
            return np.empty(0, dtype=np.int64)
        ids = np.array([self._figure_id(str(name)) for name in names], dtype=np.int64)[codes]
        # One number a pair: rows of a table are told apart ten times more slowly.
        step = int(ids.max()) + 1
        pairs = sorted(divmod(int(number), step) for number in pd.unique(owner * step + ids))
        unknown = [pair for pair in pairs if pair not in self._condition_figures]
        if unknown:
            of, figure = unknown[0]
            name = self._names("equipment")[of]
            known = {number: text for text, number in self._figures.items()}
            raise StoreError(
                f"equipment '{name}' has no condition figure '{known[figure]}'; register it first"
            )
        return ids

    def _times(self, times: pd.Series[Any], what: str, batch: FigureBatch) -> npt.NDArray[np.int64]:
        values = times.to_numpy(np.int64)
        wrong = (values < batch.start) | (values >= batch.end) | (values % self.interval_s != 0)
        if wrong.any():
            raise StoreError(
                f"{what}: {int(wrong.sum())} rows outside the window from {_iso(batch.start)} to "
                f"{_iso(batch.end)} or off the grid of {self.interval_s} s; the first is at "
                f"{_iso(int(values[wrong][0]))}"
            )
        return values

    def _owners(self, tables: _Tables) -> Owners:
        # A piece of equipment is replaced as a whole: its condition figures with it.
        equipment = np.union1d(tables.equipment["subject_id"], tables.conditions["subject_id"])
        return self._owners_of(np.unique(tables.streams["subject_id"]).tolist(), equipment.tolist())

    def _all_owners(self) -> Owners:
        return self._owners_of(sorted(self._names("stream")), sorted(self._names("equipment")))

    def _owners_of(self, streams: list[int], equipment: list[int]) -> Owners:
        return Owners(
            streams, equipment, self._ledger_id, self.site_id, self._figures, self.interval_s
        )

    def _own_calendar(self) -> Calendar:
        if self.calendar is None:
            raise StoreError(
                f"site '{self.site}' was opened for reading; give its calendar to write"
            )
        return self.calendar

    def _write_figures(
        self, connection: sa.Connection, tables: _Tables, owners: Owners, batch: FigureBatch
    ) -> Changes:
        parts = (
            (schema.stream_figures, tables.streams, "subject_id", owners.streams),
            (schema.equipment_figures, tables.equipment, "subject_id", owners.equipment),
            (schema.condition_figures, tables.conditions, "subject_id", owners.equipment),
            (schema.ledger_figures, tables.ledger, "site_id", [self.site_id]),
        )
        changes = Changes()
        for table, columns, id_column, ids in parts:
            scope = Scope(id_column, ids, "time", batch.start, batch.end)
            changes += replace_rows(connection, table, columns, scope)
        return changes

    def _write_quality(self, connection: sa.Connection, batch: FigureBatch, run_id: int) -> Changes:
        frame = batch.tag_quality
        _require(frame, "tag_quality", ("tag", "hour", *QUALITY_COLUMNS))
        hours = frame["hour"].to_numpy(np.int64)
        wrong = (hours < batch.start) | (hours >= batch.end) | (hours % _HOUR != 0)
        if wrong.any():
            raise StoreError(f"tag_quality: {int(wrong.sum())} rows outside the window's hours")
        codes, names = pd.factorize(frame["tag"])
        ids = self._tag_ids(connection, [str(name) for name in names])
        tag_id = np.array(ids, dtype=np.int64)[codes] if ids else np.empty(0, dtype=np.int64)
        columns = {
            "tag_id": tag_id,
            "hour": hours,
            **{name: frame[name].to_numpy(np.int64) for name in QUALITY_COLUMNS},
            "digest": np.asarray(frame.get("digest", np.zeros(len(frame))), dtype=np.int64),
            "run_id": np.full(len(frame), run_id),
        }
        _refuse_twice({"tag_id": tag_id, "hour": hours}, "tag_quality")
        scope = Scope("tag_id", ids, "hour", batch.start, batch.end)
        return replace_rows(connection, schema.tag_quality, columns, scope)

    def _tag_ids(self, connection: sa.Connection, names: list[str]) -> list[int]:
        table = schema.tags
        query = sa.select(table.c.tag, table.c.tag_id).where(table.c.site_id == self.site_id)
        known: dict[str, int] = pairs(connection.execute(query))
        new = [name for name in names if name not in known]
        if new:
            rows = [{"site_id": self.site_id, "tag": name} for name in new]
            upsert(connection, table, rows, ("site_id", "tag"))
            known = pairs(connection.execute(query))
        return [known[name] for name in names]

    def _figures_of(self, tables: _Tables, owners: Owners) -> Figures:
        ledger_id = np.full(len(tables.ledger["time"]), owners.ledger)
        conditions = tables.conditions
        return Figures(
            (
                _cells(tables.streams, tables.streams["subject_id"], STREAM_COLUMNS, owners),
                _cells(tables.equipment, tables.equipment["subject_id"], EQUIPMENT_COLUMNS, owners),
                _cells(tables.ledger, ledger_id, LEDGER_COLUMNS, owners),
            ),
            condition_partials(
                conditions["subject_id"],
                conditions["figure_id"],
                conditions["time"],
                conditions["value"],
                conditions["weight"],
                conditions["flag"].astype(np.int32),
                self.interval_s,
            ),
        )

    def _write_watermarks(self, connection: sa.Connection, watermarks: Mapping[str, int]) -> None:
        now = int(time.time())
        rows = [
            {"site_id": self.site_id, "source": source, "time": int(until), "updated": now}
            for source, until in watermarks.items()
        ]
        upsert(connection, schema.watermarks, rows, ("site_id", "source"))


def _cells(
    columns: Columns, subject_id: npt.NDArray[np.int64], names: tuple[str, ...], owners: Owners
) -> Cells:
    values = np.stack([columns[name] for name in rated(names)], axis=1)
    return Cells(subject_id, columns["time"], owners.rated_ids(names), values)


def _require(frame: pd.DataFrame, what: str, names: Iterable[str]) -> None:
    absent = [name for name in names if name not in frame.columns]
    if absent:
        raise StoreError(f"{what}: the column '{absent[0]}' is not there")


def _finite(
    values: pd.Series[Any], what: str, not_finite: dict[str, int]
) -> npt.NDArray[np.float64]:
    numbers = values.to_numpy(np.float64)
    infinite = np.isinf(numbers)
    if not infinite.any():
        return numbers
    not_finite[what] = int(infinite.sum())
    return np.where(infinite, np.nan, numbers)


def _refuse_twice(keys: Columns, what: str) -> None:
    columns = list(keys.values())
    order = np.lexsort(columns[::-1])
    same = np.logical_and.reduce([c[order][1:] == c[order][:-1] for c in columns])
    if same.any():
        raise StoreError(f"{what}: {int(same.sum())} rows come twice for one subject and time")


def _iso(utc_seconds: int) -> str:
    return time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(utc_seconds))
