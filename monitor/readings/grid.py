"""The uniform time grid, and the time-weighted mean of irregular readings on it.

A reading holds until the next one, up to the tag's hold time (a step function: what a historian
that reports by exception means). Each cell is summed by itself, in a few array operations for all.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from monitor.equipment.base import FloatArray

__all__ = ["Grid", "Held", "hold_on_grid"]


@dataclass(frozen=True)
class Grid:
    """Cells of one length from ``start`` to ``end``, integer UTC seconds on multiples of it."""

    start: int
    end: int
    interval: int

    def __post_init__(self) -> None:
        if self.start % self.interval or self.end % self.interval or self.end < self.start:
            raise ValueError(
                f"{self.start} to {self.end} is no whole number of {self.interval} s cells"
            )

    @property
    def count(self) -> int:
        """Number of cells."""
        return (self.end - self.start) // self.interval

    @property
    def starts(self) -> npt.NDArray[np.int64]:
        """Start of each cell."""
        return np.arange(self.start, self.end, self.interval, dtype=np.int64)

    @property
    def edges(self) -> npt.NDArray[np.int64]:
        """Ends of all cells, the start of the first included."""
        return np.arange(self.start, self.end + 1, self.interval, dtype=np.int64)

    def lead_in(self, seconds: float) -> Grid:
        """The same grid with whole cells before it that cover so many seconds."""
        cells = int(np.ceil(seconds / self.interval))
        return Grid(self.start - cells * self.interval, self.end, self.interval)


@dataclass(frozen=True)
class Held:
    """One tag on the grid, in the unit of its readings.

    Attributes:
        mean: time-weighted mean over each cell, NaN without coverage, shape (n,).
        coverage: share of each cell that readings cover, 0 to 1, shape (n,).
        edges: value in force at the cells' ends, NaN where none, shape (n + 1,).
        fresh: number of readings inside each cell, shape (n,).
        last: last value in force inside each cell, NaN without coverage, shape (n,).
        low, high: smallest and largest value in force inside each cell, shape (n,).
    """

    mean: FloatArray
    coverage: FloatArray
    edges: FloatArray
    fresh: npt.NDArray[np.int64]
    last: FloatArray
    low: FloatArray
    high: FloatArray


def hold_on_grid(seconds: FloatArray, values: FloatArray, grid: Grid, hold: float) -> Held:
    """Bring the usable readings of one tag to the grid.

    Args:
        seconds: times of the readings [UTC s], ascending, shape (k,).
        values: their values, finite, shape (k,).
        grid: the cells.
        hold: how long a reading stands when no other follows [s].
    """
    edges = grid.edges.astype(np.float64)
    if grid.count == 0:
        raise ValueError("a grid without cells has no means")
    count = np.diff(np.searchsorted(seconds, edges, side="left"))
    if len(seconds) == 0:
        empty = np.full(grid.count, np.nan)
        edge = np.full(grid.count + 1, np.nan)
        return Held(empty, np.zeros(grid.count), edge, count, empty, empty, empty)
    until = np.minimum(np.append(seconds[1:], np.inf), seconds + hold)
    # The value in force changes at readings and ends at cell edges; between two such points it is
    # constant. Sums never leave their cell, so that a figure does not depend on the window.
    inside = (seconds > edges[0]) & (seconds < edges[-1])
    points = _merged(seconds[inside], edges)
    index = np.searchsorted(seconds, points, side="right") - 1
    known = np.maximum(index, 0)
    lasted = np.minimum(points[1:], until[known[:-1]]) - points[:-1]
    lasted = np.where(index[:-1] >= 0, np.maximum(lasted, 0.0), 0.0)
    first = np.searchsorted(points, edges[:-1])
    covered = np.add.reduceat(lasted, first)
    # Relative to the first reading that counts in the cell: a constant signal's mean is that
    # constant exactly, and an expired reading leaves no trace in the last bit.
    value = values[known[:-1]]
    place = np.arange(len(lasted))
    counts = lasted > 0
    base = value[np.minimum.reduceat(np.where(counts, place, len(lasted) - 1), first)]
    last = value[np.maximum.reduceat(np.where(counts, place, 0), first)]
    above = (value - np.repeat(base, np.diff(np.append(first, len(lasted))))) * lasted
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = np.where(covered > 0, base + np.add.reduceat(above, first) / covered, np.nan)
    counted = np.where(counts, value, np.nan)
    at = np.maximum(np.searchsorted(seconds, edges, side="right") - 1, 0)
    in_force = (seconds[at] <= edges) & (edges - seconds[at] <= hold)
    return Held(
        mean=mean,
        coverage=covered / grid.interval,
        edges=np.where(in_force, values[at], np.nan),
        fresh=count,
        last=np.where(covered > 0, last, np.nan),
        low=np.fmin.reduceat(counted, first),
        high=np.fmax.reduceat(counted, first),
    )


def _merged(one: FloatArray, other: FloatArray) -> FloatArray:
    """Distinct values of two ascending arrays: a stable sort only merges the two runs."""
    both: FloatArray = np.sort(np.concatenate([one, other]), kind="stable")
    distinct = np.append(True, both[1:] != both[:-1])
    return np.asarray(both[distinct])
