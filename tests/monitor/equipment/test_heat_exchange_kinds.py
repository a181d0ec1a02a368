"""Exchanger, closed and open feedwater heater, deaerator: their laws and their figures."""

from __future__ import annotations

import numpy as np
import pytest
from equipment_builders import dead, drawn, figures_of, signal, stated, water
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from monitor.equipment.account import account, balances
from monitor.equipment.heat_transfer import log_mean_difference
from monitor.flags import Flag
from monitor.thermo.water import saturated, state_pt

dead_temperatures = st.floats(-25.0, 38.0)


def _account(box, at):
    counted = balances(box)
    return counted, account(box, counted, at)


def _superheater(hot_flow, cold_flow, hot_T, cold_T, duty_share, drop=0.0, **options):
    """Steam of 60 bar heats steam of 20 bar; the duty is a share of the largest possible."""
    hot_in = water("hi", hot_flow, p_bar=60.0, T_C=hot_T)
    cold_in = water("ci", cold_flow, p_bar=20.0, T_C=cold_T)
    hot_p, cold_p = 60.0 * (1 - drop), 20.0 * (1 - drop)
    coldest = water("x", hot_flow, p_bar=hot_p, T_C=max(cold_T, 280.0)).enthalpy
    hottest = water("y", cold_flow, p_bar=cold_p, T_C=hot_T).enthalpy
    most = min(hot_flow * (hot_in.enthalpy - coldest), cold_flow * (hottest - cold_in.enthalpy))
    duty = duty_share * most
    hot_out = water("ho", hot_flow, p_bar=hot_p, h=hot_in.enthalpy - duty / hot_flow)
    cold_out = water("co", cold_flow, p_bar=cold_p, h=cold_in.enthalpy + duty / cold_flow)
    ports = {"hot_in": hot_in, "hot_out": hot_out, "cold_in": cold_in, "cold_out": cold_out}
    return drawn("exchanger", ports, **options)


@settings(max_examples=60, deadline=None)
@given(
    st.floats(1.0, 50.0),
    st.floats(1.0, 50.0),
    st.floats(420.0, 540.0),
    st.floats(220.0, 300.0),
    st.floats(0.05, 0.9),
    st.floats(0.0, 0.08),
    dead_temperatures,
)
def test_an_exchangers_two_parts_make_up_what_it_destroys(hot, cold, hot_T, cold_T, duty, drop, t0):
    box = _superheater(hot, cold, hot_T, cold_T, duty, drop)
    # A throttle cools real steam a little, which the test's own limit on the duty leaves out.
    assume(box.only("hot_out").temperature[0] > box.only("cold_in").temperature[0] + 8)
    assume(box.only("cold_out").temperature[0] < box.only("hot_in").temperature[0] - 8)
    at = dead(t0)
    _, got = _account(box, at)
    figures = figures_of(box, at)
    scale = float(got.exergy_in[0])
    by_temperature = figures["destroyed_by_temperature"].value[0] * 1e3
    by_pressure = figures["destroyed_by_pressure"].value[0] * 1e3
    assert by_temperature >= -1e-9 * scale
    assert by_pressure >= -1e-9 * scale
    assert by_temperature + by_pressure == pytest.approx(got.destroyed[0], abs=1e-9 * scale)
    assert abs(got.closure[0]) <= 1e-9 * scale
    assert got.fuel[0] - got.product[0] == pytest.approx(got.destroyed[0], abs=1e-9 * scale)


@settings(max_examples=30, deadline=None)
@given(st.floats(0.3, 3.0), dead_temperatures, dead_temperatures)
def test_ua_and_effectiveness_know_no_weather(scale, t0, other):
    box = _superheater(20.0 * scale, 15.0 * scale, 500.0, 240.0, 0.6)
    one, two = figures_of(box, dead(t0)), figures_of(box, dead(other))
    for name in ("ua", "effectiveness"):
        assert one[name].value[0] == two[name].value[0]
    assert one["effectiveness"].value[0] == pytest.approx(60.0, abs=1.0)


