"""The newest day in one number a tag, and the whole plant worked out for many such days at once.

Each cell of a `Trial` is one supposition: the day's typical readings with a few of them read
another way (another unit, two tags crossed). One pass through the states and balances that the
daemon uses then tells what every supposition would make of the site.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from connectors.base import Quality
from monitor.equipment.base import Content, Drawn, FloatArray, Item, Signal, StreamState
from monitor.equipment.solve import complete
from monitor.readings.condition import RANGE_ABOVE, RANGE_BELOW, Gridded
from monitor.readings.grid import Grid, hold_on_grid
from monitor.site.models import Reference
from monitor.site.tags import FLOWS
from monitor.site.units import PressureDatum, Quantity
from monitor.streams import Gauges, signals_of, stream_states, with_enthalpy

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

    from monitor.site.load import Site
    from monitor.site.models import Stream
    from monitor.site.tags import Tag
    from monitor.site.units import Unit

__all__ = ["Supposition", "Trial", "Typical", "references", "relative", "try_out", "typical"]

_MOSTLY = 0.9
_PRESENT, _ENOUGH = 0.7, 0.5
_RUNNING_SHARE = 0.05
_LEAST_BAROMETER, _MOST_BAROMETER = 55e3, 110e3
"""[Pa] What a barometer can show where people live; else the reference stands in."""
_MEANS = FLOWS | {Quantity.POWER}


@dataclass(frozen=True)
class Typical:
    """One day of readings as one number a tag, whatever the instrument's range says.

    Attributes:
        raw: by tag, in its unit: the mean of flows and powers, the median of the rest, taken while
            the stream runs. A tag without a number is not here.
        barometer: [Pa].
        stored: by equipment id, how fast its content changed over the day: kg/s, W.
    """

    raw: Mapping[str, float]
    barometer: float
    stored: Mapping[str, tuple[float, float]]


@dataclass(frozen=True)
class Supposition:
    """Readings taken another way.

    Attributes:
        readings: by tag, what it would show in the site file's own unit.
        restated: tags whose numbers stay what they are, and only their unit is another: the stated
            range may be in that unit too.
    """

    readings: dict[str, float]
    restated: frozenset[str] = frozenset()


@dataclass(frozen=True)
class Trial:
    """The plant in every supposition; arrays of shape (n,).

    Attributes:
        shown: by tag, in the site file's unit, as supposed.
        as_read: the same, but for restated tags the number that the instrument gives.
        states: of streams.
        drawn: equipment.
        barometer: [Pa].
    """

    shown: Mapping[str, FloatArray]
    as_read: Mapping[str, FloatArray]
    states: Mapping[str, StreamState]
    drawn: Mapping[str, Drawn]
    barometer: FloatArray


def references(stream: Stream) -> Iterable[tuple[str, Reference]]:
    """What a stream reads: keys and references."""
    for key in type(stream).model_fields:
        value = getattr(stream, key)
        if isinstance(value, Reference):
            yield key, value


def relative(unit: Unit, other: Unit, value: float, barometer: float) -> float:
    """What a value in another unit would be in a tag's own unit, by the barometer [Pa]."""
    si = value * other.scale + other.offset
    if unit.quantity is Quantity.PRESSURE:
        absolute = float(other.absolute(np.array([si]), barometer)[0])
        si = {
            PressureDatum.GAUGE: absolute - barometer,
            PressureDatum.VACUUM: barometer - absolute,
        }.get(unit.datum or PressureDatum.ABSOLUTE, absolute)
    return (si - unit.offset) / unit.scale


def typical(site: Site, parts: Mapping[str, pd.DataFrame], start: int, end: int) -> Typical:
    """Bring a day of readings to one number a tag.

    Args:
        site: the site.
        parts: the day's readings by tag.
        start: of the day, UTC s on the grid.
        end: of the day.
    """
    grid = Grid(start, end, int(site.file.site.interval))
    tags = site.used_tags()
    held = {n: _held(tags[n], part, grid) for n, part in parts.items() if n in tags}
    means = {name: one[0] for name, one in held.items()}
    raw: dict[str, float] = {}
    together = _together(means, grid.count)
    for name, mean in means.items():
        counts = together & np.isfinite(mean) & _running(site, name, means, grid.count)
        counts = counts if counts.any() else np.isfinite(mean)
        if counts.any():
            middle = np.mean if tags[name].unit.quantity in _MEANS else np.median
            raw[name] = float(middle(mean[counts]))
    barometer = _barometer(site, raw)
    return Typical(raw, barometer, _stored(site, held, barometer, grid))


def _together(
    means: Mapping[str, FloatArray], count: int
) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """Cells in which all tags have a value that mostly have one: an outage shifts no mean then."""
    known = [np.isfinite(mean) for mean in means.values() if np.isfinite(mean).mean() > _PRESENT]
    common = np.logical_and.reduce(known) if known else np.zeros(count, dtype=np.bool_)
    return np.asarray(common if common.mean() > _ENOUGH else np.ones(count, dtype=np.bool_))


def _held(tag: Tag, part: pd.DataFrame, grid: Grid) -> tuple[FloatArray, FloatArray]:
    value = part["value"].to_numpy(dtype=np.float64)
    seconds = pd.DatetimeIndex(part["time"]).as_unit("us").asi8 / 1e6
    usable = np.isfinite(value) & (part["quality"].to_numpy() != Quality.BAD)
    if tag.range is not None and usable.any():
        # Single readings out of range are spikes; when most are, the range or the unit is wrong.
        low, high = tag.range
        span = high - low
        within = (value >= low - RANGE_BELOW * span) & (value <= high + RANGE_ABOVE * span)
        if within[usable].mean() > _MOSTLY:
            usable &= within
    held = hold_on_grid(seconds[usable], value[usable], grid, tag.hold)
    return held.mean, held.edges


