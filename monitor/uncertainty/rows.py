"""Every stream and signal again with the instruments moved, one at a time: rows of states.

Row 0 is as read; each further row has one source higher by its standard uncertainty. A stream reads
few tags, so that many tags of which no stream reads two are moved in one pass through the steam
tables (all pressures, say, then all temperatures): what each stream makes of its own gauge stands
apart from the others (the colouring of sparse Jacobians: Curtis, Powell and Reid, IMA J. Appl.
Math. 13 (1974) 117, from memory). Flows that come from balances are then found row by row.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from monitor.equipment.base import Drawn, Signal, StreamState
from monitor.equipment.solve import complete
from monitor.flags import Flag
from monitor.readings.condition import Gridded
from monitor.site.units import PressureDatum, Quantity
from monitor.streams import Gauges, stream_states, with_enthalpy
from monitor.thermo.water import state_px
from monitor.uncertainty.budget import STATE_OF
from monitor.uncertainty.classes import standard_uncertainty

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

    from monitor.equipment.base import FloatArray, Item
    from monitor.flags import FlagArray
    from monitor.site.load import Site
    from monitor.site.models import Reference, Stream
    from monitor.site.units import Unit

__all__ = ["Moved", "Sample", "in_order", "move", "rows_of"]

# In the order in which `_state` takes them.
_FIELDS = (
    "mass_flow",
    "pressure",
    "temperature",
    "enthalpy",
    "entropy",
    "volume",
    "dryness",
    "energy",
    "entropy_rate",
    "chemical",
)
_FLOW, _PRESSURE, _DRYNESS = (_FIELDS.index(n) for n in ("mass_flow", "pressure", "dryness"))
_AS_READ, _BAROMETER = 0, 1
_ANOTHER_PHASE = 0.5
# A phase that is not told lies anywhere between the two saturated ones: a rectangular distribution
# has its width over the root of 12 as standard uncertainty (GUM, 4.3.7 and 4.3.8).
_RECTANGULAR = 1.0 / np.sqrt(12.0)


@dataclass(frozen=True)
class Sample:
    """The gridded tags of some cells.

    Attributes:
        means: in SI on the tag's own datum, shape (n,).
        edges: at both ends of each cell, shape (n, 2).
        barometer: of the surroundings [Pa], shape (n,).
        barometer_edges: shape (n, 2).
        barometer_tag: that it is read from; empty when it is fixed.
        interval: of a cell [s].
    """

    means: Mapping[str, FloatArray]
    edges: Mapping[str, FloatArray]
    barometer: FloatArray
    barometer_edges: FloatArray
    barometer_tag: str
    interval: float

    @property
    def count(self) -> int:
        """Number of cells."""
        return len(self.barometer)


@dataclass(frozen=True)
class _Rows:
    """One stream with each of its sources moved: values of shape (fields, 1 + sources, n)."""

    sources: tuple[str, ...]
    values: FloatArray
    like: StreamState

    def among(self, wanted: tuple[str, ...]) -> FloatArray:
        """The rows of other sources: as read where the stream does not hang on them."""
        return self.values.take(rows_of(self.sources, wanted), axis=1)


@dataclass(frozen=True)
class _SignalRows:
    """One signal of a piece of equipment: shapes (1 + sources, n) and (1 + sources, n, 2)."""

    sources: tuple[str, ...]
    value: FloatArray
    edges: FloatArray

    def among(self, wanted: tuple[str, ...]) -> Signal:
        places = rows_of(self.sources, wanted)
        value = self.value[places].reshape(-1, 1)
        flag = np.zeros(value.shape, dtype=np.int32)
        return Signal(value, self.edges[places].reshape(-1, 2), flag)


class Moved:
    """The streams of a site and the signals of its equipment, with their sources moved.

    A cell is a row of its own here, arrays of shape (cells, 1), so that what a vessel holds keeps
    the two ends of each cell beside each other: shape (cells, 2), differences along the last axis.
    """

    def __init__(
        self, site: Site, sample: Sample, signals: Mapping[str, Mapping[str, _SignalRows]]
    ) -> None:
        self._site, self._sample, self._signals = site, sample, signals
        self._streams: dict[str, _Rows] = {}

    def sources(self, item: Item) -> tuple[str, ...]:
        """What a piece of equipment hangs on, its surroundings left out."""
        streams = (*item.ids("in"), *item.ids("out"))
        own = [signal.sources for signal in self._signals[item.id].values()]
        return in_order(*[self._streams[stream].sources for stream in streams], *own)

    def stream(
        self, stream: str, further: tuple[str, ...] = ()
    ) -> tuple[tuple[str, ...], StreamState]:
        """A stream's sources, with further ones, and its states, arrays (1 + sources, n)."""
        rows = self._streams[stream]
        wanted = in_order(rows.sources, further)
        return wanted, _state(rows.like, rows.among(wanted), rows.like.flag)

    def draw(self, item: Item, wanted: tuple[str, ...]) -> Drawn:
        """A piece of equipment with so many sources moved: cells (1 + sources) * n, row by row."""
        size = len(_FIELDS), (1 + len(wanted)) * self._sample.count, 1
        flag = np.zeros(size[1:], dtype=np.int32)
        states = {
            port: tuple(self._column(stream, wanted, size, flag) for stream in ids)
            for port, ids in item.ports.items()
        }
        signals = {key: rows.among(wanted) for key, rows in self._signals[item.id].items()}
        content = item.kind.content(item, signals)
        return Drawn(item, states, signals, self._sample.interval, content)

    def keep(self, sources: tuple[str, ...], states: Iterable[StreamState]) -> None:
        """Take over states of shape (1 + sources, n), or of as many cells in one column."""
        for state in states:
            values = _values(state, 1 + len(sources), self._sample.count)
            self._streams[state.id] = _Rows(sources, values, state)

    def _column(
        self,
        stream: str,
        wanted: tuple[str, ...],
        size: tuple[int, int, int],
        flag: FlagArray,
    ) -> StreamState:
        rows = self._streams[stream]
        return _state(rows.like, rows.among(wanted).reshape(size), flag)


