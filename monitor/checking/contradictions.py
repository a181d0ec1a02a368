"""What the physics says against the typical readings of a day, each as a multiple of its tolerance.

Balances that nothing was solved from, flows that come out negative, pressure that rises where
nothing pumps, the wrong phase at a port, efficiencies that no machine has, saturated vessels whose
pressure and temperature disagree. All are worked out for every supposition of a `Trial` at once.

Tolerances are two standard uncertainties: those that the site file states for the flow meters, and
a percent of what passes, which a day's mean leaves open (common practice). Ranges of efficiencies
and losses are wider than any sound machine needs (common practice).
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from monitor.checking.ports import STEAM, WATER, falling_pairs
from monitor.equipment.account import account, balances
from monitor.figures import stated_uncertainty
from monitor.flags import Flag
from monitor.readings.condition import RANGE_ABOVE, RANGE_BELOW
from monitor.site.models import Reference
from monitor.thermo.dead_state import dead_state
from monitor.thermo.water import saturation_temperature

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    import numpy.typing as npt

    from monitor.checking.typical import Trial
    from monitor.equipment.base import Drawn, FloatArray, Item, StreamState
    from monitor.site.load import Site
    from monitor.thermo.dead_state import DeadState

__all__ = ["Contradiction", "contradictions", "resting"]

_PERCENT = 0.01
_COVERAGE = 2.0
_FLOWING = 0.1
_TYPICAL_ERROR = 0.015
"""Standard uncertainty of a meter that states none, as a share of its reading."""
_RISE = 0.01
_LEAST_DROP, _MORE_DROP = 0.035, 0.03
"""Loss of pressure into a header that needs no reason, and what more counts as one."""
_CLEAR = 3.0
"""Size of a contradiction that has no measure: the wrong phase, a value out of range."""
_DOUBTED = 1.5
_HALF = 0.5
_WATER_CAPACITY, _STEAM_CAPACITY = 4.2e3, 2.2e3
"""[J/(kg K)] About, for what a kelvin of a thermometer's uncertainty is worth."""
# Figure, lowest and highest value [%] of machines that run, and what beyond them counts as one.
_EFFICIENCIES = (
    ("turbine", "eta_s_", 35.0, 93.0, 4.0),
    ("pump", "thermodynamic_efficiency", 30.0, 92.0, 6.0),
    ("boiler", "fuel_efficiency", 62.0, 97.0, 3.0),
    ("boiler", "blowdown_share", -1.0, 10.0, 3.0),
)


@dataclass(frozen=True)
class Contradiction:
    """One thing that the readings say against physics.

    Attributes:
        kind: tag, stream, equipment or site.
        subject: its id.
        what: a few words, such as ``mass balance``.
        size: multiples of the tolerance; NaN where it cannot be told, shape (n,).
    """

    kind: Literal["tag", "stream", "equipment", "site"]
    subject: str
    what: str
    size: FloatArray


def resting(trial: Trial) -> frozenset[str]:
    """The streams of water that do not flow, as the readings stand in a trial's first cell."""
    flows = {s.id: abs(float(s.mass_flow[0])) for s in trial.states.values() if s.medium == "water"}
    return frozenset(stream for stream, flow in flows.items() if flow < _FLOWING)


def contradictions(
    site: Site, trial: Trial, at_rest: frozenset[str] = frozenset()
) -> list[Contradiction]:
    """Hold every supposition against what cannot be.

    Args:
        site: the site.
        trial: the suppositions.
        at_rest: streams that may stand at any pressure; the same for all suppositions, or one that
            stops a stream would excuse its gauge.
    """
    count = len(trial.barometer)
    reference = site.file.dead_state
    dead = dead_state(
        np.full(count, reference.reference_temperature),
        np.full(count, reference.reference_pressure),
    )
    # What does not flow has no share of anything: no number, or one without bound.
    with np.errstate(divide="ignore", invalid="ignore"):
        found = list(_all(site, trial, dead, at_rest))
        return [replace(one, size=np.asarray(np.maximum(one.size, 0.0))) for one in found]