def _running(
    site: Site, name: str, means: Mapping[str, FloatArray], count: int
) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """Cells in which a stream that reads the tag flows, as far as a meter of its own tells."""
    if site.tags[name].unit.quantity in _MEANS:
        return np.ones(count, dtype=np.bool_)
    flows = [
        means[str(stream.flow.tag)]
        for stream in site.streams.values()
        if isinstance(stream.flow, Reference)
        and stream.flow.tag in means
        and any(reference.tag == name for _, reference in references(stream))
    ]
    known = [f for f in flows if np.isfinite(f).any()]
    if not known:
        return np.ones(count, dtype=np.bool_)
    running = np.stack([f > _RUNNING_SHARE * np.nanmax(f) for f in known])
    return np.asarray(running.any(axis=0))


def _barometer(site: Site, raw: Mapping[str, float]) -> float:
    table = site.file.dead_state
    reference = table.pressure
    shown = reference.fixed
    if reference.tag in raw:
        unit = site.tags[str(reference.tag)].unit
        shown = raw[str(reference.tag)] * unit.scale
    if shown is None or not _LEAST_BAROMETER < shown < _MOST_BAROMETER:
        return float(table.reference_pressure)
    return float(shown)


def _stored(
    site: Site,
    held: Mapping[str, tuple[FloatArray, FloatArray]],
    barometer: float,
    grid: Grid,
) -> dict[str, tuple[float, float]]:
    stored: dict[str, tuple[float, float]] = {}
    for item in site.items.values():
        signals = _signals(site, item, held, barometer, grid)
        content = item.kind.content(item, signals) if signals is not None else None
        if content is None:
            continue
        known = np.flatnonzero(np.isfinite(content.mass + content.internal_energy))
        if len(known) > 1:
            first, last = known[0], known[-1]
            seconds = float(last - first) * grid.interval
            stored[item.id] = (
                float(content.mass[last] - content.mass[first]) / seconds,
                float(content.internal_energy[last] - content.internal_energy[first]) / seconds,
            )
    return stored


def _signals(
    site: Site,
    item: Item,
    held: Mapping[str, tuple[FloatArray, FloatArray]],
    barometer: float,
    grid: Grid,
) -> dict[str, Signal] | None:
    asked = item.options.signals()
    if any(
        reference.tag is not None and reference.tag not in held for reference, _ in asked.values()
    ):
        return None
    flag = np.zeros(grid.count, dtype=np.int32)
    tags = {
        name: Gridded(site.tags[name].unit.to_si(mean), site.tags[name].unit.to_si(edges), flag)
        for name, (mean, edges) in held.items()
    }
    gauges = Gauges(tags, np.full(grid.count, barometer), np.full(grid.count + 1, barometer), flag)
    return {key: gauges.signal(reference, site.tags) for key, (reference, _) in asked.items()}


def try_out(site: Site, day: Typical, suppositions: list[Supposition]) -> Trial:
    """Work the plant out in every supposition, each one a cell.

    Args:
        site: the site.
        day: the readings as they are.
        suppositions: what to read another way; an empty one leaves all as it is.
    """
    count = len(suppositions)
    shown = {
        name: np.full(count, day.raw.get(name, np.nan), dtype=np.float64)
        for name in site.used_tags()
    }
    as_read = {name: values.copy() for name, values in shown.items()}
    for cell, supposition in enumerate(suppositions):
        for name, value in supposition.readings.items():
            shown[name][cell] = value
            if name not in supposition.restated:
                as_read[name][cell] = value
    barometer = _barometers(site, day, shown, count)
    flag = np.zeros(count, dtype=np.int32)
    tags = {}
    for name, values in shown.items():
        si = site.tags[name].unit.to_si(values)
        tags[name] = Gridded(si, np.append(si[:1], si), flag)
    gauges = Gauges(tags, barometer, np.append(barometer[:1], barometer), flag)
    states = stream_states(site, gauges)
    signals = signals_of(site, gauges)
    draw = partial(_draw, site, states, signals, day.stored, count)
    complete(site.steps, states, draw, with_enthalpy)
    return Trial(shown, as_read, states, {item: draw(item) for item in site.items}, barometer)


def _barometers(
    site: Site, day: Typical, shown: Mapping[str, FloatArray], count: int
) -> FloatArray:
    tag = site.file.dead_state.pressure.tag
    if tag is None:
        return np.full(count, day.barometer)
    told = shown[tag] * site.tags[tag].unit.scale
    possible = (told > _LEAST_BAROMETER) & (told < _MOST_BAROMETER)
    return np.asarray(np.where(possible, told, day.barometer))


def _draw(
    site: Site,
    states: Mapping[str, StreamState],
    signals: Mapping[str, Mapping[str, Signal]],
    stored: Mapping[str, tuple[float, float]],
    count: int,
    item_id: str,
) -> Drawn:
    item = site.items[item_id]
    at = {port: tuple(states[s] for s in ids) for port, ids in item.ports.items()}
    content = None
    if item_id in stored:
        # What the day stored, the same in each cell, however its gauges are read.
        time = np.arange(count + 1, dtype=np.float64)
        mass, energy = stored[item_id]
        content = Content(time * mass, time * energy, np.zeros_like(time), np.ones_like(time))
    return Drawn(item, at, signals[item_id], 1.0, content)
