"""States from p,h and p,s: they come back through the forward equations, wet and dry."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.thermo.engine import ENTHALPY, ENTROPY, evaluate_column
from monitor.thermo.isobar import _estimate
from monitor.thermo.region3 import boundary_temperature
from monitor.thermo.saturation import saturation_properties
from monitor.thermo.water import (
    CRITICAL_PRESSURE,
    CRITICAL_TEMPERATURE,
    saturated,
    saturation_pressure,
    saturation_temperature,
    state_ph,
    state_ps,
    state_pt,
    state_px,
)

PRESSURES = st.floats(np.log(650.0), np.log(16.5e6)).map(np.exp)
FRACTIONS = st.floats(0.0, 1.0)


@given(PRESSURES, st.floats(275.0, 1073.0))
@settings(deadline=None, max_examples=300)
def test_a_single_phase_state_comes_back_from_its_enthalpy_and_from_its_entropy(p, temperature):
    state = state_pt(p, temperature)
    if not state.valid:
        return
    from_h, from_s = state_ph(p, state.enthalpy), state_ps(p, state.entropy)
    # 1e-3 J/kg is the stated consistency; with cp of 0.9 to 20 kJ/(kg K) below region 3, 1e-6 K.
    assert from_h.temperature == pytest.approx(temperature, abs=1e-6)
    assert from_s.temperature == pytest.approx(temperature, abs=1e-6)
    assert from_s.enthalpy == pytest.approx(state.enthalpy, abs=1e-3)
    assert from_h.entropy == pytest.approx(state.entropy, abs=1e-5)
    assert from_h.volume == pytest.approx(state.volume, rel=1e-6)
    assert from_s.volume == pytest.approx(state.volume, rel=1e-6)
    assert from_h.dryness == from_s.dryness == state.dryness


@given(PRESSURES, FRACTIONS)
@settings(deadline=None, max_examples=300)
def test_a_wet_state_comes_back_from_its_enthalpy_and_from_its_entropy(p, dryness):
    wet = state_px(p, dryness)
    for again in (state_ph(p, wet.enthalpy), state_ps(p, wet.entropy)):
        assert again.valid
        assert again.temperature == pytest.approx(saturation_temperature(p), abs=1e-6)
        assert again.dryness == pytest.approx(dryness, abs=1e-9)
        assert again.enthalpy == pytest.approx(wet.enthalpy, abs=1e-3)
        assert again.entropy == pytest.approx(wet.entropy, abs=1e-6)
        assert again.volume == pytest.approx(wet.volume, rel=1e-9)


def _consistent(pressure, temperature):
    """States come back from h and from s; the forward equations at the T found give h and s."""
    state = state_pt(pressure, temperature)
    ok = state.valid
    assert ok.sum() > 0.9 * ok.size
    for found in (state_ps(pressure, state.entropy), state_ph(pressure, state.enthalpy)):
        assert found.valid[ok].all()
        forward = state_pt(pressure, found.temperature)
        ok &= forward.valid  # one can land within the millikelvin refused at saturation
        assert np.max(np.abs(forward.enthalpy - found.enthalpy)[ok]) < 1e-3  # J/kg
        assert np.max(np.abs(forward.entropy - found.entropy)[ok]) < 2e-6
        assert np.max(np.abs(forward.volume / found.volume - 1.0)[ok]) < 1e-6
        # Where the equations of two regions overlap, two temperatures have the same h or s.
        assert np.max(np.abs(found.temperature - temperature)[ok]) < 0.05
    return ok.sum()


def test_above_165_bar_states_come_back_within_a_millionth_of_a_kilojoule():
    """16.5 to 100 MPa through regions 1, 2 and 3, more densely where region 3 is."""
    rng = np.random.default_rng(4)
    assert _consistent(rng.uniform(16.53e6, 100e6, 10_000), rng.uniform(273.2, 1073.0, 10_000))
    assert _consistent(rng.uniform(16.53e6, 40e6, 10_000), rng.uniform(623.0, 700.0, 10_000))


@pytest.mark.parametrize(("bars", "kelvins"), [(2.0, 1.0), (0.02, 0.01), (0.002, 0.001)])
def test_around_the_critical_point_states_come_back_too(bars, kelvins):
    rng = np.random.default_rng(6)
    pressure = CRITICAL_PRESSURE + 1e5 * bars * rng.uniform(-1.0, 1.0, 3000)
    temperature = CRITICAL_TEMPERATURE + kelvins * rng.uniform(-1.0, 1.0, 3000)
    clear = (np.abs(pressure - CRITICAL_PRESSURE) > 100.0) | (
        np.abs(temperature - CRITICAL_TEMPERATURE) > 5e-4
    )  # the hair
    state = state_pt(pressure, temperature)
    keep = clear & state.valid
    assert keep.sum() > 1000
    assert _consistent(pressure[keep], temperature[keep])


def test_wet_states_in_region_3_come_back():
    rng = np.random.default_rng(8)
    pressure = np.append(rng.uniform(16.53e6, 22.06e6, 2000), CRITICAL_PRESSURE - 100.0)
    dryness = rng.uniform(0.0, 1.0, pressure.size)
    wet = state_px(pressure, dryness)
    assert wet.valid.all()
    for again in (state_ph(pressure, wet.enthalpy), state_ps(pressure, wet.entropy)):
        assert again.dryness == pytest.approx(dryness, abs=1e-9)
        assert again.enthalpy == pytest.approx(wet.enthalpy, abs=1e-3)
        assert again.volume == pytest.approx(wet.volume, rel=1e-9)


@pytest.mark.parametrize("pressure", [16.6e6, 20e6, 25e6, 60e6, 99e6])
def test_in_the_gap_between_two_regions_a_state_is_that_of_the_boundary(pressure):
    for boundary in (623.15, float(boundary_temperature(np.asarray(pressure)))):
        sides = state_pt(pressure, boundary * (1.0 + np.array([-1e-9, 1e-9])))
        for solve, ends in ((state_ps, sides.entropy), (state_ph, sides.enthalpy)):
            low, high = np.sort(ends)
            found = solve(pressure, np.linspace(low, high, 11))
            assert found.valid.all()
            assert np.max(np.abs(found.temperature - boundary)) < 0.03
            # Found from 16.5 to 100 MPa: 134 J/kg at most, at 60 MPa to region 2.
            assert np.max(np.abs(found.enthalpy[:, None] - sides.enthalpy)) < 140.0


def test_a_state_is_the_same_to_the_last_bit_in_any_batch():
    rng = np.random.default_rng(9)
    pressure = np.exp(rng.uniform(np.log(700.0), np.log(99e6), 1200))
    pressure[::3] = rng.uniform(16.6e6, 24e6, 400)
    states = state_pt(pressure, rng.uniform(274.0, 1100.0, 1200))
    for solve, given_ in ((state_ps, states.entropy), (state_ph, states.enthalpy)):
        together = solve(pressure, given_)
        for size in (1, 2, 3, 5, 31, 63, 64, 65, 100):
            for _ in range(12):
                part = np.sort(rng.choice(1200, size, replace=False))
                alone = solve(pressure[part], given_[part])
                for name in ("temperature", "enthalpy", "entropy", "volume", "dryness"):
                    np.testing.assert_array_equal(
                        getattr(alone, name), getattr(together, name)[part], err_msg=name
                    )


def test_a_dense_sweep_of_the_plant_range_is_consistent_with_the_forward_equations():
    rng = np.random.default_rng(3)
    pressure = np.exp(rng.uniform(np.log(650.0), np.log(16.5e6), 20_000))
    saturation = saturation_temperature(pressure)
    near = rng.uniform(0.0, 1.0, pressure.size) ** 3  # crowd the points near saturation
    for temperature in (
        saturation + 0.01 + near * (1073.0 - saturation),
        saturation - 0.01 - near * (saturation - 273.17),
    ):
        state = state_pt(pressure, temperature)
        for found in (state_ps(pressure, state.entropy), state_ph(pressure, state.enthalpy)):
            ok = state.valid
            assert np.array_equal(found.valid[ok], ok[ok])
            forward = state_pt(pressure, found.temperature)
            assert np.max(np.abs(forward.enthalpy - state.enthalpy)[ok]) < 1e-3
            assert np.max(np.abs(forward.enthalpy - found.enthalpy)[ok]) < 1e-3
            assert np.max(np.abs(forward.volume / found.volume - 1.0)[ok]) < 1e-6


@pytest.mark.parametrize("column", [ENTHALPY, ENTROPY])
@pytest.mark.parametrize("vapour", [True, False])
def test_the_first_estimate_is_close_enough_to_need_no_iteration(vapour, column):
    rng = np.random.default_rng(5)
    saturation = rng.uniform(295.0, 623.0, 5000)
    pressure = saturation_pressure(saturation)
    far = 1073.0 if vapour else 273.2
    share = rng.uniform(1e-6, 1.0, saturation.size) ** 2
    temperature = saturation + share * (far - saturation)
    target = evaluate_column(pressure, temperature, column)
    at_saturation = saturation_properties(pressure, saturation)[:, (3 if vapour else 0) + column]
    estimate = _estimate(vapour=vapour, column=column)
    found, slope = estimate(saturation, at_saturation, target)
    assert np.max(np.abs(found - temperature)) < 1e-4
    step = 0.01 if vapour else -0.01
    rise = evaluate_column(pressure, temperature + step, column) - target
    assert slope == pytest.approx(step / rise, rel=0.01)


@pytest.mark.parametrize("pressure", [1e3, 1e5, 1e6, 1e7, 16.6e6, 20e6])
def test_the_saturation_limits_belong_to_the_wet_region(pressure):
    liquid, vapour = saturated(pressure)
    assert state_ph(pressure, liquid.enthalpy).dryness == 0.0
    assert state_ps(pressure, vapour.entropy).dryness == 1.0
    beyond = state_ph(pressure, vapour.enthalpy + 1.0)
    assert beyond.valid
    assert beyond.dryness == 1.0
    assert 0.0 < beyond.temperature - vapour.temperature < 0.01
    below = state_ps(pressure, liquid.entropy - 0.01)
    assert below.valid
    assert below.dryness == 0.0
    assert 0.0 < liquid.temperature - below.temperature < 0.01


def test_above_800_degc_the_high_temperature_region_takes_over():
    state = state_pt(2e6, [1050.0, 1073.1, 1073.2, 1100.0, 1500.0, 2200.0])
    assert state_ph(2e6, state.enthalpy).temperature == pytest.approx(state.temperature, abs=1e-6)
    assert state_ps(2e6, state.entropy).temperature == pytest.approx(state.temperature, abs=1e-6)


def test_supercritical_states_come_back():
    # Steam of an ultra-supercritical boiler, and the fluid on its way there.
    state = state_pt(30e6, [400.0, 600.0, 680.0, 720.0, 873.15])
    again = state_ph(30e6, state.enthalpy)
    assert again.temperature == pytest.approx(state.temperature, abs=1e-4)
    np.testing.assert_array_equal(again.dryness, [0.0, 0.0, np.nan, np.nan, np.nan])


@given(
    st.floats(np.log(2e4), np.log(16e6)).map(np.exp),
    st.floats(300.0, 1000.0),
    st.floats(0.05, 1.0),
)
@settings(deadline=None, max_examples=300)
def test_throttling_never_loses_entropy(p, temperature, ratio):
    start = state_pt(p, temperature)
    end = state_ph(p * ratio, start.enthalpy)
    if start.valid and end.valid:
        # Where IF97's regions meet, s has a jump of under 2e-4 J/(kg K).
        assert end.entropy - start.entropy > -1e-3


@given(
    st.floats(np.log(1e5), np.log(16e6)).map(np.exp),
    st.floats(450.0, 1000.0),
    st.floats(0.002, 1.0),
)
@settings(deadline=None, max_examples=300)
def test_an_isentropic_expansion_never_gains_enthalpy(p, temperature, ratio):
    start = state_pt(p, temperature)
    end = state_ps(max(p * ratio, 1e3), start.entropy)
    if start.valid and end.valid:
        assert end.enthalpy <= start.enthalpy + 1e-3
