"""Condition figures of headers, let-downs, condensers, boilers, pumps, users and accumulators."""

from __future__ import annotations

import numpy as np
import pytest
from equipment_builders import (
    NO_FLAG,
    dead,
    drawn,
    figures_of,
    fuel,
    heat,
    power,
    signal,
    stated,
    water,
)
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.equipment.base import StreamState
from monitor.equipment.solve import with_flow
from monitor.flags import Flag
from monitor.thermo.water import saturated, saturation_temperature, state_ps

# Header


@settings(max_examples=30, deadline=None)
@given(st.floats(2.0, 60.0), st.floats(0.02, 0.98))
def test_pressure_loss_of_a_header_is_free_of_its_load(flow, share):
    """Two equal pipes, dp = K m^2 v in each with K = 500 1/m^4, however the flow is split."""
    inlets = []
    for name, m in (("a", share * flow), ("b", (1 - share) * flow)):
        p = 12.0
        for _ in range(40):
            p = 12.0 + 500.0 * m**2 * water(name, m, p_bar=p, T_C=250.0).volume[0] / 1e5
        inlets.append(water(name, m, p_bar=p, T_C=250.0))
    out = water("out", flow, p_bar=12.0, T_C=250.0)
    figure = figures_of(drawn("header", {"inlet": inlets, "outlet": out}))
    assert figure["pressure_loss_coefficient"].value[0] == pytest.approx(500.0, rel=1e-6)


def test_a_pipe_with_a_valve_in_it_can_be_left_out_of_a_headers_pressure_loss():
    a, b = water("a", 9.0, p_bar=12.2, T_C=250.0), water("b", 2.0, p_bar=30.0, T_C=300.0)
    ports = {"inlet": [a, b], "outlet": water("out", 11.0, p_bar=12.0, T_C=255.0)}
    box = drawn("header", ports, pressure_loss_from=["a"])
    expected = 0.2e5 / (81.0 * a.volume[0])
    got = figures_of(box)["pressure_loss_coefficient"].value[0]
    assert got == pytest.approx(expected, rel=1e-9)
    assert box.item.kind.complain(box.item, {}) == []
    (text,) = box.item.kind.complain(drawn("header", ports, pressure_loss_from=["c"]).item, {})
    assert "no inlet: a, b" in text


def test_a_pipe_without_flow_takes_no_figure_of_a_header_away():
    """A dead branch whose gauges are gone: NaN throughout but for its flow, which is zero."""
    a, out = water("a", 9.0, p_bar=12.2, T_C=250.0), water("out", 9.0, p_bar=12.0, T_C=245.0)
    still = with_flow(StreamState.absent("water", 1, "x"), np.zeros(1), NO_FLAG)
    whole = figures_of(drawn("header", {"inlet": a, "outlet": out}))
    lame = figures_of(drawn("header", {"inlet": [a, still], "outlet": [still, out]}))
    assert {k: v.value[0] for k, v in lame.items()} == {k: v.value[0] for k, v in whole.items()}
    assert all(np.isfinite(v.value[0]) for v in whole.values())


def test_a_header_read_by_one_gauge_has_no_pressure_loss_to_show():
    steam, out = water("a", 9.0, p_bar=12.0, T_C=250.0), water("b", 9.0, p_bar=12.0, T_C=250.0)
    one = {"pressure": "PT-12", "temperature": "TT-12", "flow": "FT"}
    ports = {"inlet": steam, "outlet": out}
    figures = figures_of(drawn("header", ports, statements=stated(a=one, b=one)))
    assert set(figures) == {"unaccounted_flow"}
    other = one | {"pressure": "PT-13"}
    figures = figures_of(drawn("header", ports, statements=stated(a=one, b=other)))
    assert figures["pressure_loss_coefficient"].value[0] == 0.0
    fixed = [one | {"pressure": p} for p in ("12 bar(a)", "11 bar(a)")]
    figures = figures_of(drawn("header", ports, statements=stated(a=fixed[0], b=fixed[1])))
    assert "pressure_loss_coefficient" not in figures


# Let-down


def _letdown(flow, position, outlet_bar=4.0, **options):
    inlet = water("in", flow, p_bar=12.0, T_C=250.0)
    out = water("out", flow, p_bar=outlet_bar, h=inlet.enthalpy)
    at = {"position": signal([position, position])}
    return drawn("letdown", {"inlet": inlet, "outlet": out}, signals=at, position="Z", **options)


