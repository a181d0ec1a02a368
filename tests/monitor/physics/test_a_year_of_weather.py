"""A year of real weather with frost as the dead state: no gap, no jump, the reference untouched."""

from __future__ import annotations

import numpy as np
import pytest
from physics_site import HOUR, build, exergy, last, left_over, rows, run, water
from weather_years import STATIONS, facts, weather

from monitor.flags import Flag
from monitor.thermo.dead_state import dead_state
from monitor.thermo.exergy import flow_exergy, lost_work, nonflow_exergy
from monitor.thermo.water import state_ph, state_pt, state_px

HOURS = 8760


@pytest.mark.parametrize("station", STATIONS)
def test_the_series_is_the_one_whose_facts_are_known(station):
    temperature, pressure = weather(station)
    known = facts(station)
    assert len(temperature) == known["rows", ""][0] == HOURS
    assert temperature.min() == known["min", "temp_air"][0]
    assert temperature.max() == known["max", "temp_air"][0]
    assert (temperature < 0).sum() == known["hours_below_0", "temp_air"][0]
    assert (temperature == 0).sum() == known["hours_at_exactly_0", "temp_air"][0]
    assert pressure.min() * 1000 == pytest.approx(known["min", "pressure"][0])


@pytest.mark.parametrize("station", STATIONS)
def test_a_streams_exergy_over_the_year_is_that_of_independent_libraries(station):
    # tests/reference/ambient_series.csv: iapws with ice Ih, and seuif97 with gsw.
    temperature, pressure = weather(station)
    dead = dead_state(temperature + 273.15, pressure * 1e5)
    steam = state_pt(10.9e5, 478.15)
    found = flow_exergy(steam.enthalpy, steam.entropy, dead) / 1e3
    known = facts(station)
    assert np.isfinite(found).all()
    for name, value in (("mean", found.mean()), ("min", found.min()), ("max", found.max())):
        expected, tolerance = known[f"e_flow_{name}", "temp_air;pressure"]
        assert value == pytest.approx(expected, abs=tolerance)
    assert dead.frozen.sum() == (temperature <= 0.0).sum()


@pytest.mark.parametrize("station", STATIONS)
def test_through_all_frosts_exergy_follows_the_temperature_without_a_jump(station):
    """De/dT0 = -(s - s0): between two hours e moves by that, whether water froze or not."""
    temperature, _ = weather(station)
    ordered = np.unique(temperature) + 273.15  # tenths of a degree
    dead = dead_state(ordered, 1.0e5)
    for state, exergy_of in (
        (state_pt(40e5, 673.15), lambda s: flow_exergy(s.enthalpy, s.entropy, dead)),
        (
            state_px(9e5, 0.02),
            lambda s: nonflow_exergy(s.internal_energy, s.volume, s.entropy, dead),
        ),
    ):
        step, slope = np.diff(exergy_of(state)), -(state.entropy - dead.entropy)
        low, high = np.minimum(slope[1:], slope[:-1]), np.maximum(slope[1:], slope[:-1])
        # Ice Ih and IF97 join within 0.05 J/kg.
        assert np.all(step >= low * np.diff(ordered) - 0.05)
        assert np.all(step <= high * np.diff(ordered) + 0.05)
    assert dead.frozen.any()
    assert not dead.frozen.all()


@pytest.mark.parametrize("station", STATIONS)
def test_destruction_and_the_exergy_balance_agree_in_every_hour(station):
    temperature, pressure = weather(station)
    dead = dead_state(temperature + 273.15, pressure * 1e5)
    before = state_pt(40e5, 673.15)
    after = state_ph(8e5, before.enthalpy)
    drop = flow_exergy(before.enthalpy, before.entropy, dead) - flow_exergy(
        after.enthalpy, after.entropy, dead
    )
    destroyed = lost_work(dead.temperature, after.entropy - before.entropy)
    np.testing.assert_allclose(drop, destroyed, rtol=1e-11)
    # T0 is the true one, frost or not: the loss goes as T0 in kelvin.
    np.testing.assert_allclose(destroyed / destroyed[0], dead.temperature / dead.temperature[0])


