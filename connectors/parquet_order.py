"""Which rows of a Parquet file stand after later ones of their tag, whatever is read of it."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from connectors.order import FileOrder
from connectors.times import NO_TIME

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator, Sequence

    import numpy.typing as npt

    from connectors.parquet_file import Group
    from connectors.times import ParsedTimes

__all__ = ["GroupOrder"]


class GroupOrder:
    """The order of one state of a file, row group by row group.

    Row groups are read in any order. Mostly their spans of time follow one another, forward or from
    the newest on: that is the order of the file, and what is out of it in a row group shows there
    alone, as it does where the groups before hold other tags. Else times and tags are read once,
    from the first row of the file on, and the order before each row group is kept.
    """

    def __init__(self) -> None:
        self._codes: dict[str, int] = {}
        self._before: dict[int, FileOrder] = {}

    def before(
        self,
        number: int,
        groups: Sequence[Group],
        look: Callable[[Group], Iterator[tuple[ParsedTimes, Sequence[str], npt.NDArray[np.int64]]]],
    ) -> FileOrder:
        """Return the order of the rows before a row group, to go on from.

        Args:
            number: its place in the file.
            groups: all of them.
            look: yields a row group's times, distinct tags, and which of these each row has.
        """
        spans = [(group.first, group.last) for group in groups if group.first <= group.last]
        if len(spans) < 2:  # noqa: PLR2004 - one has no neighbour
            return FileOrder()
        first, last = np.array(spans, dtype=np.int64).T
        if (np.maximum.accumulate(last)[:-1] <= first[1:]).all():
            return FileOrder(goes_back=False)
        if (np.minimum.accumulate(first)[:-1] >= last[1:]).all():
            return FileOrder(goes_back=True)
        if not any(_share_a_tag(groups[number], other) for other in groups[:number]):
            return FileOrder()
        if not self._before:
            order = FileOrder()
            for group in groups:
                self._before[group.number] = order.copy()
                for part in look(group):
                    self.late(order, *part)
        return self._before[number].copy()

    def late(
        self,
        order: FileOrder,
        times: ParsedTimes,
        words: Sequence[str],
        tag_at: npt.NDArray[np.int64],
    ) -> npt.NDArray[np.bool_] | None:
        """Say which of the next rows are out of order, None when none is.

        Args:
            order: that of the rows before.
            times: of the rows.
            words: the distinct tags, empty for a table with a column for each.
            tag_at: which of them each row has.
        """
        there = times.first != NO_TIME
        tag = np.zeros(len(there), dtype=np.int32)
        if words:
            codes = [self._codes.setdefault(w, len(self._codes)) if w else -1 for w in words]
            tag = np.array(codes, dtype=np.int32)[tag_at]
            there &= tag >= 0
        if there.all():
            late = order.late(tag, times.first, times.second)
            return late if late.any() else None
        late = np.zeros(len(there), dtype=np.bool_)
        late[there] = order.late(tag[there], times.first[there], times.second[there])
        return late if late.any() else None


def _share_a_tag(one: Group, other: Group) -> bool:
    """Say whether two row groups may share a tag."""
    if one.tags is None or other.tags is None:
        return True
    return one.tags[0] <= other.tags[1] and other.tags[0] <= one.tags[1]
