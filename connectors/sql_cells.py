"""Fetched rows of a SQL database, turned into readings."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
import pyarrow as pa

from connectors.base import Quality
from connectors.numbers import NumberReader
from connectors.quality import QualityWords
from connectors.tidy import Rows
from connectors.times import NO_TIME

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    import numpy.typing as npt

    from connectors.sql_options import SqlOptions
    from connectors.sql_times import SqlTimes
    from connectors.tidy import ProblemCount
    from connectors.times import ParsedTimes

__all__ = ["CellReader"]

_NO_TIME = "row dropped: its time cannot be read"
_MISSING_HOUR = "row dropped: its local time does not exist, the clock was put forward"
_NOT_A_NUMBER = "value is not a number: the reading is kept as bad"
_UNKNOWN_QUALITY = "quality word is in no list: the reading counts as uncertain"


class CellReader:
    """Reads the cells of one source.

    Args:
        options: what the site file says.
    """

    def __init__(self, options: SqlOptions) -> None:
        self._where = options.named
        self._words = QualityWords(options)
        self._numbers = NumberReader(".", "", self._words)

    def times(
        self, cells: Sequence[Any], times: SqlTimes, problems: ProblemCount
    ) -> tuple[ParsedTimes, npt.NDArray[np.bool_]]:
        """Return times, and where there is one; what is not understood is counted."""
        parsed = times.parse(cells)
        there = parsed.first != NO_TIME
        missing = parsed.in_missing_hour
        problems.add(self._where, "", _MISSING_HOUR, int(missing.sum()))
        lost = ~there & ~missing
        example = str(cells[int(lost.argmax())]) if lost.any() else ""
        problems.add(self._where, "", _NO_TIME, int(lost.sum()), example=example)
        return parsed, there

    def long(
        self,
        columns: Sequence[Sequence[Any]],
        keys: Mapping[Any, int],
        times: SqlTimes,
        problems: ProblemCount,
        *,
        collated: bool,
    ) -> Rows:
        """Turn rows of time, tag, value and perhaps quality; rows of other tags are left out.

        Args:
            columns: the cells, column by column.
            keys: the code of each content of the tag's column.
            times: reads the times.
            problems: what is passed over is counted here.
            collated: the database has chosen the rows by their tags; some take capitals and blanks
                at the end for the same, so that its word counts.
        """
        codes, found = pd.factorize(pd.Series(columns[1], dtype=object), use_na_sentinel=False)
        distinct = list(found)
        if collated and not all(key in keys for key in distinct):
            keys = {_folded(key): code for key, code in keys.items()}
            distinct = [_folded(key) for key in distinct]
        known = np.array([keys.get(key, -1) for key in distinct], dtype=np.int32)
        tag = known[codes]
        if (known < 0).any():
            asked = np.flatnonzero(tag >= 0).tolist()
            columns, tag = [[cells[i] for i in asked] for cells in columns], tag[asked]
        if not len(tag):
            return _rows(times.parse([]), tag, np.zeros(0), np.zeros(0, dtype=np.uint8))
        parsed, there = self.times(columns[0], times, problems)
        value = self._values(columns[2], problems)
        quality = self._qualities(columns[3] if len(columns) > 3 else None, len(value), problems)  # noqa: PLR2004
        quality[np.isnan(value)] = Quality.BAD
        rows = _rows(parsed, tag, value, quality)
        return rows if there.all() else rows.keep(there)

    def wide(
        self,
        columns: Sequence[Sequence[Any]],
        codes: Sequence[int],
        times: SqlTimes,
        problems: ProblemCount,
    ) -> Rows:
        """Turn rows of a time and a value for each tag; a null is no reading.

        Args:
            columns: the cells, column by column, the times first.
            codes: the tag's code of each column of values.
            times: reads the times.
            problems: what is passed over is counted here.
        """
        parsed, has_time = self.times(columns[0], times, problems)
        values = [self._values(cells, problems) for cells in columns[1:]]
        there = [_there(v, cells) & has_time for v, cells in zip(values, columns[1:], strict=True)]
        column, row = np.nonzero(np.array(there, dtype=np.bool_).reshape(len(values), -1))
        value = np.array(values).reshape(len(values), -1)[column, row]
        tag = np.array(codes, dtype=np.int32)[column]
        quality = np.where(np.isnan(value), Quality.BAD, Quality.GOOD).astype(np.uint8)
        return _rows(parsed.take(row), tag, value, quality)

    def _values(self, cells: Sequence[Any], problems: ProblemCount) -> npt.NDArray[np.float64]:
        try:
            value = np.array(cells, dtype=np.float64)  # None becomes NaN
        except (TypeError, ValueError):
            parsed = self._numbers.read(pa.array(["" if c is None else str(c) for c in cells]))
            unknown = int(parsed.not_understood.sum())
            problems.add(self._where, "", _NOT_A_NUMBER, unknown, example=parsed.example)
            return parsed.value
        infinite = np.isinf(value)
        problems.add(self._where, "", _NOT_A_NUMBER, int(infinite.sum()))
        value[infinite] = np.nan
        return value

    def _qualities(
        self, cells: Sequence[Any] | None, count: int, problems: ProblemCount
    ) -> npt.NDArray[np.uint8]:
        if cells is None:
            return np.full(count, Quality.GOOD, dtype=np.uint8)
        at, distinct = pd.factorize(pd.Series(cells, dtype=object), use_na_sentinel=False)
        words = [_word(cell) for cell in distinct]
        classes, unknown = self._words.classify(words)
        rows = unknown[at]
        example = words[at[int(rows.argmax())]] if rows.any() else ""
        problems.add(self._where, "", _UNKNOWN_QUALITY, int(rows.sum()), example=example)
        return classes[at]


def _rows(
    times: ParsedTimes,
    tag: npt.NDArray[np.int32],
    value: npt.NDArray[np.float64],
    quality: npt.NDArray[np.uint8],
) -> Rows:
    doubled = np.flatnonzero(times.doubled)
    return Rows(tag, times.first, value, quality, doubled, times.second[doubled])


def _there(value: npt.NDArray[np.float64], cells: Sequence[Any]) -> npt.NDArray[np.bool_]:
    """Say where there is a cell: a null or an empty text is none, a word for no value is one."""
    there = ~np.isnan(value)
    for at in np.flatnonzero(~there).tolist():
        cell = cells[at]
        there[at] = cell is not None and not (isinstance(cell, str) and not cell.strip())
    return there


def _folded(key: object) -> object:
    return key.rstrip().casefold() if isinstance(key, str) else key


def _word(cell: object) -> str:
    if isinstance(cell, float) and cell.is_integer():
        return str(int(cell))
    return "" if cell is None or cell is pd.NA or cell != cell else str(cell)  # noqa: PLR0124
