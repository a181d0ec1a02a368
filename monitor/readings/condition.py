"""Readings to gridded values with flags, and a count of what each tag delivered.

A reading is left out when the historian calls it bad, when it is no number, or when it lies outside
the instrument's range; the last good one then holds up to the tag's hold time. Each cell says which
of these happened.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from connectors.base import Quality
from monitor.flags import Flag, FlagArray
from monitor.readings.grid import Grid, Held, hold_on_grid
from monitor.site.units import PressureDatum, Quantity
from monitor.store.batch import QUALITY_COLUMNS

if TYPE_CHECKING:
    from collections.abc import Mapping

    from monitor.equipment.base import FloatArray
    from monitor.site.models import Tag

__all__ = ["RANGE_ABOVE", "RANGE_BELOW", "Conditioned", "Gridded", "condition"]

# NAMUR NE 43: 3.8 to 20.5 mA carry measured values, so a signal is trusted from 1.25 % of span
# below the range to 3.125 % above it; beyond that it tells of a fault.
RANGE_BELOW = 0.0125
RANGE_ABOVE = 0.03125

_HOUR = 3600
_Counts = dict[str, np.ndarray[tuple[int], np.dtype[np.int64]]]


@dataclass(frozen=True)
class Gridded:
    """One tag on the grid in SI; gauge and vacuum pressures still count from the barometer.

    Attributes:
        mean: shape (n,), NaN where missing.
        edges: at the cells' ends, shape (n + 1,).
        flag: shape (n,).
    """

    mean: FloatArray
    edges: FloatArray
    flag: FlagArray

    def tail(self, cells: int) -> Gridded:
        """The last cells only."""
        return Gridded(self.mean[-cells:], self.edges[-cells - 1 :], self.flag[-cells:])


@dataclass(frozen=True)
class Conditioned:
    """All tags of a window on one grid.

    Attributes:
        grid: the cells.
        tags: by tag name.
        quality: one row a tag and hour: ``tag``, ``hour``, `QUALITY_COLUMNS`.
    """

    grid: Grid
    tags: Mapping[str, Gridded]
    quality: pd.DataFrame


def condition(
    readings: pd.DataFrame, tags: Mapping[str, Tag], grid: Grid, least_coverage: float
) -> Conditioned:
    """Bring the readings of some tags to the grid.

    Args:
        readings: ``tag`` (site names), ``time``, ``value`` (in the tag's unit), ``quality``; the
            window may begin before the grid, so that held values are known at its start.
        tags: the tags wanted; one without readings gives missing cells.
        grid: the cells.
        least_coverage: share of a cell that readings must cover.
    """
    by_tag = _split(readings)
    gridded: dict[str, Gridded] = {}
    counts: dict[str, _Counts] = {}
    for name, tag in tags.items():
        part = by_tag.get(name, _NOTHING)
        gridded[name], counts[name] = _one(part, tag, grid, least_coverage)
    return Conditioned(grid, gridded, _quality_table(counts, _hours(grid)))


@dataclass(frozen=True)
class _Part:
    seconds: FloatArray
    value: FloatArray
    quality: np.ndarray[tuple[int], np.dtype[np.uint8]]


_NOTHING = _Part(np.empty(0), np.empty(0), np.empty(0, dtype=np.uint8))


def _split(readings: pd.DataFrame) -> dict[str, _Part]:
    """Readings of each tag as arrays, without a pass over the table for each tag."""
    if readings.empty:
        return {}
    codes = readings["tag"].cat.codes.to_numpy()
    names = readings["tag"].cat.categories
    seconds = pd.DatetimeIndex(readings["time"]).as_unit("us").asi8 / 1e6
    values = readings["value"].to_numpy(dtype=np.float64)
    quality = readings["quality"].to_numpy(dtype=np.uint8)
    order = np.lexsort((seconds, codes))
    bounds = np.searchsorted(codes[order], np.arange(len(names) + 1))
    seconds, values, quality = seconds[order], values[order], quality[order]
    return {
        str(name): _Part(seconds[a:b], values[a:b], quality[a:b])
        for name, a, b in zip(names, bounds, bounds[1:], strict=False)
        if b > a
    }


def _one(part: _Part, tag: Tag, grid: Grid, least_coverage: float) -> tuple[Gridded, _Counts]:
    bad = (part.quality == Quality.BAD) | ~np.isfinite(part.value)
    outside = ~bad & _outside(part.value, tag)
    uncertain = ~bad & ~outside & (part.quality == Quality.UNCERTAIN)
    usable = ~bad & ~outside
    held = hold_on_grid(part.seconds[usable], part.value[usable], grid, tag.hold)
    missing = held.coverage < least_coverage
    # A level or position has its unit's zero; only temperatures carry an offset.
    mean = np.where(missing, np.nan, tag.unit.to_si(held.mean))
    flag = np.zeros(grid.count, dtype=np.int32)
    for bit, where in (
        (Flag.BAD, _cells(part.seconds[bad], grid) > 0),
        (Flag.OUT_OF_RANGE, _cells(part.seconds[outside], grid) > 0),
        (Flag.UNCERTAIN, _cells(part.seconds[uncertain], grid) > 0),
        (Flag.HELD, (held.fresh == 0) & ~missing),
        (Flag.LOW_COVERAGE, missing & (held.coverage > 0)),
        (Flag.MISSING, missing),
    ):
        flag[where] |= bit
    gridded = Gridded(mean, tag.unit.to_si(held.edges), flag)
    return gridded, _counts(
        part, grid, held, missing, bad=bad, outside=outside, uncertain=uncertain
    )


def _outside(values: FloatArray, tag: Tag) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    if tag.range is None:
        # Without a range, only what no instrument can show is refused.
        absolute = tag.unit.quantity is Quantity.TEMPERATURE or (
            tag.unit.datum is PressureDatum.ABSOLUTE
        )
        return np.asarray((tag.unit.to_si(values) < 0) & absolute)
    low, high = tag.range
    span = high - low
    return np.asarray((values < low - RANGE_BELOW * span) | (values > high + RANGE_ABOVE * span))


def _cells(seconds: FloatArray, grid: Grid) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
    return np.diff(np.searchsorted(seconds, grid.edges.astype(np.float64), side="left"))


def _hours(grid: Grid) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
    """Start of each full hour that the grid touches."""
    return np.arange(grid.start // _HOUR * _HOUR, grid.end, _HOUR, dtype=np.int64)


def _counts(
    part: _Part,
    grid: Grid,
    held: Held,
    missing: np.ndarray[tuple[int], np.dtype[np.bool_]],
    **kinds: np.ndarray[tuple[int], np.dtype[np.bool_]],
) -> _Counts:
    """What the tag delivered in each full hour that the grid touches."""
    hours = _hours(grid)
    ends = np.append(hours, hours[-1] + _HOUR).astype(np.float64)
    bounds = np.clip(ends, grid.start, grid.end)

    def per_hour(seconds: FloatArray) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
        return np.diff(np.searchsorted(seconds, bounds, side="left"))

    def cells_where(
        mask: np.ndarray[tuple[int], np.dtype[np.bool_]],
    ) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
        return per_hour(grid.starts[mask].astype(np.float64))

    total = per_hour(part.seconds)
    counts = {name: per_hour(part.seconds[mask]) for name, mask in kinds.items()}
    return {
        "readings": total,
        "good": total - counts["bad"] - counts["outside"] - counts["uncertain"],
        "uncertain": counts["uncertain"],
        "bad": counts["bad"],
        "out_of_range": counts["outside"],
        "cells": per_hour(grid.starts.astype(np.float64)),
        "cells_missing": cells_where(missing),
        "cells_held": cells_where((held.fresh == 0) & ~missing),
    }


def _quality_table(
    counts: Mapping[str, _Counts], hours: np.ndarray[tuple[int], np.dtype[np.int64]]
) -> pd.DataFrame:
    names = list(counts)
    codes = np.repeat(np.arange(len(names)), len(hours))
    table: dict[str, object] = {
        "tag": pd.Categorical.from_codes(codes, categories=pd.Index(names, dtype=object)),
        "hour": np.tile(hours, len(names)),
    }
    empty = [np.empty(0, dtype=np.int64)]
    for column in QUALITY_COLUMNS:
        table[column] = np.concatenate([c[column] for c in counts.values()] or empty)
    return pd.DataFrame(table)
