"""Which readings of a file stand after later ones of the same tag."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from connectors.times import NO_TIME

if TYPE_CHECKING:
    import numpy.typing as npt

__all__ = ["FileOrder"]


_FIRST_STEPS = 8
"""An export from the newest to the oldest reading shows so many steps back before any forward."""


class FileOrder:
    """The latest time of each tag so far, as a file is read from its start.

    What is out of order is a property of the file: the order is that of its rows from the first
    one on, whichever part of them a window asks for. A file that begins by going back only is one
    that lists the newest reading first: there the rows that go forward are out of order.

    Args:
        goes_back: whether the newest reading comes first; None when the next rows shall tell.
    """

    def __init__(self, *, goes_back: bool | None = None) -> None:
        self._goes_back = goes_back
        self._latest = np.zeros(0, dtype=np.int64)
        self._highest = NO_TIME

    def copy(self) -> FileOrder:
        """Return the order as it is here, to go on from later."""
        other = FileOrder(goes_back=self._goes_back)
        other._latest, other._highest = self._latest.copy(), self._highest
        return other

    def late(
        self,
        tag: npt.NDArray[np.int32],
        first: npt.NDArray[np.int64],
        second: npt.NDArray[np.int64],
    ) -> npt.NDArray[np.bool_]:
        """Say which of the next rows are out of order.

        Args:
            tag: the code of each row's tag.
            first: [us] the time, in a doubled hour the earlier candidate; that one may have been
                meant by the rows before.
            second: [us] the later candidate, which may be meant by the row itself.
        """
        late = np.zeros(len(first), dtype=np.bool_)
        if not len(first):
            return late
        if self._goes_back is None:
            steps = np.diff(first)
            steps = steps[steps != 0][:_FIRST_STEPS]
            self._goes_back = len(steps) == _FIRST_STEPS and bool((steps < 0).all())
        if self._goes_back:
            first, second = -second, -first
        self._reach(int(tag.max()) + 1)
        sorted_on = int(first[0]) >= self._highest and bool((first[1:] >= first[:-1]).all())
        if sorted_on:
            self._latest[tag] = first  # of equal tags the last one stays
            self._highest = int(first[-1])
            return late
        order = np.argsort(tag, kind="stable")
        bounds = np.flatnonzero(np.diff(tag[order], prepend=-1))
        for low, high in zip(bounds, [*bounds[1:], len(order)], strict=True):
            rows = order[low:high]
            code = tag[rows[0]]
            so_far = np.maximum.accumulate(np.append(self._latest[code], first[rows]))
            late[rows] = second[rows] < so_far[:-1]
            self._latest[code] = so_far[-1]
        self._highest = max(self._highest, int(first.max()))
        return late

    def _reach(self, count: int) -> None:
        new = count - len(self._latest)
        if new > 0:
            self._latest = np.append(self._latest, np.full(new, NO_TIME, dtype=np.int64))
