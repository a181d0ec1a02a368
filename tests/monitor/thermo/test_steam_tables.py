"""States against handbook tables, against IAPWS-95, and against two independent IF97 libraries."""

from __future__ import annotations

import numpy as np
import pytest
import seuif97
from CoolProp.CoolProp import PropsSI
from iapws import IAPWS97
from thermo_reference import column, kelvin, rows

from monitor.thermo.water import saturated, saturation_temperature, state_pt, state_px, state_tx


def _within_the_table_rounding(table, state):
    for name, found, scale in (
        ("v", state.volume, 1.0),
        ("u", state.internal_energy, 1e3),
        ("h", state.enthalpy, 1e3),
        ("s", state.entropy, 1e3),
    ):
        unit = {"v": "m3_kg", "s": "kJ_kgK"}.get(name, "kJ_kg")
        difference = np.abs(found / scale - column(table, f"{name}_{unit}"))
        assert np.all(difference <= column(table, f"tol_{name}")), name


def test_superheated_steam_and_compressed_liquid_are_in_the_tables():
    table = rows("steam_tables.csv", kind="superheated") + rows(
        "steam_tables.csv", kind="compressed liquid"
    )
    state = state_pt(column(table, "p_bar", 1e5), kelvin(column(table, "T_C")))
    _within_the_table_rounding(table, state)
    assert list(state.dryness) == [1.0 if r["phase"] == "vapour" else 0.0 for r in table]


@pytest.mark.parametrize(("phase", "dryness"), [("sat liquid", 0.0), ("sat vapour", 1.0)])
def test_saturation_by_pressure_is_in_the_tables(phase, dryness):
    table = rows("steam_tables.csv", kind="saturation by pressure", phase=phase)
    pressure = column(table, "p_bar", 1e5)
    _within_the_table_rounding(table, state_px(pressure, dryness))
    _within_the_table_rounding(table, saturated(pressure)[int(dryness)])
    # The tables round temperature to 0.01 K.
    assert np.all(np.abs(saturation_temperature(pressure) - kelvin(column(table, "T_C"))) < 0.0051)


@pytest.mark.parametrize(("phase", "dryness"), [("sat liquid", 0.0), ("sat vapour", 1.0)])
def test_saturation_by_temperature_is_in_the_tables(phase, dryness):
    table = rows("steam_tables.csv", kind="saturation by temperature", phase=phase)
    _within_the_table_rounding(table, state_tx(kelvin(column(table, "T_C")), dryness))


def _plant_states(count):
    """Random states of a steam plant: 0.05 to 160 bar, 20 to 595 degC, clear of saturation."""
    rng = np.random.default_rng(20240607)
    pressure = np.exp(rng.uniform(np.log(5e3), np.log(160e5), count))
    temperature = rng.uniform(293.15, 868.15, count)
    clear = np.abs(temperature - saturation_temperature(pressure)) > 0.05
    return pressure[clear], temperature[clear]


def test_an_independent_if97_agrees_over_two_thousand_plant_states():
    # seuif97 (MIT licence), another implementation of IAPWS R7-97.
    pressure, temperature = _plant_states(2000)
    state = state_pt(pressure, temperature)
    points = list(zip(pressure / 1e6, temperature - 273.15, strict=True))
    enthalpy = np.array([seuif97.pt(p, t, 4) for p, t in points]) * 1e3
    entropy = np.array([seuif97.pt(p, t, 5) for p, t in points]) * 1e3
    volume = np.array([seuif97.pt(p, t, 3) for p, t in points])
    # In region 3 both use v(p, T), seuif97 refines it: 4e-6.
    assert state.enthalpy == pytest.approx(enthalpy, rel=1e-5, abs=1e-3)
    assert state.entropy == pytest.approx(entropy, rel=1e-5, abs=1e-6)
    assert state.volume == pytest.approx(volume, rel=2e-5)
    below_region_3 = temperature < 623.15
    assert state.enthalpy[below_region_3] == pytest.approx(enthalpy[below_region_3], rel=1e-11)


def test_a_second_independent_if97_agrees_over_plant_states():
    # iapws (pure python, slow: every eighth state).
    pressure, temperature = (v[::8] for v in _plant_states(2000))
    state = state_pt(pressure, temperature)
    other = [IAPWS97(P=p / 1e6, T=t) for p, t in zip(pressure, temperature, strict=True)]
    assert state.enthalpy == pytest.approx([o.h * 1e3 for o in other], rel=1e-5, abs=1e-3)
    assert state.entropy == pytest.approx([o.s * 1e3 for o in other], rel=1e-5, abs=1e-6)
    assert state.volume == pytest.approx([o.v for o in other], rel=2e-5)


