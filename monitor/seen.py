"""Which hours of the look-back have readings that the stored figures were not made of.

Each cycle reads its look-back and lead-in again, since readings come late; that they hardly ever do
is known from a digest of the readings of each ten minutes, and hours whose readings are all as
before, back to where the lead-in begins, need not be computed again: their figures would be the
same to the last bit.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from monitor.readings.digest import words_of

if TYPE_CHECKING:
    from monitor.site.load import Site

__all__ = ["Seen"]

_HOUR, _PART = 3600, 600


class Seen:
    """What the newest stored window was made of; kept between cycles, in memory only."""

    def __init__(self) -> None:
        self._site = ""
        self._start = self._end = 0
        self._parts: dict[int, int] = {}

    def news_from(
        self, site: Site, readings: pd.DataFrame, first: int, start: int, end: int, stored: int
    ) -> int:
        """The full hour at or after ``start`` from which figures can differ from the stored ones.

        Args:
            site: whose site file tells what figures are.
            readings: of the window and its lead-in.
            first: where the lead-in begins, integer UTC seconds.
            start: of the window.
            end: of the window.
            stored: end of the newest figures that the store has: a database that crashed, or was
                put back from a copy, may have lost the last of what it had taken.
        """
        known = self._site == site.hash and self._start <= start <= self._end <= end
        if not known:
            return start
        now = _digests(readings, first)
        changed = [
            part
            for part in now.keys() | self._parts.keys()
            if part >= first and now.get(part) != self._parts.get(part)
        ]
        return max(start, min([*changed, self._end, stored]) // _HOUR * _HOUR)

    def remember(
        self, site: Site, readings: pd.DataFrame, first: int, start: int, end: int
    ) -> None:
        """Note what a window was made of, now that it is stored; arguments as `news_from`."""
        self._site, self._start, self._end = site.hash, start, end
        self._parts = _digests(readings, first)


def _digests(readings: pd.DataFrame, first: int) -> dict[int, int]:
    """A number for the readings of each part of time after ``first``, by the part's start.

    A reading belongs to the part that it ends: it has a share in the cell before it, a vessel's
    content at that cell's end.
    """
    if readings.empty:
        return {}
    micros = pd.DatetimeIndex(readings["time"]).as_unit("us").asi8
    part = -((first * 1_000_000 - micros) // (_PART * 1_000_000)) - 1
    after = part >= 0
    part, words = part[after], words_of(readings, micros)[after]
    count = np.bincount(part)
    sums = np.zeros(len(count), dtype=np.uint64)
    # The sums of so few bits are whole numbers that a float holds exactly.
    for shift in (0, 22, 44):
        bits = (words >> np.uint64(shift)) & np.uint64(0x3FFFFF)
        sums += np.bincount(part, bits.astype(np.float64)).astype(np.uint64) << np.uint64(shift)
    return {first + k * _PART: int(sums[k]) for k in np.flatnonzero(count).tolist()}
