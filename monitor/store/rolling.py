"""Keep the stored roll-ups in step with the figures, window by window.

Hours come from the window's cells. Shifts and days come from hours, those of the window and those
stored beside it; where a time zone cuts them off the full UTC hour (India, Nepal, a shift from
06:30) they come from the cells themselves. Months come from days. Each step sums the same pieces in
the same order, so any order of windows, and a rebuild, give the same roll-ups to the last digit.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import chain
from typing import TYPE_CHECKING

import numpy as np

from monitor.store import schema, spans
from monitor.store.batch import CONDITION_COLUMNS, EQUIPMENT_COLUMNS, LEDGER_COLUMNS, STREAM_COLUMNS
from monitor.store.bulk import Scope, fetch, listed_ids, replace_rows
from monitor.store.handle import rated
from monitor.store.rollup import Cells, Partials, combine, condition_partials, roll_cells

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    import sqlalchemy as sa

    from monitor.store.spans import Calendar, Spans

__all__ = ["Figures", "Owners", "load_figures", "load_partials", "rebuild", "roll_up"]

_PARTIAL_COLUMNS = "subject_id, figure_id, start, mean, minimum, maximum, weight, covered_s"
_DAY = 86400
_REBUILD_S = 7 * _DAY
_LONGEST_DAY_S = 26 * 3600
"""How far before its first figure a day can start, and more."""


@dataclass(frozen=True)
class Owners:
    """Whose figures are meant, as ids.

    Attributes:
        streams, equipment: subject ids.
        ledger: the subject id of the site's ledger.
        site_id: the site's.
        figure_ids: ids by figure name.
        interval_s: the grid's interval in seconds.
    """

    streams: Sequence[int]
    equipment: Sequence[int]
    ledger: int
    site_id: int
    figure_ids: Mapping[str, int]
    interval_s: int

    @property
    def subjects(self) -> list[int]:
        """All subject ids, in order."""
        return sorted({*self.streams, *self.equipment, self.ledger})

    def rated_ids(self, columns: tuple[str, ...]) -> list[int]:
        """Figure ids of the columns that roll up."""
        return [self.figure_ids[name] for name in rated(columns)]


@dataclass(frozen=True)
class Figures:
    """Figures of one stretch of time: rates of streams, equipment and the ledger; conditions."""

    rates: tuple[Cells, ...]
    conditions: Partials

    def __add__(self, other: Figures) -> Figures:
        rates = tuple(
            Cells(
                np.concatenate([a.subject_id, b.subject_id]),
                np.concatenate([a.time, b.time]),
                a.figure_ids,
                np.concatenate([a.values, b.values]),
            )
            for a, b in zip(self.rates, other.rates, strict=True)
        )
        return Figures(rates, self.conditions + other.conditions)

    def roll(self, over: Spans, interval_s: int) -> Partials:
        """Roll up over spans."""
        rolled = combine(self.conditions, over)
        for cells in self.rates:
            rolled = rolled + roll_cells(cells, over, interval_s)
        return rolled


def roll_up(
    connection: sa.Connection,
    owners: Owners,
    calendar: Calendar,
    figures: Figures,
    start: int,
    end: int,
) -> None:
    """Bring all roll-ups that [start, end) touches in step with its figures.

    Args:
        connection: in the write transaction that stores the figures, after they are written.
        owners: whose figures the window stands for.
        figures: all of their figures in the window.
        calendar: the site's local time.
        start: integer UTC seconds, on a full hour.
        end: integer UTC seconds, on the grid.
    """
    hours = spans.hours(start, end)
    full_end = hours.extent[1]
    if full_end > end:
        # The last hour is not all in the window; what is stored of its rest belongs to it.
        figures = figures + load_figures(connection, owners, end, full_end)
    rolled = _Rolled(connection, owners, start, full_end, figures)
    by_hour = figures.roll(hours, owners.interval_s)
    rolled.store("hour", hours, by_hour)
    shifts = spans.of(calendar, "shift", start, end)
    rolled.store("shift", shifts, rolled.coarser(shifts, by_hour))
    days = spans.of(calendar, "day", start, end)
    by_day = rolled.coarser(days, by_hour)
    rolled.store("day", days, by_day)
    months = spans.of(calendar, "month", start, end)
    pieces = by_day + rolled.stored_around("day", months, days.extent)
    rolled.store("month", months, combine(pieces, months))


@dataclass(frozen=True)
class _Rolled:
    connection: sa.Connection
    owners: Owners
    start: int
    end: int
    figures: Figures

    def coarser(self, over: Spans, by_hour: Partials) -> Partials:
        """Shifts or days: from hours where they are made of hours, else from cells."""
        whole, cut = over.only(over.on_hours), over.only(~over.on_hours)
        stored = self.stored_around("hour", whole, (self.start, self.end))
        return combine(by_hour + stored, whole) + self._from_cells(cut)

    def stored_around(self, resolution: str, over: Spans, inside: tuple[int, int]) -> Partials:
        """Stored pieces of these spans, without those of ``inside``, which are at hand."""
        first, last = over.extent
        stretches = [(first, min(inside[0], last)), (max(inside[1], first), last)]
        found = Partials.none()
        for low, high in stretches:
            if low < high:
                ids = self.owners.subjects
                found = found + load_partials(self.connection, resolution, ids, low, high)
        return found

    def _from_cells(self, over: Spans) -> Partials:
        if not len(over.starts):
            return Partials.none()
        first, last = over.extent
        figures = self.figures
        for low, high in ((first, self.start), (self.end, last)):
            if low < high:
                figures = figures + load_figures(self.connection, self.owners, low, high)
        return figures.roll(over, self.owners.interval_s)

    def store(self, resolution: str, over: Spans, rows: Partials) -> None:
        number = schema.RESOLUTIONS[resolution]
        first, last = over.extent
        lengths = (over.ends - over.starts)[over.index(rows.start)]
        columns = {
            "resolution": np.full(len(rows.start), number),
            **vars(rows),
            "expected_s": lengths,
        }
        scope = Scope(
            "subject_id", self.owners.subjects, "start", first, last, {"resolution": number}
        )
        replace_rows(self.connection, schema.rollups, columns, scope)


def load_partials(
    connection: sa.Connection, resolution: str, subject_ids: Sequence[int], start: int, end: int
) -> Partials:
    """Read stored roll-ups that start in [start, end)."""
    fixed = {"resolution": schema.RESOLUTIONS[resolution]}
    scope = Scope("subject_id", subject_ids, "start", start, end, fixed)
    rows = _rows(connection, _PARTIAL_COLUMNS, "rollups", scope, 8)
    whole = rows[:, (0, 1, 2, 7)].astype(np.int64)
    mean, minimum, maximum, weight = rows[:, 3:7].T
    return Partials(
        subject_id=whole[:, 0],
        figure_id=whole[:, 1],
        start=whole[:, 2],
        mean=mean,
        minimum=minimum,
        maximum=maximum,
        weight=weight,
        covered_s=whole[:, 3],
    )


def load_figures(connection: sa.Connection, owners: Owners, start: int, end: int) -> Figures:
    """Read the owners' figures in [start, end)."""
    ledger = _load_cells(
        connection,
        owners,
        LEDGER_COLUMNS,
        "ledger_figures",
        Scope("site_id", [owners.site_id], "time", start, end),
    )
    rates = (
        _load_cells(
            connection,
            owners,
            STREAM_COLUMNS,
            "stream_figures",
            Scope("subject_id", owners.streams, "time", start, end),
        ),
        _load_cells(
            connection,
            owners,
            EQUIPMENT_COLUMNS,
            "equipment_figures",
            Scope("subject_id", owners.equipment, "time", start, end),
        ),
        # The ledger's rows are the site's; its roll-ups are those of the site's one subject.
        Cells(
            np.full(ledger.time.shape, owners.ledger), ledger.time, ledger.figure_ids, ledger.values
        ),
    )
    names = ", ".join(["subject_id", "figure_id", "time", *CONDITION_COLUMNS[:2], "flag"])
    scope = Scope("subject_id", owners.equipment, "time", start, end)
    rows = _rows(connection, names, "condition_figures", scope, 6)
    whole = rows[:, (0, 1, 2, 5)].astype(np.int64)
    flag = whole[:, 3].astype(np.int32)
    conditions = condition_partials(
        whole[:, 0], whole[:, 1], whole[:, 2], rows[:, 3], rows[:, 4], flag, owners.interval_s
    )
    return Figures(rates, conditions)


