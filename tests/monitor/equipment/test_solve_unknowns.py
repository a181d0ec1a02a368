from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from equipment_builders import drawn, heat, power, water

from monitor.equipment.solve import Needs, complete, plan
from monitor.flags import Flag
from monitor.streams import with_enthalpy

NAN = np.array([np.nan])


def _solve(box, needs, states=None):
    states = states or {s.id: s for s in (*box.facing("in"), *box.facing("out"))}
    planned = plan([box.item], needs)
    assert not planned.unsolved

    def draw(_):
        now = {k: tuple(states[s.id] for s in v) for k, v in box.states.items()}
        return replace(box, states=now)

    return complete(planned.steps, states, draw, with_enthalpy)


def test_a_balance_flow_comes_from_the_mass_balance_and_says_so():
    a, b = water("a", 10.0, p_bar=12.0, T_C=250.0), water("b", 4.0, p_bar=12.0, T_C=250.0)
    unknown = replace(water("c", 1.0, p_bar=12.0, T_C=250.0), mass_flow=NAN, energy=NAN)
    box = drawn("header", {"inlet": a, "outlet": [b, unknown]})
    got = _solve(box, Needs(flow=frozenset({"c"})))["c"]
    assert got.mass_flow[0] == pytest.approx(6.0)
    assert got.energy[0] == pytest.approx(6.0 * unknown.enthalpy[0])
    assert got.flag[0] & Flag.SOLVED


def test_exhaust_enthalpy_comes_from_shaft_power_when_wet():
    inlet = water("in", 6.3, p_bar=38.0, T_C=405.0)
    # Own example, two independent libraries ('turbine: condensing'): W = 5847.7 kW, x2 = 0.88663.
    exhaust = replace(
        water("out", 6.3, p_bar=0.075, x=0.9), enthalpy=NAN, energy=NAN, entropy_rate=NAN
    )
    box = drawn("turbine", {"inlet": inlet, "exhaust": exhaust, "power": power("w", 5847.7e3)})
    got = _solve(box, Needs(enthalpy=frozenset({"out"})))["out"]
    assert got.dryness[0] == pytest.approx(0.88663, abs=8e-5)
    assert got.temperature[0] - 273.15 == pytest.approx(40.29, abs=0.02)


def test_an_unknown_power_pays_for_its_drive():
    inlet = water("in", 11.2, p_bar=60.5, T_C=472.0)
    exhaust = water("out", 11.2, p_bar=5.2, T_C=214.0)
    unknown = replace(power("w", 1.0), energy=NAN)
    box = drawn(
        "turbine",
        {"inlet": inlet, "exhaust": exhaust, "power": unknown},
        drive_efficiency=0.97,
    )
    got = _solve(box, Needs(rate=frozenset({"w"})))["w"]
    # Own example 'turbine: measured exhaust': W = 5270.1 kW at the coupling.
    assert got.energy[0] / 1e3 == pytest.approx(0.97 * 5270.1, abs=0.4)


def test_spray_and_outlet_flow_are_solved_together_from_mass_and_energy():
    inlet = water("in", 10.0, p_bar=62.0, T_C=470.0)
    spray = replace(water("sp", 1.0, p_bar=80.0, T_C=130.0), mass_flow=NAN, energy=NAN)
    outlet = replace(water("out", 1.0, p_bar=12.0, T_C=220.0), mass_flow=NAN, energy=NAN)
    box = drawn("letdown", {"inlet": inlet, "spray": spray, "outlet": outlet})
    got = _solve(box, Needs(flow=frozenset({"sp", "out"})))
    m_spray, m_out = got["sp"].mass_flow[0], got["out"].mass_flow[0]
    assert m_out == pytest.approx(10.0 + m_spray)
    energy = inlet.energy + m_spray * spray.enthalpy - m_out * outlet.enthalpy
    assert abs(energy[0]) < 1e-3
    assert 0.5 < m_spray < 3.0


def test_heat_of_a_user_follows_after_its_condensate():
    steam = water("st", 5.0, p_bar=4.0, T_C=160.0)
    back = replace(water("co", 1.0, p_bar=4.0, T_C=95.0), mass_flow=NAN, energy=NAN)
    duty = replace(heat("q", 1.0, 110.0), energy=NAN, entropy_rate=NAN)
    box = drawn("user", {"steam": steam, "condensate": back, "heat": duty})
    got = _solve(box, Needs(flow=frozenset({"co"}), rate=frozenset({"q"})))
    assert got["co"].mass_flow[0] == pytest.approx(5.0)
    assert got["q"].energy[0] == pytest.approx((steam.energy - 5.0 * back.enthalpy)[0])
    assert got["q"].entropy_rate[0] == pytest.approx(got["q"].energy[0] / 383.15)


def test_more_unknowns_than_balances_are_named_and_not_guessed():
    steam = water("st", 5.0, p_bar=4.0, T_C=160.0)
    back, other = water("co", 1.0, p_bar=4.0, T_C=95.0), water("c2", 1.0, p_bar=4.0, T_C=95.0)
    box = drawn("user", {"steam": steam, "condensate": [back, other], "heat": heat("q", 1.0)})
    planned = plan([box.item], Needs(flow=frozenset({"co", "c2"}), rate=frozenset({"q"})))
    assert planned.unsolved == {("flow", "co"), ("flow", "c2"), ("rate", "q")}


def test_an_energy_residual_that_is_heat_loss_gives_no_second_unknown():
    a, b = water("a", 10.0, p_bar=12.0, T_C=250.0), water("b", 10.0, p_bar=12.0, T_C=250.0)
    box = drawn("header", {"inlet": a, "outlet": b})
    assert plan([box.item], Needs(enthalpy=frozenset({"b"}))).unsolved == {("enthalpy", "b")}


def test_a_missing_flow_makes_the_solved_one_missing_too():
    a = replace(water("a", 10.0, p_bar=12.0, T_C=250.0), mass_flow=NAN)
    unknown = replace(water("c", 1.0, p_bar=12.0, T_C=250.0), mass_flow=NAN)
    box = drawn("header", {"inlet": a, "outlet": [unknown]})
    got = _solve(box, Needs(flow=frozenset({"c"})))["c"]
    assert np.isnan(got.mass_flow[0])
    assert got.flag[0] & Flag.MISSING
