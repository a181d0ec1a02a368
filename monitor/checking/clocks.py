"""Whether the sources keep the same time, told by what moves in the plant.

Flows and pressures of one piece of equipment move together. Read by two sources, they still do; if
one source's times are taken for another zone's, they do so whole (half, quarter) hours apart. The
cross-correlation of the movements within three hours, summed over the pairs of neighbouring tags,
has its peak there. Daily and weekly patterns are taken out first: those agree at any lag.
"""

from __future__ import annotations

import datetime as dt
import zoneinfo
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from connectors.base import Quality
from monitor.readings.condition import RANGE_ABOVE, RANGE_BELOW
from monitor.readings.grid import Grid, hold_on_grid
from monitor.readings.site import neighbours

if TYPE_CHECKING:
    from collections.abc import Mapping

    from monitor.equipment.base import FloatArray
    from monitor.site.load import Site
    from monitor.site.tags import Tag

__all__ = ["Offset", "offsets"]

_STEP = 600
_LAG_STEP = 3
_SLOW = 18
_MOST_HOURS = 14
"""No zone is further than this from UTC."""
_LEAST_CELLS = 72
_CLIP = 4.0
_CLEAR = 8.0
"""Robust deviations by which the peak must stand above the other lags ..."""
_AGAINST_ZERO = 2.0
"""... and how many times the sum at no lag."""
_SIGMA_PER_MAD = 1.4826
_MOST_PAIRS = 150


@dataclass(frozen=True)
class Offset:
    """How far one source's times are off.

    Attributes:
        hours: by how much its times are too late (too early where negative).
        advice: the time zone that would set it right, as a clause; empty where none is at hand.
        others: sources that may be the wrong ones instead.
    """

    hours: float
    advice: str
    others: tuple[str, ...] = ()


def offsets(site: Site, readings: pd.DataFrame, start: int, end: int) -> dict[str, Offset]:
    """Find the sources whose times are off against the others'.

    Args:
        site: the site.
        readings: of all its tags.
        start: of the time to compare, UTC s.
        end: of it.

    Returns:
        By source id; the sources that agree are not in it.
    """
    grid = Grid(start // _STEP * _STEP, end // _STEP * _STEP, _STEP)
    if grid.count < _LEAST_CELLS:
        return {}
    moves = _movements(site, readings, grid)
    sources = [source.id for source in site.file.source]
    lags: dict[tuple[str, str], float] = {}
    for place, one in enumerate(sources):
        for other in sources[place + 1 :]:
            lag = _lag(site, moves, one, other)
            if lag is not None:
                lags[one, other] = lag
                lags[other, one] = -lag
    return _blamed(site, sources, lags, end)


def _movements(site: Site, readings: pd.DataFrame, grid: Grid) -> dict[str, FloatArray]:
    """Each tag's deviations from its own mean over three hours, in standard deviations."""
    tags, moves = site.used_tags(), {}
    for name, part in readings.groupby("tag", observed=True):
        mean = _mean(part, tags[str(name)], grid)
        if np.isfinite(mean).sum() < _LEAST_CELLS:
            continue
        filled = pd.Series(mean).interpolate(limit_direction="both")
        slow = filled.rolling(_SLOW, center=True, min_periods=1).mean()
        fast = (filled - slow).to_numpy(dtype=np.float64)
        fast = np.clip(fast, -_CLIP * fast.std(), _CLIP * fast.std())
        fast -= fast.mean()
        if fast.std() > 0:
            moves[str(name)] = fast / fast.std()
    return moves


def _mean(part: pd.DataFrame, tag: Tag, grid: Grid) -> FloatArray:
    value = part["value"].to_numpy(dtype=np.float64)
    seconds = pd.DatetimeIndex(part["time"]).as_unit("us").asi8 / 1e6
    usable = np.isfinite(value) & (part["quality"].to_numpy() != Quality.BAD)
    if tag.range is not None:
        span = tag.range[1] - tag.range[0]
        within = (value >= tag.range[0] - RANGE_BELOW * span) & (
            value <= tag.range[1] + RANGE_ABOVE * span
        )
        usable &= within if within.any() else True
    return hold_on_grid(seconds[usable], value[usable], grid, tag.hold).mean


def _lag(site: Site, moves: Mapping[str, FloatArray], one: str, other: str) -> float | None:
    """By how many hours the movements come later in ``one`` than in ``other``; None: cannot say."""
    tags = site.used_tags()
    pairs = [
        (a, b)
        for a, beside in neighbours(site).items()
        for b in sorted(beside)
        if a in moves and b in moves and (tags[a].source, tags[b].source) == (one, other)
    ][:_MOST_PAIRS]
    if not pairs:
        return None
    first, second = (np.stack([moves[pair[k]] for pair in pairs]) for k in (0, 1))
    most = _MOST_HOURS * 3600 // _STEP
    lags = np.arange(-most, most + 1, _LAG_STEP)
    count = first.shape[1]
    together = np.stack(
        [
            (first[:, max(lag, 0) : count + min(lag, 0)]
             * second[:, max(-lag, 0) : count - max(lag, 0)]).mean(axis=1)
            for lag in lags.tolist()
            if abs(lag) < count
        ]
    )  # fmt: skip
    lags = lags[np.abs(lags) < count]
    total = (together**2).sum(axis=1)
    best = int(total.argmax())
    middle = float(np.median(total))
    spread = _SIGMA_PER_MAD * float(np.median(np.abs(total - middle)))
    if total[best] < middle + _CLEAR * max(spread, 1e-12):
        return None
    if total[best] < _AGAINST_ZERO * total[len(lags) // 2]:
        return 0.0
    return float(lags[best]) * _STEP / 3600.0


def _blamed(
    site: Site, sources: list[str], lags: Mapping[tuple[str, str], float], end: int
) -> dict[str, Offset]:
    """The source that the others contradict; of two, the one whose zone has a better one."""
    found: dict[str, Offset] = {}
    for source in sources:
        own = {other: lags[source, other] for other in sources if (source, other) in lags}
        values = set(own.values())
        if len(values) != 1 or 0.0 in values:
            continue
        (hours,) = values
        agreeing = [o for o in own if any(lags.get((o, p)) == 0.0 for p in sources)]
        advice = _advice(site, source, hours, end)
        others = () if agreeing else tuple(own)
        found[source] = Offset(hours, advice, others)
    # Of two sources that disagree both are candidates: one that a zone of the site sets right.
    settled = {s: o for s, o in found.items() if not o.others}
    if settled:
        return settled
    advised = {s: o for s, o in found.items() if o.advice}
    chosen = advised or found
    return dict(list(chosen.items())[:1])


def _advice(site: Site, source: str, hours: float, end: int) -> str:
    options = next(s.model_extra or {} for s in site.file.source if s.id == source)
    stated = str(options.get("time_zone", "UTC"))
    right = _offset(stated, end) + hours
    for zone in (site.file.site.time_zone, "UTC"):
        if zone != stated and abs(_offset(zone, end) - right) < 0.1:  # noqa: PLR2004 - six minutes
            return f"time_zone = '{zone}' would set it right, where '{stated}' is taken now"
    return ""


def _offset(zone: str, at: int) -> float:
    moment = dt.datetime.fromtimestamp(at, zoneinfo.ZoneInfo(zone))
    offset = moment.utcoffset()
    return 0.0 if offset is None else offset.total_seconds() / 3600.0
