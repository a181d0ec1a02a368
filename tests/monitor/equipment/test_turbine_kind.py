from __future__ import annotations

import numpy as np
import pytest
from equipment_builders import drawn, power, water

from monitor.equipment.account import account, balances
from monitor.flags import Flag
from monitor.thermo.dead_state import dead_state
from monitor.thermo.water import state_ps

DEAD = dead_state(np.atleast_1d(291.15), np.atleast_1d(0.985e5))


def test_back_pressure_turbine_meets_the_published_example():
    """Own example, two independent libraries: 'turbine: measured exhaust' and 'back-pressure'."""
    inlet = water("in", 11.2, p_bar=60.5, T_C=472.0)
    ideal = state_ps(5.2e5, inlet.entropy).enthalpy
    exhaust = water("out", 11.2, p_bar=5.2, h=inlet.enthalpy - 0.81 * (inlet.enthalpy - ideal))
    shaft = power("w", inlet.energy - exhaust.energy)
    box = drawn("turbine", {"inlet": inlet, "exhaust": exhaust, "power": shaft})
    counted = balances(box)
    got = account(box, counted, DEAD)
    assert shaft.energy[0] / 1e3 == pytest.approx(5561.7, abs=0.8)
    assert got.destroyed[0] / 1e3 == pytest.approx(847.4, abs=0.4)
    assert (got.product / got.fuel)[0] == pytest.approx(0.86778, abs=5e-5)
    figures = box.item.kind.condition(box, DEAD)
    assert figures["eta_s_1"].value[0] == pytest.approx(81.0, abs=1e-4)


def test_each_section_has_the_flow_that_the_extractions_leave():
    inlet = water("in", 30.0, p_bar=62.0, T_C=470.0)
    extraction = water("x", 12.0, p_bar=12.0, T_C=285.0)
    exhaust = water("out", 18.0, p_bar=4.0, T_C=185.0)
    box = drawn(
        "turbine",
        {"inlet": inlet, "extraction": [extraction], "exhaust": exhaust, "power": power("w", 9e6)},
    )
    figures = box.item.kind.condition(box, DEAD)
    names = [f.name for f in box.item.kind.figures(box.item)]
    assert names == ["eta_s_1", "eta_s_2", "steam_rate"]
    available = extraction.enthalpy - state_ps(4e5, extraction.entropy).enthalpy
    assert figures["eta_s_2"].weight[0] == pytest.approx(18.0 * available[0])
    assert figures["steam_rate"].value[0] == pytest.approx(30.0 * 3600 / 9000)


def test_an_efficiency_above_one_is_flagged_and_not_clipped():
    inlet = water("in", 30.0, p_bar=62.0, T_C=440.0)
    exhaust = water("out", 30.0, p_bar=12.0, T_C=205.0)
    box = drawn("turbine", {"inlet": inlet, "exhaust": exhaust, "power": power("w", 9e6)})
    figure = box.item.kind.condition(box, DEAD)["eta_s_1"]
    assert figure.value[0] > 100
    assert figure.flag[0] & Flag.SECOND_LAW


def test_the_drive_loses_heat_at_the_dead_state():
    inlet = water("in", 11.2, p_bar=60.5, T_C=472.0)
    exhaust = water("out", 11.2, p_bar=5.2, T_C=214.0)
    internal = (inlet.energy - exhaust.energy)[0]
    shaft = power("w", 0.97 * internal)
    box = drawn(
        "turbine",
        {"inlet": inlet, "exhaust": exhaust, "power": shaft},
        drive_efficiency=0.97,
    )
    counted = balances(box)
    assert counted.unmeasured_heat[0] == pytest.approx(0.03 * internal, rel=1e-9)
    assert counted.energy_imbalance[0] == pytest.approx(0.0, abs=1e-6 * internal)


def test_a_turbine_out_of_service_has_no_figures_instead_of_errors():
    inlet = water("in", 0.0, p_bar=62.0, T_C=470.0)
    exhaust = water("out", 0.0, p_bar=4.0, T_C=185.0)
    box = drawn("turbine", {"inlet": inlet, "exhaust": exhaust, "power": power("w", 0.0)})
    figures = box.item.kind.condition(box, DEAD)
    assert np.isnan(figures["steam_rate"].value[0])
    assert figures["eta_s_1"].weight[0] == 0.0
