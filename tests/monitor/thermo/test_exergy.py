"""The exergy formulas: their laws, and the slips that they are known for."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from thermo_reference import rows

from monitor.thermo.dead_state import dead_state
from monitor.thermo.exergy import (
    STANDARD_GRAVITY,
    flow_exergy,
    heat_exergy,
    lost_work,
    nonflow_exergy,
)
from monitor.thermo.water import (
    CRITICAL_PRESSURE,
    CRITICAL_TEMPERATURE,
    saturated,
    saturation_temperature,
    state_ph,
    state_pt,
    state_px,
)

WEATHER = st.tuples(st.floats(233.15, 318.15), st.floats(6e4, 1.08e5))
PRESSURES = st.floats(np.log(1e3), np.log(16e6)).map(np.exp)


def _fact(name, source=None):
    wanted = {"fact": name} | ({"from": source} if source else {})
    row = rows("thermo_facts.csv", **wanted)[0]
    return float(row["value"]), float(row["tol"])


def test_the_flow_exergy_is_the_textbook_formula():
    dead = dead_state(291.15, 98500.0)
    state = state_pt(6.3e6, 738.15)
    expected = (
        state.enthalpy
        - dead.enthalpy
        - 291.15 * (state.entropy - dead.entropy)
        + 30.0**2 / 2
        + 9.80665 * 12.0
    )
    found = flow_exergy(state.enthalpy, state.entropy, dead, velocity=30.0, height=12.0)
    assert found == pytest.approx(expected, abs=1e-6)


def test_the_nonflow_exergy_is_the_textbook_formula():
    dead = dead_state(285.15, 100400.0)
    state = state_px(9.3e5, 0.012)
    u0 = dead.enthalpy - dead.pressure * dead.volume
    expected = (
        state.internal_energy
        - u0
        + 100400.0 * (state.volume - dead.volume)
        - 285.15 * (state.entropy - dead.entropy)
    )
    found = nonflow_exergy(state.internal_energy, state.volume, state.entropy, dead)
    assert found == pytest.approx(expected, abs=1e-6)


@given(WEATHER)
@settings(deadline=None)
def test_the_dead_state_itself_has_no_exergy(weather):
    dead = dead_state(*weather)
    flow = flow_exergy(dead.enthalpy, dead.entropy, dead)
    stored = nonflow_exergy(
        dead.enthalpy - dead.pressure * dead.volume, dead.volume, dead.entropy, dead
    )
    assert flow == pytest.approx(0.0, abs=1e-6)
    assert stored == pytest.approx(0.0, abs=1e-6)


@given(WEATHER, PRESSURES, st.floats(273.2, 1073.0))
@settings(deadline=None, max_examples=300)
def test_nonflow_exergy_is_never_negative(weather, pressure, temperature):
    dead = dead_state(*weather)
    state = state_pt(pressure, temperature)
    stored = nonflow_exergy(state.internal_energy, state.volume, state.entropy, dead)
    # IF97 and ice Ih join within 1e-4 kJ/kg.
    assert not state.valid or stored > -0.1


@given(WEATHER, PRESSURES, st.floats(0.0, 1.0))
@settings(deadline=None, max_examples=200)
def test_nonflow_exergy_of_wet_steam_is_never_negative(weather, pressure, dryness):
    dead = dead_state(*weather)
    wet = state_px(pressure, dryness)
    assert nonflow_exergy(wet.internal_energy, wet.volume, wet.entropy, dead) > -0.1


@given(WEATHER, PRESSURES, st.floats(0.0, 1.0))
@settings(deadline=None, max_examples=200)
def test_flow_and_nonflow_exergy_differ_by_the_flow_work_against_the_surroundings(
    weather, pressure, dryness
):
    dead = dead_state(*weather)
    wet = state_px(pressure, dryness)
    flow = flow_exergy(wet.enthalpy, wet.entropy, dead)
    stored = nonflow_exergy(wet.internal_energy, wet.volume, wet.entropy, dead)
    assert flow - stored == pytest.approx((pressure - dead.pressure) * wet.volume, abs=1e-3)


@given(WEATHER, PRESSURES, st.floats(290.0, 1000.0), st.floats(0.05, 1.0))
@settings(deadline=None, max_examples=300)
def test_throttling_destroys_exergy_in_any_weather(weather, pressure, temperature, ratio):
    dead = dead_state(*weather)
    start = state_pt(pressure, temperature)
    end = state_ph(max(pressure * ratio, 700.0), start.enthalpy)
    if not (start.valid and end.valid):
        return
    if pressure * ratio < 700.0:
        return
    drop = flow_exergy(start.enthalpy, start.entropy, dead) - flow_exergy(
        end.enthalpy, end.entropy, dead
    )
    destroyed = lost_work(dead.temperature, end.entropy - start.entropy)
    assert drop == pytest.approx(destroyed, abs=1e-3)
    assert destroyed > -0.5  # a region boundary's jump in s, 1e-3 J/(kg K), times T0


def test_destruction_does_not_see_the_phase_of_the_dead_state():
    first, second = state_pt(4.2e6, 671.15), state_ph(1.25e6, state_pt(4.2e6, 671.15).enthalpy)
    frozen = dead_state(259.15, 100300.0)
    drop = flow_exergy(first.enthalpy, first.entropy, frozen) - flow_exergy(
        second.enthalpy, second.entropy, frozen
    )
    assert drop == pytest.approx(259.15 * (second.entropy - first.entropy), abs=1e-6)


# ---- classic slips


def test_t0_enters_in_kelvin():
    value, tolerance = _fact("dead state temperature enters in kelvin")
    assert lost_work(291.15, 1000.0) / 1e3 == pytest.approx(value, abs=tolerance)
    # Handed over in degC, the dead state is absent rather than wrong by a factor of sixteen.
    assert np.isnan(flow_exergy(3e6, 7e3, dead_state(18.0, 101325.0)))


def test_the_dead_state_is_the_liquid_at_t0_not_the_boiling_liquid_at_p0():
    dead = dead_state(293.15, 101325.0)
    steam = state_pt(4e6, 673.15)
    boiling = saturated(101325.0)[0]
    wrong = steam.enthalpy - boiling.enthalpy - 293.15 * (steam.entropy - boiling.entropy)
    right = flow_exergy(steam.enthalpy, steam.entropy, dead)
    assert right - wrong == pytest.approx(38.8e3, abs=200.0)


def test_a_vessels_content_pushes_the_surroundings_away():
    # u - u0 - T0 (s - s0) alone, without p0 (v - v0), is short by p0 (v - v0).
    dead = dead_state(285.15, 100400.0)
    steam = saturated(7.8e5)[1]
    u0 = dead.enthalpy - dead.pressure * dead.volume
    wrong = steam.internal_energy - u0 - 285.15 * (steam.entropy - dead.entropy)
    right = nonflow_exergy(steam.internal_energy, steam.volume, steam.entropy, dead)
    assert right - wrong == pytest.approx(100400.0 * (steam.volume - dead.volume))


def test_a_stored_kilogram_is_not_a_flowing_kilogram():
    dead = dead_state(285.15, 100400.0)
    water = saturated(11.9e5)[0]
    flow = flow_exergy(water.enthalpy, water.entropy, dead)
    stored = nonflow_exergy(water.internal_energy, water.volume, water.entropy, dead)
    assert flow - stored == pytest.approx((11.9e5 - 100400.0) * water.volume)


def test_kinetic_energy_is_in_joules_not_kilojoules():
    dead = dead_state(288.15, 101325.0)
    still = flow_exergy(3e6, 7e3, dead)
    value, tolerance = _fact("specific kinetic energy", "velocity 45 m/s")
    moving = flow_exergy(3e6, 7e3, dead, velocity=45.0)
    assert (moving - still) / 1e3 == pytest.approx(value, abs=tolerance + 1e-9)
    assert flow_exergy(3e6, 7e3, dead, velocity=-45.0) == moving


def test_height_counts_with_standard_gravity():
    dead = dead_state(288.15, 101325.0)
    value, tolerance = _fact("potential energy")
    raised = flow_exergy(3e6, 7e3, dead, height=10.0) - flow_exergy(3e6, 7e3, dead)
    assert raised / 1e3 == pytest.approx(value, abs=tolerance + 1e-9)
    assert _fact("standard gravity")[0] == STANDARD_GRAVITY


# ---- heat


def test_heat_at_t0_carries_no_exergy():
    assert heat_exergy(1000.0, 288.15, 288.15) == 0.0


def test_heat_below_t0_carries_exergy_the_other_way():
    assert heat_exergy(1000.0, 270.0, 288.15) < 0.0


@pytest.mark.parametrize("boundary", [0.0, -5.0, np.nan])
def test_a_boundary_without_a_temperature_has_no_heat_exergy(boundary):
    assert np.isnan(heat_exergy(1000.0, boundary, 288.15))


def test_arrays_of_streams_and_of_weather_broadcast():
    dead = dead_state(np.linspace(260.0, 300.0, 5), 1e5)
    assert flow_exergy(np.full((3, 1), 3e6), 7e3, dead).shape == (3, 5)
    assert heat_exergy([1.0, 2.0], 400.0, [[280.0], [290.0]]).shape == (2, 2)
    assert lost_work([280.0, 290.0], 1.0).shape == (2,)


def test_a_missing_reading_gives_a_missing_exergy():
    dead = dead_state([288.15, np.nan], 1e5)
    np.testing.assert_array_equal(np.isnan(flow_exergy(3e6, 7e3, dead)), [False, True])
    np.testing.assert_array_equal(np.isnan(flow_exergy([3e6, np.nan], 7e3, dead)), [False, True])


# ---- facts of water that the trade goes by


def test_facts_of_water_hold():
    assert _fact("critical temperature")[0] == CRITICAL_TEMPERATURE
    assert _fact("critical pressure")[0] * 1e6 == CRITICAL_PRESSURE
    boiling, tolerance = _fact("boiling at one atmosphere")
    assert saturation_temperature(101325.0) - 273.15 == pytest.approx(boiling, abs=tolerance)
    vacuum, tolerance = _fact("saturation at vacuum")
    assert saturation_temperature(4932.928) - 273.15 == pytest.approx(vacuum, abs=tolerance)


def test_near_saturation_the_state_could_be_anything():
    heat, tolerance = _fact("near saturation p and T do not fix steam", "h_g - h_f at 10 bar")
    liquid, vapour = saturated(1e6)
    assert (vapour.enthalpy - liquid.enthalpy) / 1e3 == pytest.approx(heat, abs=tolerance)
    shift, tolerance = _fact(
        "near saturation p and T do not fix steam", "T_sat shift for +1 % of 10 bar"
    )
    moved = saturation_temperature(1.01e6) - saturation_temperature(1e6)
    assert moved == pytest.approx(shift, abs=tolerance)


def test_the_compressibility_factor_of_steam():
    gas_constant = _fact("gas constant of water (IF97)")[0] * 1e3
    table = rows("thermo_facts.csv", fact="compressibility factor of steam")
    for row in table:
        bar, _, celsius, _ = row["from"].split()
        pressure, temperature = float(bar) * 1e5, float(celsius) + 273.15
        factor = pressure * state_pt(pressure, temperature).volume / (gas_constant * temperature)
        assert factor == pytest.approx(float(row["value"]), abs=float(row["tol"]))
    assert len(table) == 6
