"""First and second law for every kind there is, on random equipment that could exist.

A new kind fails here until `POSSIBLE` says how one is built: states first, then the one flow, rate
or enthalpy that closes its balances.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from equipment_builders import dead, drawn, fuel, heat, power, signal, water
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.equipment import KINDS
from monitor.equipment.account import account, balances
from monitor.flags import Flag
from monitor.thermo.water import saturated, saturation_temperature, state_ps

SIZES = st.lists(st.floats(0.0, 1.0), min_size=5, max_size=5)
AMBIENT = st.tuples(st.floats(-25.0, 38.0), st.floats(0.94, 1.05))


def between(share, low, high):
    return low + share * (high - low)


def boiling_at(p_bar):
    return float(saturation_temperature(p_bar * 1e5)) - 273.15


def with_rate_of(name, inlets, outlets, boundary_C):
    """Heat that closes the energy balance."""
    return heat(name, sum(s.energy for s in inlets) - sum(s.energy for s in outlets), boundary_C)


def boiler(a):
    p = between(a[0], 10, 120)
    steam = water("st", between(a[1], 1, 60), p_bar=p, T_C=between(a[2], 400, 540))
    blown = water("bd", 0.03 * steam.mass_flow, p_bar=1.05 * p, x=0.0)
    feed = water("fw", steam.mass_flow + blown.mass_flow, p_bar=1.3 * p, T_C=between(a[3], 40, 150))
    gained = float((steam.energy + blown.energy - feed.energy)[0])
    burnt = fuel("f", gained / between(a[4], 0.5, 0.99) / 40e6, heating_value=40e6, ratio=1.06)
    ports = {"fuel": burnt, "feedwater": feed, "steam": steam, "blowdown": blown}
    ports["loss"] = with_rate_of("q", [burnt, feed], [steam, blown], 140.0)
    return drawn("boiler", ports, heat_loss="none")


def closed_feedwater_heater(a):
    p = between(a[0], 1.5, 20.0)
    cold_C = between(a[1], 20.0, boiling_at(p) - 15.0)
    warm_C = between(a[2], cold_C + 2.0, boiling_at(p) - 1.0)
    flow = between(a[3], 1.0, 80.0)
    cold = water("ci", flow, p_bar=90.0, T_C=cold_C)
    warm = water("co", flow, p_bar=89.0, T_C=warm_C)
    steam = water("st", 1.0, p_bar=p, T_C=boiling_at(p) + between(a[4], 1.0, 80.0))
    drain = water("dr", 1.0, p_bar=p, x=0.0)
    m = (warm.energy - cold.energy) / (steam.enthalpy - drain.enthalpy)
    ports = {
        "steam": water("st", m, p_bar=p, h=steam.enthalpy),
        "feedwater_in": cold,
        "drain": water("dr", m, p_bar=p, x=0.0),
        "feedwater_out": warm,
    }
    return drawn("closed_feedwater_heater", ports)


def condenser(a):
    p = between(a[0], 0.04, 0.3)
    cold_C = between(a[1], 2.0, boiling_at(p) - 8.0)
    warm_C = between(a[2], cold_C + 2.0, boiling_at(p) - 0.5)
    steam = water("st", between(a[3], 1, 60), p_bar=p, x=between(a[4], 0.8, 1.0))
    drip = water("hw", steam.mass_flow, p_bar=p, x=0.0)
    cold, warm = (water("c", 1.0, p_bar=2.0, T_C=t) for t in (cold_C, warm_C))
    m = (steam.energy - drip.energy) / (warm.enthalpy - cold.enthalpy)
    ports = {
        "steam": steam,
        "cooling_in": water("ci", m, p_bar=2.0, T_C=cold_C),
        "condensate": drip,
        "cooling_out": water("co", m, p_bar=2.0, T_C=warm_C),
    }
    return drawn("condenser", ports)


def _mixed(a, p_bar, hot_C):
    one = water("a", between(a[1], 0.5, 50), p_bar=p_bar, T_C=hot_C)
    two = water("b", between(a[2], 0.5, 50), p_bar=p_bar, T_C=hot_C + between(a[3], 0.0, 150.0))
    flow = one.mass_flow + two.mass_flow
    out_bar = between(a[4], 0.5, 1.0) * p_bar
    return [one, two], water("out", flow, p_bar=out_bar, h=(one.energy + two.energy) / flow)


def control_volume(a):
    inlets, outlet = _mixed(a, between(a[0], 5.0, 60.0), 290.0)
    lost = water("l", outlet.mass_flow, p_bar=outlet.pressure / 1e5, h=0.98 * outlet.enthalpy)
    gone = with_rate_of("q", inlets, [lost], 90.0)
    return drawn("control_volume", {"inlet": inlets, "outlet": [lost, gone]})


def header(a):
    inlets, outlet = _mixed(a, between(a[0], 5.0, 60.0), 290.0)
    cooler = water("out", outlet.mass_flow, p_bar=outlet.pressure / 1e5, h=0.99 * outlet.enthalpy)
    return drawn("header", {"inlet": inlets, "outlet": cooler})


def _heated(kind, a, vent):
    p = between(a[0], 1.1, 8.0)
    out = water("fw", 1.0, p_bar=p, x=0.0)
    cold = water("w", between(a[1], 1, 80), p_bar=p, T_C=between(a[2], 5.0, boiling_at(p) - 8.0))
    steam = water("s", 1.0, p_bar=1.5 * p, T_C=boiling_at(1.5 * p) + between(a[3], 1.0, 90.0))
    gone = vent * cold.mass_flow * between(a[4], 0.0, 1.0)
    light = water("v", gone, p_bar=p, x=1.0)
    needed = cold.mass_flow * (out.enthalpy - cold.enthalpy) + gone * (
        light.enthalpy - out.enthalpy
    )
    m = needed / (steam.enthalpy - out.enthalpy)
    ports = {
        "steam": water("s", m, p_bar=1.5 * p, h=steam.enthalpy),
        "water": cold,
        "feedwater": water("fw", m + cold.mass_flow - gone, p_bar=p, x=0.0),
    }
    return drawn(kind, ports | ({"vent": light} if vent else {}))


def exchanger(a):
    hot_C, cold_C = between(a[0], 430.0, 540.0), between(a[1], 260.0, 320.0)
    colder_C, warmer_C = (
        between(a[2], cold_C + 10, hot_C - 60),
        between(a[3], cold_C + 5, hot_C - 20),
    )
    flow = between(a[4], 1.0, 50.0)
    hot_in = water("hi", flow, p_bar=60.0, T_C=hot_C)
    hot_out = water("ho", flow, p_bar=58.0, T_C=max(colder_C, cold_C + 20.0))
    cold, warm = (water("c", 1.0, p_bar=p, T_C=t) for p, t in ((20.0, cold_C), (19.5, warmer_C)))
    m = (hot_in.energy - hot_out.energy) / (warm.enthalpy - cold.enthalpy)
    ports = {
        "hot_in": hot_in,
        "hot_out": hot_out,
        "cold_in": water("ci", m, p_bar=20.0, T_C=cold_C),
        "cold_out": water("co", m, p_bar=19.5, T_C=warmer_C),
    }
    return drawn("exchanger", ports)


def flash_vessel(a):
    p = between(a[0], 3.0, 30.0)
    low = between(a[1], 0.2, 0.8) * p
    hot = water("i", between(a[2], 0.5, 40.0), p_bar=p, x=0.02 * a[3])
    liquid, vapour = saturated(np.atleast_1d(low * 1e5))
    x = float(((hot.enthalpy - liquid.enthalpy) / (vapour.enthalpy - liquid.enthalpy))[0])
    steam = water("s", x * hot.mass_flow, p_bar=low, x=1.0)
    rest = water("c", hot.mass_flow - steam.mass_flow, p_bar=low, x=0.0)
    return drawn("flash_vessel", {"inlet": hot, "steam": steam, "condensate": rest})


def letdown(a):
    p = between(a[0], 10.0, 100.0)
    inlet = water("i", between(a[1], 0.5, 50.0), p_bar=p, T_C=between(a[2], 400.0, 540.0))
    spray = water("w", 0.15 * a[3] * inlet.mass_flow, p_bar=1.2 * p, T_C=130.0)
    flow = inlet.mass_flow + spray.mass_flow
    out = water(
        "o", flow, p_bar=between(a[4], 0.1, 0.9) * p, h=(inlet.energy + spray.energy) / flow
    )
    return drawn("letdown", {"inlet": inlet, "spray": spray, "outlet": out})


def pump(a):
    inlet = water("i", between(a[0], 0.5, 100.0), p_bar=2.0, T_C=between(a[1], 10.0, 115.0))
    p = between(a[2], 5.0, 150.0)
    ideal = state_ps(p * 1e5, inlet.entropy).enthalpy - inlet.enthalpy
    outlet = water("o", inlet.mass_flow, p_bar=p, h=inlet.enthalpy + ideal / between(a[3], 0.3, 1))
    motor = between(a[4], 0.8, 1.0)
    drive = power("w", (outlet.energy - inlet.energy) / motor)
    ports = {"inlet": inlet, "power": drive, "outlet": outlet}
    return drawn("pump", ports, motor_efficiency=motor)


def trap_group(a):
    p = between(a[0], 3.0, 40.0)
    inlet = water("i", between(a[1], 0.05, 10.0), p_bar=p, x=0.3 * a[2])
    out = water("o", inlet.mass_flow, p_bar=between(a[3], 0.2, 0.9) * p, h=inlet.enthalpy)
    return drawn("trap_group", {"inlet": inlet, "outlet": out})


def turbine(a):
    inlet = water("i", between(a[0], 2, 100), p_bar=between(a[1], 40, 120), T_C=500.0)

    def expanded(name, source, flow, p_bar, efficiency):
        ideal = state_ps(p_bar * 1e5, source.entropy).enthalpy
        h = source.enthalpy - efficiency * (source.enthalpy - ideal)
        return water(name, flow, p_bar=p_bar, h=h)

    gland = water("g", 0.01 * inlet.mass_flow, p_bar=inlet.pressure / 1e5, h=inlet.enthalpy)
    taken = expanded("x", inlet, 0.3 * inlet.mass_flow, 10.0, between(a[2], 0.3, 1.0))
    flow = inlet.mass_flow - gland.mass_flow - taken.mass_flow
    exhaust = expanded("o", taken, flow, between(a[3], 0.05, 5.0), between(a[4], 0.3, 1.0))
    given_up = inlet.energy - gland.energy - taken.energy - exhaust.energy
    ports = {
        "inlet": inlet,
        "leak_off": gland,
        "extraction": taken,
        "exhaust": exhaust,
        "power": power("w", 0.96 * given_up),
    }
    return drawn("turbine", ports, drive_efficiency=0.96)


def user(a):
    p = between(a[0], 2.0, 20.0)
    steam = water("s", between(a[1], 0.2, 40.0), p_bar=p, T_C=boiling_at(p) + 1.0 + 80.0 * a[2])
    back_C = between(a[3], 60.0, boiling_at(p) - 1.0)
    back = water("c", between(a[4], 0.1, 1.0) * steam.mass_flow, p_bar=p, T_C=back_C)
    lost = water("l", steam.mass_flow - back.mass_flow, p_bar=p, T_C=back_C)
    ports = {"steam": steam, "condensate": back, "lost": lost}
    # Heat is given off down to the condensate's temperature, so the process is colder than that.
    ports["heat"] = with_rate_of("q", [steam], [back, lost], back_C - 5.0)
    return drawn("user", ports)


def vent(a):
    p = between(a[0], 2.0, 60.0)
    inlet = water("i", between(a[1], 0.01, 10.0), p_bar=p, T_C=boiling_at(p) + 1.0 + 100.0 * a[2])
    out = water("o", inlet.mass_flow, p_bar=between(a[3], 1.0, p - 0.5), h=inlet.enthalpy)
    return drawn("vent", {"inlet": inlet, "outlet": out})


def accumulator(a):
    p, level = between(a[0], 5.0, 12.0), between(a[1], 0.4, 0.85)
    charge = water("c", between(a[2], 0.1, 5.0), p_bar=16.0, T_C=between(a[3], 205.0, 300.0))
    discharge = water("d", 0.5 * a[4] * charge.mass_flow, p_bar=p, x=1.0)
    liquid, vapour = saturated(np.atleast_1d(p * 1e5))
    m_l, m_v = 60.0 * level / liquid.volume, 60.0 * (1 - level) / vapour.volume
    energy = m_l * liquid.internal_energy + m_v * vapour.internal_energy
    mass = m_l + m_v + 300.0 * (charge.mass_flow - discharge.mass_flow)
    energy = energy + 300.0 * (charge.energy - discharge.energy)
    low, high = 1e5, 40e5
    for _ in range(90):
        middle = (low + high) / 2
        liquid, vapour = saturated(np.atleast_1d(middle))
        x = (60.0 / mass - liquid.volume) / (vapour.volume - liquid.volume)
        u = liquid.internal_energy + x * (vapour.internal_energy - liquid.internal_energy)
        low, high = (middle, high) if (mass * u)[0] < energy[0] else (low, middle)
    after = float(((1 - x) * mass * liquid.volume / 60.0)[0])
    signals = {"pressure": signal([p * 1e5, middle]), "level": signal([level, after])}
    ports = {"charge": charge, "discharge": discharge}
    return drawn("accumulator", ports, signals=signals, volume="60 m^3", level="L", pressure="P")


POSSIBLE = {
    "accumulator": accumulator,
    "boiler": boiler,
    "closed_feedwater_heater": closed_feedwater_heater,
    "condenser": condenser,
    "control_volume": control_volume,
    "deaerator": lambda a: _heated("deaerator", a, 0.005),
    "exchanger": exchanger,
    "flash_vessel": flash_vessel,
    "header": header,
    "letdown": letdown,
    "open_feedwater_heater": lambda a: _heated("open_feedwater_heater", a, 0.0),
    "pump": pump,
    "trap_group": trap_group,
    "turbine": turbine,
    "user": user,
    "vent": vent,
}


@pytest.mark.parametrize("kind", sorted(KINDS))
@settings(max_examples=25, deadline=None)
@given(SIZES, AMBIENT)
def test_gouy_stodola_is_the_exergy_balance_and_nothing_is_made_of_nothing(kind, sizes, ambient):
    box, at = POSSIBLE[kind](sizes), dead(*ambient)
    counted = balances(box)
    got = account(box, counted, at)
    throughput = float(sum(np.abs(s.energy) for s in box.facing("in"))[0])
    # What the builder left open is rounding; what the two counts differ by is that and no more.
    assert abs(counted.mass_imbalance[0]) <= 1e-9 * box.item.kind.load(box)[0]
    assert abs(counted.energy_imbalance[0]) <= 1e-9 * throughput
    assert abs(got.closure[0]) <= 1e-9 * throughput
    assert got.destroyed[0] >= -1e-9 * throughput
    # The second count, here in the test's own words: exergy in, out, with heat, stored.
    entering = sum(s.exergy(at)[0] for s in box.facing("in"))
    leaving = sum(s.exergy(at)[0] for s in box.facing("out"))
    stored = 0.0
    if box.content is not None:
        held = box.content
        e = held.internal_energy - at.temperature * held.entropy - at.gibbs * held.mass
        stored = float(np.diff(e)[0]) / box.interval
    boundary = box.item.options.boundary_temperature or at.temperature[0]
    with_heat = counted.heat_loss[0] * (1 - at.temperature[0] / boundary)
    assert got.destroyed[0] == pytest.approx(
        entering - leaving - with_heat - stored, abs=2e-9 * throughput
    )


@pytest.mark.parametrize("kind", sorted(KINDS))
@settings(max_examples=15, deadline=None)
@given(SIZES)
def test_possible_equipment_contradicts_no_law_in_any_figure(kind, sizes):
    box = POSSIBLE[kind](sizes)
    listed = {f.name for f in box.item.kind.figures(box.item)}
    for name, figure in box.item.kind.condition(box, dead()).items():
        if name in listed:
            assert not figure.flag[0] & Flag.SECOND_LAW, name


@pytest.mark.parametrize("kind", sorted(KINDS))
@settings(max_examples=15, deadline=None)
@given(SIZES, AMBIENT, AMBIENT)
def test_entropy_generated_is_the_same_under_another_sky(kind, sizes, one, other):
    """(I - heat lost at T0 - the fuel's own) / T0 is a property of the streams alone."""
    box = POSSIBLE[kind](sizes)
    counted = balances(box)
    at_dead = counted.heat_loss[0] + counted.unmeasured_heat[0]
    chemical = sum(s.chemical[0] for s in box.facing("in"))
    generated = [
        (account(box, counted, dead(*sky)).destroyed[0] - at_dead - chemical) / (sky[0] + 273.15)
        for sky in (one, other)
    ]
    scale = float(sum(np.abs(s.entropy_rate) for s in box.facing("in"))[0]) + at_dead / 250.0
    assert generated[0] == pytest.approx(generated[1], abs=1e-10 * max(scale, 1.0))


def test_a_law_broken_by_one_stream_shows():
    """The tests above can fail: a turbine whose exhaust carries too little entropy."""
    box = turbine([0.5] * 5)
    (exhaust,) = box.at("exhaust")
    less = replace(exhaust, entropy_rate=0.8 * exhaust.entropy_rate)
    broken = replace(box, states={**box.states, "exhaust": (less,)})
    at = dead()
    throughput = float(sum(np.abs(s.energy) for s in box.facing("in"))[0])
    assert account(broken, balances(broken), at).destroyed[0] < -1e-3 * throughput
