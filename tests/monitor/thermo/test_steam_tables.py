"""States against handbook tables and against IAPWS-95."""

from __future__ import annotations

import numpy as np
import pytest
import seuif97
from CoolProp.CoolProp import PropsSI
from independent_steam import sample
from thermo_reference import column, kelvin, rows

from monitor.thermo.dead_state import dead_state
from monitor.thermo.exergy import flow_exergy
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


def test_wet_steam_agrees_with_an_independent_if97():
    rng = np.random.default_rng(7)
    pressure = np.exp(rng.uniform(np.log(2e3), np.log(160e5), 300))
    dryness = rng.uniform(0.0, 1.0, 300)
    state = state_px(pressure, dryness)
    points = list(zip(pressure / 1e6, dryness, strict=True))
    assert state.enthalpy == pytest.approx([seuif97.px(p, x, 4) * 1e3 for p, x in points], rel=1e-9)
    assert state.entropy == pytest.approx([seuif97.px(p, x, 5) * 1e3 for p, x in points], rel=1e-9)
    assert state.volume == pytest.approx([seuif97.px(p, x, 3) for p, x in points], rel=1e-9)


@pytest.mark.parametrize(
    ("highest", "hottest", "largest"),
    [
        # Below region 3; and to 300 bar, most at 288 bar and 408 degC.
        (16e6, 868.15, {"h": 240.0, "s": 0.43, "v": 2.6e-4, "e": 125.0}),
        (30e6, 893.15, {"h": 380.0, "s": 0.50, "v": 6.5e-4, "e": 230.0}),
    ],
)
def test_if97_stays_close_to_iapws_95_over_the_plant_range(highest, hottest, largest):
    """0.05 bar and 20 degC up. The largest deviations found are the limits, rounded up.

    IAPWS R6-95(2018) through CoolProp's HEOS: h in J/kg, s in J/(kg K), v as a share, and the
    specific flow exergy e in J/kg, each formulation with its own dead state at 15 degC and 1 atm.
    Beside the critical point (20 K, above 170 bar) the two part further, and are not compared.
    """
    pressure, temperature = sample(
        4000, lowest=5e3, highest=highest, coldest=293.15, hottest=hottest, seed=20260805
    )
    clear = (pressure < 17e6) | (np.abs(temperature - 655.0) > 20.0)
    pressure, temperature = pressure[clear], temperature[clear]
    state = state_pt(pressure, temperature)
    enthalpy, entropy, density = (
        PropsSI(name, "P", pressure, "T", temperature, "Water")
        for name in ("Hmass", "Smass", "Dmass")
    )
    h0, s0 = (PropsSI(name, "P", 101325.0, "T", 288.15, "Water") for name in ("Hmass", "Smass"))
    exergy = enthalpy - h0 - 288.15 * (entropy - s0)
    found = {
        "h": state.enthalpy - enthalpy,
        "s": state.entropy - entropy,
        "v": state.volume * density - 1.0,
        "e": flow_exergy(state.enthalpy, state.entropy, dead_state(288.15, 101325.0)) - exergy,
    }
    for name, limit in largest.items():
        assert np.max(np.abs(found[name])) < limit, name
        assert np.max(np.abs(found[name])) > limit / 4.0, (
            "the stated limit is wider than it need be"
        )


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