def test_an_exchanger_without_a_pressure_drop_read_has_nothing_to_split():
    box = _superheater(20.0, 15.0, 500.0, 240.0, 0.6)
    same = {"pressure": "60 bar(a)", "temperature": "T", "flow": "F"}
    said = stated(hi=same, ho=same, ci=same, co=same)
    figures = figures_of(drawn("exchanger", box.states, statements=said))
    assert set(figures) == {"ua", "effectiveness"}
    said = stated(hi=same, ho=same, ci=same, co=same | {"pressure": "58 bar(a)"})
    figures = figures_of(drawn("exchanger", box.states, statements=said))
    assert {"destroyed_by_temperature", "destroyed_by_pressure"} <= set(figures)


def test_ua_of_an_exchanger_of_liquid_water_is_that_of_the_textbook_formula():
    """Counterflow, from the definition: Q / LMTD, with the differences 30 K and 20 K."""
    hot_in, hot_out = water("hi", 2.0, p_bar=5, T_C=90), water("ho", 2.0, p_bar=5, T_C=60)
    cold_in = water("ci", 1.0, p_bar=5, T_C=40)
    duty = 2.0 * (hot_in.enthalpy - hot_out.enthalpy)
    flow = duty / (state_pt(5e5, 60 + 273.15).enthalpy - cold_in.enthalpy)
    cold_in = water("ci", flow, p_bar=5, T_C=40)
    cold_out = water("co", flow, p_bar=5, T_C=60)
    ports = {"hot_in": hot_in, "hot_out": hot_out, "cold_in": cold_in, "cold_out": cold_out}
    ua = figures_of(drawn("exchanger", ports))["ua"].value[0]
    assert ua == pytest.approx(duty[0] / 1e3 / (10.0 / np.log(30.0 / 20.0)), rel=1e-9)
    parallel = figures_of(drawn("exchanger", ports, arrangement="parallel"))["ua"]
    # Side by side both would leave at 60 degC: no exchanger is long enough.
    assert np.isnan(parallel.value[0])
    assert parallel.flag[0] & Flag.SECOND_LAW


def test_heat_that_would_flow_uphill_is_flagged():
    ports = {
        "hot_in": water("hi", 2.0, p_bar=5, T_C=90),
        "hot_out": water("ho", 2.0, p_bar=5, T_C=60),
        "cold_in": water("ci", 3.0, p_bar=5, T_C=75),
        "cold_out": water("co", 3.0, p_bar=5, T_C=95),
    }
    ua = figures_of(drawn("exchanger", ports))["ua"]
    assert np.isnan(ua.value[0])
    assert ua.flag[0] & Flag.SECOND_LAW


@given(st.floats(0.1, 100.0), st.floats(0.1, 100.0))
def test_the_log_mean_lies_between_geometric_and_arithmetic_mean(a, b):
    """A known inequality of the logarithmic mean."""
    mean = float(log_mean_difference(np.atleast_1d(a), np.atleast_1d(b))[0])
    assert np.sqrt(a * b) * (1 - 1e-9) <= mean <= (a + b) / 2 * (1 + 1e-9)


def _closed_heater(flow, ttd, dca, drain_in=0.0, p_bar=6.0):
    boiling = float(saturated(p_bar * 1e5)[0].temperature) - 273.15
    cold = water("fi", flow, p_bar=90.0, T_C=105.0)
    warm = water("fo", flow, p_bar=88.0, T_C=boiling - ttd)
    drain_T = 105.0 + dca
    bled = water("st", 1.0, p_bar=p_bar, T_C=260.0)
    cascade = water("di", drain_in, p_bar=12.0, x=0.0)
    out = water("dr", 1.0, p_bar=p_bar, T_C=drain_T)
    duty = flow * (warm.enthalpy - cold.enthalpy)
    steam = (duty - drain_in * (cascade.enthalpy - out.enthalpy)) / (bled.enthalpy - out.enthalpy)
    ports = {
        "steam": water("st", steam, p_bar=p_bar, T_C=260.0),
        "drain_in": [cascade] if drain_in else [],
        "feedwater_in": cold,
        "drain": water("dr", steam + drain_in, p_bar=p_bar, T_C=drain_T),
        "feedwater_out": warm,
    }
    return drawn("closed_feedwater_heater", ports)


