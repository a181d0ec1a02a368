"""What a state is at the edges: on saturation, out of region, at 0 degC, without a reading."""

from __future__ import annotations

import subprocess
import sys
import threading

import numpy as np
import pytest

from monitor.thermo.water import (
    CRITICAL_PRESSURE,
    near_saturation,
    saturated,
    saturation_pressure,
    saturation_temperature,
    state_ph,
    state_ps,
    state_pt,
    state_px,
    state_tx,
)

T_SAT_1_BAR = float(saturation_temperature(1e5))
P_350 = float(saturation_pressure(623.15))

# Each edge: what it is, a pressure in Pa, a temperature in K, whether it is a state, how dry.
EDGES = [
    ("0 degC at one atmosphere is liquid, though metastable", 101325.0, 273.15, True, 0.0),
    ("just below 0 degC there is no IF97", 101325.0, 273.149, False, None),
    ("the triple point is on saturation", 611.657, 273.16, False, None),
    ("the lowest pressure covered", 611.213, 300.0, True, 1.0),
    ("below the lowest pressure covered", 611.0, 300.0, False, None),
    ("exactly on saturation", 1e5, T_SAT_1_BAR, False, None),
    ("the next number above saturation", 1e5, np.nextafter(T_SAT_1_BAR, 1e3), False, None),
    ("the next number below saturation", 1e5, np.nextafter(T_SAT_1_BAR, 0.0), False, None),
    ("5 mK above saturation", 1e5, T_SAT_1_BAR + 0.005, True, 1.0),
    ("5 mK below saturation", 1e5, T_SAT_1_BAR - 0.005, True, 0.0),
    ("800 degC", 1e5, 1073.15, True, 1.0),
    ("above 800 degC, region 5", 1e5, 1073.16, True, 1.0),
    ("above 800 degC and 50 MPa", 50.1e6, 1073.16, False, None),
    ("2000 degC", 1e5, 2273.15, True, 1.0),
    ("above 2000 degC", 1e5, 2273.16, False, None),
    ("100 MPa", 100e6, 400.0, True, 0.0),
    ("above 100 MPa", 100.01e6, 400.0, False, None),
    ("gas below the critical pressure, above the critical temperature", 20e6, 700.0, True, 1.0),
    ("supercritical", 25e6, 700.0, True, np.nan),
    ("liquid above the critical pressure", 25e6, 500.0, True, 0.0),
    ("350 degC, region 1", 20e6, 623.15, True, 0.0),
    ("the next number above 350 degC, region 3", 20e6, np.nextafter(623.15, 1e3), True, 0.0),
    ("where region 3 begins, on saturation", P_350, 623.15, False, None),
    ("on the boundary between regions 2 and 3", 30e6, 698.15, True, np.nan),
    ("where that boundary meets 100 MPa", 100e6, 863.15, True, np.nan),
    ("800 degC at 100 MPa", 100e6, 1073.15, True, np.nan),
    ("the critical point is on saturation", 22.064e6, 647.096, False, None),
    ("1 mK above the critical point", 22.064e6, 647.097, True, np.nan),
    ("10 mK below the critical temperature", 22.064e6, 647.086, True, 0.0),
    ("no pressure", np.nan, 500.0, False, None),
    ("no temperature", 1e5, np.nan, False, None),
    ("infinite pressure", np.inf, 500.0, False, None),
    ("infinite temperature", 1e5, np.inf, False, None),
    ("minus infinity", -np.inf, -np.inf, False, None),
    ("negative pressure", -1e5, 500.0, False, None),
    ("zero pressure", 0.0, 500.0, False, None),
    ("a temperature in degC by mistake", 1e5, 18.0, False, None),
    ("negative temperature", 1e5, -18.0, False, None),
]


@pytest.mark.parametrize(
    ("pressure", "temperature", "valid", "dryness"),
    [edge[1:] for edge in EDGES],
    ids=[edge[0] for edge in EDGES],
)
def test_an_edge_has_a_defined_state(pressure, temperature, valid, dryness):
    state = state_pt(pressure, temperature)
    assert bool(state.valid) is valid
    for computed in (state.enthalpy, state.entropy, state.volume, state.internal_energy):
        assert bool(np.isfinite(computed)) is valid
    assert state.dryness == pytest.approx(np.nan if dryness is None else dryness, nan_ok=True)


