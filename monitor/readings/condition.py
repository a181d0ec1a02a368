"""Readings to gridded values with flags, and a count of what each tag delivered.

A reading is left out when the historian calls it bad, when it is no number, when it lies outside
the instrument's range, moved too fast, or is a spike; the last good one then holds up to the tag's
hold time. A value that stands still while its neighbours move is used. Each cell says which of
these happened.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd

from connectors.base import Mark, Quality
from monitor.flags import Flag, FlagArray
from monitor.readings.checks import spikes, too_fast, trailing_spread
from monitor.readings.digest import Words, digests, words_of
from monitor.readings.grid import Grid, Held, hold_on_grid
from monitor.site.tags import FLOWS
from monitor.site.units import PressureDatum, Quantity
from monitor.store.batch import QUALITY_COLUMNS

if TYPE_CHECKING:
    from collections.abc import Collection, Mapping

    from monitor.equipment.base import FloatArray
    from monitor.site.models import Tag

__all__ = ["RANGE_ABOVE", "RANGE_BELOW", "Conditioned", "Gridded", "at_rest", "condition"]

# NAMUR NE 43: 3.8 to 20.5 mA carry measured values, so a signal is trusted from 1.25 % of span
# below the range to 3.125 % above it; beyond that it tells of a fault.
RANGE_BELOW = 0.0125
RANGE_ABOVE = 0.03125

_HOUR = 3600
# The lowest share of a range is rest: an empty pipe, a vessel without pressure.
_REST_SHARE = 0.01
_LEAST_REPORTING = 0.5
_REST_AT_ZERO = FLOWS | {Quantity.POWER}

_IntArray = npt.NDArray[np.int64]
_BoolArray = npt.NDArray[np.bool_]
_Counts = dict[str, _IntArray]


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
        quality: one row a tag and hour: ``tag``, ``hour``, `QUALITY_COLUMNS`, and ``digest``, which
            tells whether the readings are the same as another time.
    """

    grid: Grid
    tags: Mapping[str, Gridded]
    quality: pd.DataFrame


def condition(
    readings: pd.DataFrame,
    tags: Mapping[str, Tag],
    grid: Grid,
    least_coverage: float,
    neighbours: Mapping[str, Collection[str]] | None = None,
) -> Conditioned:
    """Bring the readings of some tags to the grid.

    Args:
        readings: ``tag`` (site names), ``time``, ``value`` (in the tag's unit), ``quality``, and
            ``marks`` where a source makes any; the window may begin before the grid, so that held
            values are known at its start.
        tags: the tags wanted; one without readings gives missing cells.
        grid: the cells.
        least_coverage: share of a cell that readings must cover.
        neighbours: the tags whose movement shows that a tag is stuck; of ``tags`` only, and none
            for a tag that is not named.
    """
    by_tag = _split(readings)
    judged = {
        name: _judged(by_tag.get(name, _NOTHING), tag, grid, least_coverage)
        for name, tag in tags.items()
    }
    stuck = _stuck(judged, tags, grid, neighbours or {})
    return Conditioned(
        grid,
        {name: _gridded(one, tags[name], grid, stuck[name]) for name, one in judged.items()},
        _quality_table(
            {name: _counts(one, grid, stuck[name]) for name, one in judged.items()}, _hours(grid)
        ),
    )


@dataclass(frozen=True)
class _Part:
    seconds: FloatArray
    value: FloatArray
    quality: npt.NDArray[np.uint8]
    marks: npt.NDArray[np.uint8]
    words: Words


_NO_BYTES = np.empty(0, dtype=np.uint8)
_NOTHING = _Part(np.empty(0), np.empty(0), _NO_BYTES, _NO_BYTES, words=np.empty(0, dtype=np.uint64))


def _split(readings: pd.DataFrame) -> dict[str, _Part]:
    """Readings of each tag as arrays, without a pass over the table for each tag."""
    if readings.empty:
        return {}
    codes = readings["tag"].cat.codes.to_numpy()
    names = readings["tag"].cat.categories
    micros = pd.DatetimeIndex(readings["time"]).as_unit("us").asi8
    seconds = micros / 1e6
    # Without marks: they hang on the export that a reading stands in.
    words = words_of(readings[["tag", "value", "quality"]], micros)
    values = readings["value"].to_numpy(dtype=np.float64)
    quality = readings["quality"].to_numpy(dtype=np.uint8)
    marks = np.zeros(len(readings), dtype=np.uint8)
    if "marks" in readings:
        # A source that makes none leaves holes where its rows stand beside another's.
        marks = readings["marks"].fillna(0).to_numpy(dtype=np.uint8)
    order = np.lexsort((seconds, codes))
    bounds = np.searchsorted(codes[order], np.arange(len(names) + 1))
    seconds, values, quality = seconds[order], values[order], quality[order]
    marks, words = marks[order], words[order]
    return {
        str(name): _Part(seconds[a:b], values[a:b], quality[a:b], marks[a:b], words[a:b])
        for name, a, b in zip(names, bounds, bounds[1:], strict=False)
        if b > a
    }