def test_flow_coefficient_is_that_of_the_standards_own_units():
    """IEC 60534-2-1: W = 31.6 Kv Y sqrt(x p1 rho1) in kg/h, bar, kg/m3 (N6, from memory)."""
    box = _letdown(3.0, 0.5, outlet_bar=10.0)
    inlet = box.only("inlet")
    x, choked = 2.0 / 12.0, 1.3 / 1.4 * 0.7
    expansion = 1 - x / (3 * choked)
    kv = 3.0 * 3600 / (31.6 * expansion * np.sqrt(x * 12.0 / inlet.volume[0]))
    got = figures_of(box)["flow_coefficient"].value[0]
    assert got == pytest.approx(kv / 0.5, rel=1e-3)


@settings(max_examples=40, deadline=None)
@given(st.floats(0.05, 1.0), st.floats(1.0, 11.0), st.sampled_from(["linear", "equal_percentage"]))
def test_a_sound_valves_coefficient_knows_neither_opening_nor_pressure(position, behind, form):
    inlet = water("in", 1.0, p_bar=12.0, T_C=250.0)
    share = position if form == "linear" else 50.0 ** (position - 1)
    choked = 1.3 / 1.4 * 0.7
    x = min(1 - behind / 12.0, choked)
    root = np.sqrt(x * 12e5 / inlet.volume[0])
    flow = 200.0 * share / 36000 * (1 - x / (3 * choked)) * root
    got = figures_of(_letdown(flow, position, behind, characteristic=form))["flow_coefficient"]
    assert got.value[0] == pytest.approx(200.0, rel=1e-9)


def test_a_closed_valve_has_a_passing_flow_and_an_open_one_a_coefficient():
    closed, opened = figures_of(_letdown(0.4, 0.0)), figures_of(_letdown(4.0, 0.6))
    assert closed["passing_flow"].value[0] == pytest.approx(1.44)
    assert np.isnan(closed["flow_coefficient"].value[0])
    assert np.isnan(opened["passing_flow"].value[0])
    assert opened["flow_coefficient"].value[0] > 0


# Condenser


def _condenser(flow, inlet_C, ua, **options):
    """A condenser of known UA: the cooling water's rise follows from its effectiveness."""
    cold = water("ci", flow, p_bar=2.5, T_C=inlet_C)
    boiling = 313.15
    p = saturated(np.atleast_1d(0.0738e5))[0]
    boiling = float(p.temperature[0])
    capacity = flow * 4180.0
    warm_K = boiling - (boiling - cold.temperature[0]) * np.exp(-ua / capacity)
    warm = water("co", flow, p_bar=2.2, T_C=warm_K - 273.15)
    duty = float((warm.energy - cold.energy)[0])
    steam = water("st", 1.0, p_bar=0.0738, x=0.92)
    condensate = water("hw", 1.0, p_bar=0.0738, x=0.0)
    m = duty / float((steam.enthalpy - condensate.enthalpy)[0])
    ports = {
        "steam": water("st", m, p_bar=0.0738, x=0.92),
        "cooling_in": cold,
        "condensate": water("hw", m, p_bar=0.0738, x=0.0),
        "cooling_out": warm,
    }
    return drawn("condenser", ports, **options)


def test_cleanliness_is_ua_over_the_designs_at_the_days_cooling_water():
    figures = figures_of(_condenser(600.0, 15.0, 2400e3, design_ua="3000 kW/K"))
    # The test's own water has a heat capacity of 4.18 kJ/(kg K), so the UA is met within 0.5 %.
    assert figures["ua"].value[0] == pytest.approx(2400.0, rel=5e-3)
    assert figures["cleanliness"].value[0] == pytest.approx(80.0, rel=5e-3)
    half = {"design_ua": "3000 kW/K", "design_cooling_flow": "1200 kg/s"}
    corrected = figures_of(_condenser(600.0, 15.0, 2400e3, **half))["cleanliness"]
    expected = figures["cleanliness"].value[0] * np.sqrt(2.0)
    assert corrected.value[0] == pytest.approx(expected, rel=1e-9)
    warm = {
        "design_ua": "3000 kW/K",
        "design_cooling_temperature": "25 degC",
        "ua_per_kelvin": 0.01,
    }
    colder = figures_of(_condenser(600.0, 15.0, 2400e3, **warm))["cleanliness"]
    assert colder.value[0] == pytest.approx(figures["cleanliness"].value[0] / 0.9, rel=1e-9)


def test_one_fouling_is_judged_once():
    box = _condenser(600.0, 15.0, 2400e3)
    (plain,) = (f for f in box.item.kind.figures(box.item) if f.judged)
    assert plain.name == "ua"
    box = _condenser(600.0, 15.0, 2400e3, design_ua="3000 kW/K")
    (judged,) = (f for f in box.item.kind.figures(box.item) if f.judged)
    assert judged.name == "cleanliness"
    with pytest.raises(ValueError, match="design_cooling_temperature"):
        _condenser(600.0, 15.0, 2400e3, ua_per_kelvin=0.01)


