"""Worked examples that two independent libraries answered: states, throttles, turbines, vessels.

Each example is solved here from its inputs by the functions of `monitor.thermo` alone. Its expected
values come from iapws and seuif97 (see the ``source`` and ``confirmed_by`` columns).
"""

from __future__ import annotations

import numpy as np
import pytest
from thermo_reference import inputs, kelvin, rows

from monitor.thermo.dead_state import dead_state
from monitor.thermo.exergy import flow_exergy, heat_exergy, lost_work, nonflow_exergy
from monitor.thermo.water import saturated, state_ph, state_ps, state_pt, state_px

EXAMPLES = rows("exergy_examples.csv")


def _state(given, number=""):
    pressure = given[f"p{number}_bar"] * 1e5
    if f"x{number}" in given:
        return state_px(pressure, given[f"x{number}"])
    return state_pt(pressure, kelvin(given[f"T{number}_C"]))


def _dead(given):
    return dead_state(kelvin(given["T0_C"]), given["p0_bar"] * 1e5)


def _flow(state, dead):
    return flow_exergy(state.enthalpy, state.entropy, dead)


def _stored(state, dead):
    return nonflow_exergy(state.internal_energy, state.volume, state.entropy, dead)


def _part(given, name):
    return {k.removeprefix(f"{name}."): v for k, v in given.items() if k.startswith(f"{name}.")}


def _single_state(given):
    state, dead = _state(given), _dead(given)
    return {
        "h": state.enthalpy / 1e3,
        "s": state.entropy / 1e3,
        "e_flow": _flow(state, dead) / 1e3,
        "e_nonflow": _stored(state, dead) / 1e3,
    }


def _ice(given):
    dead = _dead(given)
    return {
        "h0": dead.enthalpy / 1e3,
        "s0": dead.entropy / 1e3,
        "u0": (dead.enthalpy - dead.pressure * dead.volume) / 1e3,
        "v0": dead.volume,
        "g0": dead.gibbs / 1e3,
    }


def _throttle(given):
    first, dead = _state(given, 1), _dead(given)
    second = state_ph(given["p2_bar"] * 1e5, first.enthalpy)
    generated = given["m_kg_s"] * (second.entropy - first.entropy)
    return {
        "T2": second.temperature - 273.15,
        "x2": second.dryness,
        "s_gen": generated / 1e3,
        "Ed": lost_work(dead.temperature, generated) / 1e3,
        "Ed_balance": given["m_kg_s"] * (_flow(first, dead) - _flow(second, dead)) / 1e3,
        "Ed_clamped_wrong": lost_work(273.15, generated) / 1e3,
    }


def _turbine(given):
    first, dead, flow = _state(given, 1), _dead(given), given["m_kg_s"]
    ideal = state_ps(given["p2_bar"] * 1e5, first.entropy)
    if "eta_s" in given:
        drop = given["eta_s"] * (first.enthalpy - ideal.enthalpy)
        second = state_ph(given["p2_bar"] * 1e5, first.enthalpy - drop)
    else:
        second = _state(given, 2)
    work = flow * (first.enthalpy - second.enthalpy)
    supplied = flow * (_flow(first, dead) - _flow(second, dead))
    return {
        "h2s": ideal.enthalpy / 1e3,
        "h2": second.enthalpy / 1e3,
        "T2": second.temperature - 273.15,
        "x2": second.dryness,
        "W": work / 1e3,
        "eta_s": (first.enthalpy - second.enthalpy) / (first.enthalpy - ideal.enthalpy),
        "Ed": lost_work(dead.temperature, flow * (second.entropy - first.entropy)) / 1e3,
        "Ed_balance": (supplied - work) / 1e3,
        "eff": work / supplied,
    }


def _mixing(given):
    dead = _dead(given)
    parts = [_part(given, f"in{i}") for i in (1, 2, 3)]
    states, flows = [_state(part) for part in parts], [part["m_kg_s"] for part in parts]
    total = sum(flows)
    enthalpy = sum(m * s.enthalpy for m, s in zip(flows, states, strict=True)) / total
    out = state_ph(given["out.p_bar"] * 1e5, enthalpy)
    entering = sum(m * s.entropy for m, s in zip(flows, states, strict=True))
    exergy = sum(m * _flow(s, dead) for m, s in zip(flows, states, strict=True))
    return {
        "m": total,
        "h_out": enthalpy / 1e3,
        "T_out": out.temperature - 273.15,
        "s_gen": (total * out.entropy - entering) / 1e3,
        "Ed": lost_work(dead.temperature, total * out.entropy - entering) / 1e3,
        "Ed_balance": (exergy - total * _flow(out, dead)) / 1e3,
    }