@dataclass(frozen=True)
class _Judged:
    """One tag's readings with what became of each, and the usable ones on the grid.

    ``left_out`` and ``beside`` name masks over the readings: a reading is left out for one reason,
    and may carry any number of remarks beside that.
    """

    part: _Part
    left_out: dict[str, _BoolArray]
    beside: dict[str, _BoolArray]
    held: Held
    missing: _BoolArray


def _judged(part: _Part, tag: Tag, grid: Grid, least_coverage: float) -> _Judged:
    bad = (part.quality == Quality.BAD) | ~np.isfinite(part.value)
    outside = ~bad & _outside(part.value, tag)
    believed = np.flatnonzero(~bad & ~outside)
    fast, spike = _movements(part.seconds[believed], part.value[believed], tag)
    left_out = {"bad": bad, "out_of_range": outside}
    for name, found in (("too_fast", fast), ("spike", spike)):
        left_out[name] = np.zeros(len(bad), dtype=np.bool_)
        left_out[name][believed[found]] = True
    usable = believed[~(fast | spike)]
    values = part.value[usable]
    if tag.cut_off is not None:
        values = np.where(values < tag.cut_off, 0.0, values)
    held = hold_on_grid(part.seconds[usable], values, grid, tag.hold)
    used = np.zeros(len(bad), dtype=np.bool_)
    used[usable] = True
    beside = {
        "uncertain": used & (part.quality == Quality.UNCERTAIN),
        "out_of_order": (part.marks & Mark.OUT_OF_ORDER) != 0,
        "ambiguous": (part.marks & Mark.AMBIGUOUS_TIME) != 0,
    }
    return _Judged(part, left_out, beside, held, held.coverage < least_coverage)


def _movements(seconds: FloatArray, values: FloatArray, tag: Tag) -> tuple[_BoolArray, _BoolArray]:
    """Readings that moved too fast, and spikes among the others."""
    fast = spike = np.zeros(len(values), dtype=np.bool_)
    # Two numbers at the far ends of what a float holds may lie further apart than that.
    with np.errstate(over="ignore", invalid="ignore"):
        if tag.fastest is not None:
            fast = too_fast(seconds, values, tag.fastest, tag.hold)
        if tag.spike_seconds > 0:
            spike = spikes(
                seconds, values, tag.spike_seconds, tag.spike_threshold, tag.smallest_spike
            )
    return fast, spike & ~fast


_BITS = {
    "bad": Flag.BAD,
    "out_of_range": Flag.OUT_OF_RANGE,
    "too_fast": Flag.TOO_FAST,
    "spike": Flag.SPIKE,
    "uncertain": Flag.UNCERTAIN,
    "out_of_order": Flag.OUT_OF_ORDER,
    "ambiguous": Flag.AMBIGUOUS_TIME,
}


def _gridded(one: _Judged, tag: Tag, grid: Grid, stuck: _BoolArray) -> Gridded:
    # A level or position has its unit's zero; only temperatures carry an offset.
    value = tag.unit.to_si(one.held.last if tag.takes_last else one.held.mean)
    flag = np.zeros(grid.count, dtype=np.int32)
    for name, mask in (one.left_out | one.beside).items():
        if mask.any():
            flag[_cells(one.part.seconds[mask], grid) > 0] |= _BITS[name]
    for bit, where in (
        (Flag.HELD, (one.held.fresh == 0) & ~one.missing),
        (Flag.LOW_COVERAGE, one.missing & (one.held.coverage > 0)),
        (Flag.MISSING, one.missing),
        (Flag.STUCK, stuck),
    ):
        flag[where] |= bit
    return Gridded(np.where(one.missing, np.nan, value), tag.unit.to_si(one.held.edges), flag)


