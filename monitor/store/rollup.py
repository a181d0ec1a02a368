"""Roll figures up over hours, shifts, days and months: arrays in, arrays out.

A rate (kW, kg/s, bar, degC) is averaged over the grid cells that have a value; all cells are
equally long, so its weight is the time covered, and an energy is mean times covered time. A
condition figure is averaged with its own denominator as weight, sum(v w) / sum(w), over the cells
that may be judged (`monitor.flags.NOT_JUDGED`): the mean is then the figure that the span's totals
give. An exergetic efficiency is never averaged; it is the ratio of two of these means.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from monitor.flags import NOT_JUDGED

if TYPE_CHECKING:
    from collections.abc import Sequence

    from monitor.flags import FlagArray
    from monitor.store.spans import Spans

__all__ = ["Cells", "Partials", "combine", "condition_partials", "roll_cells"]

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Cells:
    """Rates of several subjects on the grid, in any order.

    Attributes:
        subject_id: shape (n,).
        time: integer UTC seconds, start of the cell, shape (n,).
        figure_ids: what the columns are, shape (m,).
        values: shape (n, m); NaN where absent.
    """

    subject_id: IntArray
    time: IntArray
    figure_ids: Sequence[int]
    values: FloatArray


@dataclass(frozen=True)
class Partials:
    """Means over pieces of time, one row a subject, figure and piece; all of shape (n,).

    Attributes:
        subject_id, figure_id: whose, and which figure.
        start: where the piece starts, integer UTC seconds.
        mean, minimum, maximum: over the cells that count.
        weight: what the mean is weighted with when pieces are put together.
        covered_s: seconds of cells that count.
    """

    subject_id: IntArray
    figure_id: IntArray
    start: IntArray
    mean: FloatArray
    minimum: FloatArray
    maximum: FloatArray
    weight: FloatArray
    covered_s: IntArray

    @classmethod
    def none(cls) -> Partials:
        """No pieces at all."""
        whole, real = np.empty(0, dtype=np.int64), np.empty(0, dtype=np.float64)
        return cls(whole, whole, whole, real, real, real, real, whole)

    def where(self, keep: npt.NDArray[np.bool_] | IntArray) -> Partials:
        """The pieces that ``keep`` marks, or in its order."""
        return Partials(*(values[keep] for values in vars(self).values()))

    def __add__(self, other: Partials) -> Partials:
        both = zip(vars(self).values(), vars(other).values(), strict=True)
        return Partials(*(np.concatenate(pair) for pair in both))


def roll_cells(cells: Cells, spans: Spans, interval_s: int) -> Partials:
    """Average rates over spans; a figure without any value in a span gives no row."""
    span = spans.index(cells.time)
    order = np.lexsort((cells.time, span, cells.subject_id))
    order = order[span[order] >= 0]
    if not len(order):
        return Partials.none()
    subject, span, values = cells.subject_id[order], span[order], cells.values[order]
    first = _group_starts(subject, span)
    present = ~np.isnan(values)
    count = np.add.reduceat(present, first, axis=0, dtype=np.int64)
    total = np.add.reduceat(np.where(present, values, 0.0), first, axis=0)
    some = count > 0
    group, figure = np.nonzero(some)
    covered = count[some] * interval_s
    return Partials(
        subject_id=subject[first][group],
        figure_id=np.asarray(cells.figure_ids, dtype=np.int64)[figure],
        start=spans.starts[span[first]][group],
        mean=total[some] / count[some],
        minimum=np.fmin.reduceat(values, first, axis=0)[some],
        maximum=np.fmax.reduceat(values, first, axis=0)[some],
        weight=covered.astype(np.float64),
        covered_s=covered,
    )


def condition_partials(
    subject_id: IntArray,
    figure_id: IntArray,
    time: IntArray,
    value: FloatArray,
    weight: FloatArray,
    flag: FlagArray,
    interval_s: int,
) -> Partials:
    """Condition figures as pieces of one cell each, those that may not be judged left out."""
    counts = np.isfinite(value) & (weight > 0) & ((flag & int(NOT_JUDGED)) == 0)
    value = value[counts]
    covered = np.full(value.shape, interval_s, dtype=np.int64)
    return Partials(
        subject_id[counts], figure_id[counts], time[counts], value, value, value, weight[counts],
        covered,
    )  # fmt: skip


def combine(pieces: Partials, spans: Spans) -> Partials:
    """Put pieces together over spans; every piece lies wholly in the span that its start is in."""
    span = spans.index(pieces.start)
    # Always summed in order of time, so that the same pieces give the same last digit.
    order = np.lexsort((pieces.start, pieces.figure_id, span, pieces.subject_id))
    order = order[span[order] >= 0]
    if not len(order):
        return Partials.none()
    pieces, span = pieces.where(order), span[order]
    first = _group_starts(pieces.subject_id, span, pieces.figure_id)
    weight = np.add.reduceat(pieces.weight, first)
    return Partials(
        subject_id=pieces.subject_id[first],
        figure_id=pieces.figure_id[first],
        start=spans.starts[span[first]],
        mean=np.add.reduceat(pieces.mean * pieces.weight, first) / weight,
        minimum=np.minimum.reduceat(pieces.minimum, first),
        maximum=np.maximum.reduceat(pieces.maximum, first),
        weight=weight,
        covered_s=np.add.reduceat(pieces.covered_s, first),
    )


def _group_starts(*keys: IntArray) -> npt.NDArray[np.intp]:
    """Where, in rows that are sorted by these keys, a new combination begins."""
    changes = np.logical_or.reduce([key[1:] != key[:-1] for key in keys])
    return np.concatenate([[0], np.flatnonzero(changes) + 1])
