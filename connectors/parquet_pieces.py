"""Decoded pieces of row groups, kept for the next window: one row group often spans many days."""

from __future__ import annotations

from collections import OrderedDict
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa

if TYPE_CHECKING:
    import numpy.typing as npt

    from connectors.times import ParsedTimes

__all__ = ["Piece", "PieceCache"]


@dataclass(frozen=True)
class Piece:
    """Some rows of a row group.

    Attributes:
        batch: the columns of values and quality as they are in the file.
        times: of each row.
        words: the distinct tag names; none in layout ``wide``.
        tag_at: which of them each row has.
        late: which rows stand after later ones of their tag, None when none does.
        ordered: the rows stand in the order of time.
    """

    batch: pa.RecordBatch
    times: ParsedTimes
    words: list[str]
    tag_at: npt.NDArray[np.int64]
    late: npt.NDArray[np.bool_] | None
    ordered: bool

    @property
    def nbytes(self) -> int:
        """The memory that it takes."""
        times = self.times
        second = 0 if times.second is times.first else times.second.nbytes
        parsed = times.first.nbytes + second + times.in_missing_hour.nbytes
        late = 0 if self.late is None else self.late.nbytes
        return int(self.batch.nbytes) + parsed + int(self.tag_at.nbytes) + late

    def within(self, start: int, end: int) -> Piece:
        """Return the rows of a span of time, without a look at the others if they are in order.

        Args:
            start: [us] of the span.
            end: [us] of the span; it is half open.
        """
        first = self.times.first
        inside: Any
        if self.ordered:
            low, high = np.searchsorted(first, [start, end]).tolist()
            inside, count, batch = slice(low, high), high - low, self.batch.slice(low, high - low)
        else:
            inside = np.flatnonzero((first >= start) & (first < end))
            count = len(inside)
            batch = self.batch if count == len(first) else self.batch.take(pa.array(inside))
        if count == len(first):
            return self
        late = None if self.late is None else self.late[inside]
        # In layout wide there are no tags beside the rows.
        tag_at = self.tag_at[inside] if self.words else self.tag_at
        return Piece(batch, self.times.take(inside), self.words, tag_at, late, self.ordered)


class PieceCache:
    """Keeps the pieces of the row groups used last within a bound of memory.

    Args:
        limit: [bytes]
    """

    def __init__(self, limit: int) -> None:
        self.limit = limit
        self._used = 0
        self._pieces: OrderedDict[Any, list[Piece]] = OrderedDict()

    def get(self, key: object) -> list[Piece] | None:
        """Return a row group's pieces if they are here."""
        pieces = self._pieces.get(key)
        if pieces is not None:
            self._pieces.move_to_end(key)
        return pieces

    def put(self, key: object, pieces: list[Piece]) -> None:
        """Keep pieces that fit, at the cost of those that were used longest ago."""
        size = sum(piece.nbytes for piece in pieces)
        if size > self.limit or key in self._pieces:
            return
        while self._used + size > self.limit:
            _, old = self._pieces.popitem(last=False)
            self._used -= sum(piece.nbytes for piece in old)
        self._pieces[key] = pieces
        self._used += size

    def clear(self) -> None:
        """Forget everything."""
        self._pieces.clear()
        self._used = 0
