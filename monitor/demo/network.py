"""One pass through the demo plant's steam network, from the boilers down and back.

Flows downstream are demands, the boilers give what their master controller asks for, and the
condensing turbine takes the rest. So mass and energy close exactly in every pass; what a pass
takes from the one before is weak: how an efficiency follows its own flow, a heat loss its own
temperature.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from monitor.demo.design import DESIGN, Given, thinned
from monitor.demo.vessel import Charging, Vessel, VesselRun, run_vessel
from monitor.thermo.water import (
    State,
    saturation_pressure,
    state_ph,
    state_ps,
    state_pt,
    state_px,
)

if TYPE_CHECKING:
    from monitor.demo.plan import FloatArray

__all__ = ["Lagged", "LowPressure", "MidPressure", "Network", "TopPressure", "run_network"]

WATER_HEAT_CAPACITY = 4184.0
COARSE_INTERVAL = 300.0
COARSE_PASSES, FINE_PASSES = 3, 1


@dataclass(frozen=True)
class Lagged:
    """What a pass takes from the last one: flows [kg/s], duty and header losses [W]."""

    throttle: FloatArray
    exhaust: FloatArray
    feed: FloatArray
    duty: FloatArray
    header_loss: tuple[FloatArray, FloatArray, FloatArray]


@dataclass(frozen=True)
class TopPressure:
    """The 62 bar side: states, the flows through LD62, and TG1's first section."""

    feedwater: State
    feed: State
    header: State
    extraction: State
    section_efficiency: FloatArray
    let_down: FloatArray
    let_down_enthalpy: FloatArray
    spray: FloatArray


@dataclass(frozen=True)
class MidPressure:
    """The 12 bar side: accumulator, header, LD12."""

    vessel: VesselRun
    header: State
    extraction_flow: FloatArray
    let_down_out: State
    spray: FloatArray


@dataclass(frozen=True)
class LowPressure:
    """The 4 bar side, the deaerator, and the condensing turbine, which share one mass balance."""

    exhaust: State
    section_efficiency: FloatArray
    discharge: State
    header: State
    exhaust_flow: FloatArray
    deaerator_steam: FloatArray
    makeup: FloatArray
    feed_flow: FloatArray
    condensing_flow: FloatArray
    condensing_exhaust: State
    condensing_efficiency: FloatArray
    hotwell: State
    condensate: State
    cooling_in: State
    cooling_out: State
    duty: FloatArray


@dataclass(frozen=True)
class Network:
    """The whole network after one pass, with the header losses [W] that it was run with."""

    top: TopPressure
    mid: MidPressure
    low: LowPressure
    header_loss: tuple[FloatArray, FloatArray, FloatArray]


def run_network(given: Given) -> Network:
    """Run passes until the weak loops have settled: a few on a coarse time grid, then on all."""
    step = max(1, round(COARSE_INTERVAL / given.interval))
    coarse = replace(thinned(given, step), interval=given.interval * step)
    last = _first_guess(coarse)
    for _ in range(COARSE_PASSES):
        _, last = _pass(coarse, last)
    last = _refined(last, coarse, given, step)
    for _ in range(FINE_PASSES):
        network, last = _pass(given, last)
    return network


def _pass(given: Given, last: Lagged) -> tuple[Network, Lagged]:
    top = _top(given, last)
    mid = _mid(given, last, top)
    low = _low(given, last, top, mid)
    network = Network(top, mid, low, last.header_loss)
    return network, _lag(given, network)


def _first_guess(given: Given) -> Lagged:
    ones = np.ones_like(given.p62)
    loss = (120e3 * ones, 85e3 * ones, 72e3 * ones)
    return Lagged(26.0 * ones, 20.5 * ones, 38.0 * ones, 19e6 * ones, loss)


def _refined(last: Lagged, coarse: Given, given: Given, step: int) -> Lagged:
    """Bring what was found on the coarse grid to all readings.

    Web breaks are too quick for the coarse grid: what is interpolated is how far a flow is from
    what the load alone would make of it.
    """
    fine = np.arange(given.p62.size)
    rough, exact = _expected(coarse), _expected(given)

    def spread(values: FloatArray) -> FloatArray:
        return np.interp(fine, step * np.arange(values.size), values)

    loss = last.header_loss
    return Lagged(
        throttle=exact.throttle + spread(last.throttle - rough.throttle),
        exhaust=exact.exhaust + spread(last.exhaust - rough.exhaust),
        feed=exact.feed + spread(last.feed - rough.feed),
        duty=exact.duty + spread(last.duty - rough.duty),
        header_loss=(spread(loss[0]), spread(loss[1]), spread(loss[2])),
    )