def _load_cells(
    connection: sa.Connection, owners: Owners, columns: tuple[str, ...], table: str, scope: Scope
) -> Cells:
    names = rated(columns)
    listed = ", ".join([scope.id_column, scope.time_column, *names])
    rows = _rows(connection, listed, table, scope, 2 + len(names))
    whole = rows[:, :2].astype(np.int64)
    return Cells(whole[:, 0], whole[:, 1], owners.rated_ids(columns), rows[:, 2:])


def _rows(
    connection: sa.Connection, columns: str, table: str, scope: Scope, width: int
) -> np.ndarray[tuple[int, int], np.dtype[np.float64]]:
    parts = [
        fetch(connection, f"select {columns} from {table} t where {where}", width)  # noqa: S608
        for where in scope.conditions("t")
    ]
    return np.concatenate([np.empty((0, width)), *parts])


def rebuild(connection: sa.Connection, owners: Owners, calendar: Calendar) -> None:
    """Make the roll-ups of these owners anew from their figures.

    Where figures have expired (`monitor.store.retention`), what was rolled up from them cannot be
    made again, and stays as it is.
    """
    ends = _extent(connection, owners)
    if ends is None:
        _drop_rollups(connection, owners, 0)
        return
    start, last = ends
    if _days_before(connection, owners, start - _LONGEST_DAY_S):
        start = (start // _DAY + 1) * _DAY
        _drop_rollups(connection, owners, start)
    else:
        _drop_rollups(connection, owners, 0)
    for first in range(start, last, _REBUILD_S):
        end = min(first + _REBUILD_S, last)
        figures = load_figures(connection, owners, first, end)
        roll_up(connection, owners, calendar, figures, first, end)


def _extent(connection: sa.Connection, owners: Owners) -> tuple[int, int] | None:
    """From the full hour of the oldest figure to the end of the newest."""
    tables = {
        "stream_figures": ("subject_id", owners.streams),
        "equipment_figures": ("subject_id", owners.equipment),
        "condition_figures": ("subject_id", owners.equipment),
        "ledger_figures": ("site_id", [owners.site_id]),
    }
    ends = [
        fetch(connection, f"select min(time), max(time) from {table} where {column} = {i}", 2)  # noqa: S608
        for table, (column, ids) in tables.items()
        for i in ids
    ]
    known = np.array([t for t in chain.from_iterable(e[0] for e in ends) if not np.isnan(t)])
    if not len(known):
        return None
    return int(known.min()) // 3600 * 3600, int(known.max()) + owners.interval_s


def _drop_rollups(connection: sa.Connection, owners: Owners, start: int) -> None:
    resolutions = ", ".join(str(number) for number in schema.RESOLUTIONS.values())
    for owned in listed_ids("subject_id", owners.subjects):
        # The resolution leads the key: naming all of them finds the rows without a scan.
        connection.exec_driver_sql(
            f"delete from rollups where resolution in ({resolutions}) and {owned} "  # noqa: S608
            f"and start >= {start}"
        )


def _days_before(connection: sa.Connection, owners: Owners, time: int) -> bool:
    """Whether there are days too old to be of any figure that is left."""
    day = schema.RESOLUTIONS["day"]
    return any(
        len(
            fetch(
                connection,
                f"select 1 from rollups where resolution = {day} and {owned} and start < {time} "  # noqa: S608
                "limit 1",
                1,
            )
        )
        for owned in listed_ids("subject_id", owners.subjects)
    )