# Each edge of the other ways: what it is, the way, its two numbers, T in K (None: absent), dryness.
# T away from saturation by iapws.
OTHER_EDGES = [
    ("saturation at 0 degC", state_tx, 273.15, 0.5, 273.15, 0.5),
    ("saturation below 0 degC", state_tx, 273.149, 0.5, None, None),
    ("saturation at the critical temperature", state_tx, 647.096, 0.3, 647.096, 0.3),
    ("saturation above it", state_tx, 647.097, 0.3, None, None),
    ("saturation at the lowest pressure", state_px, 611.213, 1.0, 273.15, 1.0),
    ("saturation below it", state_px, 611.212, 1.0, None, None),
    ("saturation at the critical pressure", state_px, 22.064e6, 0.3, 647.096, 0.3),
    ("saturation above it", state_px, 22.0641e6, 0.3, None, None),
    ("dry", state_px, 1e5, 1.0, T_SAT_1_BAR, 1.0),
    ("boiling", state_px, 1e5, 0.0, T_SAT_1_BAR, 0.0),
    ("drier than dry", state_px, 1e5, np.nextafter(1.0, 2.0), None, None),
    ("wetter than boiling", state_px, 1e5, -1e-12, None, None),
    ("h at 0 degC", state_ph, 1e5, 59.7, 273.15, 0.0),
    ("h below 0 degC", state_ph, 1e5, 30.0, None, None),
    ("h above 2000 degC", state_ph, 1e5, 8e6, None, None),
    ("h of region 5 at 500 bar", state_ph, 50e6, 4.2e6, 1167.22, np.nan),
    ("h above 800 degC, above 500 bar", state_ph, 51e6, 4.2e6, None, None),
    ("h where region 3 begins", state_ph, P_350, 2.5e6, 623.15, 0.92877),
    ("h at the critical point", state_ph, 22.064e6, 2087546.845, 647.096, np.nan),
    ("s at 100 MPa", state_ps, 100e6, 3e3, 570.35, 0.0),
    ("s above 100 MPa", state_ps, 100.01e6, 3e3, None, None),
    ("s at the lowest pressure", state_ps, 611.213, 9.1e3, 273.15, 0.99391),
    ("s below the lowest pressure", state_ps, 611.0, 9.1e3, None, None),
]


@pytest.mark.parametrize(
    ("way", "first", "second", "temperature", "dryness"),
    [edge[1:] for edge in OTHER_EDGES],
    ids=[edge[0] for edge in OTHER_EDGES],
)
def test_every_other_way_has_defined_edges(way, first, second, temperature, dryness):
    state = way(first, second)
    present = temperature is not None
    assert bool(state.valid) is present
    for computed in (state.enthalpy, state.entropy, state.volume, state.internal_energy):
        assert bool(np.isfinite(computed)) is present
    if present:
        assert state.temperature == pytest.approx(temperature, abs=0.05)
        assert state.dryness == pytest.approx(dryness, abs=1e-5, nan_ok=True)
    else:
        assert np.isnan(state.dryness)


def test_the_critical_point_has_the_published_enthalpy_whatever_the_dryness():
    # IAPWS R7-97(2012) at its own critical point, 322 kg/m3 and 647.096 K: 2087.5 kJ/kg, as the
    # handbooks print it (from memory).
    wet = state_px(CRITICAL_PRESSURE, [0.0, 0.5, 1.0])
    assert wet.enthalpy == pytest.approx(2087.5e3, abs=100.0)
    assert wet.volume == pytest.approx(1 / 322.0)


def test_a_batch_of_edges_gives_what_each_gives_alone():
    pressure, temperature = (np.array([edge[i] for edge in EDGES]) for i in (1, 2))
    together = state_pt(pressure, temperature)
    alone = [state_pt(p, t) for p, t in zip(pressure, temperature, strict=True)]
    np.testing.assert_array_equal(together.valid, [bool(s.valid) for s in alone])
    np.testing.assert_array_equal(together.enthalpy, [float(s.enthalpy) for s in alone])
    np.testing.assert_array_equal(together.dryness, [float(s.dryness) for s in alone])


@pytest.mark.parametrize("pressure", [700.0, 1e5, 1e6, 1e7, 16.6e6, 20e6])
def test_a_stated_side_decides_on_saturation(pressure):
    temperature = saturation_temperature(pressure)
    liquid, vapour = saturated(pressure)
    assert state_pt(pressure, temperature, side="vapour").enthalpy == vapour.enthalpy
    assert state_pt(pressure, temperature, side="liquid").enthalpy == liquid.enthalpy
    each = state_pt([pressure] * 3, temperature, side=[1, -1, 0])
    np.testing.assert_array_equal(each.dryness, [1.0, 0.0, np.nan])
    np.testing.assert_array_equal(each.valid, [True, True, False])


def test_a_stated_side_does_not_move_a_point_off_saturation():
    superheated = state_pt(1e6, 500.0)
    assert state_pt(1e6, 500.0, side="liquid").enthalpy == superheated.enthalpy


def test_an_unknown_side_is_refused():
    with pytest.raises(ValueError, match="'vapour', 'liquid'"):
        state_pt(1e5, 400.0, side="steam")