def _expected(given: Given) -> Lagged:
    """What the load alone would make of each flow, and of the condenser's duty."""
    load = given.load
    let_down = load.let_down_62 + given.passing
    exhaust = _low_users(given) - load.let_down_12 - load.discharge
    throttle = exhaust + load.dispersion + load.let_down_12 - let_down
    condensing = load.boiler_steam - throttle - let_down
    nothing = np.zeros_like(exhaust)
    return Lagged(
        throttle, exhaust, load.boiler_steam, 2.2e6 * condensing, (nothing, nothing, nothing)
    )


def _lag(given: Given, network: Network) -> Lagged:
    low, mid = network.low, network.mid
    headers = (network.top.header, mid.header, low.header)
    losses = tuple(
        k * (header.temperature - given.air.temperature)
        for k, header in zip(DESIGN.header_loss, headers, strict=True)
    )
    return Lagged(
        throttle=low.exhaust_flow + mid.extraction_flow,
        exhaust=low.exhaust_flow,
        feed=low.feed_flow,
        duty=low.duty,
        header_loss=(losses[0], losses[1], losses[2]),
    )


def _efficiency(section: int, flow: FloatArray) -> FloatArray:
    """Isentropic efficiency against load: a flat top that falls off to both sides."""
    share = flow / DESIGN.section_flow[section]
    return DESIGN.section_efficiency[section] * (1.0 - 0.16 * np.square(share - 1.0))


def _expand(inlet: State, pressure: FloatArray, efficiency: FloatArray) -> State:
    """Expand steam with an isentropic efficiency: h2 = h1 - eta (h1 - h2s)."""
    ideal = state_ps(pressure, inlet.entropy)
    return state_ph(pressure, inlet.enthalpy - efficiency * (inlet.enthalpy - ideal.enthalpy))


def _pump(inlet: State, pressure: FloatArray, efficiency: float) -> State:
    """Pump water: h2 = h1 + (h2s - h1) / eta."""
    ideal = state_ps(pressure, inlet.entropy)
    return state_ph(pressure, inlet.enthalpy + (ideal.enthalpy - inlet.enthalpy) / efficiency)


def _top(given: Given, last: Lagged) -> TopPressure:
    # Feed water leaves the deaerator saturated; the feed pump's curve falls with its flow.
    feedwater = state_px(given.p_deaerator, 0.0)
    feed = _pump(feedwater, 86.0e5 - 4.0e5 * (last.feed / 40.0) ** 2, DESIGN.pump_efficiency[0])
    steam = given.gas_flow * given.gas_steam.enthalpy + given.bark_flow * given.bark_steam.enthalpy
    header = state_ph(given.p62, (steam - last.header_loss[0]) / given.load.boiler_steam)
    efficiency = _efficiency(0, last.throttle) - given.degraded
    # The spray valve follows the opening, and is shut when the let-down is: what passes a closed
    # valve is throttled only.
    let_down = given.load.let_down_62 + given.passing
    share = np.clip(given.opening_62 / 0.03, 0.0, 1.0)
    cooled = state_pt(given.p12, DESIGN.let_down_outlet[0]).enthalpy
    outlet = header.enthalpy + share * (cooled - header.enthalpy)
    return TopPressure(
        feedwater=feedwater,
        feed=feed,
        header=header,
        extraction=_expand(header, 1.02 * given.p12, efficiency),
        section_efficiency=efficiency,
        let_down=let_down,
        let_down_enthalpy=outlet,
        spray=let_down * (header.enthalpy - outlet) / (outlet - feed.enthalpy),
    )


def _mid(given: Given, last: Lagged, top: TopPressure) -> MidPressure:
    load = given.load
    let_down_out = top.let_down + top.spray
    extra = let_down_out * (top.let_down_enthalpy - top.extraction.enthalpy)
    charging = Charging(
        extraction_enthalpy=top.extraction.enthalpy,
        let_down=extra - last.header_loss[1],
        other_flow=load.dispersion + load.let_down_12,
        fill_enthalpy=top.feed.enthalpy,
        ambient=given.air.temperature,
        wanted_discharge=load.discharge,
    )
    vessel = run_vessel(Vessel(), charging, given.interval)
    header = state_ph(given.p12, vessel.charge_enthalpy)
    outlet = state_pt(given.p4, DESIGN.let_down_outlet[1])
    cooling = (header.enthalpy - outlet.enthalpy) / (outlet.enthalpy - top.feed.enthalpy)
    return MidPressure(
        vessel=vessel,
        header=header,
        extraction_flow=charging.other_flow + vessel.charge - let_down_out,
        let_down_out=outlet,
        spray=load.let_down_12 * cooling,
    )