@lru_cache(maxsize=4096)
def rows_of(sources: tuple[str, ...], wanted: tuple[str, ...]) -> npt.NDArray[np.intp]:
    """Which row stands for each wanted source: the first, as read, for those that are not there.

    They are the same window after window.
    """
    places = {source: place for place, source in enumerate(sources, start=1)}
    return np.array([0, *(places.get(source, 0) for source in wanted)], dtype=np.intp)


@lru_cache(maxsize=1024)
def in_order(*groups: tuple[str, ...]) -> tuple[str, ...]:
    """Every source once, in the order met."""
    return tuple(dict.fromkeys(source for group in groups for source in group))


def move(site: Site, sample: Sample) -> Moved:
    """Move every instrument of a site by its standard uncertainty, and find all streams again.

    Args:
        site: the site.
        sample: the cells.

    Returns:
        Every stream's states, those that come from balances included.
    """
    signals = {item.id: _signals(site, sample, item) for item in site.items.values()}
    moved = Moved(site, sample, signals)
    for stream, rows in _measured(site, sample).items():
        moved._streams[stream] = rows  # noqa: SLF001 - made here, in the same file
    for step in site.steps:
        item = site.items[step.equipment]
        wanted = moved.sources(item)
        drawn = moved.draw(item, wanted)
        found: dict[str, StreamState] = {}
        complete((step,), found, lambda _, drawn=drawn: drawn, with_enthalpy)  # type: ignore[misc]
        moved.keep(wanted, found.values())
    return moved


