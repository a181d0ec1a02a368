"""The dead state through the seasons: liquid, ice, the jump that is none, and missing weather."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from thermo_reference import kelvin, rows

from monitor.thermo.dead_state import dead_state, live_ambient
from monitor.thermo.ice import melting_temperature
from monitor.thermo.water import state_pt, state_px, state_tx


def _fact(name, source):
    (row,) = rows("thermo_facts.csv", **{"fact": name, "from": source})
    return float(row["value"]), float(row["tol"])


def test_dead_state_water_is_compressed_liquid_at_the_surroundings():
    dead = dead_state(293.15, 101325.0)
    water = state_pt(101325.0, 293.15)
    assert not dead.frozen
    assert dead.enthalpy == water.enthalpy
    assert dead.entropy == water.entropy
    assert dead.volume == water.volume
    assert dead.gibbs == pytest.approx(dead.enthalpy - 293.15 * dead.entropy)
    assert dead.gibbs == pytest.approx(
        water.internal_energy + 101325.0 * water.volume - 293.15 * water.entropy
    )


def test_saturated_liquid_at_the_same_temperature_is_a_close_approximation():
    value, tolerance = _fact(
        "ambient water by saturated liquid at the same temperature",
        "h(1.01325 bar; 20 degC) - h_f(20 degC)",
    )
    difference = dead_state(293.15, 101325.0).enthalpy - state_tx(293.15, 0.0).enthalpy
    assert difference / 1e3 == pytest.approx(value, abs=tolerance)


def test_saturated_liquid_at_the_same_pressure_is_the_classic_slip():
    value, tolerance = _fact(
        "ambient water by saturated liquid at the same pressure (wrong)",
        "h_f(1.01325 bar) - h(1.01325 bar; 20 degC)",
    )
    wrong = state_px(101325.0, 0.0)
    dead = dead_state(293.15, 101325.0)
    assert (wrong.enthalpy - dead.enthalpy) / 1e3 == pytest.approx(value, abs=tolerance)
    # The dead state's Gibbs energy would be off by 39 kJ/kg.
    wrong_gibbs = wrong.enthalpy - 293.15 * wrong.entropy
    assert wrong_gibbs - dead.gibbs == pytest.approx(38.8e3, abs=200.0)


def test_below_freezing_dead_state_water_is_ice():
    # Own values from iapws and gsw (ice Ih of IAPWS R10-06(2009)).
    for row in rows("exergy_examples.csv", example="sub-zero dead state: ice Ih"):
        dead = dead_state(kelvin(-14.0), 1.003e5)
        found = {
            "h0": dead.enthalpy / 1e3,
            "s0": dead.entropy / 1e3,
            "u0": (dead.enthalpy - dead.pressure * dead.volume) / 1e3,
            "v0": dead.volume,
            "g0": dead.gibbs / 1e3,
        }[row["quantity"]]
        assert dead.frozen
        assert found == pytest.approx(float(row["expected"]), abs=float(row["tol"]))


def test_the_gibbs_energy_does_not_jump_where_water_freezes():
    value, tolerance = _fact(
        "no jump of exergy when water freezes", "g0(ice) - g0(liquid) at 0.0025 degC and 1 atm"
    )
    melting = melting_temperature(101325.0)
    ice, liquid = dead_state(melting - 1e-9, 101325.0), dead_state(melting + 1e-9, 101325.0)
    assert ice.frozen
    assert not liquid.frozen
    assert (ice.gibbs - liquid.gibbs) / 1e3 == pytest.approx(value, abs=tolerance)
    # While h0 jumps by the heat of fusion, 333.4 kJ/kg (IAPWS R10-06(2009)).
    assert liquid.enthalpy - ice.enthalpy == pytest.approx(333.43e3, abs=50.0)


@pytest.mark.parametrize("pressure", [3e4, 7e4, 1.0e5, 1.1e5, 1.34e5, 1.36e5, 2e5])
def test_the_gibbs_energy_is_continuous_and_falls_with_entropy_at_any_ambient_pressure(pressure):
    temperature = np.linspace(272.9, 273.3, 4001)
    dead = dead_state(temperature, pressure)
    steps = np.diff(dead.gibbs)
    # 0.1 mK times an entropy between that of ice and of water; the phases differ by 4e-5 kJ/kg.
    assert np.max(np.abs(steps)) < 1220.9 * 1e-4 + 0.05
    assert np.all(np.diff(dead.frozen.astype(int)) <= 0)
    assert dead.frozen[0]
    assert not dead.frozen[-1]


def test_zero_degc_is_a_frozen_dead_state_at_one_atmosphere_and_liquid_at_two_bar():
    assert dead_state(273.15, 101325.0).frozen
    assert not dead_state(273.15, 2e5).frozen
    bridged = dead_state(273.146, 2e5)
    assert not bridged.frozen
    assert bridged.enthalpy == pytest.approx(dead_state(273.15, 2e5).enthalpy - 16.87, abs=0.05)


def test_supercooled_liquid_instead_of_ice_would_be_16_kj_off():
    value, tolerance = _fact(
        "ice instead of supercooled water as dead state",
        "g0(supercooled) - g0(ice) at -14 degC",
    )
    # Supercooled water from 0 degC down with cp 4.22 to 4.5 kJ/(kg K): the mean, 4.3, will do.
    zero = state_pt(101325.0, 273.15)
    temperature, capacity = 259.15, 4300.0
    enthalpy = zero.enthalpy + capacity * (temperature - 273.15)
    entropy = zero.entropy + capacity * np.log(temperature / 273.15)
    supercooled = enthalpy - temperature * entropy
    difference = supercooled - dead_state(temperature, 101325.0).gibbs
    assert difference / 1e3 == pytest.approx(value, abs=2 * tolerance)


@pytest.mark.parametrize(
    ("temperature", "pressure"),
    [(18.0, 1e5), (-14.0, 1e5), (np.nan, 1e5), (293.15, np.nan), (np.inf, 1e5), (293.15, -1e5),
     (293.15, 0.0), (400.0, 1e5), (260.0, np.inf)],
)  # fmt: skip
def test_a_dead_state_that_is_no_weather_is_absent(temperature, pressure):
    dead = dead_state(temperature, pressure)
    assert np.isnan(dead.gibbs)
    assert np.isnan(dead.enthalpy)
    assert np.isnan(dead.volume)


def test_a_series_of_weather_is_one_batch():
    temperature = kelvin([-20.0, -0.1, 0.0, 0.1, 15.0, 35.0, np.nan])
    dead = dead_state(temperature, 1e5)
    assert dead.gibbs.shape == (7,)
    np.testing.assert_array_equal(dead.frozen, [True, True, True, False, False, False, False])
    for i, t in enumerate(temperature[:-1]):
        assert dead.gibbs[i] == dead_state(t, 1e5).gibbs


# ---- live ambient


def test_a_gap_holds_the_last_reading_and_then_falls_back_to_the_reference():
    values = [280.0, 281.0, np.nan, 999.0, np.nan, np.nan, 285.0]
    usable = [True, True, True, False, True, True, True]
    filled, stands_in = live_ambient(values, usable, 2, 1, 288.15)
    np.testing.assert_array_equal(filled, [280, 281, 281, 281, 288.15, 288.15, 285])
    np.testing.assert_array_equal(stands_in, [False, False, True, True, True, True, False])


def test_before_the_first_reading_there_is_only_the_reference():
    filled, stands_in = live_ambient([np.nan, np.nan, 280.0], [True] * 3, 5, 1, 288.15)
    np.testing.assert_array_equal(filled, [288.15, 288.15, 280.0])
    np.testing.assert_array_equal(stands_in, [True, True, False])


def test_a_hold_of_zero_cells_holds_nothing():
    filled, _ = live_ambient([280.0, np.nan], [True, True], 0, 1, 288.15)
    np.testing.assert_array_equal(filled, [280.0, 288.15])


def test_an_infinite_reading_is_not_usable():
    filled, stands_in = live_ambient([np.inf, -np.inf], [True, True], 3, 1, 288.15)
    np.testing.assert_array_equal(filled, [288.15, 288.15])
    assert stands_in.all()


def test_a_trailing_mean_is_flagged_while_it_rests_on_a_stand_in():
    filled, stands_in = live_ambient([1.0, 2.0, 0.0, 4.0, 5.0], [1, 1, 0, 1, 1], 1, 2, 10.0)
    np.testing.assert_allclose(filled, [1.0, 1.5, 2.0, 3.0, 4.5])
    np.testing.assert_array_equal(stands_in, [False, False, True, True, False])


@pytest.mark.parametrize(
    ("hold", "mean", "reference"), [(-1, 1, 288.0), (1, 0, 288.0), (1, 1, np.nan)]
)
def test_a_live_ambient_without_sense_is_refused(hold, mean, reference):
    with pytest.raises(ValueError, match="give a hold of 0 or more"):
        live_ambient([280.0], [True], hold, mean, reference)


@given(
    st.lists(st.tuples(st.floats(240.0, 310.0), st.booleans()), max_size=60),
    st.integers(0, 5),
    st.integers(1, 8),
)
@settings(deadline=None)
def test_filling_agrees_with_pandas(series, hold, mean):
    values = np.array([v for v, _ in series], dtype=float)
    usable = np.array([u for _, u in series], dtype=bool)
    filled, stands_in = live_ambient(values, usable, hold, mean, 288.15)
    plain = pd.Series(np.where(usable, values, np.nan), dtype=float)
    held = plain.ffill(limit=hold) if hold else plain
    expected = held.fillna(288.15).rolling(mean, min_periods=1).mean()
    np.testing.assert_allclose(filled, expected, rtol=0, atol=1e-9)
    resting = plain.isna().astype(float).rolling(mean, min_periods=1).max() > 0
    np.testing.assert_array_equal(stands_in, resting)