# Boiler


def _boiler(**more):
    ports = {
        "fuel": fuel("f", 2.0, heating_value=48e6, ratio=1.04),
        "feedwater": water("fw", 31.0, p_bar=80.0, T_C=130.0),
        "steam": water("st", 30.0, p_bar=62.0, T_C=470.0),
        "blowdown": water("bd", 1.0, p_bar=64.0, x=0.0),
    }
    return drawn("boiler", ports | more)


def test_exergetic_efficiency_of_a_boiler_tells_the_boiler_and_not_the_day():
    box = _boiler()
    summer, winter = figures_of(box, dead(35.0)), figures_of(box, dead(-20.0))
    standard = dead(15.0, 1.01325)
    spent, made = box.item.kind.fuel(box, standard)
    for figures in (summer, winter):
        got = figures["exergetic_efficiency"].value[0]
        assert got == pytest.approx(100 * float(made[0] / spent[0]), rel=1e-9)
    assert 35 < summer["exergetic_efficiency"].value[0] < 50
    assert summer["blowdown_share"].value[0] == pytest.approx(100 / 31)


def test_a_loss_that_closes_the_balance_is_no_measured_loss():
    losses = {"loss": [heat("stack", 9.6e6, 130.0), heat("casing", 0.96e6, 40.0)]}
    assert figures_of(_boiler(**losses))["loss_share"].value[0] == pytest.approx(11.0)
    assert "loss_share" not in figures_of(_boiler())
    solved = stated(stack={"medium": "heat", "heat": "balance"})
    box = _boiler(loss=losses["loss"][0])
    assert "loss_share" not in figures_of(drawn("boiler", box.states, statements=solved))


# Pump


def _pump(efficiency, drive=1.0, **options):
    inlet = water("in", 40.0, p_bar=2.0, T_C=105.0)
    ideal = state_ps(80e5, inlet.entropy).enthalpy - inlet.enthalpy
    outlet = water("out", 40.0, p_bar=80.0, h=inlet.enthalpy + ideal / efficiency)
    shaft = power("w", 40.0 * ideal / efficiency / drive)
    return drawn("pump", {"inlet": inlet, "power": shaft, "outlet": outlet}, **options)


@given(st.floats(0.3, 0.95), st.floats(0.85, 1.0))
@settings(max_examples=30, deadline=None)
def test_a_pumps_temperature_rise_tells_the_pump_and_its_power_the_drive_too(eta, drive):
    figures = figures_of(_pump(eta, drive))
    assert figures["thermodynamic_efficiency"].value[0] == pytest.approx(100 * eta, rel=1e-4)
    assert figures["eta_s"].value[0] == pytest.approx(100 * eta * drive, rel=1e-6)


def test_with_one_of_power_and_temperature_a_pump_has_one_efficiency():
    said = stated(w={"medium": "power", "power": "balance"})
    box = _pump(0.7, spare={"mass"}, statements=said)
    (figure,) = box.item.kind.figures(box.item)
    assert (figure.name, figure.label) == ("eta_s", "isentropic efficiency")
    assert figures_of(box)["eta_s"].value[0] == pytest.approx(70.0, rel=1e-6)


def test_water_that_leaves_a_pump_too_cold_is_flagged():
    box = _pump(0.7)
    cold = {**box.states, "outlet": (water("out", 40.0, p_bar=80.0, T_C=105.1),)}
    figure = figures_of(drawn("pump", cold))["thermodynamic_efficiency"]
    assert figure.value[0] > 100
    assert figure.flag[0] & Flag.SECOND_LAW


# User


def _user(duty, process_C, **options):
    steam, back = water("st", 5.0, p_bar=4.0, T_C=160.0), water("co", 5.0, p_bar=4.0, T_C=95.0)
    ports = {"steam": steam, "condensate": back, "heat": heat("q", duty, process_C)}
    return drawn("user", ports, **options)


def test_ua_of_a_user_is_its_duty_per_kelvin_below_saturation():
    difference = float(saturation_temperature(4e5)) - 383.15
    figures = figures_of(_user(11e6, 110.0))
    assert figures["ua"].value[0] == pytest.approx(11e3 / difference, rel=1e-9)
    uphill = figures_of(_user(11e6, 150.0))["ua"]
    assert np.isnan(uphill.value[0])
    assert uphill.flag[0] & Flag.SECOND_LAW


