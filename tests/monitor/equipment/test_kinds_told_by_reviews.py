"""What single kinds lacked: the drives of pumps, moisture, stored exergy, clean tubes."""

from __future__ import annotations

import numpy as np
import pytest
from equipment_builders import dead, drawn, figures_of, heat, power, signal, stated, water
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.equipment.account import account, balances
from monitor.flags import Flag
from monitor.thermo.water import saturated, saturation_temperature, state_ps

# Pump


def _pump(eta, motor, flow=40.0, **options):
    inlet = water("in", flow, p_bar=2.0, T_C=105.0)
    ideal = state_ps(80e5, inlet.entropy).enthalpy - inlet.enthalpy
    outlet = water("out", flow, p_bar=80.0, h=inlet.enthalpy + ideal / eta)
    electrical = power("w", (outlet.energy - inlet.energy) / motor)
    return drawn("pump", {"inlet": inlet, "power": electrical, "outlet": outlet}, **options)


@settings(max_examples=30, deadline=None)
@given(st.floats(0.3, 0.95), st.floats(0.8, 0.99), st.floats(-20.0, 38.0))
def test_a_motors_loss_is_no_imbalance_but_a_line_of_its_own(eta, motor, t0):
    box = _pump(eta, motor, motor_efficiency=motor)
    electrical = box.only("power").energy[0]
    counted = balances(box)
    got = account(box, counted, dead(t0))
    assert abs(counted.energy_imbalance[0]) <= 1e-9 * electrical
    assert counted.unmeasured_heat[0] == pytest.approx((1 - motor) * electrical, rel=1e-9)
    # The drive's loss is destroyed whole, the pump's by its entropy.
    inside = box.only("outlet").entropy_rate - box.only("inlet").entropy_rate
    expected = dead(t0).temperature * inside + (1 - motor) * electrical
    assert got.destroyed[0] == pytest.approx(expected[0], rel=1e-9)
    assert abs(got.closure[0]) <= 1e-9 * electrical
    figures = figures_of(box)
    assert figures["eta_s"].value[0] == pytest.approx(100 * eta, rel=1e-4)
    assert figures["drive_loss"].value[0] == pytest.approx((1 - motor) * electrical / 1e3)


def test_a_pump_without_a_stated_motor_is_pump_and_drive_as_before():
    box = _pump(0.7, 0.9)
    assert figures_of(box)["eta_s"].value[0] == pytest.approx(63.0, rel=1e-4)
    (main, _) = box.item.kind.figures(box.item)
    assert main.label.endswith("with drive")
    assert balances(box).energy_imbalance[0] == pytest.approx(0.1 * box.only("power").energy[0])


# Turbine


def _wet(eta_dry, back_bar, loss_per_moisture=0.0):
    """A section that obeys Baumann's rule with a = 1, found by repetition."""
    inlet = water("in", 10.0, p_bar=40.0, T_C=400.0)
    ideal = state_ps(back_bar * 1e5, inlet.entropy).enthalpy
    moisture = 0.0
    for _ in range(60):
        h = inlet.enthalpy - eta_dry * (1 - moisture / 2) * (inlet.enthalpy - ideal)
        exhaust = water("out", 10.0, p_bar=back_bar, h=h)
        moisture = float(1 - exhaust.dryness[0])
    ports = {"inlet": inlet, "exhaust": exhaust, "power": power("w", inlet.energy - exhaust.energy)}
    return drawn("turbine", ports, loss_per_moisture=loss_per_moisture)


@settings(max_examples=20, deadline=None)
@given(st.floats(0.7, 0.9), st.floats(0.03, 0.2))
def test_the_efficiency_on_dry_steam_does_not_move_with_the_vacuum(eta, back):
    assert figures_of(_wet(eta, back, 1.0))["eta_s_1"].value[0] == pytest.approx(100 * eta)
    assert figures_of(_wet(eta, back))["eta_s_1"].value[0] < 100 * eta - 1.0