def _stuck(
    judged: Mapping[str, _Judged],
    tags: Mapping[str, Tag],
    grid: Grid,
    neighbours: Mapping[str, Collection[str]],
) -> dict[str, _BoolArray]:
    """Cells at whose end a tag has stood still for its time while a neighbour moved."""
    never = np.zeros(grid.count, dtype=np.bool_)
    stuck = dict.fromkeys(judged, never)
    still: dict[tuple[str, int], _BoolArray] = {}

    def stands_still(name: str, cells: int) -> _BoolArray:
        if (name, cells) not in still:
            held = judged[name].held
            spread = trailing_spread(held.low, held.high, cells)
            still[name, cells] = spread <= tags[name].least_movement
        return still[name, cells]

    def moved(name: str, cells: int) -> _BoolArray:
        held = judged[name].held
        return ~stands_still(name, cells) & np.isfinite(held.low)

    for name, tag in tags.items():
        cells = int(np.ceil(tag.stuck_seconds / grid.interval))
        beside = [other for other in neighbours.get(name, ()) if other in judged and other != name]
        if cells == 0 or cells > grid.count or not beside:
            continue
        held = judged[name].held
        suspect = stands_still(name, cells) & ~at_rest(held.low, held.high, tag)
        suspect &= _reporting(judged[name].held.fresh, cells) & ~judged[name].missing
        if suspect.any():
            stuck[name] = suspect & np.logical_or.reduce([moved(other, cells) for other in beside])
    return stuck


def at_rest(lowest: FloatArray, highest: FloatArray, tag: Tag) -> _BoolArray:
    """Where a value that stands still is what the plant does: nothing flows, nothing presses.

    Args:
        lowest: smallest value over some time, in the tag's unit.
        highest: largest value over that time.
        tag: the tag.
    """
    low, high = tag.range or (0.0, 0.0)
    rest = highest <= low + _REST_SHARE * (high - low) if tag.range else highest < -np.inf
    if tag.unit.quantity in _REST_AT_ZERO or tag.unit.datum is PressureDatum.GAUGE:
        rest = rest | (np.fmax(np.abs(lowest), np.abs(highest)) <= tag.least_movement)
    return np.asarray(rest)


def _reporting(fresh: _IntArray, cells: int) -> _BoolArray:
    """Cells in whose trailing window the source kept reporting."""
    told = np.concatenate([np.zeros(cells, dtype=np.int64), np.cumsum(fresh > 0)])
    return np.asarray(told[cells:] - told[:-cells] >= _LEAST_REPORTING * cells)


def _outside(values: FloatArray, tag: Tag) -> _BoolArray:
    if tag.range is None:
        # Without a range, only what no instrument can show is refused.
        absolute = tag.unit.quantity is Quantity.TEMPERATURE or (
            tag.unit.datum is PressureDatum.ABSOLUTE
        )
        return np.asarray((tag.unit.to_si(values) < 0) & absolute)
    low, high = tag.range
    span = high - low
    return np.asarray((values < low - RANGE_BELOW * span) | (values > high + RANGE_ABOVE * span))


def _cells(seconds: FloatArray, grid: Grid) -> _IntArray:
    return np.diff(np.searchsorted(seconds, grid.edges.astype(np.float64), side="left"))


def _hours(grid: Grid) -> _IntArray:
    """Start of each full hour that the grid touches."""
    return np.arange(grid.start // _HOUR * _HOUR, grid.end, _HOUR, dtype=np.int64)


def _counts(one: _Judged, grid: Grid, stuck: _BoolArray) -> _Counts:
    """What the tag delivered in each full hour that the grid touches."""
    hours = _hours(grid)
    ends = np.append(hours, hours[-1] + _HOUR).astype(np.float64)
    bounds = np.clip(ends, grid.start, grid.end)

    def per_hour(seconds: FloatArray) -> _IntArray:
        return np.diff(np.searchsorted(seconds, bounds, side="left"))

    seconds, starts = one.part.seconds, grid.starts.astype(np.float64)
    counts = {
        name: per_hour(seconds[mask]) if mask.any() else np.zeros(len(hours), dtype=np.int64)
        for name, mask in (one.left_out | one.beside).items()
    }
    total = per_hour(seconds)
    return counts | {
        "readings": total,
        "good": total - counts["uncertain"] - sum(counts[name] for name in one.left_out),
        "digest": digests(seconds, one.part.words, bounds),
        "cells": per_hour(starts),
        "cells_missing": per_hour(starts[one.missing]),
        "cells_held": per_hour(starts[(one.held.fresh == 0) & ~one.missing]),
        "cells_stuck": per_hour(starts[stuck]),
    }


def _quality_table(counts: Mapping[str, _Counts], hours: _IntArray) -> pd.DataFrame:
    names = list(counts)
    codes = np.repeat(np.arange(len(names)), len(hours))
    table: dict[str, object] = {
        "tag": pd.Categorical.from_codes(codes, categories=pd.Index(names, dtype=object)),
        "hour": np.tile(hours, len(names)),
    }
    empty = [np.empty(0, dtype=np.int64)]
    for column in (*QUALITY_COLUMNS, "digest"):
        table[column] = np.concatenate([c[column] for c in counts.values()] or empty)
    return pd.DataFrame(table)