def _letdown(given):
    dead = _dead(given)
    steam, spray, out = (_state(_part(given, name)) for name in ("steam", "spray", "out"))
    flow = given["steam.m_kg_s"]
    water = flow * (steam.enthalpy - out.enthalpy) / (out.enthalpy - spray.enthalpy)
    generated = (flow + water) * out.entropy - flow * steam.entropy - water * spray.entropy
    balance = flow * _flow(steam, dead) + water * _flow(spray, dead)
    return {
        "m_water": water,
        "m_out": flow + water,
        "s_gen": generated / 1e3,
        "Ed": lost_work(dead.temperature, generated) / 1e3,
        "Ed_balance": (balance - (flow + water) * _flow(out, dead)) / 1e3,
    }


def _heat_loss(given):
    first, second, dead, flow = _state(given, 1), _state(given, 2), _dead(given), given["m_kg_s"]
    boundary = kelvin(given["Tb_C"])
    heat = flow * (first.enthalpy - second.enthalpy)
    with_heat = heat_exergy(heat, boundary, dead.temperature)
    generated = flow * (second.entropy - first.entropy) + heat / boundary
    internal = lost_work(dead.temperature, generated)
    return {
        "Q": heat / 1e3,
        "Eq_boundary": with_heat / 1e3,
        "Eq": with_heat / 1e3,
        "Ed_internal": internal / 1e3,
        "Ed": internal / 1e3,
        "Ed_total": (internal + with_heat) / 1e3,
        "check": flow * (_flow(first, dead) - _flow(second, dead)) / 1e3,
    }


def _heater(given):
    # One pressure serves both ends.
    return _heat_loss(given | {"p1_bar": given["p_bar"], "p2_bar": given["p_bar"]})


def _content(volume, pressure, liquid_fraction):
    liquid, vapour = saturated(pressure)
    water = volume * liquid_fraction / liquid.volume
    steam = volume * (1.0 - liquid_fraction) / vapour.volume
    return water + steam, state_px(pressure, steam / (water + steam))


def _vessel_terms(volume, pressure):
    """U = m a + b for a vessel of saturated water and steam that is full: a, b."""
    liquid, vapour = saturated(pressure)
    slope = (vapour.internal_energy - liquid.internal_energy) / (vapour.volume - liquid.volume)
    return liquid.internal_energy - liquid.volume * slope, volume * slope


def _charging(given):
    dead, volume = _dead(given), given["V_m3"]
    mass, before = _content(volume, given["p1_bar"] * 1e5, given["liquid_volume_fraction_1"])
    inlet = _state(_part(given, "inlet"))
    a, b = _vessel_terms(volume, given["p2_bar"] * 1e5)
    # (m + m_in) a + b - m u1 = m_in h_in
    added = (mass * (a - before.internal_energy) + b) / (inlet.enthalpy - a)
    liquid, vapour = saturated(given["p2_bar"] * 1e5)
    total = mass + added
    dryness = (volume / total - liquid.volume) / (vapour.volume - liquid.volume)
    after = state_px(given["p2_bar"] * 1e5, dryness)
    stored = mass * _stored(before, dead), total * _stored(after, dead)
    supplied = added * _flow(inlet, dead)
    generated = total * after.entropy - mass * before.entropy - added * inlet.entropy
    return {
        "m1": mass,
        "m_in": added,
        "x2": dryness,
        "liquid_fraction_2": total * (1.0 - dryness) * liquid.volume / volume,
        "E1": stored[0] / 1e6,
        "E2": stored[1] / 1e6,
        "E_in": supplied / 1e6,
        "Ed": lost_work(dead.temperature, generated) / 1e6,
        "Ed_balance": (stored[0] + supplied - stored[1]) / 1e6,
        "naive_flow_E2": total * _flow(after, dead) / 1e6,
    }