def test_moisture_cannot_lift_an_efficiency_over_the_second_law():
    """Measured 95 %, on dry steam 104 %: the law has nothing against it."""
    figure = figures_of(_wet(1.04, 0.03, 1.0))["eta_s_1"]
    assert figure.value[0] == pytest.approx(104.0)
    assert not figure.flag[0] & Flag.SECOND_LAW


@pytest.mark.parametrize("h", [2700e3, 130e3])
def test_an_exhaust_that_the_balance_finds_dry_or_liquid_is_flagged(h):
    ports = {
        "inlet": water("in", 10.0, p_bar=40.0, T_C=400.0),
        "exhaust": water("out", 10.0, p_bar=0.08, h=h),
        "power": power("w", 8e6),
    }
    said = stated(out={"pressure": "P", "enthalpy": "balance", "flow": "balance"})
    moisture = figures_of(drawn("turbine", ports, statements=said))["exhaust_moisture"]
    assert moisture.value[0] < 0 or moisture.value[0] > 100
    assert moisture.flag[0] & Flag.SECOND_LAW


# Condenser


@settings(max_examples=30, deadline=None)
@given(st.floats(2e6, 30e6), st.floats(300.0, 900.0), st.floats(5.0, 28.0), st.floats(0.6, 1.0))
def test_a_ttd_above_clean_tubes_is_zero_while_they_are_clean(duty, flow, inlet_C, clean):
    """Steam at the pressure that tubes of UA = clean * 2000 kW/K need at this duty and water."""
    cold = water("ci", flow, p_bar=2.5, T_C=inlet_C)
    warm = water("co", flow, p_bar=2.5, h=cold.enthalpy + duty / flow)
    rise = float((warm.temperature - cold.temperature)[0])
    ttd = rise / np.expm1(clean * 2000e3 * rise / duty)
    boiling = float(warm.temperature[0]) + ttd
    if boiling > 373.0:
        return
    low, high = 650.0, 2e5
    for _ in range(90):
        middle = (low + high) / 2
        low, high = (low, middle) if saturation_temperature(middle) > boiling else (middle, high)
    p = (low + high) / 2e5
    latent = float(saturated(p * 1e5)[1].enthalpy - saturated(p * 1e5)[0].enthalpy)
    ports = {
        "steam": water("st", duty / latent, p_bar=p, x=1.0),
        "cooling_in": cold,
        "condensate": water("hw", duty / latent, p_bar=p, x=0.0),
        "cooling_out": warm,
    }
    figures = figures_of(drawn("condenser", ports, design_ua="2000 kW/K"))
    assert figures["duty"].value[0] == pytest.approx(duty / 1e3, rel=1e-9)
    assert figures["cleanliness"].value[0] == pytest.approx(100 * clean, rel=1e-5)
    expected = ttd - rise / np.expm1(2000e3 * rise / duty)
    assert figures["ttd_above_clean"].value[0] == pytest.approx(expected, abs=1e-4)


def test_heat_that_would_flow_uphill_is_flagged_wherever_it_shows():
    cold, hot = water("ci", 500.0, p_bar=2.5, T_C=18.0), water("co", 500.0, p_bar=2.5, T_C=46.0)
    ports = {
        "steam": water("st", 8.0, p_bar=0.08, x=0.9),
        "cooling_in": cold,
        "condensate": water("hw", 8.0, p_bar=0.08, x=0.0),
        "cooling_out": hot,
    }
    figures = figures_of(drawn("condenser", ports))
    assert figures["ttd"].value[0] < 0
    assert figures["ttd"].flag[0] & figures["ua"].flag[0] & Flag.SECOND_LAW
    ports = {
        "hot_in": water("a", 5.0, p_bar=20.0, T_C=400.0),
        "hot_out": water("b", 5.0, p_bar=20.0, T_C=300.0),
        "cold_in": water("c", 5.0, p_bar=20.0, T_C=250.0),
        "cold_out": water("d", 5.0, p_bar=20.0, T_C=405.0),
    }
    figures = figures_of(drawn("exchanger", ports))
    assert figures["ua"].flag[0] & figures["effectiveness"].flag[0] & Flag.SECOND_LAW


