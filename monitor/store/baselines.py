"""Baselines: what a condition figure is expected to be, and every earlier answer to that."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import sqlalchemy as sa

from monitor.store import schema
from monitor.store.engine import reading, writing
from monitor.store.handle import SiteHandle
from monitor.store.upsert import inserted_id

if TYPE_CHECKING:
    from collections.abc import Mapping

__all__ = ["BaselineRecord", "Baselines"]


@dataclass(frozen=True)
class BaselineRecord:
    """A baseline as stored; times in integer UTC seconds.

    Attributes:
        subject, figure: which condition figure of which equipment.
        made: when it was fitted.
        reference_start, reference_end: the period it was fitted on, half open.
        coefficients: whatever the fit needs to be used again; must be writable as JSON.
        sigma: standard deviation of the residuals, in the figure's unit.
        phi: lag-1 autocorrelation of the residuals.
        points: hours it rests on.
        reason: why it was made.
        retired: when a later one took its place; None while it is in force.
        baseline_id: its number in the store; 0 before it is there.
    """

    subject: str
    figure: str
    made: int
    reference_start: int
    reference_end: int
    coefficients: Mapping[str, Any]
    sigma: float
    phi: float
    points: int
    reason: str
    retired: int | None = None
    baseline_id: int = 0


class Baselines(SiteHandle):
    """The site's baselines."""

    def add_baseline(self, baseline: BaselineRecord) -> int:
        """Store a baseline and retire the one in force for the same figure, as of ``made``.

        Returns:
            Its number.
        """
        table = schema.baselines
        row = {
            **vars(baseline),
            "site_id": self.site_id,
            "coefficients": json.dumps(dict(baseline.coefficients), sort_keys=True),
        }
        del row["baseline_id"]
        with writing(self.engine, "store a baseline") as connection:
            if baseline.retired is None:
                connection.execute(
                    sa.update(table)
                    .where(
                        *self._baselines_of(baseline.subject, baseline.figure),
                        table.c.retired.is_(None),
                    )
                    .values(retired=baseline.made)
                )
            return inserted_id(connection, table, row)

    def retire_baseline(self, subject: str, figure: str, time: int) -> bool:
        """Take a figure's baseline out of force; tell whether there was one."""
        table = schema.baselines
        change = (
            sa.update(table)
            .where(*self._baselines_of(subject, figure), table.c.retired.is_(None))
            .values(retired=time)
        )
        with writing(self.engine, "retire a baseline") as connection:
            return connection.execute(change).rowcount > 0

    def current_baselines(self) -> dict[tuple[str, str], BaselineRecord]:
        """The baselines in force, by (subject, figure)."""
        found = self._baselines(schema.baselines.c.retired.is_(None))
        return {(b.subject, b.figure): b for b in found}

    def baseline_history(self, subject: str, figure: str) -> list[BaselineRecord]:
        """Every baseline of a figure, oldest first."""
        return self._baselines(*self._baselines_of(subject, figure))

    def _baselines_of(self, subject: str, figure: str) -> list[sa.ColumnElement[bool]]:
        table = schema.baselines
        return [
            table.c.site_id == self.site_id,
            table.c.subject == subject,
            table.c.figure == figure,
        ]

    def _baselines(self, *conditions: sa.ColumnElement[bool]) -> list[BaselineRecord]:
        table = schema.baselines
        columns = [c for c in table.columns if c.name != "site_id"]
        query = (
            sa.select(*columns)
            .where(table.c.site_id == self.site_id, *conditions)
            .order_by(table.c.made, table.c.baseline_id)
        )
        with reading(self.engine, "read its baselines") as connection:
            return [
                BaselineRecord(**{**row, "coefficients": json.loads(row["coefficients"])})
                for row in connection.execute(query).mappings()
            ]