def _measured(site: Site, sample: Sample) -> dict[str, _Rows]:
    """What the instruments alone give; unknowns that balances give are NaN."""
    passes = _passes(site, sample)
    states = stream_states(site, _gauges(site, sample, passes))
    count = 1 + max(passes.values())
    found = {}
    for name, state in states.items():
        values = _values(state, count, sample.count)
        ways = _ways(site, sample, site.streams[name], passes)
        near = (state.flag[: sample.count] & Flag.NEAR_SATURATION) != 0
        if near.any():
            _hold_phase(values, near)
        rows = values[:, [_AS_READ, *ways.values()]]
        found[name] = _Rows(tuple(ways), rows, state)
        if near.any():
            found[name] = _with_phase(found[name], near, _phase_source(site, name))
    return found


def _passes(site: Site, sample: Sample) -> dict[str, int]:
    """The pass in which each tag of a stream is moved: never two tags of one stream in one."""
    beside: dict[str, dict[str, None]] = {}
    for stream in site.streams.values():
        tags = dict.fromkeys(r.tag for _, r, _ in stream.references() if r.tag is not None)
        for tag in tags:
            beside.setdefault(tag, {}).update(tags)
    passes = {sample.barometer_tag: _BAROMETER}
    for tag, others in beside.items():
        taken = {passes[other] for other in others if other in passes}
        free = next(p for p in itertools.count(_BAROMETER + 1) if p not in taken)
        passes.setdefault(tag, free)
    return passes


def _gauges(site: Site, sample: Sample, passes: Mapping[str, int]) -> Gauges:
    """The gauges of all passes, one after the other: as read, then moved."""
    names = list(sample.means)
    count = 1 + max(passes.values())
    # The shapes are stated since a site of fixed values alone has no tag to take them from.
    means = np.array([sample.means[name] for name in names]).reshape(-1, sample.count)
    moved = np.repeat(means[:, None], count, axis=1)
    barometer = np.repeat(sample.barometer[None], count, axis=0)
    for place, name in enumerate(names):
        if name not in passes:
            continue
        u = standard_uncertainty(site.tags[name], means[place])
        moved[place, passes[name]] += u
        if name == sample.barometer_tag:
            barometer[_BAROMETER] += u
    barometer = barometer.reshape(-1)
    flag = np.zeros(barometer.shape, dtype=np.int32)
    # Streams are made of means; edges belong to the equipment's own signals and stand idle here.
    idle = np.append(barometer, barometer[-1])
    tags = {
        name: Gridded(values, idle, flag)
        for name, values in zip(names, moved.reshape(-1, count * sample.count), strict=True)
    }
    return Gauges(tags, barometer, idle, flag)


def _ways(site: Site, sample: Sample, stream: Stream, passes: Mapping[str, int]) -> dict[str, int]:
    """The tags that a stream reads, each with the pass that moved it."""
    ways: dict[str, int] = {}
    for _, reference, _ in stream.references():
        if reference.tag is not None:
            ways[reference.tag] = passes[reference.tag]
        if sample.barometer_tag and _on_barometer(site, reference):
            ways[sample.barometer_tag] = _BAROMETER
    test = stream.throttling_test
    if sample.barometer_tag and test is not None and test.pressure is None:
        ways[sample.barometer_tag] = _BAROMETER  # the sample expands into the surroundings
    return ways


def _unit(site: Site, reference: Reference) -> Unit | None:
    return reference.unit if reference.tag is None else site.tags[reference.tag].unit


def _on_barometer(site: Site, reference: Reference) -> bool:
    unit = _unit(site, reference)
    return unit is not None and unit.datum in (PressureDatum.GAUGE, PressureDatum.VACUUM)


def _hold_phase(values: FloatArray, near: np.ndarray[tuple[int], np.dtype[np.bool_]]) -> None:
    """Beside saturation a gauge's move must not boil the stream: its phase is a source itself."""
    dryness = values[_DRYNESS]
    other = near & (np.abs(dryness - dryness[_AS_READ]) > _ANOTHER_PHASE)
    as_read = np.broadcast_to(values[:, :1], values.shape)
    values[:, other] = as_read[:, other]


