"""Streams and equipment built in the open, for the tests of the balances and of each kind."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from monitor.equipment import KINDS
from monitor.equipment.base import Drawn, Item, Signal, StreamState
from monitor.equipment.solve import with_flow, with_rate
from monitor.site.models import Stream
from monitor.thermo.dead_state import dead_state
from monitor.thermo.water import state_ph, state_pt, state_px

NO_FLAG = np.zeros(1, dtype=np.int32)


def water(name, flow, *, p_bar, T_C=None, x=None, h=None):
    """A stream of water or steam: kg/s, bar absolute, and degC or dryness or J/kg."""
    flow, p = np.broadcast_arrays(np.atleast_1d(np.asarray(flow, float)), np.asarray(p_bar) * 1e5)
    if h is not None:
        state = state_ph(p, h)
    elif x is not None:
        state = state_px(p, x)
    else:
        state = state_pt(p, np.asarray(T_C) + 273.15)
    assert np.all(state.valid), "the test's own state is outside the steam tables"
    blank = replace(
        StreamState.absent("water", len(flow), name),
        pressure=np.broadcast_to(state.pressure, flow.shape),
        temperature=np.broadcast_to(state.temperature, flow.shape),
        enthalpy=np.broadcast_to(state.enthalpy, flow.shape),
        entropy=np.broadcast_to(state.entropy, flow.shape),
        volume=np.broadcast_to(state.volume, flow.shape),
        dryness=np.broadcast_to(state.dryness, flow.shape),
    )
    return with_flow(blank, flow, np.zeros(len(flow), dtype=np.int32))


def power(name, watts):
    watts = np.atleast_1d(np.asarray(watts, float))
    blank = replace(StreamState.absent("power", len(watts), name), mass_flow=np.zeros(len(watts)))
    return with_rate(blank, watts, np.zeros(len(watts), dtype=np.int32))


def heat(name, watts, boundary_C=None):
    watts = np.atleast_1d(np.asarray(watts, float))
    blank = replace(StreamState.absent("heat", len(watts), name), mass_flow=np.zeros(len(watts)))
    if boundary_C is None:
        blank = replace(blank, boundary_is_dead=True)
    else:
        blank = replace(blank, temperature=np.full(len(watts), boundary_C + 273.15))
    return with_rate(blank, watts, np.zeros(len(watts), dtype=np.int32))


def fuel(name, flow, *, heating_value, ratio):
    flow = np.atleast_1d(np.asarray(flow, float))
    energy = flow * heating_value
    return replace(
        StreamState.absent("fuel", len(flow), name),
        mass_flow=flow,
        energy=energy,
        entropy_rate=np.zeros_like(energy),
        chemical=(ratio - 1.0) * energy,
    )


def drawn(
    kind_name,
    ports,
    *,
    signals=None,
    interval=300.0,
    spare=frozenset({"mass", "energy"}),
    statements=None,
    **options,
):
    """One piece of equipment over a window; ports: name -> stream or list of streams."""
    kind = KINDS[kind_name]
    states = {k: tuple(v) if isinstance(v, (list, tuple)) else (v,) for k, v in ports.items()}
    item = Item(
        id="it",
        name="it",
        kind=kind,
        ports={k: tuple(s.id for s in v) for k, v in states.items()},
        options=kind.options.model_validate(options),
        spare=frozenset(spare),
        statements=statements or {},
    )
    signals = signals or {}
    return Drawn(item, states, signals, interval, kind.content(item, signals))


def signal(edges):
    """A signal from its values at the cells' ends."""
    edges = np.asarray(edges, float)
    mean = (edges[1:] + edges[:-1]) / 2
    return Signal(mean, edges, np.zeros(len(mean), dtype=np.int32))


def dead(t_C=15.0, p_bar=1.01325):
    """A dead state of one cell."""
    return dead_state(np.atleast_1d(t_C + 273.15), np.atleast_1d(p_bar * 1e5))


def figures_of(box, at=None):
    """Values of the listed condition figures of one cell, by name; none may be missing."""
    found = box.item.kind.condition(box, at or dead())
    return {f.name: found[f.name] for f in box.item.kind.figures(box.item)}


def stated(**streams):
    """What a site file would say of some streams: id -> the keys of its table."""
    return {name: Stream.model_validate({"id": name} | keys) for name, keys in streams.items()}
