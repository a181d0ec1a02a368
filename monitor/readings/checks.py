"""Checks on one tag's readings: too fast, a spike, standing still.

Every check looks back only, and only so far: a reading's verdict never changes when later ones
come, and does not depend on the window that it was read with. What the first two find is left out,
as a reading outside the instrument's range is; a value that stands still is used and flagged, since
nothing better is known.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from monitor.equipment.base import FloatArray

__all__ = ["MOST_READINGS", "spikes", "too_fast", "trailing_spread"]

BoolArray = npt.NDArray[np.bool_]

MOST_READINGS = 15
"""The spike filter's window holds this many readings at most, however dense they come."""
_LEAST_READINGS = 5
# Makes the median of the absolute deviations an estimate of a normal sigma.
_SIGMA_PER_MAD = 1.4826


def too_fast(seconds: FloatArray, values: FloatArray, limit: float, reach: float) -> BoolArray:
    """Find readings that moved faster than a limit from the reading before them.

    The return from a single wrong reading passes: the one before had moved too fast itself, and
    from the one before that nothing much has moved. A step loses one reading: the next confirms it.

    Args:
        seconds: times [s], ascending, shape (k,).
        values: shape (k,).
        limit: largest rate of change [1/s] in the values' unit.
        reach: readings older than this say nothing about the next one [s].
    """
    fast = _faster(seconds, values, limit, reach, 1)
    if not fast.any():
        return fast
    returned = _known(seconds, reach, 2) & ~_faster(seconds, values, limit, reach, 2)
    returned[1:] &= fast[:-1]
    return np.asarray(fast & ~returned)


def _known(seconds: FloatArray, reach: float, back: int) -> BoolArray:
    known = np.zeros(len(seconds), dtype=np.bool_)
    known[back:] = seconds[back:] - seconds[:-back] <= reach
    return known


def _faster(
    seconds: FloatArray, values: FloatArray, limit: float, reach: float, back: int
) -> BoolArray:
    fast = _known(seconds, reach, back)
    moved = np.abs(values[back:] - values[:-back])
    fast[back:] &= moved > limit * (seconds[back:] - seconds[:-back])
    return fast


def spikes(
    seconds: FloatArray,
    values: FloatArray,
    window: float,
    threshold: float,
    least: tuple[float, float],
) -> BoolArray:
    """Find spikes by the Hampel identifier on a trailing window.

    A reading is off when it lies further than ``threshold`` * S from the median of the readings
    before it, and further than what a spike is at least; S is 1.4826 times the median of their
    absolute deviations from that median. An off reading is a spike unless the reading before it
    agrees with it: was off to the same side, or no further from it than what a spike is at least.
    So a step or a steep ramp loses its first reading and no other.

    The window is trailing where the filter is usually centred, so that a verdict stands when later
    readings come. F. R. Hampel, J. Am. Stat. Assoc. 69, 383 (1974); R. K. Pearson, IEEE Trans.
    Control Syst. Technol. 10, 55 (2002).

    Args:
        seconds: times [s], ascending, shape (k,).
        values: finite, shape (k,).
        window: the readings before one count for so long [s]; the newest 15 of them at most, and
            with fewer than 5 nothing is said.
        threshold: in multiples of S; 3 is usual.
        least: how far off a spike is at least: an amount, and a share of the median.
    """
    off = np.zeros(len(values), dtype=np.int8)
    asked = _candidates(values, least[0])
    if len(asked) == 0:
        return off > 0
    before = asked[:, None] + np.arange(-MOST_READINGS, 0)
    inside = np.maximum(before, 0)
    known = (before >= 0) & (seconds[asked, None] - seconds[inside] <= window)
    middle = _median_of_known(values[inside], known)
    spread = _median_of_known(np.abs(values[inside] - middle[:, None]), known)
    smallest = least[0] + least[1] * np.abs(middle)
    above = values[asked] - middle
    limit = np.maximum(threshold * _SIGMA_PER_MAD * spread, smallest)
    judged = (known.sum(axis=1) >= _LEAST_READINGS) & (np.abs(above) > limit)
    off[asked] = np.where(judged, np.sign(above), 0.0)
    previous = asked - 1  # none of them the first reading: that has none before it to differ from
    near = np.abs(values[asked] - values[previous]) <= smallest
    agrees = (near | (off[asked] == off[previous])) & (seconds[asked] - seconds[previous] <= window)
    found = np.zeros(len(values), dtype=np.bool_)
    found[asked] = judged & ~agrees
    return found


def _candidates(values: FloatArray, least: float) -> npt.NDArray[np.int64]:
    """Readings far enough from any of those before them to be off at all: few, as a rule."""
    count = len(values)
    low, high = np.full(count, np.inf), np.full(count, -np.inf)
    for back in range(1, min(MOST_READINGS, count - 1) + 1):
        np.minimum(low[back:], values[:-back], out=low[back:])
        np.maximum(high[back:], values[:-back], out=high[back:])
    return np.flatnonzero(np.maximum(values - low, high - values) > least)


def _median_of_known(values: FloatArray, known: BoolArray) -> FloatArray:
    """Median along rows of the known values; a row without any gives zero."""
    ordered = np.sort(np.where(known, values, np.inf), axis=1)
    count = known.sum(axis=1)
    rows, upper = np.arange(len(values)), count // 2
    middle = 0.5 * (ordered[rows, np.maximum(count - 1, 0) // 2] + ordered[rows, upper])
    return np.where(count > 0, middle, 0.0)


def trailing_spread(low: FloatArray, high: FloatArray, cells: int) -> FloatArray:
    """Largest less smallest value over each cell and the ``cells - 1`` before it.

    Args:
        low: smallest value in each cell, NaN for none, shape (n,).
        high: largest value in each cell, shape (n,).
        cells: length of the trailing window.

    Returns:
        Shape (n,); infinite where the window begins before the first cell or a cell has no value:
        what is not known did not stand still.
    """
    spread = np.full(len(low), np.inf)
    if cells > len(low):
        return spread
    smallest = np.lib.stride_tricks.sliding_window_view(np.nan_to_num(low, nan=-np.inf), cells)
    largest = np.lib.stride_tricks.sliding_window_view(np.nan_to_num(high, nan=np.inf), cells)
    spread[cells - 1 :] = largest.max(axis=1) - smallest.min(axis=1)
    return spread
