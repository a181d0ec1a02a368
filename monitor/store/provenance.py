"""Which run, and with it which program and which site file, made a stored figure."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

import pandas as pd
import sqlalchemy as sa

from monitor.store import schema
from monitor.store.batch import EQUIPMENT_COLUMNS
from monitor.store.engine import reading
from monitor.store.handle import SITE_SUBJECT, Instant, Kind, SiteHandle, seconds, utc
from monitor.store.runs import Run

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = ["Provenance", "Table"]

Table = Literal["streams", "equipment", "conditions", "ledger"]

_TABLES = {
    "streams": schema.stream_figures,
    "equipment": schema.equipment_figures,
    "conditions": schema.condition_figures,
    "ledger": schema.ledger_figures,
}
_RUN = [column for column in schema.runs.columns if column.name != "site_id"]


class Provenance(SiteHandle):
    """The runs behind the site's figures. A figure that comes out the same keeps its first run."""

    def made_by(self, kind: Kind, subject: str, figure: str, time: Instant) -> Run | None:
        """The run that made one figure.

        Args:
            kind: of the subject.
            subject: its id; ignored for the site itself.
            figure: the figure's name.
            time: start of its cell.

        Returns:
            The run; None where nothing is stored for the cell.

        Raises:
            StoreError: the store cannot be read.
        """
        table, conditions = self._where(kind, subject, figure)
        query = (
            sa.select(*_RUN)
            .join(table, table.c.run_id == schema.runs.c.run_id)
            .where(table.c.time == seconds(time), *conditions)
        )
        with reading(self.engine, "read who made a figure") as connection:
            found = connection.execute(query).mappings().first()
        return None if found is None else Run(**found)

    def run_numbers(self, table: Table, start: Instant, end: Instant) -> pd.DataFrame:
        """The runs of many figures.

        Returns:
            ``time``, ``subject`` (but for the ledger), ``figure`` (of conditions), ``run_id``.

        Raises:
            StoreError: the store cannot be read.
        """
        of, owners, names = _TABLES[table], schema.subjects, schema.figure_names
        columns: list[sa.ColumnElement[object]] = [of.c.time]
        query = sa.select().where(of.c.time >= seconds(start), of.c.time < seconds(end))
        if table == "ledger":
            query = query.where(of.c.site_id == self.site_id)
        else:
            columns.append(owners.c.subject)
            query = query.join(owners, owners.c.subject_id == of.c.subject_id).where(
                owners.c.site_id == self.site_id
            )
        if table == "conditions":
            columns.append(names.c.figure)
            query = query.join(names, names.c.figure_id == of.c.figure_id)
        query = query.add_columns(*columns, of.c.run_id)
        with reading(self.engine, "read who made figures") as connection:
            rows = connection.execute(query).all()
        frame = pd.DataFrame(rows, columns=[c.name for c in (*columns, of.c.run_id)])
        return frame.assign(time=utc(frame["time"].tolist()))

    def _where(
        self, kind: Kind, subject: str, figure: str
    ) -> tuple[sa.Table, Sequence[sa.ColumnElement[bool]]]:
        if kind == "site" or subject == SITE_SUBJECT:
            return schema.ledger_figures, [schema.ledger_figures.c.site_id == self.site_id]
        owners, names = schema.subjects, schema.figure_names
        owner = sa.select(owners.c.subject_id).where(
            owners.c.site_id == self.site_id, owners.c.kind == kind, owners.c.subject == subject
        )
        table = schema.stream_figures if kind == "stream" else schema.equipment_figures
        if kind == "equipment" and figure not in EQUIPMENT_COLUMNS:
            table = schema.condition_figures
            of = sa.select(names.c.figure_id).where(names.c.figure == figure)
            return table, [
                table.c.subject_id == owner.scalar_subquery(),
                table.c.figure_id == of.scalar_subquery(),
            ]
        return table, [table.c.subject_id == owner.scalar_subquery()]
