"""The check values of IAPWS R7-97(2012): every row that p-T, saturation, p-h or p-s reaches."""

from __future__ import annotations

import numpy as np
import pytest
from thermo_reference import column, rows

from monitor.thermo.water import (
    saturation_pressure,
    saturation_temperature,
    state_ph,
    state_ps,
    state_pt,
)

STATES = [r for r in rows("if97_states.csv") if r["region"] in {"1", "2", "3", "5"}]


@pytest.mark.parametrize("row", STATES, ids=lambda r: f"{r['table']}, {r['T_K']} K, {r['p_MPa']}")
def test_a_single_phase_check_value_is_reproduced(row):
    # IAPWS R7-97(2012) Tables 5, 15, 33, 42, nine printed digits. Region 3 is checked in (T, rho)
    # in the standard; here the printed pressure goes in and the density must come out: at
    # 200 kg/m3 a share of 2e-9, the last digit of p, is 2e-8 of the density.
    tolerance = 2e-8 if row["region"] == "3" else 1e-8
    state = state_pt(float(row["p_MPa"]) * 1e6, float(row["T_K"]))
    assert state.valid
    assert state.enthalpy == pytest.approx(float(row["h_kJ_kg"]) * 1e3, rel=tolerance)
    assert state.internal_energy == pytest.approx(float(row["u_kJ_kg"]) * 1e3, rel=tolerance)
    assert state.entropy == pytest.approx(float(row["s_kJ_kgK"]) * 1e3, rel=tolerance)
    assert state.volume == pytest.approx(float(row["v_m3_kg"]), rel=tolerance)


def test_every_reachable_row_is_used():
    # Left out: the metastable vapour (Table 18) and the B23 line, which nothing here computes.
    assert len(STATES) == 12
    left = {r["region"] for r in rows("if97_states.csv")} - {"1", "2", "3", "5"}
    assert left == {"2-metastable", "4", "2/3 boundary"}


def test_saturation_pressure_has_the_published_values():
    table = rows("if97_states.csv", table="Table 35")
    expected = column(table, "p_MPa", 1e6)
    assert saturation_pressure(column(table, "T_K")) == pytest.approx(expected, rel=2e-9)


def test_saturation_temperature_has_the_published_values():
    table = rows("if97_states.csv", table="Table 36")
    expected = column(table, "T_K")
    assert saturation_temperature(column(table, "p_MPa", 1e6)) == pytest.approx(expected, rel=2e-9)


def test_saturation_pressure_and_temperature_are_each_others_inverse():
    temperature = np.linspace(273.1501, 647.0959, 5001)
    again = saturation_temperature(saturation_pressure(temperature))
    assert np.max(np.abs(again - temperature)) < 1e-9


@pytest.mark.parametrize(
    ("pair", "state", "name"), [("p;h", state_ph, "h_kJ_kg"), ("p;s", state_ps, "s_kJ_kgK")]
)
def test_refined_temperatures_agree_with_the_backward_equations(pair, state, name):
    # Tables 7, 9, 24, 29 hold what the backward equations give. They may differ from the forward
    # equations by 25 mK in region 1 and in regions 2b, 2c, by 10 mK in 2a (R7-97(2012) section 5.2
    # and 6.3); ours solve the forward equations, so this is the distance allowed, not zero.
    table = rows("if97_backward.csv", pair=pair)
    found = state(column(table, "p_MPa", 1e6), column(table, name, 1e3))
    allowed = np.array([0.010 if r["region"] == "2a" else 0.025 for r in table])
    assert found.valid.all()
    assert np.all(np.abs(found.temperature - column(table, "T_K")) < allowed)


def test_refined_temperatures_are_not_those_of_the_backward_equations():
    table = rows("if97_backward.csv", pair="p;s")
    entropy = column(table, "s_kJ_kgK", 1e3)
    pressure = column(table, "p_MPa", 1e6)
    raw = state_pt(pressure, column(table, "T_K")).entropy - entropy
    refined = state_pt(pressure, state_ps(pressure, entropy).temperature).entropy - entropy
    assert np.max(np.abs(raw)) > 0.02
    assert np.max(np.abs(refined)) < 1e-6