def _all(
    site: Site, trial: Trial, dead: DeadState, at_rest: frozenset[str]
) -> Iterator[Contradiction]:
    errors = _flow_errors(site, trial)
    yield from _ranges(site, trial)
    yield from _surroundings(site, trial)
    for stream in site.streams.values():
        yield from _at_stream(site, trial, stream.id, errors)
    for item in site.items.values():
        drawn = trial.drawn[item.id]
        yield from _balanced(site, item, drawn, errors)
        yield from _possible(item, drawn, dead)
        yield from _pressures(site, item, trial, at_rest)
        yield from _phases(item, trial)


def _ranges(site: Site, trial: Trial) -> Iterator[Contradiction]:
    for name, tag in site.used_tags().items():
        if tag.range is not None:
            low, high = tag.range[0], tag.range[1]
            below, above = RANGE_BELOW * (high - low), RANGE_ABOVE * (high - low)
            outside = np.logical_and.reduce(
                [
                    (v < low - below) | (v > high + above)
                    for v in (trial.shown[name], trial.as_read[name])
                ]
            )
            yield Contradiction("tag", name, "range", np.where(outside, _CLEAR, 0.0))


def _surroundings(site: Site, trial: Trial) -> Iterator[Contradiction]:
    """The ambient: no open air is below -60 or above 60 degC, no barometer far from one bar."""
    table = site.file.dead_state
    for reference, low, high in (
        (table.temperature, 213.0, 333.0),
        (table.pressure, 75e3, 108e3),
    ):
        if reference.tag is not None:
            si = site.tags[reference.tag].unit.to_si(trial.shown[reference.tag])
            outside = (si < low) | (si > high)
            yield Contradiction(
                "tag", reference.tag, "the open air", np.where(outside, _CLEAR, 0.0)
            )


def _flow_errors(site: Site, trial: Trial) -> dict[str, FloatArray]:
    """Standard uncertainty of each flow [kg/s]; a solved one has those of what it came from."""
    errors: dict[str, FloatArray] = {}
    for stream in site.streams.values():
        flow = trial.states[stream.id].mass_flow
        stated = None
        if isinstance(stream.flow, Reference):
            stated = stated_uncertainty(site, stream.flow, flow)
        share = _PERCENT if stream.flow == "balance" else _TYPICAL_ERROR
        errors[stream.id] = np.asarray(
            np.abs(flow) * share if stated is None else np.broadcast_to(stated, flow.shape)
        )
    for step in site.steps:
        if "mass" in step.balance:
            item = site.items[step.equipment]
            unknown = {stream for _, stream in step.unknowns}
            around = [s for s in (*item.ids("in"), *item.ids("out")) if s not in unknown]
            joint = _joint([errors[s] for s in around], len(trial.barometer))
            errors.update(dict.fromkeys(unknown, joint))
    return errors


def _joint(errors: list[FloatArray], count: int) -> FloatArray:
    return np.asarray(np.sqrt(sum((np.nan_to_num(e) ** 2 for e in errors), np.zeros(count))))


def _at_stream(
    site: Site, trial: Trial, stream: str, errors: Mapping[str, FloatArray]
) -> Iterator[Contradiction]:
    state, says = trial.states[stream], site.streams[stream]
    item = site.items[site.producer.get(stream) or site.consumer[stream]]
    drawn = trial.drawn[item.id]
    if says.flow == "balance":
        passing = np.maximum(_sum(drawn, "in", "mass_flow"), _sum(drawn, "out", "mass_flow"))
        error = np.hypot(errors[stream], _PERCENT * passing)
        yield Contradiction(
            "stream", stream, "flow below zero", -state.mass_flow / (_COVERAGE * error)
        )
    if "balance" in {says.heat, says.power}:
        passing = _sum(drawn, "in", "energy")
        yield Contradiction(
            "stream", stream, "rate below zero", -state.energy / (_COVERAGE * _PERCENT * passing)
        )
    if state.medium != "water":
        return
    outside = (state.flag & Flag.OUT_OF_REGION) != 0
    near = ((state.flag & Flag.NEAR_SATURATION) != 0) & _may_be_near(site, state)
    assumed = ((state.flag & Flag.SIDE_ASSUMED) != 0) & ((state.flag & Flag.UNCERTAIN) != 0)
    size = np.where(outside, _CLEAR, np.where(near | assumed, _DOUBTED, 0.0))
    yield Contradiction("stream", stream, "state", size)
    if says.enthalpy == "balance":
        # What a balance finds must be a state of water: NaN tells that it is none.
        yield Contradiction("stream", stream, "state by balance", 0.0 * state.entropy)