@pytest.fixture(scope="module")
def year(tmp_path_factory):
    temperature, pressure = weather(STATIONS[0])
    site = build(
        tmp_path_factory.mktemp("year"),
        {
            "in": {"pressure": "40 bar(a)", "temperature": "400 degC", "flow": "5 kg/s"},
            "out": {"pressure": "8 bar(a)", "temperature": "300 degC", "flow": "5 kg/s"},
        },
        {"valve": {"kind": "letdown", "ports": {"inlet": "in", "outlet": "out"}}},
        {"TA": {"unit": "degC", "hold": "2 h", "spike_window": "0 s"},
         "PA": {"unit": "bar(a)", "hold": "2 h", "spike_window": "0 s"}},
        site={"interval": "1 h"},
    )  # fmt: skip

    def hourly(series):
        return lambda seconds: series[np.clip(seconds // HOUR, 0, HOURS - 1).astype(int)]

    values = {"TA": hourly(temperature), "PA": hourly(pressure)}
    return temperature, pressure, run(site, values, hours=HOURS, step=HOUR)


def test_a_site_runs_through_the_year_without_a_gap(year):
    temperature, pressure, batch = year
    stream = rows(batch.streams, "in")
    valve = rows(batch.equipment, "valve")
    assert len(stream) == len(valve) == len(batch.ledger) == HOURS
    for table, column in (
        (stream, "exergy_live_kw"),
        (valve, "destroyed_live_kw"),
        (batch.ledger, "destroyed_live_kw"),
    ):
        assert np.isfinite(table[column]).all()
    rise = water(8, 300).s - water(40, 400).s
    np.testing.assert_allclose(
        valve["destroyed_live_kw"], 5 * rise * (temperature + 273.15), rtol=1e-7
    )
    for hour in (0, int(temperature.argmin()), int(temperature.argmax()), 4000):
        expected = 5 * exergy(water(40, 400), temperature[hour], pressure[hour])
        assert stream["exergy_live_kw"].iloc[hour] == pytest.approx(expected, rel=1e-7)
    assert left_over(batch.ledger, "live").abs().max() < 1e-8


def test_frost_is_flagged_and_leaves_the_reference_figures_as_they_are(year):
    temperature, _, batch = year
    stream, valve = rows(batch.streams, "in"), rows(batch.equipment, "valve")
    frost = (stream["flag"].to_numpy() & int(Flag.FREEZING)) != 0
    np.testing.assert_array_equal(frost, temperature <= 0.0)
    for table, column in (
        (stream, "exergy_reference_kw"),
        (valve, "destroyed_reference_kw"),
        (batch.ledger, "destroyed_reference_kw"),
    ):
        assert table[column].nunique() == 1
    assert stream["exergy_live_kw"].nunique() > 1000


@pytest.mark.parametrize(
    ("dead", "readings", "celsius", "bar"),
    [
        ({"temperature": "TA", "pressure": "PA"}, {"TA": 21.0, "PA": 0.99}, 21.0, 0.99),
        # The river that the condenser rejects to, and a barometer.
        ({"temperature": "TW", "pressure": "PA"}, {"TA": 30.0, "TW": 8.5, "PA": 0.99}, 8.5, 0.99),
        ({"temperature": "12 degC", "pressure": "PA"}, {"TA": 30.0, "PA": 0.99}, 12.0, 0.99),
        ({"temperature": "12 degC", "pressure": "1 bar(a)"}, {"TA": 30.0, "PA": 0.9}, 12.0, 1.0),
    ],
)  # fmt: skip
def test_a_site_may_take_air_water_or_fixed_surroundings(tmp_path, dead, readings, celsius, bar):
    site = build(
        tmp_path,
        {
            "in": {"pressure": "P", "temperature": "400 degC", "flow": "5 kg/s"},
            "out": {"pressure": "8 bar(a)", "temperature": "300 degC", "flow": "5 kg/s"},
        },
        {"valve": {"kind": "letdown", "ports": {"inlet": "in", "outlet": "out"}}},
        {"TW": {"unit": "degC"}, "P": {"unit": "bar(a)"}},
        dead=dead,
    )
    batch = run(site, {"TW": 50.0, "P": 40.0} | readings)
    expected = 5 * exergy(water(40, 400), celsius, bar)
    assert last(batch.streams, "in", "exergy_live_kw") == pytest.approx(expected, rel=1e-7)
    expected = 5 * exergy(water(40, 400), 15.0, 1.01325)
    assert last(batch.streams, "in", "exergy_reference_kw") == pytest.approx(expected, rel=1e-7)
