"""Columns of a Parquet file, turned into times, values and qualities."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from connectors.base import ConnectorError
from connectors.numbers import NumberReader
from connectors.quality import QualityWords
from connectors.times import NO_TIME, TimeReader, is_numeric

if TYPE_CHECKING:
    from collections.abc import Callable

    import numpy.typing as npt

    from connectors.parquet_options import ParquetOptions
    from connectors.times import ParsedTimes

__all__ = ["Cells", "ColumnReader", "distinct_texts", "is_text"]

_TEXTS = (pa.types.is_string, pa.types.is_large_string, pa.types.is_string_view)


@dataclass(frozen=True)
class Cells:
    """Values of a column.

    Attributes:
        value: the numbers, NaN where there is none.
        there: where the cell is not null.
        not_understood: neither a number nor a known word for no value.
        other_mark: of these, the ones that are numbers with a decimal comma.
        text: what stands in a cell, by its position.
    """

    value: npt.NDArray[np.float64]
    there: npt.NDArray[np.bool_]
    not_understood: npt.NDArray[np.bool_]
    other_mark: npt.NDArray[np.bool_]
    text: Callable[[int], str]


class ColumnReader:
    """Reads the columns of one source.

    Args:
        options: what the site file says.
    """

    def __init__(self, options: ParquetOptions) -> None:
        self._format = options.time_format
        self._column = options.time_column
        self._zone = options.time_zone
        self._times = TimeReader(options.time_format, options.time_zone)
        self._words = QualityWords(options)
        self._numbers = NumberReader(".", "", self._words)

    def is_local(self, kind: Any) -> bool:  # noqa: ANN401 - pyarrow's types are unknown to mypy
        """Say whether times of a column type are wall-clock times of a zone with odd hours."""
        has_zone = pa.types.is_timestamp(kind) and kind.tz is not None
        return not has_zone and self._zone not in {"UTC", "Etc/UTC"}

    def times(self, column: pa.Array, file: str) -> ParsedTimes:
        """Read times; what cannot be read becomes `NO_TIME`.

        Raises:
            ConnectorError: the column's type does not go with the source's time_format.
        """
        kind = column.type
        if pa.types.is_date(kind):
            column, kind = column.cast(pa.timestamp("us")), pa.timestamp("us")
        if pa.types.is_timestamp(kind):
            stamps = column.cast(pa.timestamp("us", kind.tz), safe=False).cast(pa.int64())
            time = np.asarray(stamps.fill_null(NO_TIME).to_numpy(zero_copy_only=False), np.int64)
            return self._times.universal(time) if kind.tz is not None else self._times.local(time)
        if _is_number(kind):
            if not is_numeric(self._format):
                raise ConnectorError(
                    f"{file}: column '{self._column}' holds numbers ({kind}); set time_format = "
                    "'epoch_s', 'epoch_ms', 'epoch_us', 'serial_1900' or 'serial_1904'"
                )
            return self._times.numbers(_floats(column))
        if not is_text(kind):
            raise ConnectorError(
                f"{file}: column '{self._column}' holds no times but {kind}; correct time_column"
            )
        coded = _dictionary(column)
        texts = coded.dictionary.cast(pa.string()).fill_null("")
        at = coded.indices.fill_null(len(texts)).to_numpy(zero_copy_only=False)
        return self._times.read(pa.concat_arrays([texts, pa.array([""])])).take(at)

    def cells(self, column: pa.Array, name: str, file: str) -> Cells:
        """Read values.

        Raises:
            ConnectorError: the column's type is neither number nor text.
        """
        there = column.is_valid().to_numpy(zero_copy_only=False)
        if pa.types.is_null(column.type):
            column = column.cast(pa.float64())
        if _is_number(column.type) or pa.types.is_boolean(column.type):
            value = _floats(column)
            infinite = np.isinf(value)
            value = np.where(infinite, np.nan, value)
            return Cells(value, there, infinite, np.zeros_like(infinite), lambda _: "infinity")
        if not is_text(column.type):
            raise ConnectorError(
                f"{file}: column '{name}' holds no values but {column.type}; leave the tag out or "
                "correct value_column"
            )
        texts = column.cast(pa.string()).fill_null("")
        read = self._numbers.read(texts)
        return Cells(
            value=read.value,
            there=there & ~read.empty,
            not_understood=read.not_understood,
            other_mark=read.other_mark,
            text=lambda row: str(texts[row]),
        )

    def qualities(self, column: pa.Array) -> tuple[npt.NDArray[np.uint8], npt.NDArray[np.bool_]]:
        """Return classes, and where the word is in no list."""
        words, at = distinct_texts(column)
        classes, unknown = self._words.classify(words)
        return classes[at], unknown[at]


def distinct_texts(column: pa.Array) -> tuple[list[str], npt.NDArray[np.int64]]:
    """Return the distinct cells as texts (null as an empty one), and which each row has."""
    coded = _dictionary(column)
    words = [_word(cell) for cell in coded.dictionary.to_pylist()] + [""]
    at = coded.indices.cast(pa.int64()).fill_null(len(words) - 1)
    return words, np.asarray(at.to_numpy(zero_copy_only=False), np.int64)


def _dictionary(column: pa.Array) -> Any:  # noqa: ANN401
    return column if pa.types.is_dictionary(column.type) else column.dictionary_encode()


def _word(cell: object) -> str:
    if isinstance(cell, float) and cell.is_integer():
        return str(int(cell))
    return "" if cell is None else str(cell).strip()


def _is_number(kind: Any) -> bool:  # noqa: ANN401
    return bool(
        pa.types.is_integer(kind) or pa.types.is_floating(kind) or pa.types.is_decimal(kind)
    )


def is_text(kind: Any) -> bool:  # noqa: ANN401
    """Say whether a column type is one of texts."""
    if pa.types.is_dictionary(kind):
        return is_text(kind.value_type)
    return any(is_one(kind) for is_one in _TEXTS)


def _floats(column: pa.Array) -> npt.NDArray[np.float64]:
    if pa.types.is_boolean(column.type):
        column = column.cast(pa.int8())
    numbers = pc.cast(column, pa.float64(), safe=False)
    return np.asarray(numbers.to_numpy(zero_copy_only=False), np.float64)