def test_wet_steam_agrees_with_an_independent_if97():
    rng = np.random.default_rng(7)
    pressure = np.exp(rng.uniform(np.log(2e3), np.log(160e5), 300))
    dryness = rng.uniform(0.0, 1.0, 300)
    state = state_px(pressure, dryness)
    points = list(zip(pressure / 1e6, dryness, strict=True))
    assert state.enthalpy == pytest.approx([seuif97.px(p, x, 4) * 1e3 for p, x in points], rel=1e-9)
    assert state.entropy == pytest.approx([seuif97.px(p, x, 5) * 1e3 for p, x in points], rel=1e-9)
    assert state.volume == pytest.approx([seuif97.px(p, x, 3) for p, x in points], rel=1e-9)


def test_saturation_in_region_3_is_within_its_stated_limit():
    # Against iapws, which solves the basic equation of region 3 for the density.
    pressure = np.array([16.6e6, 18e6, 20e6, 21e6, 21.5e6])
    liquid, vapour = saturated(pressure)
    for side, dryness in ((liquid, 0), (vapour, 1)):
        expected = [IAPWS97(P=p / 1e6, x=dryness).h * 1e3 for p in pressure]
        assert np.all(np.abs(side.enthalpy - expected) < [10.0, 10.0, 10.0, 10.0, 500.0])


def test_if97_stays_close_to_iapws_95_over_the_plant_range():
    # IAPWS R6-95(2018) through CoolProp's HEOS. Largest deviations found over this sweep:
    # h 0.23 kJ/kg, s 0.00042 kJ/(kg K), h - T0 s 0.11 kJ/kg at 15 degC, v 0.012 %.
    pressure, temperature = _plant_states(1000)
    state = state_pt(pressure, temperature)
    enthalpy = PropsSI("Hmass", "P", pressure, "T", temperature, "Water")
    entropy = PropsSI("Smass", "P", pressure, "T", temperature, "Water")
    density = PropsSI("Dmass", "P", pressure, "T", temperature, "Water")
    assert np.isfinite(enthalpy).all()
    assert np.max(np.abs(state.enthalpy - enthalpy)) < 250.0
    assert np.max(np.abs(state.entropy - entropy)) < 0.45
    work_potential = state.enthalpy - enthalpy - 288.15 * (state.entropy - entropy)
    assert np.max(np.abs(work_potential)) < 150.0
    assert np.max(np.abs(state.volume * density - 1.0)) < 2e-4


def test_single_phase_check_values_of_iapws_95_are_met_within_the_formulations_difference():
    # IAPWS R6-95(2018) Table 7, the rows inside IF97's range and clear of the critical point.
    table = [
        r
        for r in rows("iapws95.csv", table="Table 7")
        if float(r["p_MPa"]) < 100 and r["T_K"] != "647"
    ]
    assert len(table) == 7
    state = state_pt(column(table, "p_MPa", 1e6), column(table, "T_K"))
    assert np.all(np.abs(state.entropy - column(table, "s_kJ_kgK", 1e3)) < 0.6)
    assert state.volume == pytest.approx(1.0 / column(table, "rho_kg_m3"), rel=5e-4)


def test_saturation_check_values_of_iapws_95_are_met_within_the_formulations_difference():
    # IAPWS R6-95(2018) Table 8 at 275, 450 and 625 K; at 625 K near-critical slopes count.
    table = rows("iapws95.csv", table="Table 8")
    liquid, vapour = state_tx(column(table, "T_K"), 0.0), state_tx(column(table, "T_K"), 1.0)
    for state, side in ((liquid, "liq"), (vapour, "vap")):
        enthalpy = np.abs(state.enthalpy - column(table, f"h_{side}_kJ_kg", 1e3))
        entropy = np.abs(state.entropy - column(table, f"s_{side}_kJ_kgK", 1e3))
        assert np.all(enthalpy < [100.0, 250.0, 800.0]), enthalpy
        assert np.all(entropy < [0.3, 0.5, 1.2]), entropy
        volume = 1.0 / column(table, f"rho_{side}_kg_m3")
        assert state.volume == pytest.approx(volume, rel=3e-3)
