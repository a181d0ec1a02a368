"""Figures of whole windows: the ledger closes, flags travel, windows do not matter."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from small_site import STEADY, readings, times_of, write_site

from connectors.base import Quality
from monitor.figures import compute
from monitor.flags import Flag
from monitor.site.load import load_site

START = 1_771_200_000  # 2026-02-16 00:00 UTC
HOUR = 3600


@pytest.fixture(scope="module")
def site(tmp_path_factory):
    return load_site(write_site(tmp_path_factory.mktemp("small")))


def _cells(site, start=START, end=START + 2 * HOUR, values=None, quality=None):
    return compute(site, readings(times_of(site, start, end), values, quality), start, end).batch


def _one(batch, subject, table="equipment"):
    rows = getattr(batch, table)
    return rows[rows["subject"] == subject].reset_index(drop=True)


def _has(flags, bits):
    return (flags.to_numpy() & int(bits)) != 0


def _left_over(ledger, state):
    return (
        ledger[f"supplied_{state}_kw"]
        - ledger[f"used_{state}_kw"]
        - ledger[f"lost_{state}_kw"]
        - ledger[f"destroyed_{state}_kw"]
        - ledger[f"stored_rate_{state}_kw"]
        - ledger[f"imbalance_{state}_kw"]
    )


@settings(
    max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(
    st.floats(-20, 35), st.floats(950, 1040), st.floats(60, 140), st.floats(430, 520),
    st.floats(15, 24),
)  # fmt: skip
def test_the_ledger_closes_to_rounding_whatever_the_readings_say(site, ta, pa, ft, th, wg):
    batch = _cells(site, values={"TA": ta, "PA": pa, "FT": ft, "TH": th, "WG": wg})
    # Power that the steam cannot give leaves the exhaust without a state: absent, and flagged.
    absent = batch.ledger["supplied_live_kw"].isna()
    assert (absent == _has(batch.ledger["flag"], Flag.MISSING)).all()
    assume(not absent.any())
    supplied = batch.ledger["supplied_live_kw"].abs()
    for state in ("live", "reference"):
        assert (_left_over(batch.ledger, state).abs() <= 1e-9 * supplied).all()


def test_balances_that_close_leave_no_imbalance(site):
    """Every flow here comes from a balance or has no spare one, so nothing is left over."""
    batch = _cells(site)
    assert batch.ledger["imbalance_live_kw"].abs().max() < 1e-6
    assert batch.equipment["mass_imbalance_kg_s"].abs().max() < 1e-9


def test_the_account_at_the_reference_dead_state_does_not_see_the_weather(site):
    cold = _cells(site, values={"TA": -12.0}).ledger
    warm = _cells(site, values={"TA": 33.0}).ledger
    np.testing.assert_allclose(
        cold["destroyed_reference_kw"], warm["destroyed_reference_kw"], rtol=1e-12
    )
    assert (cold["destroyed_live_kw"] < warm["destroyed_live_kw"]).all()


def test_condition_figures_of_the_turbine_do_not_see_the_weather(site):
    cold = _cells(site, values={"TA": -12.0}).conditions
    warm = _cells(site, values={"TA": 33.0}).conditions
    machine = cold["figure"].isin(["eta_s_1", "eta_s_2", "steam_rate"])
    np.testing.assert_allclose(cold["value"][machine], warm["value"][machine], rtol=1e-12)


def test_gauge_pressures_follow_the_barometer(site):
    """T_sat and exergy move with the absolute pressure: 61 bar(g) is 62.005 bar at 1005 mbar."""
    streams = _one(_cells(site), "to_turbine", "streams")
    assert streams["pressure_bar"].to_numpy() == pytest.approx(61.0 + 1.005)


@settings(max_examples=12, deadline=None)
@given(st.permutations(range(4)), st.integers(0, 2**31 - 1))
def test_any_order_and_size_of_windows_gives_the_same_figures(site, order, seed):
    rng = np.random.default_rng(seed)
    end = START + 4 * HOUR
    times = times_of(site, START, end)
    kept = rng.random(len(times)) > 0.3
    noisy = {k: v * (1 + 0.003 * rng.standard_normal(len(times))) for k, v in STEADY.items()}
    read = readings(times[kept], {k: v[kept] for k, v in noisy.items()})
    whole = compute(site, read, START, end).batch
    parts = {k: compute(site, read, START + k * HOUR, START + (k + 1) * HOUR).batch for k in order}
    for table in ("streams", "equipment", "conditions", "ledger"):
        keys = [c for c in ("subject", "figure", "time") if c in getattr(whole, table)]
        joined = pd.concat([getattr(parts[k], table) for k in order], ignore_index=True)
        pd.testing.assert_frame_equal(
            joined.astype(dict.fromkeys(keys, "object")).sort_values(keys, ignore_index=True),
            getattr(whole, table)
            .astype(dict.fromkeys(keys, "object"))
            .sort_values(keys, ignore_index=True),
            check_exact=True,
        )


def test_frost_runs_on_with_ice_as_dead_state_and_says_so(site):
    batch = _cells(site, values={"TA": -14.0})
    assert _has(batch.ledger["flag"], Flag.FREEZING).all()
    assert np.isfinite(batch.ledger["destroyed_live_kw"]).all()
    assert batch.ledger["t0_degc"].to_numpy() == pytest.approx(-14.0)


def test_a_stale_ambient_is_held_and_then_the_reference_stands_in(site):
    """Hold of 1 h in the site file, reference 15 degC; the last ambient reading is at 00:00."""
    times = times_of(site, START, START + 3 * HOUR)
    read = readings(times)
    rows = read.readings
    gone = (rows["tag"] == "TA") & (rows["time"] > pd.Timestamp(START, unit="s", tz="UTC"))
    read = type(read)(rows[~gone])
    ledger = compute(site, read, START, START + 3 * HOUR).batch.ledger
    late = ledger["time"] >= START + 2 * HOUR
    assert ledger.loc[late, "t0_degc"].to_numpy() == pytest.approx(15.0)
    assert _has(ledger.loc[late, "flag"], Flag.DEAD_STATE_HELD).all()
    early = ledger["time"] == START + 1800
    assert ledger.loc[early, "t0_degc"].to_numpy() == pytest.approx(12.0)


def test_a_dead_instrument_makes_its_figures_absent_and_leaves_the_others(site):
    batch = _cells(site, quality={"TX": Quality.BAD})
    turbine, letdown = _one(batch, "turbine"), _one(batch, "letdown")
    assert turbine["destroyed_live_kw"].isna().all()
    assert _has(turbine["flag"], Flag.MISSING).all()
    assert _has(turbine["flag"], Flag.BAD).all()
    assert np.isfinite(letdown["destroyed_live_kw"]).all()
    # A ledger with a hole in it is no ledger: absent, not smaller.
    assert batch.ledger.filter(like="_kw").isna().all(axis=None)
    assert np.isfinite(batch.ledger["t0_degc"]).all()
    assert _has(batch.ledger["flag"], Flag.MISSING).all()


def test_p_and_t_near_saturation_are_flagged_and_not_judged(site):
    """T_sat(12.005 bar) is 187.98 degC (IAPWS R7-97): 188.5 degC fixes no state within 2 K."""
    batch = _cells(site, values={"TX": 188.5})
    stream = _one(batch, "extraction", "streams")
    assert _has(stream["flag"], Flag.NEAR_SATURATION).all()


def test_a_stated_phase_decides_near_saturation(tmp_path):
    changed = write_site(tmp_path, ('temperature = "TX"', 'temperature = "TX"\nphase = "vapour"'))
    site = load_site(changed)
    above = _one(_cells(site, values={"TX": 188.5}), "extraction", "streams")
    below = _one(_cells(site, values={"TX": 187.5}), "extraction", "streams")
    assert not _has(above["flag"], Flag.NEAR_SATURATION | Flag.SIDE_ASSUMED).any()
    assert _has(below["flag"], Flag.SIDE_ASSUMED).all()
    # Saturated vapour at 12.005 bar: h_g = 2784 kJ/kg (IAPWS R7-97, steam tables).
    assert below["enthalpy_kj_kg"].to_numpy() == pytest.approx(2784.0, abs=0.5)


def test_a_moving_load_is_unsteady_and_a_stopped_machine_is_off(site):
    end = START + 4 * HOUR
    times = times_of(site, START, end)
    flow = np.where(times < START + HOUR, 100.0, 60.0)
    turbine = _one(_cells(site, end=end, values={"FT": flow}), "turbine")
    unsteady = _has(turbine["flag"], Flag.UNSTEADY)
    moved = turbine["time"] - (START + HOUR)
    assert not unsteady[moved < 0].any()
    assert unsteady[(moved >= 0) & (moved < 1800)].all()
    assert not unsteady[moved > 1800].any()
    stopped = _one(_cells(site, values={"FT": 0.0, "WG": 0.0, "FX": 0.0}), "turbine")
    assert _has(stopped["flag"], Flag.OFF).all()


def test_a_closed_letdown_that_passes_shows_its_flow(site):
    batch = _cells(site, values={"ZL": 0.0, "FL": 102.0})
    figures = batch.conditions
    passing = figures[figures["figure"] == "passing_flow"]
    assert passing["value"].to_numpy() == pytest.approx(2.0, abs=1e-9)
    open_valve = _cells(site).conditions
    assert open_valve.loc[open_valve["figure"] == "passing_flow", "value"].isna().all()


def test_readings_are_counted_by_the_hour(site):
    batch = _cells(site, quality={"TX": Quality.BAD})
    quality = batch.tag_quality.set_index("tag")
    assert quality.loc["TX", "bad"].tolist() == [60, 60]
    assert quality.loc["PH", "good"].tolist() == [60, 60]
    assert quality.loc["TX", "cells_missing"].tolist() == [12, 12]


def test_a_window_off_the_hour_is_refused(site):
    with pytest.raises(ValueError, match="starts on a full hour"):
        compute(site, readings(times_of(site, START, START + HOUR)), START + 300, START + HOUR)
