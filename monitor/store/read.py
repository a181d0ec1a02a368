"""Figures out: tables for the reports, the pages and the drift charts."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import numpy.typing as npt
import pandas as pd
import sqlalchemy as sa

from monitor.flags import NOT_JUDGED
from monitor.store import schema
from monitor.store.batch import (
    CONDITION_COLUMNS,
    EQUIPMENT_COLUMNS,
    LEDGER_COLUMNS,
    QUALITY_COLUMNS,
    STREAM_COLUMNS,
)
from monitor.store.bulk import Scope, fetch
from monitor.store.engine import reading
from monitor.store.handle import SITE_SUBJECT, Instant, Kind, SiteHandle, seconds, utc
from monitor.store.rolling import Owners, load_figures
from monitor.store.spans import Spans

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["Reads", "energy_mwh", "means_of"]

Resolution = Literal["hour", "shift", "day", "month"]

_HOUR = 3600
_ROLLUP_COLUMNS = ("mean", "minimum", "maximum", "weight", "covered_s", "expected_s")
_KJ_PER_MWH = 3.6e6


def energy_mwh(rollup: pd.DataFrame) -> pd.Series[float]:
    """Energy [MWh] of rolled-up rates in kW: the mean times the time that has values.

    Args:
        rollup: with ``mean`` [kW] and ``covered_s`` [s], as `Reads.rollups` gives.
    """
    return rollup["mean"] * rollup["covered_s"] / _KJ_PER_MWH


def means_of(means: pd.DataFrame, figure: str) -> dict[str, float]:
    """One figure's mean by subject, out of what `Reads.means` gives."""
    if not len(means):
        return {}
    at = means.index.get_level_values("figure") == figure
    rows = means[at].droplevel("figure")["mean"]
    return {str(subject): float(mean) for subject, mean in rows.items()}