def test_a_user_at_the_dead_state_has_no_process_temperature_to_tell_a_ua():
    said = stated(q={"medium": "heat", "heat": "balance"})
    assert "ua" not in figures_of(_user(11e6, None, statements=said))
    known = stated(q={"medium": "heat", "heat": "balance", "boundary_temperature": "TT"})
    assert "ua" in figures_of(_user(11e6, 110.0, statements=known))


# Accumulator


def _vessel(pressures, levels, discharge=0.0):
    ports = {"discharge": water("d", discharge, p_bar=8.0, x=1.0)}
    signals = {"pressure": signal(pressures), "level": signal(levels)}
    return drawn("accumulator", ports, signals=signals, volume="60 m^3", level="L", pressure="P")


def _cooled(loss, seconds, discharge=0.0):
    """Pressure and level after a vessel of 8 bar, 70 % has lost heat and a little steam."""
    liquid, vapour = saturated(np.atleast_1d(8e5))
    m_l, m_v = 42.0 / liquid.volume, 18.0 / vapour.volume
    mass = m_l + m_v - discharge * seconds
    u = m_l * liquid.internal_energy + m_v * vapour.internal_energy
    energy = u - (loss + discharge * vapour.enthalpy) * seconds
    low, high = 5e5, 8e5
    for _ in range(80):
        p = np.atleast_1d((low + high) / 2)
        liquid, vapour = saturated(p)
        x = (60.0 / mass - liquid.volume) / (vapour.volume - liquid.volume)
        here = liquid.internal_energy + x * (vapour.internal_energy - liquid.internal_energy)
        low, high = (low, p[0]) if (mass * here)[0] > energy[0] else (p[0], high)
    return p[0], float(((1 - x) * mass * liquid.volume / 60.0)[0])


def test_stored_exergy_is_that_of_two_independent_libraries():
    """Own example, tests/reference (accumulator charging, E1): 4620.72 MJ at 12 degC, 1.004 bar."""
    ports = {"discharge": water("d", 0.0, p_bar=7.8, x=1.0)}
    signals = {"pressure": signal([7.5e5, 7.8e5]), "level": signal([0.7, 0.72])}
    box = drawn("accumulator", ports, signals=signals, volume="52 m^3", level="L", pressure="P")
    got = figures_of(box, dead(12.0, 1.004))["stored_exergy"].value[0]
    assert got == pytest.approx(4620.72 / 3.6, abs=0.5 / 3.6)


@pytest.mark.parametrize("discharge", [0.0, 0.2])
def test_a_standing_vessel_loses_what_it_was_made_to_lose_even_while_a_little_flows(discharge):
    p, level = _cooled(50e3, 300.0, discharge)
    figures = figures_of(_vessel([8e5, p], [0.7, level], discharge), dead(10.0))
    assert figures["standing_loss"].value[0] == pytest.approx(50.0, abs=0.5)
    difference = float(saturation_temperature(8e5)) - 283.15
    coefficient = figures["heat_loss_coefficient"].value[0]
    assert coefficient == pytest.approx(50.0 / difference, rel=0.02)


def test_a_levels_noise_does_not_pass_for_megawatts():
    """Half a per cent of level is 0.26 t of hot water: 700 kW over five minutes as energy."""
    p, level = _cooled(50e3, 300.0)
    noisy = figures_of(_vessel([8e5, p], [0.7, level - 0.005]))
    assert noisy["standing_loss"].value[0] == pytest.approx(50.0, abs=15.0)


def test_an_accumulator_at_work_has_no_standing_loss():
    figures = figures_of(_vessel([8e5, 7.9e5], [0.7, 0.69], discharge=2.0))
    assert np.isnan(figures["standing_loss"].value[0])


def test_a_periods_psi_of_an_accumulator_is_exergy_returned_over_exergy_stored():
    """Charged and discharged to where it began: fuel is what was charged, product what came out."""
    charge = water("c", [3.0, 0.0], p_bar=12.0, T_C=220.0)
    discharge = water("d", [0.0, 3.1], p_bar=8.0, x=1.0)
    signals = {"pressure": signal([8e5, 9e5, 8e5]), "level": signal([0.7, 0.715, 0.7])}
    box = drawn(
        "accumulator", {"charge": charge, "discharge": discharge},
        signals=signals, volume="60 m^3", level="L", pressure="P",
    )  # fmt: skip
    at = dead()
    spent, made = box.item.kind.fuel(box, at)
    assert spent.sum() == pytest.approx(charge.exergy(at).sum(), rel=1e-9)
    assert made.sum() == pytest.approx(discharge.exergy(at).sum(), rel=1e-12)
    assert 0.5 < made.sum() / spent.sum() < 1.0