@settings(max_examples=40, deadline=None)
@given(
    st.floats(5.0, 100.0),
    st.floats(0.5, 15.0),
    st.floats(3.0, 20.0),
    st.floats(0.0, 1.0),
    dead_temperatures,
)
def test_a_closed_heater_closes_and_shows_ttd_and_dca_as_built(flow, ttd, dca, drain_in, t0):
    box = _closed_heater(flow, ttd, dca, drain_in)
    counted, got = _account(box, dead(t0))
    scale = float(got.exergy_in[0])
    assert abs(counted.mass_imbalance[0]) <= 1e-9 * flow
    assert abs(got.closure[0]) <= 1e-9 * scale
    assert got.destroyed[0] >= -1e-9 * scale
    assert got.fuel[0] - got.product[0] == pytest.approx(got.destroyed[0], abs=1e-8 * scale)
    figures = figures_of(box)
    assert figures["ttd"].value[0] == pytest.approx(ttd, abs=1e-6)
    assert figures["dca"].value[0] == pytest.approx(dca, abs=1e-6)
    assert figures["ua"].value[0] > 0


def test_a_desuperheating_zone_may_heat_above_saturation_but_not_above_the_steam():
    possible = figures_of(_closed_heater(20.0, -1.5, 6.0))
    assert possible["ttd"].value[0] == pytest.approx(-1.5, abs=1e-6)
    assert possible["ttd"].flag[0] == 0
    assert np.isnan(possible["ua"].value[0])
    box = _closed_heater(20.0, 3.0, 6.0)
    hotter = {**box.states, "feedwater_out": (water("fo", 20.0, p_bar=88.0, T_C=270.0),)}
    figures = figures_of(drawn("closed_feedwater_heater", hotter))
    assert figures["ttd"].flag[0] & Flag.SECOND_LAW


def test_a_drain_stated_as_saturated_has_no_approach_of_its_own():
    box = _closed_heater(20.0, 3.0, 6.0)
    said = stated(dr={"pressure": "6 bar(a)", "phase": "liquid", "flow": "balance"})
    names = figures_of(drawn("closed_feedwater_heater", box.states, statements=said))
    assert "dca" not in names
    assert "ttd" in names


def _deaerator(flow, p_bar=1.4, vent_share=0.002, subcooling=0.0, **options):
    """A deaerator that closes: steam from the energy balance, vent a share of the feed water."""
    boiling = float(saturated(p_bar * 1e5)[0].temperature) - 273.15
    out = (
        water("fw", flow, p_bar=p_bar, T_C=boiling - subcooling)
        if subcooling
        else water("fw", flow, p_bar=p_bar, x=0.0)
    )
    steam = water("st", 1.0, p_bar=4.0, T_C=165.0)
    cold, back = water("mu", 1.0, p_bar=4.0, T_C=20.0), water("co", 1.0, p_bar=4.0, T_C=85.0)
    vent = water("ve", vent_share * flow, p_bar=p_bar, x=1.0)
    # Half make-up, half condensate: m_s + m_w = flow + vent, energies likewise.
    mean = (cold.enthalpy + back.enthalpy) / 2
    left, energy = flow + vent.mass_flow, out.energy + vent.energy
    m_steam = (energy - left * mean) / (steam.enthalpy - mean)
    half = (left - m_steam) / 2
    ports = {
        "steam": water("st", m_steam, p_bar=4.0, T_C=165.0),
        "water": [water("mu", half, p_bar=4.0, T_C=20.0), water("co", half, p_bar=4.0, T_C=85.0)],
        "feedwater": out,
        "vent": [vent] if vent_share else [],
    }
    return drawn("deaerator", ports, **options)