def _may_be_near(site: Site, state: StreamState) -> npt.NDArray[np.bool_]:
    """Whether nearness to saturation is a stream's own; a flow from a balance brings others'."""
    says = site.streams[state.id]
    if says.throttling_test is not None:
        return np.ones(len(state.flag), dtype=bool)
    if says.temperature is None or says.phase is not None:
        return np.zeros(len(state.flag), dtype=bool)
    away = np.abs(state.temperature - saturation_temperature(state.pressure))
    return np.asarray(away <= site.file.site.saturation_band)


def _thermal_error(site: Site, state: StreamState) -> FloatArray:
    """Standard uncertainty of a stream's energy from its thermometer [W]."""
    reference = site.streams[state.id].temperature
    stated = None if reference is None else stated_uncertainty(site, reference, state.temperature)
    capacity = np.where(state.dryness > _HALF, _STEAM_CAPACITY, _WATER_CAPACITY)
    flow = np.abs(np.nan_to_num(state.mass_flow))
    return np.asarray(flow * capacity * (0.0 if stated is None else stated))


def _balanced(
    site: Site, item: Item, drawn: Drawn, errors: Mapping[str, FloatArray]
) -> Iterator[Contradiction]:
    counted = balances(drawn)
    around = (*drawn.facing("in"), *drawn.facing("out"))
    water = [s for s in around if s.medium == "water"]
    count = len(counted.mass_imbalance)
    if "mass" in item.spare and water:
        passing = np.maximum(*(_water(drawn.facing(way)) for way in ("in", "out")))
        error = np.hypot(_joint([errors[s.id] for s in water], count), _PERCENT * passing)
        size = np.abs(counted.mass_imbalance) / (_COVERAGE * error)
        yield Contradiction("equipment", item.id, "mass balance", size)
    by_heat = item.options.heat_loss == "balance"
    if not by_heat and "energy" not in item.spare:
        return
    passing = np.maximum(_sum(drawn, "in", "energy"), _sum(drawn, "out", "energy"))
    carried = [np.asarray(errors[s.id] * np.nan_to_num(s.enthalpy)) for s in water]
    carried += [_thermal_error(site, s) for s in water]
    error = np.hypot(_joint(carried, count), _PERCENT * passing)
    if by_heat:
        # A lagged vessel or pipe loses a little and gains nothing.
        lost = counted.heat_loss
        most = (0.4 if item.kind.name == "boiler" else 0.03) * passing
        size = np.maximum(-lost, lost - most) / (_COVERAGE * error)
        yield Contradiction("equipment", item.id, "heat loss", size)
    else:
        size = np.abs(counted.energy_imbalance) / (_COVERAGE * error)
        yield Contradiction("equipment", item.id, "energy balance", size)


def _water(states: tuple[StreamState, ...]) -> FloatArray:
    flows = [np.abs(s.mass_flow) for s in states if s.medium == "water"]
    return np.asarray(np.nansum(flows, axis=0)) if flows else np.zeros(1)


def _sum(drawn: Drawn, way: Literal["in", "out"], name: str) -> FloatArray:
    rates = [np.abs(getattr(s, name)) for s in drawn.facing(way)]
    return np.asarray(np.nansum(rates, axis=0)) if rates else np.zeros(1)


def _possible(item: Item, drawn: Drawn, dead: DeadState) -> Iterator[Contradiction]:
    """Second law, and efficiencies that some machine has."""
    if drawn.content is None:
        drawn_up = account(drawn, balances(drawn), dead)
        size = -drawn_up.destroyed / (0.02 * np.abs(drawn_up.exergy_in))
        yield Contradiction("equipment", item.id, "second law", size)
    wanted = [row for row in _EFFICIENCIES if row[0] == item.kind.name]
    values = item.kind.condition(drawn, dead) if wanted else {}
    for _, prefix, low, high, one in wanted:
        for name, figure in values.items():
            if name.startswith(prefix):
                beyond = np.maximum(low - figure.value, figure.value - high) / one
                yield Contradiction("equipment", item.id, _words(name), beyond)
    if item.kind.name == "turbine":
        (exhaust,) = drawn.at("exhaust")
        size = (0.80 - exhaust.dryness) / 0.03
        yield Contradiction("equipment", item.id, "wetness of the exhaust", size)
    if item.kind.name == "condenser":
        yield from _condensing(item, drawn)