def _low(given: Given, last: Lagged, top: TopPressure, mid: MidPressure) -> LowPressure:
    efficiency = _efficiency(1, last.exhaust)
    exhaust = _expand(top.extraction, 1.03 * given.p4, efficiency)
    discharge = state_px(mid.vessel.pressure[:-1], 1.0)
    capacity = given.cooling_flow * WATER_HEAT_CAPACITY
    # A condenser is an exchanger with one side at constant temperature: 1 - exp(-UA / C).
    effectiveness = -np.expm1(-DESIGN.condenser_conductance / capacity)
    saturation = given.air.cooling_water + last.duty / capacity / effectiveness
    vacuum = saturation_pressure(saturation)
    hotwell = state_pt(vacuum, saturation - 0.8)
    condensate = _pump(hotwell, np.full_like(vacuum, 6.0e5), DESIGN.pump_efficiency[1])
    feed_flow = (
        given.load.boiler_steam + sum(given.blowdown) + top.spray + mid.spray + mid.vessel.fill
    )
    steam, makeup, header = _deaerate(
        given, last, top, mid, (exhaust, discharge, condensate), feed_flow
    )
    let_down = given.load.let_down_12 + mid.spray
    exhaust_flow = _low_users(given) + steam - let_down - mid.vessel.discharge
    throttle = exhaust_flow + mid.extraction_flow
    condensing = given.load.boiler_steam - throttle - top.let_down
    condensing_efficiency = _efficiency(2, condensing)
    wet = _expand(top.header, vacuum, condensing_efficiency)
    duty = condensing * (wet.enthalpy - hotwell.enthalpy)
    cooling_in = state_pt(2.6e5, given.air.cooling_water)
    warmed = cooling_in.enthalpy + duty / given.cooling_flow
    return LowPressure(
        exhaust=exhaust,
        section_efficiency=efficiency,
        discharge=discharge,
        header=state_ph(given.p4, header),
        exhaust_flow=exhaust_flow,
        deaerator_steam=steam,
        makeup=makeup,
        feed_flow=feed_flow,
        condensing_flow=condensing,
        condensing_exhaust=wet,
        condensing_efficiency=condensing_efficiency,
        hotwell=hotwell,
        condensate=condensate,
        cooling_in=cooling_in,
        cooling_out=state_ph(2.1e5, warmed),
        duty=duty,
    )


def _low_users(given: Given) -> FloatArray:
    return given.load.board_machine + given.load.heating


def _deaerate(
    given: Given,
    last: Lagged,
    top: TopPressure,
    mid: MidPressure,
    states: tuple[State, State, State],
    feed_flow: FloatArray,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Solve the deaerator's steam, which moves the header it comes from and what is left for TG2.

    Returns:
        Deaerator steam and make-up [kg/s], and the 4 bar header's enthalpy [J/kg].
    """
    exhaust, discharge, condensate = states
    load, vessel = given.load, mid.vessel
    users = _low_users(given)
    let_down = load.let_down_12 + mid.spray
    returned, carried = _returns(given)
    # TG2 gives up what the deaerator takes, so the make-up does not depend on it.
    fixed = users - let_down - vessel.discharge + mid.extraction_flow + top.let_down
    most_condensing = load.boiler_steam - fixed
    makeup = feed_flow - returned - most_condensing
    needed = feed_flow * top.feedwater.enthalpy - carried - makeup * given.makeup.enthalpy
    steam = 0.09 * feed_flow
    for _ in range(60):
        turbine = users + steam - let_down - vessel.discharge
        header = (
            turbine * exhaust.enthalpy
            + let_down * mid.let_down_out.enthalpy
            + vessel.discharge * discharge.enthalpy
            - last.header_loss[2]
        ) / (users + steam)
        condensing = (most_condensing - steam) * condensate.enthalpy
        missing = needed - condensing - steam * header
        change = missing / (header - condensate.enthalpy)
        steam = steam + change
        if np.abs(change).max() < 1e-14:  # noqa: PLR2004 - rounding of a few kg/s
            break
    return steam, makeup, header


def _returns(given: Given) -> tuple[FloatArray, FloatArray]:
    """Condensate that comes back [kg/s] and the enthalpy that it carries [W]."""
    flows = return_flows(given)
    states = given.returns
    carried = sum(
        (f * s.enthalpy for f, s in zip(flows, states, strict=True)), np.zeros_like(flows[0])
    )
    return flows[0] + flows[1] + flows[2], carried


def return_flows(given: Given) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Condensate returned by dispersion, board machine and heating [kg/s]."""
    load = given.load
    return 0.70 * load.dispersion, 0.88 * load.board_machine, load.heating
