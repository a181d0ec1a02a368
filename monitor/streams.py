"""Stream states from gridded tags: every state of a window in a few batch calls.

Streams that read the same gauges share one state; states of one kind of specification (p and T; p
and x; T and x) go through the steam tables in one call for all streams together.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from monitor.equipment.base import FloatArray, Signal, StreamState
from monitor.equipment.solve import with_flow, with_rate
from monitor.flags import Flag, FlagArray
from monitor.readings.meters import mass_flow
from monitor.site.models import Reference
from monitor.site.units import Quantity
from monitor.thermo.fuels import exergy_ratio
from monitor.thermo.water import (
    saturation_temperature,
    state_ph,
    state_pt,
    state_px,
    state_tx,
)

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Mapping, Sequence

    from monitor.readings.condition import Gridded
    from monitor.site.load import Site
    from monitor.site.models import Stream, Tag, ThrottlingTest
    from monitor.thermo.water import State

__all__ = ["Gauges", "signals_of", "stream_states", "with_enthalpy"]

Way = Literal["pt", "degree", "throttled", "px", "tx", "p only"]


@dataclass(frozen=True)
class Gauges:
    """What a site's references resolve to in one window.

    Attributes:
        tags: gridded tags by name.
        barometer: absolute pressure of the surroundings, Pa, shape (n,).
        barometer_edges: the same at the cells' ends, shape (n + 1,).
        barometer_flag: what it rests on, shape (n,).
    """

    tags: Mapping[str, Gridded]
    barometer: FloatArray
    barometer_edges: FloatArray
    barometer_flag: FlagArray

    @property
    def count(self) -> int:
        """Number of cells."""
        return len(self.barometer)

    def signal(self, reference: Reference, units: Mapping[str, Tag]) -> Signal:
        """Mean, edges and flag of a tag or a fixed value, SI, pressures absolute."""
        if reference.tag is None:
            fixed = np.nan if reference.fixed is None else reference.fixed
            mean, edges = np.full(self.count, fixed), np.full(self.count + 1, fixed)
            flag = np.zeros(self.count, dtype=np.int32)
            unit = reference.unit
        else:
            gridded = self.tags[reference.tag]
            mean, edges, flag = gridded.mean, gridded.edges, gridded.flag
            unit = units[reference.tag].unit
        if unit is None or unit.quantity is not Quantity.PRESSURE:
            return Signal(mean, edges, flag)
        rests_on_barometer = unit.datum in {"g", "vac"}
        return Signal(
            unit.absolute(mean, self.barometer),
            unit.absolute(edges, self.barometer_edges),
            flag | self.barometer_flag if rests_on_barometer else flag,
        )


def signals_of(site: Site, gauges: Gauges) -> dict[str, dict[str, Signal]]:
    """The own signals of every piece of equipment, by equipment id and option."""
    return {
        item.id: {
            key: gauges.signal(reference, site.tags)
            for key, (reference, _) in item.options.signals().items()
        }
        for item in site.items.values()
    }


def stream_states(site: Site, gauges: Gauges) -> dict[str, StreamState]:
    """Every stream of the site over a window; what is left to balances is NaN."""
    water = [s for s in site.streams.values() if s.medium == "water"]
    intensive = _water_states(site, gauges, water)
    states: dict[str, StreamState] = {}
    for stream in site.streams.values():
        if stream.medium == "water":
            states[stream.id] = _with_measured_flow(site, gauges, stream, intensive[stream.id])
        elif stream.medium == "fuel":
            states[stream.id] = _fuel(site, gauges, stream)
        else:
            states[stream.id] = _energy(site, gauges, stream)
    return states


def with_enthalpy(state: StreamState, enthalpy: FloatArray) -> StreamState:
    """Give a stream of known pressure the state that a found enthalpy [J/kg] fixes."""
    water = state_ph(state.pressure, enthalpy)
    outside = ~water.valid & np.isfinite(enthalpy) & np.isfinite(state.pressure)
    return _with_state(state, water, _bits(outside, Flag.OUT_OF_REGION))


@dataclass(frozen=True)
class _Specification:
    """What fixes a water state; streams with equal ones share it."""

    way: Way
    pressure: Reference | None
    temperature: Reference | None = None
    dryness: float | None = None
    phase: str | None = None
    degree: Reference | None = None
    test: ThrottlingTest | None = None


def _specification(stream: Stream) -> _Specification:
    p = stream.pressure
    if stream.enthalpy is not None:
        return _Specification("p only", p)
    if stream.throttling_test is not None:
        return _Specification("throttled", p, test=stream.throttling_test)
    if stream.superheat is not None:
        return _Specification("degree", p, phase="vapour", degree=stream.superheat)
    if stream.subcooling is not None:
        return _Specification("degree", p, phase="liquid", degree=stream.subcooling)
    if p is not None and stream.temperature is not None and stream.dryness is None:
        return _Specification("pt", p, stream.temperature, phase=stream.phase)
    dryness = stream.dryness
    if dryness is None:
        dryness = {"vapour": 1.0, "liquid": 0.0}.get(stream.phase or "")
    way: Way = "tx" if p is None else "px"
    return _Specification(way, p, stream.temperature, dryness)


def _water_states(site: Site, gauges: Gauges, streams: Sequence[Stream]) -> dict[str, StreamState]:
    wanted = {s.id: _specification(s) for s in streams}
    distinct = list(dict.fromkeys(wanted.values()))
    found: dict[_Specification, StreamState] = {}
    for way, solve in _WAYS.items():
        group = [s for s in distinct if s.way == way]
        if group:
            found |= dict(zip(group, solve(site, gauges, group), strict=True))
    return {stream: replace(found[spec], id=stream) for stream, spec in wanted.items()}


def _stacked(
    site: Site, gauges: Gauges, references: Iterable[Reference | None]
) -> tuple[FloatArray, FlagArray]:
    signals = [gauges.signal(r, site.tags) for r in references if r is not None]
    return np.concatenate([s.value for s in signals]), np.concatenate([s.flag for s in signals])


def _by_pt(site: Site, gauges: Gauges, group: Sequence[_Specification]) -> list[StreamState]:
    """P and T; near saturation they do not fix the state, so a stated phase decides or a flag."""
    p, p_flag = _stacked(site, gauges, (s.pressure for s in group))
    T, T_flag = _stacked(site, gauges, (s.temperature for s in group))
    return _beside_saturation(
        site, gauges, group, p, T - saturation_temperature(p), T, p_flag | T_flag
    )


def _by_degree(site: Site, gauges: Gauges, group: Sequence[_Specification]) -> list[StreamState]:
    """P and a degree of superheat or of subcooling, which has a meaning below critical only."""
    p, p_flag = _stacked(site, gauges, (s.pressure for s in group))
    degree, flag = _stacked(site, gauges, (s.degree for s in group))
    off = _sides(group, gauges.count) * degree
    T = saturation_temperature(p) + off
    return _beside_saturation(site, gauges, group, p, off, T, p_flag | flag)


def _sides(group: Sequence[_Specification], count: int) -> FloatArray:
    """+1 for a stream stated as vapour, -1 as liquid, 0 for one that says nothing."""
    sides = [{"vapour": 1.0, "liquid": -1.0}.get(s.phase or "", 0.0) for s in group]
    return np.repeat(sides, count)


def _beside_saturation(
    site: Site,
    gauges: Gauges,
    group: Sequence[_Specification],
    p: FloatArray,
    off: FloatArray,
    T: FloatArray,
    flag: FlagArray,
) -> list[StreamState]:
    """States at p and T, which is ``off`` saturation (NaN where there is none)."""
    side = _sides(group, gauges.count)
    wrong = (side != 0) & (side * off <= 0)
    near = np.abs(off) < site.file.site.saturation_band
    # A little on the wrong side is the thermometer's error; far on it, the statement is in doubt.
    state = state_pt(p, np.where(wrong, T - off, T), side=side)
    known = np.isfinite(p) & (np.isfinite(T) | np.isfinite(off))
    flag = (
        flag
        | _bits(near & (side == 0), Flag.NEAR_SATURATION)
        | _bits(wrong, Flag.SIDE_ASSUMED)
        | _bits(wrong & ~near, Flag.UNCERTAIN)
        | _bits(known & ~state.valid, Flag.OUT_OF_REGION)
    )
    return _cut(state, flag, gauges.count)


def _by_throttling(
    site: Site, gauges: Gauges, group: Sequence[_Specification]
) -> list[StreamState]:
    """P, and the enthalpy of a sample that kept it while it expanded and became superheated.

    A sample that did not clear saturation by the stated margin may hold water still: the state is
    flagged, and absent where it lies on saturation or below.
    """
    tests = [s.test for s in group if s.test is not None]
    p, flag = _stacked(site, gauges, (s.pressure for s in group))
    T, T_flag = _stacked(site, gauges, (t.temperature for t in tests))
    after = [_after(site, gauges, test) for test in tests]
    p_after = np.concatenate([signal.value for signal in after])
    flag = flag | T_flag | np.concatenate([signal.flag for signal in after])
    superheat = T - saturation_temperature(p_after)
    least = np.repeat([t.least_superheat for t in tests], gauges.count)
    sample = state_pt(p_after, np.where(superheat > 0.0, T, np.nan), side="vapour")
    state = state_ph(p, sample.enthalpy)
    known = np.isfinite(p) & np.isfinite(p_after) & np.isfinite(T)
    flag = (
        flag
        | _bits(known & (superheat < least), Flag.NEAR_SATURATION)
        | _bits(known & ~state.valid, Flag.OUT_OF_REGION)
    )
    return _cut(state, flag, gauges.count)


def _after(site: Site, gauges: Gauges, test: ThrottlingTest) -> Signal:
    if test.pressure is not None:
        return gauges.signal(test.pressure, site.tags)
    return Signal(gauges.barometer, gauges.barometer_edges, gauges.barometer_flag)


def _by_px(site: Site, gauges: Gauges, group: Sequence[_Specification]) -> list[StreamState]:
    p, flag = _stacked(site, gauges, (s.pressure for s in group))
    state = state_px(p, np.repeat([s.dryness or 0.0 for s in group], gauges.count))
    outside = np.isfinite(p) & ~state.valid
    return _cut(state, flag | _bits(outside, Flag.OUT_OF_REGION), gauges.count)


def _by_tx(site: Site, gauges: Gauges, group: Sequence[_Specification]) -> list[StreamState]:
    T, flag = _stacked(site, gauges, (s.temperature for s in group))
    state = state_tx(T, np.repeat([s.dryness or 0.0 for s in group], gauges.count))
    outside = np.isfinite(T) & ~state.valid
    return _cut(state, flag | _bits(outside, Flag.OUT_OF_REGION), gauges.count)


def _by_p(site: Site, gauges: Gauges, group: Sequence[_Specification]) -> list[StreamState]:
    p, flag = _stacked(site, gauges, (s.pressure for s in group))
    return [
        replace(StreamState.absent("water", gauges.count), pressure=part, flag=bits)
        for part, bits in zip(np.split(p, len(group)), np.split(flag, len(group)), strict=True)
    ]


_WAYS: dict[Way, Callable[[Site, Gauges, Sequence[_Specification]], list[StreamState]]] = {
    "pt": _by_pt,
    "degree": _by_degree,
    "throttled": _by_throttling,
    "px": _by_px,
    "tx": _by_tx,
    "p only": _by_p,
}


def _cut(state: State, flag: FlagArray, count: int) -> list[StreamState]:
    """Cut one stacked batch back into streams of ``count`` cells."""
    blank = StreamState.absent("water", count)
    parts = []
    for k in range(len(flag) // count):
        cut = slice(k * count, (k + 1) * count)
        parts.append(
            replace(
                blank,
                pressure=state.pressure[cut],
                temperature=state.temperature[cut],
                enthalpy=state.enthalpy[cut],
                entropy=state.entropy[cut],
                volume=state.volume[cut],
                dryness=state.dryness[cut],
                flag=np.asarray(flag[cut], dtype=np.int32),
            )
        )
    return parts


def _with_state(stream: StreamState, state: State, flag: FlagArray) -> StreamState:
    return replace(
        stream,
        temperature=state.temperature,
        enthalpy=state.enthalpy,
        entropy=state.entropy,
        volume=state.volume,
        dryness=state.dryness,
        flag=np.asarray(stream.flag | flag, dtype=np.int32),
    )


def _with_measured_flow(
    site: Site, gauges: Gauges, stream: Stream, state: StreamState
) -> StreamState:
    if not isinstance(stream.flow, Reference):
        return state
    signal = gauges.signal(stream.flow, site.tags)
    flow = _mass_flow(site, stream.flow, signal, 1.0 / state.volume)
    return with_flow(state, flow, signal.flag)


def _mass_flow(
    site: Site, reference: Reference, signal: Signal, density: FloatArray | float
) -> FloatArray:
    """What a flow's reference shows, as a mass flow [kg/s] at this stream's density [kg/m^3]."""
    tag = site.tags.get(reference.tag or "")
    unit = reference.unit if tag is None else tag.unit
    if unit is None:
        return signal.value
    meter, stated = (None, None) if tag is None else (tag.meter, tag.metered_density)
    return mass_flow(signal.value, unit.quantity, meter, stated, density)


def _fuel(site: Site, gauges: Gauges, stream: Stream) -> StreamState:
    if not isinstance(stream.flow, Reference) or stream.lower_heating_value is None:
        raise TypeError(f"fuel '{stream.id}' was accepted without flow or heating value")
    signal = gauges.signal(stream.flow, site.tags)
    ratio = stream.exergy_ratio
    ratio = exergy_ratio(stream.fuel) if ratio is None else ratio
    # A fuel's meter needs no state: the site file gives a density where it counts volume.
    flow = _mass_flow(site, stream.flow, signal, np.nan)
    energy = flow * stream.lower_heating_value
    return replace(
        StreamState.absent("fuel", gauges.count, stream.id),
        mass_flow=flow,
        energy=energy,
        entropy_rate=np.zeros_like(energy),
        chemical=(ratio - 1.0) * energy,
        flag=signal.flag,
    )


def _energy(site: Site, gauges: Gauges, stream: Stream) -> StreamState:
    """Power or heat; a rate left to a balance stays NaN until then."""
    blank = StreamState.absent(stream.medium, gauges.count, stream.id)
    flag = blank.flag
    if stream.medium == "heat":
        boundary = stream.boundary_temperature
        if isinstance(boundary, Reference):
            signal = gauges.signal(boundary, site.tags)
            blank, flag = replace(blank, temperature=signal.value), signal.flag
        else:
            blank = replace(blank, boundary_is_dead=True)
    rate = stream.power if stream.medium == "power" else stream.heat
    if not isinstance(rate, Reference):
        return replace(blank, mass_flow=np.zeros(gauges.count), flag=flag)
    signal = gauges.signal(rate, site.tags)
    return with_rate(blank, signal.value, signal.flag | flag)


def _bits(where: np.ndarray[tuple[int], np.dtype[np.bool_]], flag: Flag) -> FlagArray:
    return np.where(where, np.int32(flag), np.int32(0))