def _words(figure: str) -> str:
    return "isentropic efficiency" if figure.startswith("eta_s") else figure.replace("_", " ")


def _condensing(item: Item, drawn: Drawn) -> Iterator[Contradiction]:
    """Condensate leaves close to boiling at the steam's pressure; cooling water stays below it."""
    steam, condensate = drawn.at("steam")[0], drawn.only("condensate")
    boiling = saturation_temperature(steam.pressure)
    below = boiling - condensate.temperature
    size = np.maximum(-below - 0.5, below - 5.0) / 1.5
    yield Contradiction("equipment", item.id, "condensing temperature", size)
    warmer = drawn.only("cooling_out").temperature
    size = np.maximum(warmer - boiling, boiling - warmer - 25.0) / 2.0
    yield Contradiction("equipment", item.id, "cooling water's temperature", size)
    rise = warmer - drawn.only("cooling_in").temperature
    yield Contradiction("equipment", item.id, "cooling water's rise", -rise / 0.5)


def _pressures(
    site: Site, item: Item, trial: Trial, at_rest: frozenset[str]
) -> Iterator[Contradiction]:
    """Pressure falls along a pipe, and little along a header's or from a drum to its outlet."""
    for upper, lower in falling_pairs(item):
        if {upper, lower} & at_rest:
            continue
        above, below = trial.states[upper], trial.states[lower]
        error = np.hypot(
            _gauge_error(site, upper, above.pressure), _gauge_error(site, lower, below.pressure)
        )
        allowed = _COVERAGE * error + _RISE * above.pressure
        rise = (below.pressure - above.pressure) / allowed
        yield Contradiction("equipment", item.id, f"pressure from {upper} to {lower}", rise)
    if item.kind.name == "header":
        yield from _header(item, trial)
    if item.kind.name == "boiler":
        yield from _drum(item, trial)


def _gauge_error(site: Site, stream: str, pressure: FloatArray) -> FloatArray:
    reference = site.streams[stream].pressure
    stated = None if reference is None else stated_uncertainty(site, reference, pressure)
    return np.broadcast_to(np.asarray(0.0 if stated is None else stated), pressure.shape)


def _header(item: Item, trial: Trial) -> Iterator[Contradiction]:
    """The inlet that comes nearest must be near: a header feeds nothing through a valve."""
    for lower in item.ports["outlet"]:
        below = trial.states[lower].pressure
        drops = [
            (trial.states[i].pressure - below) / below
            for i in item.ports["inlet"]
            if item.differ(i, lower, "pressure")
        ]
        if drops:
            nearest = np.min(np.stack(drops), axis=0)
            size = (nearest - _LEAST_DROP) / _MORE_DROP
            yield Contradiction("equipment", item.id, f"pressure loss to {lower}", size)
            break


def _drum(item: Item, trial: Trial) -> Iterator[Contradiction]:
    for drum in item.ports.get("blowdown", ()):
        for steam in item.ports["steam"]:
            outlet = trial.states[steam].pressure
            drop = (trial.states[drum].pressure - outlet) / outlet
            yield Contradiction("equipment", item.id, "pressure loss", (drop - 0.12) / 0.05)
    for feed in item.ports["feedwater"]:
        for steam in item.ports["steam"]:
            ratio = trial.states[feed].pressure / trial.states[steam].pressure
            yield Contradiction("equipment", item.id, "feed pressure", (ratio - 2.0) / 0.5)


def _phases(item: Item, trial: Trial) -> Iterator[Contradiction]:
    kind = item.kind.name
    for port, streams in item.ports.items():
        wanted = WATER.get((kind, port)), STEAM.get((kind, port))
        for stream in streams:
            dryness = trial.states[stream].dryness
            wrong = dryness > _HALF if wanted[0] else dryness < _HALF if wanted[1] else None
            if wrong is not None:
                size = np.where(np.isnan(dryness), np.nan, np.where(wrong, _CLEAR, 0.0))
                yield Contradiction("stream", stream, f"phase at {item.id}", size)
