"""Numbers as historians write them: decimal commas, thousands marks, and words in their place."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

if TYPE_CHECKING:
    from collections.abc import Sequence

    import numpy.typing as npt

    from connectors.quality import QualityWords

__all__ = ["NumberReader", "ParsedNumbers", "floats"]


@dataclass(frozen=True)
class ParsedNumbers:
    """A column of numbers read from text.

    Attributes:
        value: the numbers, NaN where the text is none.
        empty: there is no text at all.
        not_understood: neither a number nor a known word for no value.
        other_mark: of these, the ones that are numbers with the other decimal mark.
    """

    value: npt.NDArray[np.float64]
    empty: npt.NDArray[np.bool_]
    not_understood: npt.NDArray[np.bool_]
    other_mark: npt.NDArray[np.bool_]


class NumberReader:
    """Reads one source's numbers.

    Args:
        decimal: the decimal mark.
        thousands: the mark between groups of three digits, empty for none.
        words: what may stand in a number's place.
    """

    def __init__(self, decimal: str, thousands: str, words: QualityWords) -> None:
        self._decimal, self._thousands, self._words = decimal, thousands, words
        mark = re.escape(decimal)
        plain = rf"\d+({mark}\d*)?|{mark}\d+"
        # Only whole groups of three count: '1,5' must not become 15 because ',' groups digits.
        grouped = rf"\d{{1,3}}({re.escape(thousands)}\d{{3}})+({mark}\d*)?|" if thousands else ""
        other = "," if decimal == "." else "."
        # None where that mark groups digits: '12.34' is then no number in any reading.
        self._other_mark = "" if other == thousands else rf"^[+-]?\d+{re.escape(other)}\d+$"
        self._pattern = rf"^[+-]?({grouped}{plain})([eE][+-]?\d+)?$"

    def read(self, texts: pa.Array) -> ParsedNumbers:
        """Read texts; nothing is refused, what is not a number is told apart."""
        trimmed = pc.utf8_trim(texts, characters=' \t"\u00a0')
        if self._thousands == " ":
            trimmed = pc.replace_substring_regex(trimmed, "[\u00a0\u202f]", " ")
        matched = pc.match_substring_regex(trimmed, self._pattern)
        number = pc.if_else(matched, trimmed, None)
        if self._thousands:
            number = pc.replace_substring(number, self._thousands, "")
        if self._decimal != ".":
            number = pc.replace_substring(number, self._decimal, ".")
        value = number.cast(pa.float64()).to_numpy(zero_copy_only=False)
        empty = pc.equal(trimmed, "").to_numpy(zero_copy_only=False)
        other = np.zeros(len(texts), dtype=np.bool_)
        words = ~(matched.to_numpy(zero_copy_only=False) | empty)
        value = np.array(value, dtype=np.float64)
        unknown = np.isinf(value)  # digits that no number of 64 bits can hold
        if words.any():
            found = trimmed.filter(pa.array(words)).dictionary_encode()
            distinct = found.dictionary.to_pylist()
            state, no_value = (
                self._words.state_numbers(distinct),
                self._words.mean_no_value(distinct),
            )
            at = found.indices.to_numpy(zero_copy_only=False)
            value[words] = state[at]
            unknown[words] = ~no_value[at] & np.isnan(state[at])
            if self._other_mark:
                like = pc.match_substring_regex(found.dictionary, self._other_mark)
                other[words] = unknown[words] & like.to_numpy(zero_copy_only=False)[at]
        value[np.isinf(value)] = np.nan
        return ParsedNumbers(value, empty, unknown, other)


def floats(cells: Sequence[Any]) -> npt.NDArray[np.float64]:
    """Return cells as floats, a null as NaN.

    Raises:
        TypeError, ValueError: one of them is no number.
    """
    try:
        return np.fromiter(cells, np.float64, len(cells))
    except TypeError:
        return np.array(list(cells), dtype=np.float64)
