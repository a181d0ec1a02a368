"""Simulate the demo plant: from a plan to the true state of every stream."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

import numpy as np

from monitor.demo.design import DESIGN, Given, given
from monitor.demo.happenings import events
from monitor.demo.layout import MACHINES
from monitor.demo.network import Network, return_flows, run_network
from monitor.demo.plant import Content, Machine, Plant, Truth
from monitor.thermo.dead_state import dead_state
from monitor.thermo.water import State, state_ph, state_px

if TYPE_CHECKING:
    from monitor.demo.plan import DemoPlan, FloatArray

__all__ = ["simulate"]


def simulate(plan: DemoPlan, at: Given | None = None) -> Plant:
    """Simulate the demo plant over a plan.

    Args:
        plan: the span.
        at: weather, load and the machines' state at its readings; the plan's own by default.

    Returns:
        True states at every reading. Mass and energy close at every reading for every machine; the
        accumulator's content is stated at both ends of every interval.
    """
    at = given(plan) if at is None else at
    network = run_network(at)
    streams = {
        **_boiler_streams(at, network),
        **_top_streams(at, network),
        **_mid_streams(at, network),
        **_low_streams(at, network),
        **_condensing_streams(at, network),
        **_feed_streams(at, network),
    }
    return Plant(
        times=plan.times(),
        interval=at.interval,
        live=dead_state(at.air.temperature, at.air.barometer),
        reference=dead_state(np.full_like(at.p62, 288.15), np.full_like(at.p62, 101325.0)),
        streams=streams,
        machines=_machines(network, streams),
        signals=_signals(at, network, streams),
        conditions=_conditions(at, network),
        events=events(plan),
    )


def _water(flow: FloatArray, state: State) -> Truth:
    nothing = np.zeros_like(flow)
    return Truth(
        medium="water",
        energy=flow * state.enthalpy,
        mass_flow=flow,
        pressure=state.pressure,
        temperature=state.temperature,
        enthalpy=state.enthalpy,
        entropy=state.entropy,
        dryness=state.dryness,
        entropy_rate=flow * state.entropy,
        chemical=nothing,
    )


def _dry(
    medium: Literal["power", "heat", "fuel"],
    energy: FloatArray,
    *,
    entropy_rate: FloatArray | None = None,
    mass_flow: FloatArray | None = None,
    chemical: FloatArray | None = None,
) -> Truth:
    nothing, absent = np.zeros_like(energy), np.full_like(energy, np.nan)
    return Truth(
        medium=medium,
        energy=energy,
        mass_flow=nothing if mass_flow is None else mass_flow,
        pressure=absent,
        temperature=absent,
        enthalpy=absent,
        entropy=absent,
        dryness=absent,
        entropy_rate=nothing if entropy_rate is None else entropy_rate,
        chemical=nothing if chemical is None else chemical,
    )


def _heat(energy: FloatArray, boundary: float) -> Truth:
    return _dry("heat", energy, entropy_rate=energy / boundary)


def _boiler_streams(at: Given, net: Network) -> dict[str, Truth]:
    streams: dict[str, Truth] = {}
    boilers = (
        ("b1", "gas", at.gas_flow, at.gas_steam),
        ("b2", "bark", at.bark_flow, at.bark_steam),
    )
    for i, (name, fuel, flow, steam) in enumerate(boilers):
        blown = at.blowdown[i]
        drum = state_px(steam.pressure + 2.0e5, 0.0)
        gain = (
            flow * steam.enthalpy + blown * drum.enthalpy - (flow + blown) * net.top.feed.enthalpy
        )
        fired = gain / at.boiler_efficiency[i]
        streams[fuel] = _dry(
            "fuel",
            fired,
            mass_flow=fired / DESIGN.heating_value[i],
            chemical=(DESIGN.exergy_ratio[i] - 1.0) * fired,
        )
        streams[f"{name}_feed"] = _water(flow + blown, net.top.feed)
        streams[f"{name}_steam"] = _water(flow, steam)
        streams[f"{name}_blowdown"] = _water(blown, drum)
        streams[f"{name}_stack"] = _heat(fired - gain, DESIGN.stack_temperature[i])
    return streams


def _top_streams(at: Given, net: Network) -> dict[str, Truth]:
    top, mid, low = net.top, net.mid, net.low
    throttle = low.exhaust_flow + mid.extraction_flow
    internal = (
        throttle * top.header.enthalpy
        - mid.extraction_flow * top.extraction.enthalpy
        - low.exhaust_flow * low.exhaust.enthalpy
    )
    # Nothing flows through a tight valve: the dead end behind it stands at the header's state.
    idle = top.let_down <= 0
    outlet = state_ph(at.p12, np.where(idle, mid.header.enthalpy, top.let_down_enthalpy))
    return {
        "tg1_inlet": _water(throttle, top.header),
        "tg2_inlet": _water(low.condensing_flow, top.header),
        "ld62_inlet": _water(top.let_down, top.header),
        "ld62_spray": _water(top.spray, top.feed),
        "ld62_outlet": _water(top.let_down + top.spray, outlet),
        "tg1_extraction": _water(mid.extraction_flow, top.extraction),
        "tg1_exhaust": _water(low.exhaust_flow, low.exhaust),
        "tg1_power": _dry("power", DESIGN.drive_efficiency * internal),
    }


def _mid_streams(at: Given, net: Network) -> dict[str, Truth]:
    mid, load = net.mid, at.load
    flow = return_flows(at)[0]
    back = at.returns[0]
    heat = load.dispersion * (mid.header.enthalpy - back.enthalpy)
    return {
        "disp_steam": _water(load.dispersion, mid.header),
        "disp_return": _water(flow, back),
        "disp_lost": _water(load.dispersion - flow, back),
        "disp_heat": _heat(heat, DESIGN.user_temperature[0]),
        "ld12_inlet": _water(load.let_down_12, mid.header),
        "ld12_spray": _water(mid.spray, net.top.feed),
        "ld12_outlet": _water(load.let_down_12 + mid.spray, mid.let_down_out),
        "acc_charge": _water(mid.vessel.charge, mid.header),
        "acc_fill": _water(mid.vessel.fill, net.top.feed),
        "acc_discharge": _water(mid.vessel.discharge, net.low.discharge),
    }


def _low_streams(at: Given, net: Network) -> dict[str, Truth]:
    low, load = net.low, at.load
    _, board_flow, heating_flow = return_flows(at)
    _, board, heating = at.returns
    board_heat = load.board_machine * (low.header.enthalpy - board.enthalpy)
    heating_heat = load.heating * (low.header.enthalpy - heating.enthalpy)
    return {
        "bm_steam": _water(load.board_machine, low.header),
        "bm_return": _water(board_flow, board),
        "bm_lost": _water(load.board_machine - board_flow, board),
        "bm_heat": _heat(board_heat, DESIGN.user_temperature[1]),
        "heat_steam": _water(load.heating, low.header),
        "heat_return": _water(heating_flow, heating),
        "heat_heat": _heat(heating_heat, DESIGN.user_temperature[2]),
        "da_steam": _water(low.deaerator_steam, low.header),
    }


def _condensing_streams(at: Given, net: Network) -> dict[str, Truth]:
    low = net.low
    flow = low.condensing_flow
    internal = flow * (net.top.header.enthalpy - low.condensing_exhaust.enthalpy)
    return {
        "tg2_exhaust": _water(flow, low.condensing_exhaust),
        "tg2_power": _dry("power", DESIGN.drive_efficiency * internal),
        "cooling_in": _water(at.cooling_flow, low.cooling_in),
        "cooling_out": _water(at.cooling_flow, low.cooling_out),
        "hotwell": _water(flow, low.hotwell),
        "cep_power": _dry("power", flow * (low.condensate.enthalpy - low.hotwell.enthalpy)),
        "condensate": _water(flow, low.condensate),
    }


def _feed_streams(at: Given, net: Network) -> dict[str, Truth]:
    top, low = net.top, net.low
    work = low.feed_flow * (top.feed.enthalpy - top.feedwater.enthalpy)
    return {
        "makeup": _water(low.makeup, at.makeup),
        "feedwater": _water(low.feed_flow, top.feedwater),
        "fwp_power": _dry("power", work),
        "feed_main": _water(low.feed_flow, top.feed),
    }


def _machines(net: Network, streams: dict[str, Truth]) -> dict[str, Machine]:
    vessel = net.mid.vessel
    content = Content(vessel.mass, vessel.internal_energy, vessel.entropy)
    bearing = 1.0 / DESIGN.drive_efficiency - 1.0
    losses = {
        "HDR62": net.header_loss[0],
        "HDR12": net.header_loss[1],
        "HDR4": net.header_loss[2],
        "ACC": vessel.loss,
        "TG1": bearing * streams["tg1_power"].energy,
        "TG2": bearing * streams["tg2_power"].energy,
    }
    nothing = np.zeros_like(net.low.duty)
    return {
        m.id: Machine(
            id=m.id,
            kind=m.kind,
            inlets=m.inlets,
            outlets=m.outlets,
            heat_loss=losses.get(m.id, nothing),
            content=content if m.id == "ACC" else None,
        )
        for m in MACHINES
    }


def _signals(at: Given, net: Network, streams: dict[str, Truth]) -> dict[str, FloatArray]:
    """Find what is measured but belongs to no stream."""
    outlet, flow = streams["ld62_outlet"].temperature, streams["ld62_outlet"].mass_flow
    header = net.mid.header.temperature
    # A trickle cools down on its way to the thermometer in the dead end.
    heard = -np.expm1(-flow / 0.03)
    return {
        "ambient": at.air.temperature,
        "barometer": at.air.barometer,
        "ld62_position": at.opening_62,
        "ld12_position": at.opening_12,
        "ld62_outlet_gauge": header + (outlet - header) * heard,
        "acc_level": net.mid.vessel.level[:-1],
        "acc_pressure": net.mid.vessel.pressure[:-1],
    }


def _conditions(at: Given, net: Network) -> dict[tuple[str, str], FloatArray]:
    losses = net.header_loss
    T0 = at.air.temperature
    temperatures = (
        net.top.header.temperature, net.mid.header.temperature, net.low.header.temperature,
    )  # fmt: skip
    headers = {
        (name, "heat_loss_coefficient"): loss / (T - T0)
        for name, loss, T in zip(("HDR62", "HDR12", "HDR4"), losses, temperatures, strict=True)
    }
    return {
        ("TG1", "eta_s_1"): net.top.section_efficiency,
        ("TG1", "eta_s_2"): net.low.section_efficiency,
        ("TG2", "eta_s_1"): net.low.condensing_efficiency,
        ("LD62", "passing_flow"): at.passing,
        ("B1", "fuel_efficiency"): at.boiler_efficiency[0],
        ("B2", "fuel_efficiency"): at.boiler_efficiency[1],
        **headers,
    }
