"""The control charts' points: hourly measured, expected, residual, EWMA and limit."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from monitor.store import schema
from monitor.store.bulk import Scope, fetch, replace_rows
from monitor.store.engine import reading, writing
from monitor.store.errors import StoreError
from monitor.store.handle import Instant, SiteHandle, seconds, utc

__all__ = ["DRIFT_COLUMNS", "DriftPoints"]

_NUMBERS = ("measured", "expected", "residual", "ewma", "limit")
DRIFT_COLUMNS = (*_NUMBERS, "cells", "judged", "baseline_id")
"""Columns beside ``hour``: ``limit`` is the EWMA's, in the figure's unit; ``judged`` is 0 or 1;
``baseline_id`` is absent where the figure has no baseline."""


class DriftPoints(SiteHandle):
    """The site's control charts."""

    def replace_drift_points(
        self, equipment: str, figure: str, start: Instant, end: Instant, points: pd.DataFrame
    ) -> int:
        """Make a chart's points in [start, end) exactly these.

        Args:
            equipment: the equipment's id.
            figure: one of its registered condition figures.
            start: where the stretch to replace begins.
            end: where it ends.
            points: ``hour`` (integer UTC seconds, each once) and `DRIFT_COLUMNS`.

        Returns:
            How many rows were inserted, changed or removed.

        Raises:
            StoreError: unknown equipment or figure, hours outside the stretch or twice.
        """
        subject_id = self._subject_id("equipment", equipment)
        figure_id = self._figure_id(figure)
        first, last = seconds(start), seconds(end)
        hours = points["hour"].to_numpy(np.int64)
        if ((hours < first) | (hours >= last)).any() or len(np.unique(hours)) != len(hours):
            raise StoreError(
                f"drift points of '{equipment}' {figure}: hours outside the stretch, or twice"
            )
        columns: dict[str, npt.NDArray[Any]] = {
            "subject_id": np.full(len(points), subject_id),
            "figure_id": np.full(len(points), figure_id),
            "hour": hours,
            **{name: points[name].to_numpy(np.float64) for name in _NUMBERS},
            "cells": points["cells"].to_numpy(np.int64),
            "judged": points["judged"].to_numpy(np.int64),
            "baseline_id": _or_none(points["baseline_id"]),
        }
        scope = Scope("subject_id", [subject_id], "hour", first, last, {"figure_id": figure_id})
        with writing(self.engine, "store drift points") as connection:
            changes = replace_rows(connection, schema.drift_points, columns, scope)
        return changes.changed + changes.removed

    def drift_points(
        self, equipment: str, figure: str, start: Instant, end: Instant
    ) -> pd.DataFrame:
        """A chart's points in [start, end).

        Returns:
            Indexed by ``hour`` (UTC); `DRIFT_COLUMNS`.
        """
        subject_id, figure_id = self._subject_id("equipment", equipment), self._figure_id(figure)
        names = ", ".join(f'"{name}"' for name in ("hour", *DRIFT_COLUMNS))
        query = (
            f"select {names} from drift_points where subject_id = {subject_id} "  # noqa: S608
            f"and figure_id = {figure_id} and hour >= {seconds(start)} and hour < {seconds(end)} "
            "order by hour"
        )
        with reading(self.engine, "read drift points") as connection:
            rows = fetch(connection, query, 1 + len(DRIFT_COLUMNS))
        frame = pd.DataFrame(rows[:, 1:], columns=list(DRIFT_COLUMNS), index=_hours(rows[:, 0]))
        return frame.astype({"cells": "int64", "judged": "bool", "baseline_id": "Int64"})


def _hours(values: npt.NDArray[np.float64]) -> pd.DatetimeIndex:
    return utc(values.astype(np.int64).tolist()).rename("hour")


def _or_none(values: pd.Series[Any]) -> npt.NDArray[Any]:
    """Whole numbers with None where absent: NaN would make all of them fractions."""
    numbers = values.astype("Int64")
    return np.array([None if pd.isna(n) else int(n) for n in numbers], dtype=object)
