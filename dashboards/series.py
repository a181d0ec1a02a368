"""Time series made ready to draw: local clock time, few enough points, gaps kept as gaps."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

if TYPE_CHECKING:
    import numpy.typing as npt

    Floats = npt.NDArray[np.float64]

__all__ = [
    "band",
    "isolated",
    "local",
    "regular_means",
    "spacing",
    "stretches",
    "thinned",
]

_BUCKETS = 800
_KEPT_IN_BUCKET = 4  # first, lowest, highest, last
_HOUR = pd.Timedelta(hours=1)


def local(table: pd.DataFrame) -> pd.DataFrame:
    """Return the table on the local clock (no zone), with a break where the clock goes back.

    A line would otherwise run backwards through the hour that happens twice a year.
    """
    index = pd.DatetimeIndex(table.index)
    clock = index.tz_localize(None)
    plain = table.set_axis(clock, axis=0)
    back = np.flatnonzero(np.diff(clock.asi8) <= 0)
    if back.size == 0:
        return plain
    numbers = plain.astype("float64")
    pieces: list[pd.DataFrame] = []
    start = 0
    for stop in (back + 1).tolist():
        pieces.append(numbers.iloc[start:stop])
        gap = numbers.iloc[stop - 1 : stop] * np.nan
        pieces.append(gap)
        start = stop
    pieces.append(numbers.iloc[start:])
    return pd.concat(pieces)


def thinned(table: pd.DataFrame, by: str, buckets: int = _BUCKETS) -> pd.DataFrame:
    """Keep of each bucket of rows the first, lowest, highest and last, and one gap if it has any.

    Drawn as a line at ``buckets`` pixels or fewer, the result looks like the whole series: U. Jugel
    et al., M4: a visualization-oriented time series data aggregation, PVLDB 7 (2014) 797.

    Args:
        table: one row a time.
        by: the column whose extremes are kept.
        buckets: how many; a table of up to four rows a bucket comes back as it is.
    """
    rows = len(table)
    if rows <= buckets * _KEPT_IN_BUCKET:
        return table
    values = table[by].to_numpy(dtype=np.float64)
    width = -(-rows // buckets)
    padded = np.full(width * -(-rows // width), np.nan)
    padded[:rows] = values
    grid = padded.reshape(-1, width)
    base = np.arange(len(grid)) * width
    lowest = base + np.argmin(np.where(np.isnan(grid), np.inf, grid), axis=1)
    highest = base + np.argmax(np.where(np.isnan(grid), -np.inf, grid), axis=1)
    gap = base + np.argmax(np.isnan(grid), axis=1)
    last = np.minimum(base + width - 1, rows - 1)
    keep = np.unique(np.concatenate([base, lowest, highest, gap, last]))
    return table.iloc[keep[keep < rows]]


def spacing(index: pd.DatetimeIndex) -> pd.Timedelta:
    """Return the usual step of a time axis; an hour where one point has none."""
    if len(index) < 2:  # noqa: PLR2004 - a step needs two points
        return _HOUR
    step = pd.Timedelta(pd.Series(index).diff().median())
    return step if step > pd.Timedelta(0) else _HOUR


def regular_means(table: pd.DataFrame, most: int = 1500) -> tuple[pd.DataFrame, pd.Timedelta]:
    """Return means over equal steps, at most about ``most`` of them, and the step.

    Rates average without changing what they add up to, which thinning would. Rows that are missing
    come back as NaN.
    """
    index = pd.DatetimeIndex(table.index)
    step = spacing(index)
    if len(index) == 0:
        return table.astype("float64"), step
    steps = (index[-1] - index[0]) / step + 1
    if steps > most:
        step = (step * int(np.ceil(steps / most))).ceil("s")
    means = table.astype("float64").resample(step, origin="start").mean()
    return means, step


def stretches(good: npt.NDArray[np.bool_]) -> list[tuple[int, int]]:
    """Return [start, stop) of every unbroken stretch of True."""
    edges = np.diff(np.concatenate([[False], good, [False]]).astype(np.int8))
    starts, stops = np.flatnonzero(edges == 1), np.flatnonzero(edges == -1)
    return list(zip(starts.tolist(), stops.tolist(), strict=True))


def isolated(values: Floats) -> npt.NDArray[np.bool_]:
    """Tell the values with a gap on both sides: a line alone would not show them."""
    finite = np.concatenate([[False], np.isfinite(values), [False]])
    return np.asarray(finite[1:-1] & ~finite[:-2] & ~finite[2:], dtype=np.bool_)


def band(times: pd.DatetimeIndex, low: Floats, high: Floats) -> tuple[pd.DatetimeIndex, Floats]:
    """Return closed outlines between two lines, one for each stretch without a gap.

    Args:
        times: local clock times.
        low: lower line; NaN is a gap.
        high: upper line.
    """
    stamps = times.to_numpy()
    xs: list[npt.NDArray[np.datetime64]] = []
    ys: list[Floats] = []
    for start, stop in stretches(np.isfinite(low) & np.isfinite(high)):
        there = stamps[start:stop]
        xs += [there, there[::-1], there[:1]]
        ys += [high[start:stop], low[start:stop][::-1], np.array([np.nan])]
    if not xs:
        return times[:0], np.array([])
    return pd.DatetimeIndex(np.concatenate(xs)), np.concatenate(ys)