def _discharging(given):
    dead, volume = _dead(given), given["V_m3"]
    first, last = given["p1_bar"] * 1e5, given["p2_bar"] * 1e5
    start, before = _content(volume, first, given["liquid_volume_fraction_1"])
    pressure = np.linspace(first, last, 4001)
    a, b = _vessel_terms(volume, pressure)
    steam = saturated(pressure)[1]
    enthalpy = 0.5 * (steam.enthalpy[1:] + steam.enthalpy[:-1])
    mass = [float(start)]
    for i, h in enumerate(enthalpy):  # d(m u) = h_g dm, trapezoidal
        mass.append((mass[-1] * (a[i] - h) + b[i] - b[i + 1]) / (a[i + 1] - h))
    exergy = _flow(steam, dead)
    leaving = float(np.sum(-np.diff(mass) * 0.5 * (exergy[1:] + exergy[:-1])))
    liquid, vapour = saturated(last)
    dryness = (volume / mass[-1] - liquid.volume) / (vapour.volume - liquid.volume)
    stored = start * _stored(before, dead), mass[-1] * _stored(state_px(last, dryness), dead)
    return {
        "m_out": start - mass[-1],
        "m2": mass[-1],
        "E1": stored[0] / 1e6,
        "E2": stored[1] / 1e6,
        "E_out": leaving / 1e6,
        "E_drop": (stored[0] - stored[1]) / 1e6,
        "Ed": (stored[0] - stored[1] - leaving) / 1e6,
    }


def _standing(given):
    dead, volume = _dead(given), given["V_m3"]
    mass, before = _content(volume, given["p1_bar"] * 1e5, given["liquid_volume_fraction_1"])
    liquid, vapour = saturated(given["p2_bar"] * 1e5)
    dryness = (volume / mass - liquid.volume) / (vapour.volume - liquid.volume)
    after = state_px(given["p2_bar"] * 1e5, dryness)
    heat = mass * (before.internal_energy - after.internal_energy)
    boundary = kelvin(given["Tb_C"])
    with_heat = heat_exergy(heat, boundary, dead.temperature)
    generated = mass * (after.entropy - before.entropy) + heat / boundary
    internal = lost_work(dead.temperature, generated)
    stored = mass * _stored(before, dead), mass * _stored(after, dead)
    return {
        "m": mass,
        "Q": heat / 1e6,
        "E1": stored[0] / 1e6,
        "E2": stored[1] / 1e6,
        "Eq": with_heat / 1e6,
        "Ed_internal": internal / 1e6,
        "Ed_total": (internal + with_heat) / 1e6,
        "E_drop": (stored[0] - stored[1]) / 1e6,
    }


def _frozen_content(given):
    mass, state = _content(given["V_m3"], given["p1_bar"] * 1e5, given["liquid_volume_fraction_1"])
    return {"E1": mass * _stored(state, _dead(given)) / 1e6}


SOLVERS = {
    "state": _single_state,
    "sub-zero state": _single_state,
    "sub-zero dead state": _ice,
    "throttle": _throttle,
    "sub-zero throttle": _throttle,
    "turbine": _turbine,
    "mixing header": _mixing,
    "let-down station with desuperheater": _letdown,
    "pipe with heat loss at the cladding": _heat_loss,
    "sub-zero heat loss": _heat_loss,
    "condensing heater at boundary temperature": _heater,
    "accumulator: charging": _charging,
    "accumulator: discharging": _discharging,
    "accumulator: standing heat loss": _standing,
    "sub-zero accumulator content": _frozen_content,
}


@pytest.mark.parametrize("row", EXAMPLES, ids=lambda r: f"{r['example']}, {r['quantity']}")
def test_an_example_has_the_answer_of_two_independent_libraries(row):
    name = row["example"]
    solver = SOLVERS.get(name) or SOLVERS[name.partition(":")[0]]
    found = solver(inputs(row["inputs"]))[row["quantity"]]
    assert found == pytest.approx(float(row["expected"]), abs=float(row["tol"]))
    # IAPWS-95 gives the same within the difference of the formulations.
    assert found == pytest.approx(float(row["iapws95_value"]), abs=float(row["tol_any"]))


def test_all_127_examples_are_solved():
    assert len(EXAMPLES) == 127