class Reads(SiteHandle):
    """The site's figures. Spans of time are half open; times come back as UTC."""

    def streams(self, subject: str | None, start: Instant, end: Instant) -> pd.DataFrame:
        """Figures of one stream, or of all of them.

        Returns:
            Indexed by ``time``; `STREAM_COLUMNS`, ``flag``; ``subject`` first when none was named.

        Raises:
            StoreError: the site has no such stream.
        """
        return self._rates("stream", "stream_figures", STREAM_COLUMNS, subject, start, end)

    def equipment(self, subject: str | None, start: Instant, end: Instant) -> pd.DataFrame:
        """Figures of one piece of equipment, or of all of them.

        Returns:
            Indexed by ``time``; `EQUIPMENT_COLUMNS`, ``flag``; ``subject`` first when none was
            named.

        Raises:
            StoreError: the site has no such equipment.
        """
        return self._rates("equipment", "equipment_figures", EQUIPMENT_COLUMNS, subject, start, end)

    def ledger(self, start: Instant, end: Instant) -> pd.DataFrame:
        """The site's ledger.

        Returns:
            Indexed by ``time``; `LEDGER_COLUMNS`, ``flag``.
        """
        scope = Scope("site_id", [self.site_id], "time", seconds(start), seconds(end))
        _, frame = self._table("ledger_figures", LEDGER_COLUMNS, scope)
        return frame

    def conditions(
        self, subject: str | None, figure: str | None, start: Instant, end: Instant
    ) -> pd.DataFrame:
        """Condition figures of one piece of equipment, or of all of them.

        Returns:
            Indexed by ``time``; ``value``, ``weight``, ``u_value``, ``flag``; ``subject`` and
            ``figure`` first where none was named.

        Raises:
            StoreError: the site has no such equipment or figure.
        """
        fixed = {} if figure is None else {"figure_id": self._figure_id(figure)}
        scope = self._scope("equipment", subject, "time", start, end, fixed)
        names = ("figure_id", *CONDITION_COLUMNS)
        owner, frame = self._table("condition_figures", names, scope)
        figure_id = frame.pop("figure_id").to_numpy().astype(np.int64)
        if figure is None:
            frame.insert(0, "figure", _named(figure_id, self._figure_names))
        if subject is None:
            frame.insert(0, "subject", _named(owner, self._names("equipment")))
        return frame

    def tag_quality(self, start: Instant, end: Instant) -> pd.DataFrame:
        """How the readings of each tag were, hour by hour.

        Returns:
            ``tag``, ``hour`` (UTC), `QUALITY_COLUMNS`, by tag and hour; ``digest``, a number that
            hangs on all readings of the hour, 0 where it was not kept.
        """
        table, tags = schema.tag_quality, schema.tags
        columns = [table.c[name] for name in (*QUALITY_COLUMNS, "digest")]
        query = (
            sa.select(tags.c.tag, table.c.hour, *columns)
            .join(tags, tags.c.tag_id == table.c.tag_id)
            .where(tags.c.site_id == self.site_id)
            .where(table.c.hour >= seconds(start), table.c.hour < seconds(end))
            .order_by(tags.c.tag, table.c.hour)
        )
        return self._counted(query, ("tag", "hour", *QUALITY_COLUMNS, "digest"), "hour")

    def tag_quality_totals(self, start: Instant, end: Instant) -> pd.DataFrame:
        """How the readings of each tag were, over the whole stretch.

        Returns:
            ``tag``, `QUALITY_COLUMNS` (sums), by tag.
        """
        table, tags = schema.tag_quality, schema.tags
        sums = [sa.func.sum(table.c[name]).label(name) for name in QUALITY_COLUMNS]
        query = (
            sa.select(tags.c.tag, *sums)
            .join(tags, tags.c.tag_id == table.c.tag_id)
            .where(tags.c.site_id == self.site_id)
            .where(table.c.hour >= seconds(start), table.c.hour < seconds(end))
            .group_by(tags.c.tag)
            .order_by(tags.c.tag)
        )
        return self._counted(query, ("tag", *QUALITY_COLUMNS), None)

    def rollups(
        self,
        kind: Kind,
        resolution: Resolution,
        start: Instant,
        end: Instant,
        *,
        subject: str | None = None,
        figures: Sequence[str] | None = None,
    ) -> pd.DataFrame:
        """Roll-ups whose spans start in [start, end).

        Args:
            kind: ``stream``, ``equipment`` (its condition figures too) or ``site`` (the ledger).
            resolution: ``hour``, ``shift``, ``day`` or ``month``, the last three in local time.
            start: where the stretch begins.
            end: where it ends.
            subject: one subject of that kind, or None for all.
            figures: only these, or None for all.

        Returns:
            ``subject``, ``figure``, ``start`` (UTC), ``mean``, ``minimum``, ``maximum``,
            ``weight``, ``covered_s``, ``expected_s`` (the span's length), by subject, start and
            figure. A span in which a figure has no value has no row.
        """
        fixed = {"resolution": schema.RESOLUTIONS[resolution]}
        scope = self._scope(kind, subject, "start", start, end, fixed)
        listed = ", ".join(["subject_id", "figure_id", "start", *_ROLLUP_COLUMNS])
        chosen = ""
        if figures is not None:
            ids = ", ".join(str(self._figure_id(figure)) for figure in figures) or "null"
            chosen = f" and t.figure_id in ({ids})"
        with reading(self.engine, "read roll-ups") as connection:
            parts = [
                fetch(
                    connection,
                    f"select {listed} from rollups t where {where}{chosen} "  # noqa: S608
                    "order by subject_id, start, figure_id",
                    9,
                )
                for where in scope.conditions("t")
            ]
        rows = np.concatenate([np.empty((0, 9)), *parts])
        frame = pd.DataFrame(rows[:, 3:], columns=list(_ROLLUP_COLUMNS))
        frame = frame.astype({"covered_s": "int64", "expected_s": "int64"})
        frame.insert(0, "start", utc(rows[:, 2].astype(np.int64).tolist()))
        frame.insert(0, "figure", _named(rows[:, 1], self._figure_names))
        frame.insert(0, "subject", _named(rows[:, 0], self._names(kind)))
        return frame

    def efficiencies(
        self,
        resolution: Resolution,
        start: Instant,
        end: Instant,
        *,
        subject: str | None = None,
    ) -> pd.DataFrame:
        """Exergetic efficiencies of equipment by span: mean product over mean fuel.

        Returns:
            ``subject``, ``start`` (UTC), ``psi_live``, ``psi_reference``; NaN without any fuel.
        """
        parts = ("product_live_kw", "fuel_live_kw", "product_reference_kw", "fuel_reference_kw")
        long = self.rollups("equipment", resolution, start, end, subject=subject, figures=parts)
        wide = long.pivot_table(index=["subject", "start"], columns="figure", values="mean")
        wide = wide.reindex(columns=list(parts)).reset_index()
        made = {
            f"psi_{state}": wide[f"product_{state}_kw"]
            / wide[f"fuel_{state}_kw"].where(wide[f"fuel_{state}_kw"] > 0)
            for state in ("live", "reference")
        }
        return wide[["subject", "start"]].assign(**made)

    def means(
        self, kind: Kind, start: Instant, end: Instant, *, subject: str | None = None
    ) -> pd.DataFrame:
        """Roll-ups over one stretch of any length: a shift, a week, the span of a page.

        From the stored hours where the stretch is made of full hours, else from the cells.

        Returns:
            Indexed by ``subject`` and ``figure``: ``mean``, ``minimum``, ``maximum``, ``weight``,
            ``covered_s``, ``expected_s``.
        """
        first, last = seconds(start), seconds(end)
        ids = self._ids(kind, subject)
        whole_hours = first % _HOUR == 0 and last % _HOUR == 0
        with reading(self.engine, "read means") as connection:
            means = self._means_of_hours if whole_hours else self._means_of_cells
            rows = means(connection, kind, ids, first, last)
        columns = list(_ROLLUP_COLUMNS[:-1])
        frame = pd.DataFrame(rows[:, 2:], columns=columns).astype({"covered_s": "int64"})
        frame["expected_s"] = last - first
        frame.index = pd.MultiIndex.from_arrays(
            [
                _named(rows[:, 0], self._names(kind)),
                _named(rows[:, 1], self._figure_names),
            ],
            names=["subject", "figure"],
        )
        return frame.sort_index()

    def uncertainties(
        self, kind: Literal["equipment", "site"], start: Instant, end: Instant
    ) -> dict[tuple[str, str], float]:
        """Standard uncertainties of means over a stretch, by subject and figure.

        Those of the instruments' classes, which do not average out: the mean of the cells' own,
        exact where the plant runs alike and an upper bound else. Condition figures count in the
        cells that may be judged, as in their means. What has none is not there.
        """
        first, last = seconds(start), seconds(end)
        with reading(self.engine, "read uncertainties") as connection:
            if kind == "site":
                return self._ledger_uncertainties(connection, first, last)
            scope = self._scope("equipment", None, "time", first, last, {})
            names, figures = self._names("equipment"), self._figure_names
            found = {}
            for where in scope.conditions("t"):
                for owner, u in fetch(
                    connection,
                    "select subject_id, avg(u_destroyed_live_kw) from equipment_figures t "  # noqa: S608
                    f"where {where} group by subject_id",
                    2,
                ):
                    found[names[int(owner)], "destroyed_live_kw"] = float(u)
                for owner, figure, u in fetch(
                    connection,
                    "select subject_id, figure_id, avg(u_value) from condition_figures t "  # noqa: S608
                    f"where {where} and (flag & {int(NOT_JUDGED)}) = 0 "
                    "group by subject_id, figure_id",
                    3,
                ):
                    found[names[int(owner)], figures[int(figure)]] = float(u)
        return {key: u for key, u in found.items() if np.isfinite(u)}

    def _ledger_uncertainties(
        self, connection: sa.Connection, start: int, end: int
    ) -> dict[tuple[str, str], float]:
        columns = [name for name in LEDGER_COLUMNS if name.startswith("u_")]
        means = ", ".join(f"avg({name})" for name in columns)
        (row,) = fetch(
            connection,
            f"select {means} from ledger_figures t where site_id = {self.site_id} "  # noqa: S608
            f"and time >= {start} and time < {end}",
            len(columns),
        )
        return {
            (SITE_SUBJECT, name.removeprefix("u_")): float(u)
            for name, u in zip(columns, row, strict=True)
            if np.isfinite(u)
        }

    def flag_counts(
        self, kind: Literal["stream", "equipment"], start: Instant, end: Instant
    ) -> pd.DataFrame:
        """How many cells of each subject carry which flag.

        Returns:
            ``subject``, ``flag`` (see `monitor.flags.Flag`), ``cells``.
        """
        scope = self._scope(kind, None, "time", start, end, {})
        with reading(self.engine, "read flags") as connection:
            parts = [
                fetch(
                    connection,
                    f"select subject_id, flag, count(*) from {kind}_figures t "  # noqa: S608
                    f"where {where} group by subject_id, flag order by subject_id, flag",
                    3,
                )
                for where in scope.conditions("t")
            ]
        rows = np.concatenate([np.empty((0, 3)), *parts])
        frame = pd.DataFrame(rows[:, 1:].astype(np.int64), columns=["flag", "cells"])
        frame.insert(0, "subject", _named(rows[:, 0], self._names(kind)))
        return frame

    def newest(self) -> pd.Timestamp | None:
        """The time of the newest figure, None in a site without any."""
        return self._edge("max")

    def oldest(self) -> pd.Timestamp | None:
        """The time of the oldest figure, None in a site without any."""
        return self._edge("min")

    def condition_labels(self) -> pd.DataFrame:
        """The registered condition figures.

        Returns:
            ``subject``, ``figure``, ``label``, ``unit``, ``worse``.
        """
        table, owner, names = schema.figures, schema.subjects, schema.figure_names
        query = (
            sa.select(owner.c.subject, names.c.figure, table.c.label, table.c.unit, table.c.worse)
            .select_from(table)
            .join(owner, owner.c.subject_id == table.c.subject_id)
            .join(names, names.c.figure_id == table.c.figure_id)
            .where(owner.c.site_id == self.site_id)
            .order_by(owner.c.subject, names.c.figure)
        )
        with reading(self.engine, "read its figures") as connection:
            rows = [tuple(row) for row in connection.execute(query)]
        return pd.DataFrame(rows, columns=["subject", "figure", "label", "unit", "worse"])

    def _means_of_hours(
        self, connection: sa.Connection, _kind: Kind, ids: list[int], start: int, end: int
    ) -> npt.NDArray[np.float64]:
        """Subject, figure and the roll-up's columns, from the stored hours."""
        fixed = {"resolution": schema.RESOLUTIONS["hour"]}
        scope = Scope("subject_id", ids, "start", start, end, fixed)
        parts = [
            fetch(
                connection,
                "select subject_id, figure_id, sum(mean * weight) / sum(weight), min(minimum), "  # noqa: S608
                f"max(maximum), sum(weight), sum(covered_s) from rollups t where {where} "
                "group by subject_id, figure_id",
                7,
            )
            for where in scope.conditions("t")
        ]
        return np.concatenate([np.empty((0, 7)), *parts])

    def _means_of_cells(
        self, connection: sa.Connection, kind: Kind, ids: list[int], start: int, end: int
    ) -> npt.NDArray[np.float64]:
        """Subject, figure and the roll-up's columns, from the cells."""
        owners = Owners(
            ids if kind == "stream" else [],
            ids if kind == "equipment" else [],
            self._ledger_id,
            self.site_id,
            self._figures,
            self.interval_s,
        )
        over = Spans(np.array([start]), np.array([end]))
        rolled = load_figures(connection, owners, start, end).roll(over, self.interval_s)
        rolled = rolled.where(np.isin(rolled.subject_id, ids))
        names = ("subject_id", "figure_id", *_ROLLUP_COLUMNS[:-1])
        return np.stack([vars(rolled)[name].astype(np.float64) for name in names], axis=1)

    def _edge(self, which: Literal["min", "max"]) -> pd.Timestamp | None:
        """Ledger, streams or equipment, whichever reaches further: each by its key."""
        owned = [("ledger_figures", "site_id", self.site_id)]
        owned += [("stream_figures", "subject_id", i) for i in self._names("stream")]
        owned += [("equipment_figures", "subject_id", i) for i in self._names("equipment")]
        with reading(self.engine, "read its newest time") as connection:
            found = [
                fetch(connection, f"select {which}(time) from {t} where {column} = {i}", 1)[0, 0]  # noqa: S608
                for t, column, i in owned
            ]
        known = [int(time) for time in found if not np.isnan(time)]
        if not known:
            return None
        return utc([min(known) if which == "min" else max(known)])[0]

    @property
    def _figure_names(self) -> dict[int, str]:
        return {number: name for name, number in self._figures.items()}

    def _ids(self, kind: Kind, subject: str | None) -> list[int]:
        if subject is not None:
            return [self._subject_id(kind, subject)]
        return sorted(self._names(kind))

    def _scope(
        self,
        kind: Kind,
        subject: str | None,
        time_column: str,
        start: Instant,
        end: Instant,
        fixed: dict[str, int],
    ) -> Scope:
        ids = self._ids(kind, subject)
        return Scope("subject_id", ids, time_column, seconds(start), seconds(end), fixed)

    def _rates(
        self,
        kind: Kind,
        table: str,
        columns: tuple[str, ...],
        subject: str | None,
        start: Instant,
        end: Instant,
    ) -> pd.DataFrame:
        owner, frame = self._table(
            table, columns, self._scope(kind, subject, "time", start, end, {})
        )
        if subject is None:
            frame.insert(0, "subject", _named(owner, self._names(kind)))
        return frame

    def _table(
        self, table: str, columns: tuple[str, ...], scope: Scope
    ) -> tuple[npt.NDArray[np.float64], pd.DataFrame]:
        """Read the scope in key order: the owners' ids, and a table indexed by time."""
        keys = (scope.id_column, scope.time_column)
        listed = ", ".join([*keys, *columns, "flag"])
        width = len(columns) + 3
        # The whole key, so that the order is the same on every database.
        order = ", ".join([*keys, "figure_id"] if "figure_id" in columns else keys)
        with reading(self.engine, "read figures") as connection:
            parts = [
                fetch(
                    connection,
                    f"select {listed} from {table} t where {where} order by {order}",  # noqa: S608
                    width,
                )
                for where in scope.conditions("t")
            ]
        rows = np.concatenate([np.empty((0, width)), *parts])
        index = utc(rows[:, 1].astype(np.int64).tolist()).rename("time")
        frame = pd.DataFrame(rows[:, 2:], columns=[*columns, "flag"], index=index)
        return rows[:, 0], frame.astype({"flag": "int32"})

    def _counted(
        self, query: sa.Select[Any], columns: tuple[str, ...], time: str | None
    ) -> pd.DataFrame:
        with reading(self.engine, "read tag quality") as connection:
            rows = [tuple(row) for row in connection.execute(query)]
        frame = pd.DataFrame(rows, columns=list(columns))
        counts = [name for name in columns if name not in {"tag", "hour"}]
        frame = frame.astype(dict.fromkeys(counts, "int64"))
        if time is not None:
            frame[time] = utc(frame[time].astype(np.int64).tolist())
        return frame


def _named(ids: npt.NDArray[Any], names: dict[int, str]) -> pd.Index[Any]:
    """Ids as their names, without a Python string a row."""
    known = sorted(names)
    codes = np.searchsorted(known, ids) if known else np.empty(0, dtype=np.int64)
    texts = pd.Index([names[number] for number in known], dtype="str")
    return pd.CategoricalIndex(pd.Categorical.from_codes(codes, categories=texts))