@settings(max_examples=40, deadline=None)
@given(st.floats(5.0, 100.0), st.floats(1.1, 3.0), st.floats(0.0, 0.01), dead_temperatures)
def test_a_deaerators_fuel_less_product_is_destroyed_or_vented(flow, p_bar, vent, t0):
    box = _deaerator(flow, p_bar, vent)
    at = dead(t0)
    counted, got = _account(box, at)
    scale = float(got.exergy_in[0])
    vented = box.only("vent").exergy(at)[0] if vent else 0.0
    assert abs(counted.energy_imbalance[0]) <= 1e-9 * abs(box.only("feedwater").energy[0])
    assert got.destroyed[0] >= -1e-9 * scale
    assert got.fuel[0] - got.product[0] == pytest.approx(
        got.destroyed[0] + vented, abs=1e-8 * scale
    )


def test_vent_and_excess_steam_are_what_the_deaerator_was_built_with():
    figures = figures_of(_deaerator(40.0, vent_share=0.003))
    assert figures["vent_share"].value[0] == pytest.approx(0.3, rel=1e-9)
    assert figures["steam_excess"].value[0] == pytest.approx(0.0, abs=1e-6)
    assert figures["ttd"].value[0] == pytest.approx(0.0, abs=1e-6)
    box = _deaerator(40.0)
    more = water("st", 1.1 * box.only("steam").mass_flow, p_bar=4.0, T_C=165.0)
    lying = drawn("deaerator", {**box.states, "steam": more})
    assert figures_of(lying)["steam_excess"].value[0] == pytest.approx(10.0, abs=1e-6)


def test_figures_that_the_site_file_makes_nothing_of_are_not_listed():
    box = _deaerator(40.0)
    said = stated(fw={"pressure": "PT", "phase": "liquid", "flow": "balance"})
    solved = drawn("deaerator", box.states, spare={"mass"}, statements=said)
    assert set(figures_of(solved)) == {"vent_share"}
    heater = {k: v for k, v in box.states.items() if k != "vent"}
    assert set(figures_of(drawn("open_feedwater_heater", heater))) == {"ttd", "steam_excess"}


def test_ttd_of_a_deaerator_is_taken_at_its_own_pressure():
    box = _deaerator(40.0, subcooling=1.2)
    assert figures_of(box)["ttd"].value[0] == pytest.approx(1.2, abs=1e-6)
    own = {"pressure": signal([1.5e5, 1.5e5]), "level": signal([0.7, 0.7])}
    kept = drawn("deaerator", box.states, signals=own, volume="40 m^3", level="L", pressure="P")
    higher = float(saturated(1.5e5)[0].temperature - saturated(1.4e5)[0].temperature)
    assert figures_of(kept)["ttd"].value[0] == pytest.approx(1.2 + higher, abs=1e-6)


def test_what_a_deaerator_stores_is_no_imbalance():
    """The level rises: mass and energy in, less what stays, leave by the feed water."""
    p = 1.4e5
    liquid, vapour = saturated(p)
    stored = 40.0 * 0.02 * (1 / liquid.volume - 1 / vapour.volume) / 300.0
    box = _deaerator(40.0 + float(stored), vent_share=0.0)
    ports = {**box.states, "feedwater": water("fw", 40.0, p_bar=1.4, x=0.0)}
    level = {"pressure": signal([p, p]), "level": signal([0.70, 0.72])}
    kept = drawn("deaerator", ports, signals=level, volume="40 m^3", level="L", pressure="P")
    counted, got = _account(kept, dead())
    assert abs(counted.mass_imbalance[0]) <= 1e-9 * 40.0
    # Filling pushes vapour out of the way at its own energy: a small part of the throughput.
    assert abs(counted.energy_imbalance[0]) <= 2e-3 * kept.only("feedwater").energy[0]
    bare = balances(drawn("deaerator", ports))
    assert bare.mass_imbalance[0] == pytest.approx(float(stored), rel=1e-6)
    assert got.destroyed[0] > 0


def test_volume_level_and_pressure_go_together():
    box = _deaerator(40.0)
    with pytest.raises(ValueError, match="go together"):
        drawn("deaerator", box.states, volume="40 m^3")