def _phase_source(site: Site, name: str) -> str:
    """Streams that read the same gauges are in doubt together: named after the first."""

    def gauges(stream: Stream) -> list[tuple[str, Reference]]:
        return [(key, reference) for key, reference, _ in stream.references() if key != "flow"]

    own = gauges(site.streams[name])
    return STATE_OF + next(s.id for s in site.streams.values() if gauges(s) == own)


def _with_phase(
    rows: _Rows, near: np.ndarray[tuple[int], np.dtype[np.bool_]], source: str
) -> _Rows:
    """Add the phase as a source: the state moved by 1/sqrt(12) of the way to the other side."""
    read = rows.values[:, 0]
    moved = np.where(read[_DRYNESS] > 0.5, 1.0 - _RECTANGULAR, _RECTANGULAR)  # noqa: PLR2004
    water = state_px(read[_PRESSURE], moved)
    flow = read[_FLOW]
    still = flow == 0
    changed = {
        "temperature": water.temperature,
        "enthalpy": water.enthalpy,
        "entropy": water.entropy,
        "volume": water.volume,
        "dryness": water.dryness,
        "energy": np.where(still, 0.0, flow * water.enthalpy),
        "entropy_rate": np.where(still, 0.0, flow * water.entropy),
    }
    row = np.stack(
        [
            np.where(near, changed.get(name, own), own)
            for name, own in zip(_FIELDS, read, strict=True)
        ]
    )
    return _Rows(
        (*rows.sources, source), np.concatenate([rows.values, row[:, None]], axis=1), rows.like
    )


def _signals(site: Site, sample: Sample, item: Item) -> dict[str, _SignalRows]:
    return {
        key: _signal(site, sample, reference)
        for key, (reference, _) in item.options.signals().items()
    }


def _signal(site: Site, sample: Sample, reference: Reference) -> _SignalRows:
    """Mean and ends of a tag or a fixed value, absolute; an offset moves both ends alike."""
    n, unit = sample.count, _unit(site, reference)
    if reference.tag is None:
        fixed = np.nan if reference.fixed is None else reference.fixed
        mean, edges = np.full(n, fixed), np.full((n, 2), fixed)
    else:
        mean, edges = sample.means[reference.tag], sample.edges[reference.tag]
    gauged = unit is not None and unit.quantity is Quantity.PRESSURE
    on_barometer = bool(sample.barometer_tag) and _on_barometer(site, reference)
    own = () if reference.tag is None else (reference.tag,)
    sources = in_order(own, (sample.barometer_tag,) if on_barometer else ())
    values, ends = [], []
    for source in ("", *sources):
        here, there = (
            _step(site, sample, s) if s == source else 0.0
            for s in (reference.tag, sample.barometer_tag)
        )
        value, end = mean + here, edges + np.reshape(here, (-1, 1))
        if gauged and unit is not None:
            value = unit.absolute(value, sample.barometer + there)
            end = unit.absolute(end, sample.barometer_edges + np.reshape(there, (-1, 1)))
        values.append(value)
        ends.append(end)
    return _SignalRows(sources, np.stack(values), np.stack(ends))


def _step(site: Site, sample: Sample, name: str | None) -> FloatArray | float:
    if not name:
        return 0.0
    return standard_uncertainty(site.tags[name], sample.means[name])


def _values(state: StreamState, rows: int, count: int) -> FloatArray:
    return np.array([getattr(state, name) for name in _FIELDS]).reshape(len(_FIELDS), rows, count)


def _state(like: StreamState, values: FloatArray, flag: FlagArray) -> StreamState:
    flow, pressure, temperature, enthalpy, entropy, volume, dryness, energy, rate, chemical = values
    return StreamState(
        id=like.id,
        medium=like.medium,
        mass_flow=flow,
        pressure=pressure,
        temperature=temperature,
        enthalpy=enthalpy,
        entropy=entropy,
        volume=volume,
        dryness=dryness,
        energy=energy,
        entropy_rate=rate,
        chemical=chemical,
        flag=flag,
        boundary_is_dead=like.boundary_is_dead,
    )
