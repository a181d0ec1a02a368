"""Fetched rows of a SQL database, turned into readings."""

from __future__ import annotations

from functools import partial
from itertools import compress
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
import pyarrow as pa

from connectors.base import Quality
from connectors.numbers import NumberReader, floats
from connectors.quality import QualityWords
from connectors.tidy import Rows, first_few, place_of
from connectors.times import NO_TIME

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping, Sequence

    import numpy.typing as npt

    from connectors.sql_options import SqlOptions
    from connectors.sql_times import SqlTimes
    from connectors.tidy import ProblemCount
    from connectors.times import ParsedTimes

__all__ = ["CellReader"]

_NO_TIME = "row dropped: its time cannot be read"
_MISSING_HOUR = "row dropped: its local time does not exist, the clock was put forward"
_NOT_A_NUMBER = "value is not a number: the reading is kept as bad"
_OTHER_MARK = (
    "value is a text with a decimal comma: the reading is kept as bad; hand it over as a number "
    "(a query may replace the comma)"
)
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
        self,
        cells: Sequence[Any],
        times: SqlTimes,
        problems: ProblemCount,
        place: Callable[[int], str] = lambda _: "",
    ) -> tuple[ParsedTimes, npt.NDArray[np.bool_]]:
        """Return times, and where there is one; what is not understood is counted.

        Args:
            cells: as they were fetched.
            times: reads them.
            problems: what is passed over is counted here.
            place: says where a row stands.
        """
        parsed = times.parse(cells)
        there = parsed.first != NO_TIME
        missing = parsed.in_missing_hour
        for what, rows in ((_MISSING_HOUR, missing), (_NO_TIME, ~there & ~missing)):
            examples = first_few(rows, cells.__getitem__, place)
            problems.add(self._where, what, int(rows.sum()), examples)
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
        codes = _TagCodes(keys, collated=collated)
        tag = np.fromiter(map(codes.__getitem__, columns[1]), np.int32, len(columns[1]))
        known = tag >= 0
        if not known.all():
            asked = known.tolist()
            columns, tag = [list(compress(cells, asked)) for cells in columns], tag[known]
        if not len(tag):
            return _rows(times.parse([]), tag, np.zeros(0), np.zeros(0, dtype=np.uint8))
        names = columns[1]
        parsed, there = self.times(columns[0], times, problems, lambda row: str(names[row]))

        def place(row: int) -> str:
            return place_of(str(names[row]), int(parsed.first[row]))

        value, _ = self._values(columns[2], problems, place)
        words = columns[3] if len(columns) > 3 else None  # noqa: PLR2004
        quality = self._qualities(words, len(value), problems, place)
        quality[np.isnan(value)] = Quality.BAD
        rows = _rows(parsed, tag, value, quality)
        return rows if there.all() else rows.keep(there)

    def wide(
        self,
        columns: Sequence[Sequence[Any]],
        codes: Sequence[int],
        times: SqlTimes,
        problems: ProblemCount,
        names: Sequence[str],
    ) -> Rows:
        """Turn rows of a time and a value for each tag; a null is no reading.

        Args:
            columns: the cells, column by column, the times first.
            codes: the tag's code of each column of values.
            times: reads the times.
            problems: what is passed over is counted here.
            names: those of the columns of values.
        """
        parsed, has_time = self.times(columns[0], times, problems)
        cells = [
            self._values(column, problems, partial(_place_in, name, parsed.first))
            for name, column in zip(names, columns[1:], strict=True)
        ]
        shape = (len(cells), len(has_time))
        there = np.array([part[1] for part in cells], dtype=np.bool_).reshape(shape) & has_time
        column, row = np.nonzero(there)
        value = np.array([part[0] for part in cells], dtype=np.float64).reshape(shape)[column, row]
        tag = np.array(codes, dtype=np.int32)[column]
        quality = np.where(np.isnan(value), Quality.BAD, Quality.GOOD).astype(np.uint8)
        return _rows(parsed.take(row), tag, value, quality)

    def _values(
        self, cells: Sequence[Any], problems: ProblemCount, place: Callable[[int], str]
    ) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.bool_]]:
        """Return numbers, NaN where there is none, and where there is a cell at all.

        A null or an empty text is none, a word for no value is one.
        """
        try:
            value = floats(cells)
        except (TypeError, ValueError):
            parsed = self._numbers.read(pa.array(["" if c is None else str(c) for c in cells]))
            unknown, comma = parsed.not_understood, parsed.other_mark
            for what, rows in ((_NOT_A_NUMBER, unknown & ~comma), (_OTHER_MARK, comma)):
                examples = first_few(rows, cells.__getitem__, place)
                problems.add(self._where, what, int(rows.sum()), examples)
            return parsed.value, ~parsed.empty
        there = np.ones(len(value), dtype=np.bool_)
        if np.isnan(value).any():
            there = np.asarray(_objects(cells) != None, dtype=np.bool_)  # noqa: E711 - by cell
        infinite = np.isinf(value)
        if infinite.any():
            examples = first_few(infinite, cells.__getitem__, place)
            problems.add(self._where, _NOT_A_NUMBER, int(infinite.sum()), examples)
            value[infinite] = np.nan
        return value, there

    def _qualities(
        self,
        cells: Sequence[Any] | None,
        count: int,
        problems: ProblemCount,
        place: Callable[[int], str],
    ) -> npt.NDArray[np.uint8]:
        if cells is None:
            return np.full(count, Quality.GOOD, dtype=np.uint8)
        at, distinct = pd.factorize(pd.Series(list(cells), dtype=object), use_na_sentinel=False)
        words = [_word(cell) for cell in distinct]
        classes, unknown = self._words.classify(words)
        rows = unknown[at]
        examples = first_few(rows, lambda row: words[at[row]], place)
        problems.add(self._where, _UNKNOWN_QUALITY, int(rows.sum()), examples)
        return classes[at]


def _place_in(name: str, first: npt.NDArray[np.int64], row: int) -> str:
    return place_of(name, int(first[row]))


def _rows(
    times: ParsedTimes,
    tag: npt.NDArray[np.int32],
    value: npt.NDArray[np.float64],
    quality: npt.NDArray[np.uint8],
) -> Rows:
    doubled = np.flatnonzero(times.doubled)
    return Rows(tag, times.first, value, quality, doubled, times.second[doubled])


class _TagCodes(dict[Any, int]):
    """The code of each content of a tag column, -1 for those that nobody asked for."""

    def __init__(self, keys: Mapping[Any, int], *, collated: bool) -> None:
        super().__init__(keys)
        self._folded = {_folded(key): code for key, code in keys.items()} if collated else {}

    def __missing__(self, key: Any) -> int:  # noqa: ANN401
        code = self[key] = self._folded.get(_folded(key), -1)
        return code


def _objects(cells: Sequence[Any]) -> npt.NDArray[np.object_]:
    held = np.empty(len(cells), dtype=object)
    held[:] = list(cells)
    return held


def _folded(key: object) -> object:
    return key.rstrip().casefold() if isinstance(key, str) else key


def _word(cell: object) -> str:
    if isinstance(cell, float) and cell.is_integer():
        return str(int(cell))
    return "" if cell is None or cell is pd.NA or cell != cell else str(cell)  # noqa: PLR0124