def test_the_band_refused_on_saturation_is_narrower_than_any_thermometer():
    # The batch call's band: p within 3.3e-5 of p_sat, measured as 0.5 to 2.7 mK.
    pressure = np.geomspace(700.0, 22e6, 200)
    temperature = saturation_temperature(pressure)
    assert not state_pt(pressure, temperature).valid.any()
    assert state_pt(pressure, temperature + 0.003).valid.all()
    assert state_pt(pressure, np.maximum(temperature - 0.003, 273.15)).valid.all()


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf, -1.0, 0.0, 1e12])
def test_no_bad_input_raises_or_passes_for_a_state(bad):
    for state in (
        state_ph(bad, 3e6),
        state_ps(bad, 7e3),
        state_px(bad, 0.5),
        state_tx(bad, 0.5),
        *saturated(bad),
    ):
        assert not state.valid
        assert np.isnan(state.enthalpy)
        assert np.isnan(state.dryness)
    assert np.isnan(saturation_pressure(bad))
    assert np.isnan(saturation_temperature(bad))
    assert not near_saturation(bad, 400.0, 2.0)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf, -1e12, 1e12])
def test_no_bad_enthalpy_or_entropy_raises_or_passes_for_a_state(bad):
    pressure = np.array([700.0, 1e5, 16.6e6, 25e6, 60e6])
    for state in (state_ph(pressure, bad), state_ps(pressure, bad)):
        assert not state.valid.any()
        assert np.isnan(state.temperature).all() or np.isnan(state.enthalpy).all()


def test_enthalpy_below_that_of_0_degc_has_no_state():
    # IF97 at 0 degC and 1 bar: h = 0.06 kJ/kg.
    assert state_ph(1e5, 100.0).valid
    assert not state_ph(1e5, 20.0).valid


@pytest.mark.parametrize("bad", [-0.01, 1.01, np.nan, np.inf])
def test_a_dryness_outside_0_to_1_has_no_state(bad):
    assert not state_px(1e5, bad).valid
    assert not state_tx(400.0, bad).valid


def test_saturation_ends_at_0_degc_and_at_the_critical_point():
    assert np.isfinite(saturation_pressure([273.15, 647.096])).all()
    assert np.isnan(saturation_pressure([273.149, 647.097])).all()
    assert np.isfinite(saturation_temperature([611.213, CRITICAL_PRESSURE])).all()
    assert np.isnan(saturation_temperature([611.0, CRITICAL_PRESSURE + 1.0])).all()
    assert state_tx(273.15, 1.0).valid


def test_the_band_around_saturation_is_inclusive_and_has_two_sides():
    temperature = T_SAT_1_BAR + np.array([-2.1, -1.9, 0.0, 1.9, 2.1])
    assert list(near_saturation(1e5, temperature, 2.0)) == [False, True, True, True, False]
    assert not near_saturation(25e6, 650.0, 5.0)
    assert not near_saturation(1e5, np.nan, 5.0)


def test_shapes_broadcast_and_scalars_stay_scalar():
    assert state_pt(1e5, 300.0).enthalpy.shape == ()
    assert state_pt([[1e5], [2e5]], [300.0, 310.0, 320.0]).volume.shape == (2, 3)
    assert state_ph([[1e5], [2e5]], [3e6, 2e6, 1e5]).dryness.shape == (2, 3)
    assert state_px([], 1.0).enthalpy.shape == (0,)
    assert state_ps([], []).valid.shape == (0,)
    assert state_pt(np.array([]), 300.0).valid.shape == (0,)


def test_inputs_are_not_changed():
    pressure, temperature = np.array([1e5, 2e5]), np.array([T_SAT_1_BAR, 500.0])
    state_pt(pressure, temperature, side="vapour")
    state_ps(pressure, np.array([7e3, np.nan]))
    np.testing.assert_array_equal(pressure, [1e5, 2e5])
    np.testing.assert_array_equal(temperature, [T_SAT_1_BAR, 500.0])


def test_threads_do_not_share_the_engine():
    expected = state_pt(1e6, np.linspace(460.0, 900.0, 3000)).enthalpy
    found = {}

    def work(number):
        found[number] = state_pt(1e6, np.linspace(460.0, 900.0, 3000)).enthalpy

    threads = [threading.Thread(target=work, args=(n,)) for n in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len(found) == 4
    for enthalpy in found.values():
        np.testing.assert_array_equal(enthalpy, expected)


def test_importing_the_package_does_not_import_coolprop():
    code = (
        "import sys, monitor.thermo.water, monitor.thermo.dead_state, monitor.thermo.exergy, "
        "monitor.thermo.fuels; print('CoolProp' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"
