"""Unknown flows, enthalpies and rates, found from the balances of the equipment they touch.

A site file may call a flow, an enthalpy or a rate of power or heat ``balance``. Each piece of
equipment offers one mass balance and one energy balance (the latter unless its residual is its heat
loss). `plan` finds, once and before anything runs, an order in which every unknown has a balance to
come from; `complete` carries the plan out on whole windows.

Where a wall keeps two fluids apart (a condenser's tubes) and flows of both are unknown, each fluid
closes by itself. Mass and energy together would find them too, but a per cent of error in the duty
would appear as cooling water that turns into condensate.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from monitor.equipment.account import content_rates
from monitor.equipment.base import FloatArray, StreamState, sum_flags
from monitor.flags import Flag, FlagArray
from monitor.site.models import Reference

if TYPE_CHECKING:
    from collections.abc import Callable, Collection, Mapping, Sequence

    from monitor.equipment.base import Drawn, Item

__all__ = [
    "Needs",
    "Plan",
    "Step",
    "Unknown",
    "competing",
    "complete",
    "plan",
    "spare_balances",
    "spare_measurements",
]

Unknown = tuple[Literal["flow", "enthalpy", "rate"], str]

# Two flows are told apart by the enthalpies they carry. Within that of one kelvin of water two
# thermometers see no difference, and the flows come out as large as one likes; within five, the
# flows are off by a fifth for each kelvin.
_INDISTINCT, _HARDLY_DISTINCT = 4.2e3, 21e3  # [J/kg]


@dataclass(frozen=True)
class Needs:
    """What a site file leaves to balances: stream ids by kind of unknown."""

    flow: frozenset[str] = frozenset()
    enthalpy: frozenset[str] = frozenset()
    rate: frozenset[str] = frozenset()

    def all(self) -> set[Unknown]:
        """Every unknown as (kind, stream)."""
        return (
            {("flow", s) for s in self.flow}
            | {("enthalpy", s) for s in self.enthalpy}
            | {("rate", s) for s in self.rate}
        )


@dataclass(frozen=True)
class Step:
    """One balance used for one unknown (or both balances for two flows).

    ``mass of its fluid`` is that of one of two fluids; that of both together is still to be had.
    """

    equipment: str
    balance: Literal["mass", "mass of its fluid", "energy", "mass and energy"]
    unknowns: tuple[Unknown, ...]


@dataclass(frozen=True)
class Plan:
    """Steps in order, and the unknowns for which no balance was found."""

    steps: tuple[Step, ...]
    unsolved: frozenset[Unknown]


def plan(items: Sequence[Item], needs: Needs) -> Plan:
    """Find an order in which balances give every unknown.

    Args:
        items: the site's equipment.
        needs: what is left to balances.

    Returns:
        The steps, and whatever could not be placed: the caller turns those into errors.
    """
    open_unknowns = needs.all()
    free_balances = {item.id: _offered(item) for item in items}
    steps: list[Step] = []
    progress = True
    while open_unknowns and progress:
        progress = False
        for item in items:
            step = _step_at(item, open_unknowns, free_balances[item.id])
            if step is None:
                continue
            steps.append(step)
            open_unknowns -= set(step.unknowns)
            free_balances[item.id] -= set(step.balance.split(" and "))
            progress = True
        if not progress:
            # Only now: what other equipment tells of a flow leaves this balance to be a check.
            steps += (apart := _steps_apart(items, open_unknowns, free_balances)[:1])
            open_unknowns -= {unknown for step in apart for unknown in step.unknowns}
            progress = bool(apart)
    return Plan(tuple(steps), frozenset(open_unknowns))


def _steps_apart(
    items: Sequence[Item], open_unknowns: set[Unknown], free: Mapping[str, set[str]]
) -> list[Step]:
    """Flows that are the only unknown one of their fluid, while one of the other is unknown too."""
    found = []
    for item in items:
        flows = _flows_at(item, open_unknowns)
        fluids = [item.fluid(stream) for _, stream in flows]
        if "mass" not in free[item.id] or len(set(fluids)) == 1:
            continue
        found += [
            Step(item.id, "mass of its fluid", (flow,))
            for flow, fluid in zip(flows, fluids, strict=True)
            if fluids.count(fluid) == 1
        ]
    return found


def _flows_at(item: Item, open_unknowns: set[Unknown]) -> tuple[Unknown, ...]:
    streams = {*item.ids("in"), *item.ids("out")}
    return tuple(sorted(u for u in open_unknowns if u[0] == "flow" and u[1] in streams))


def spare_balances(item: Item, steps: Sequence[Step]) -> frozenset[str]:
    """The balances of one piece of equipment that no step has used."""
    used = {b for step in steps if step.equipment == item.id for b in step.balance.split(" and ")}
    return frozenset(_offered(item) - used)


def spare_measurements(item: Item) -> dict[str, tuple[str, ...]]:
    """The tags of which any one might be left to each balance that nothing was taken from.

    Together they say more than is needed: that is what tells a wrong one, and it is worth knowing.

    Args:
        item: with its ``spare`` balances and ``statements``.

    Returns:
        ``mass`` and ``energy``, as far as they are spare and rest on a tag: tags in the order of
        the ports.
    """
    keys = {"mass": ("flow",), "energy": ("flow", "temperature", "power", "heat")}
    found = {}
    for balance, read in keys.items():
        tags = [
            reference.tag
            for stream in (*item.ids("in"), *item.ids("out"))
            for key in read
            if not (balance == "mass" and item.states(stream, "medium") != "water")
            and isinstance(reference := item.states(stream, key), Reference)
            and reference.tag
        ]
        if balance in item.spare and tags:
            found[balance] = tuple(dict.fromkeys(tags))
    return found


def competing(item: Item, unsolved: Collection[Unknown]) -> tuple[str, ...]:
    """What is still unknown at one piece of equipment, in words: one of these must be measured."""
    streams = (*item.ids("in"), *item.ids("out"))
    words = {"flow": "flow", "enthalpy": "state", "rate": "rate"}
    return tuple(
        f"the {words[kind]} of '{stream}'" for kind, stream in sorted(unsolved) if stream in streams
    )


def _offered(item: Item) -> set[str]:
    return {"mass"} if item.options.heat_loss == "balance" else {"mass", "energy"}


def _step_at(item: Item, open_unknowns: set[Unknown], free: set[str]) -> Step | None:
    streams = {*item.ids("in"), *item.ids("out")}
    flows = _flows_at(item, open_unknowns)
    others = tuple(u for u in open_unknowns if u[1] in streams and u[0] != "flow")
    if "mass" in free and len(flows) == 1:
        return Step(item.id, "mass", flows)
    if "energy" in free and not flows and len(others) == 1:
        return Step(item.id, "energy", others)
    # Two flows alone would only be found to be zero: something at the equipment must be known.
    mix = len({item.fluid(stream) for _, stream in flows}) == 1
    enough = len(streams) > len(flows) and mix
    if free == {"mass", "energy"} and len(flows) == 2 and not others and enough:  # noqa: PLR2004
        return Step(item.id, "mass and energy", flows)
    return None


def complete(
    steps: Sequence[Step],
    states: dict[str, StreamState],
    draw: Callable[[str], Drawn],
    with_enthalpy: Callable[[StreamState, FloatArray], StreamState],
) -> dict[str, StreamState]:
    """Fill in the unknowns of one window, in the plan's order.

    Args:
        steps: from `plan`.
        states: every stream, unknowns as NaN; changed in place.
        draw: gives a piece of equipment with the streams as they are now.
        with_enthalpy: gives the water state at a stream's pressure and a found enthalpy.

    Returns:
        ``states``.
    """
    for step in steps:
        drawn = draw(step.equipment)
        if step.balance in ("mass", "mass of its fluid"):
            found = _flow_from_mass(drawn, step.unknowns[0][1], step.balance)
        elif step.balance == "energy":
            found = _from_energy(drawn, step.unknowns[0], with_enthalpy)
        else:
            found = _flows_from_both(drawn, (step.unknowns[0][1], step.unknowns[1][1]))
        states.update(found)
    return states


@dataclass(frozen=True)
class _Split:
    """One unknown stream at a piece of equipment, and everything else there."""

    unknown: StreamState
    sign: float
    """+1 when the unknown leaves, -1 when it enters."""
    inlets: tuple[StreamState, ...]
    outlets: tuple[StreamState, ...]

    def net(self, name: str) -> FloatArray:
        """Sum in minus sum out of one rate, the unknown left out."""
        like = self.unknown.flag.astype(float) * 0.0
        total_in = sum((getattr(s, name) for s in self.inlets), like)
        total_out = sum((getattr(s, name) for s in self.outlets), like)
        return np.asarray(total_in - total_out)


def _split(drawn: Drawn, *unknown: str) -> _Split:
    inlets, outlets = drawn.facing("in"), drawn.facing("out")
    leaving = [s for s in outlets if s.id == unknown[0]]
    (state,) = leaving or [s for s in inlets if s.id == unknown[0]]
    return _Split(
        unknown=state,
        sign=1.0 if leaving else -1.0,
        inlets=tuple(s for s in inlets if s.id not in unknown),
        outlets=tuple(s for s in outlets if s.id not in unknown),
    )


def _water_only(states: Sequence[StreamState]) -> tuple[StreamState, ...]:
    return tuple(s for s in states if s.medium == "water")


def _flow_from_mass(drawn: Drawn, stream: str, balance: str) -> dict[str, StreamState]:
    split = _split(drawn, stream)
    water = _Split(split.unknown, split.sign, _water_only(split.inlets), _water_only(split.outlets))
    if balance == "mass of its fluid":
        own = drawn.item.fluid(stream)
        inlets, outlets = (
            tuple(s for s in side if drawn.item.fluid(s.id) == own)
            for side in (water.inlets, water.outlets)
        )
        water = _Split(split.unknown, split.sign, inlets, outlets)
    flow = split.sign * (water.net("mass_flow") - content_rates(drawn).mass)
    flag = _flag_of(drawn, (*water.inlets, *water.outlets))
    return {stream: with_flow(split.unknown, flow, flag)}


def _from_energy(
    drawn: Drawn,
    unknown: Unknown,
    with_enthalpy: Callable[[StreamState, FloatArray], StreamState],
) -> dict[str, StreamState]:
    kind, stream = unknown
    split = _split(drawn, stream)
    rest = split.net("energy") - content_rates(drawn).internal_energy
    if kind == "rate" and split.unknown.medium == "power":
        # The unknown power itself sets what its drive loses.
        energy = split.sign * rest * drawn.item.kind.drive_efficiency(drawn.item)
    else:
        energy = split.sign * (rest - drawn.item.kind.unmeasured_heat(drawn))
    flag = _flag_of(drawn, (*split.inlets, *split.outlets)) | split.unknown.flag
    if kind == "rate":
        return {stream: with_rate(split.unknown, energy, flag)}
    flow = split.unknown.mass_flow
    with np.errstate(divide="ignore", invalid="ignore"):
        enthalpy = np.where(flow > 0, energy / flow, np.nan)
    found = with_enthalpy(split.unknown, enthalpy)
    # A flow within the meters' error that has no possible enthalpy is none, and what little the
    # balance leaves is an imbalance. Else every stop would blank the whole site's ledger.
    small = np.abs(flow) < drawn.item.options.off_below
    known = np.isfinite(energy) & np.isfinite(split.unknown.pressure)
    still = small & known & np.isnan(found.entropy)
    flag = _missing_where_nan(flag, np.where(still, 0.0, enthalpy))
    found = replace(found, flag=np.where(still, split.unknown.flag, found.flag))
    return {stream: with_flow(found, np.where(still, 0.0, flow), flag)}


def _flows_from_both(drawn: Drawn, streams: tuple[str, str]) -> dict[str, StreamState]:
    first, second = _split(drawn, *streams), _split(drawn, *reversed(streams))
    rates = content_rates(drawn)
    water = _Split(first.unknown, first.sign, _water_only(first.inlets), _water_only(first.outlets))
    mass = water.net("mass_flow") - rates.mass
    energy = first.net("energy") - rates.internal_energy - drawn.item.kind.unmeasured_heat(drawn)
    a, b = first.unknown, second.unknown
    # sign_a m_a + sign_b m_b = mass; the same with enthalpies = energy.
    difference = np.abs(b.enthalpy - a.enthalpy)
    determinant = np.where(difference < _INDISTINCT, np.nan, b.enthalpy - a.enthalpy)
    flow_a = first.sign * (mass * b.enthalpy - energy) / determinant
    flow_b = second.sign * (energy - mass * a.enthalpy) / determinant
    doubtful = np.where(difference < _HARDLY_DISTINCT, np.int32(Flag.UNCERTAIN), np.int32(0))
    flag = _flag_of(drawn, (*first.inlets, *first.outlets)) | a.flag | b.flag | doubtful
    return {a.id: with_flow(a, flow_a, flag), b.id: with_flow(b, flow_b, flag)}


def _flag_of(drawn: Drawn, states: Sequence[StreamState]) -> FlagArray:
    like = drawn.facing("out") or drawn.facing("in")
    flags = sum_flags(states or like[:1], tuple(drawn.signals.values()))
    return np.asarray(flags | Flag.SOLVED, dtype=np.int32)


def with_flow(state: StreamState, flow: FloatArray, flag: FlagArray) -> StreamState:
    """Give a water stream its mass flow [kg/s] and the rates that follow from it.

    A flow of exactly zero carries nothing, whatever the stagnant pipe's instruments say.
    """
    still = flow == 0
    return StreamState(
        id=state.id,
        medium=state.medium,
        mass_flow=flow,
        pressure=state.pressure,
        temperature=state.temperature,
        enthalpy=state.enthalpy,
        entropy=state.entropy,
        volume=state.volume,
        dryness=state.dryness,
        energy=np.where(still, 0.0, flow * state.enthalpy),
        entropy_rate=np.where(still, 0.0, flow * state.entropy),
        chemical=state.chemical,
        flag=_missing_where_nan(state.flag | flag, flow),
    )


def with_rate(state: StreamState, energy: FloatArray, flag: FlagArray) -> StreamState:
    """Give a power or heat stream its rate [W]."""
    if state.medium == "power" or state.boundary_is_dead:
        entropy = np.zeros_like(energy)
    else:
        entropy = energy / state.temperature
    return StreamState(
        id=state.id,
        medium=state.medium,
        mass_flow=np.zeros_like(energy),
        pressure=state.pressure,
        temperature=state.temperature,
        enthalpy=state.enthalpy,
        entropy=state.entropy,
        volume=state.volume,
        dryness=state.dryness,
        energy=energy,
        entropy_rate=entropy,
        chemical=np.zeros_like(energy),
        flag=_missing_where_nan(state.flag | flag, energy),
        boundary_is_dead=state.boundary_is_dead,
    )


def _missing_where_nan(flag: FlagArray, value: FloatArray) -> FlagArray:
    absent = np.where(np.isnan(value), np.int32(Flag.MISSING), np.int32(0))
    return np.asarray(flag | absent, dtype=np.int32)