@pytest.mark.parametrize(
    ("out_C", "flagged"), [(17.6, False), (18.0, False), (28.0, False), (8.0, True), (46.0, True)]
)
def test_only_heat_that_flows_uphill_contradicts_a_condenser(out_C, flagged):
    """18 degC in; steam at 0.08 bar boils at 41.5 degC. A thermometer's error is no contradiction;
    water cooled by steam (two thermometers swapped) is one."""
    ports = {
        "steam": water("st", 8.0, p_bar=0.08, x=0.9),
        "cooling_in": water("ci", 500.0, p_bar=2.5, T_C=18.0),
        "condensate": water("hw", 8.0, p_bar=0.08, x=0.0),
        "cooling_out": water("co", 500.0, p_bar=2.5, T_C=out_C),
    }
    figures = figures_of(drawn("condenser", ports))
    for figure in ("ttd", "ua"):
        assert bool(figures[figure].flag[0] & Flag.SECOND_LAW) is flagged


# Vessels that store


def _filling(kind, edges, **ports):
    """Ports of a vessel at 1.4 bar whose level and pressure move."""
    pressures, levels = edges
    signals = {"pressure": signal(pressures), "level": signal(levels)}
    return drawn(kind, ports, signals=signals, volume="40 m^3", level="L", pressure="P")


@settings(max_examples=40, deadline=None)
@given(st.floats(-0.02, 0.02), st.floats(-3e4, 3e4), st.floats(0.0, 0.3), st.floats(-20.0, 35.0))
def test_fuel_less_product_is_what_is_destroyed_and_vented_while_a_deaerator_fills(
    rise, swell, vent, t0
):
    steam, cold = water("s", 4.0, p_bar=4.0, T_C=165.0), water("c", 30.0, p_bar=4.0, T_C=70.0)
    hot, gone = water("f", 34.0 - vent, p_bar=1.4, x=0.0), water("v", vent, p_bar=1.4, x=1.0)
    box = _filling("deaerator", ([1.4e5, 1.4e5 + swell], [0.7, 0.7 + rise]),
                   steam=steam, water=cold, feedwater=hot, vent=gone)  # fmt: skip
    at = dead(t0)
    counted = balances(box)
    got = account(box, counted, at)
    # What the readings do not close is no part of fuel and product: mass at the outlet's state.
    specific = hot.enthalpy - at.temperature * hot.entropy - at.gibbs
    left = got.destroyed + got.closure + got.unaccounted - counted.mass_imbalance * specific
    assert (got.fuel - got.product)[0] == pytest.approx(
        (left + gone.exergy(at))[0], abs=1e-9 * got.exergy_in[0]
    )


@settings(max_examples=40, deadline=None)
@given(st.floats(-0.02, 0.02), st.floats(-3e4, 3e4), st.floats(-20.0, 35.0))
def test_fuel_less_product_is_what_is_destroyed_while_a_flash_vessel_fills(rise, swell, t0):
    ports = {
        "inlet": water("i", 6.0, p_bar=10.0, x=0.0),
        "steam": water("s", 0.8, p_bar=1.4, x=1.0),
        "condensate": water("c", 5.2, p_bar=1.4, x=0.0),
    }
    box = _filling("flash_vessel", ([1.4e5, 1.4e5 + swell], [0.5, 0.5 + rise]), **ports)
    got = account(box, balances(box), dead(t0))
    left = got.destroyed + got.closure + got.unaccounted
    assert (got.fuel - got.product)[0] == pytest.approx(left[0], abs=1e-9 * got.exergy_in[0])


# Generic control volume


def test_a_control_volume_is_in_service_by_whatever_it_has():
    hot, cold = water("a", 5.0, p_bar=3.0, T_C=90.0), water("b", 4.0, p_bar=3.0, T_C=60.0)
    load = drawn("control_volume", {"inlet": hot, "outlet": cold}).item.kind.load
    assert load(drawn("control_volume", {"inlet": hot, "outlet": cold})) == 5.0
    assert load(drawn("control_volume", {"inlet": heat("q", 1e6, 200.0), "outlet": cold})) == 4.0
    alone = drawn("control_volume", {"inlet": power("w", 1e6), "outlet": heat("q", 1e6)})
    assert np.isnan(load(alone)).all()
