from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from scipy.signal import lfilter

from monitor.drift.charts import (
    ChartError,
    alarm_condition,
    average_run_length,
    change_point,
    cusum,
    ewma,
    ewma_limit_width,
    ewma_sigma,
    ewma_variance,
)

REFERENCE = Path(__file__).parents[2] / "reference"
CHARTS = pd.read_csv(REFERENCE / "control_charts.csv")
DATA = pd.read_csv(REFERENCE / "control_chart_data.csv")
RUN_LENGTHS = pd.read_csv(REFERENCE / "control_ewma_run_lengths.csv")
residuals = hnp.arrays(np.float64, st.integers(1, 60), elements=st.floats(-1e3, 1e3))


def data(name):
    return DATA[DATA["dataset"] == name]


def published(case, quantity):
    row = CHARTS[(CHARTS["case"] == case) & (CHARTS["quantity"] == quantity)].iloc[0]
    return pytest.approx(row["value"], abs=row["tol"] + 1e-9)  # the binary fraction of a tie


def shifted(case, width):
    rows = CHARTS[(CHARTS["case"] == case) & CHARTS["parameters"].str.contains(width, regex=False)]
    return [
        (float(p.rsplit("=", 1)[1]), float(v), float(t))
        for p, v, t in zip(rows["parameters"], rows["value"], rows["tol"], strict=True)
    ]


# --- NIST/SEMATECH e-Handbook 6.3.2.4 ------------------------------------------------------------


def test_the_handbook_s_ewma_sequence_comes_out():
    rows = data("nist_ewma")
    found = ewma(rows["x"], 0.3, start=50.0)
    np.testing.assert_allclose(found, rows["expected_2"], atol=1e-9)
    np.testing.assert_allclose(found, rows["expected_1"], atol=0.0051)  # printed to two decimals


def test_the_handbook_s_ewma_limits_come_out():
    sigma = ewma_sigma(2.0539, 0.3)
    assert sigma / 2.0539 == published("nist_ewma", "sqrt(lambda/(2-lambda))")
    assert 50 + 3 * sigma == published("nist_ewma", "UCL")
    assert 50 - 3 * sigma == published("nist_ewma", "LCL")
    first = 50 + 3 * 2.0539 * float(np.sqrt(ewma_variance(1, 0.3)))
    assert first == published("nist_ewma", "UCL_1")
    residual = data("nist_ewma")["x"].to_numpy() - 50
    calls = alarm_condition(ewma(residual, 0.3), 3 * sigma, 0.0, "both")
    assert calls.sum() == published("nist_ewma", "signals")


# --- run lengths ---------------------------------------------------------------------------------


@pytest.mark.parametrize("row", list(RUN_LENGTHS.itertuples()))
def test_run_lengths_are_those_of_lucas_and_saccucci(row):
    found = average_run_length(row.weight, row.width, row.shift_sigma)
    assert found == pytest.approx(row.average_run_length, rel=row.tol_rel)


@pytest.mark.parametrize(("shift", "value", "tol"), shifted("shewhart_arl", "L=3"))
def test_a_weight_of_one_is_a_shewhart_chart(shift, value, tol):
    assert average_run_length(1.0, 3.0, shift) == pytest.approx(value, abs=tol)


@pytest.mark.parametrize("weight", [0.02, 0.1, 0.3, 1.0])
@pytest.mark.parametrize("hours", [50.0, 8766.0, 87660.0])
def test_the_limit_gives_the_run_length_it_was_asked_for(weight, hours):
    width = ewma_limit_width(weight, hours)
    assert average_run_length(weight, width) == pytest.approx(hours, rel=1e-4)


def test_one_limit_alone_signals_half_as_often_as_two():
    # Rare signals of the two sides are nearly independent.
    two = average_run_length(0.1, 3.5)
    assert average_run_length(0.1, 3.5, worse="low") == pytest.approx(2 * two, rel=0.01)
    assert ewma_limit_width(0.1, 8000.0, "high") < ewma_limit_width(0.1, 8000.0, "both")


def test_a_shift_towards_the_only_limit_is_found_as_by_two():
    two = average_run_length(0.1, 2.814, 1.0)
    assert average_run_length(0.1, 2.814, 1.0, "high") == pytest.approx(two, rel=1e-3)
    assert average_run_length(0.1, 2.814, -1.0, "low") == pytest.approx(two, rel=1e-3)


def first_passage(calls):
    """Run lengths of simulated charts, NaN for those that never signal."""
    return np.where(calls.any(axis=1), calls.argmax(axis=1) + 1.0, np.nan)


@pytest.mark.parametrize(("worse", "shift"), [("both", 0.0), ("low", 0.0), ("both", 0.75)])
def test_simulated_charts_run_as_long_as_designed(worse, shift):
    rng = np.random.default_rng(20)
    wanted = 150.0
    width = ewma_limit_width(0.1, wanted, worse)
    z = ewma(rng.normal(shift, 1.0, (3000, 1500)), 0.1)
    runs = first_passage(alarm_condition(z, width * ewma_sigma(1.0, 0.1), 0.0, worse))
    expected = wanted if shift == 0 else average_run_length(0.1, width, shift)
    # 3000 runs with a spread like their mean: 1.8 % standard error. The chance of a run beyond
    # 1500 hours is e^-10.
    assert np.nanmean(runs) == pytest.approx(expected, rel=0.06)


def test_a_two_sigma_step_is_found_within_the_published_ballpark():
    rng = np.random.default_rng(4)
    width = 2.814  # Lucas and Saccucci: in control 500, at two sigma 4.36
    z = ewma(rng.normal(2.0, 1.0, (4000, 60)), 0.1)
    runs = first_passage(alarm_condition(z, width * ewma_sigma(1.0, 0.1), 0.0, "both"))
    assert np.nanmean(runs) == pytest.approx(4.36, abs=0.1)


@pytest.mark.parametrize(("shift", "value", "tol"), shifted("cusum_arl_two_sided", "h=4"))
def test_the_cusum_runs_as_long_as_lucas_and_crosier_say(shift, value, tol):
    rng = np.random.default_rng(9)
    runs = 1500
    steps = int(12 * value) + 20
    up, down = cusum(rng.normal(shift, 1.0, (runs, steps)), 0.5)
    found = first_passage((up > 4) | (down > 4))
    error = np.nanstd(found) / np.sqrt(runs)
    assert np.nanmean(found) == pytest.approx(value, abs=4 * error + tol)


# --- autocorrelated residuals --------------------------------------------------------------------


@pytest.mark.parametrize("phi", [0.0, 0.4, 0.8, 0.9])
def test_the_exact_variance_is_what_a_simulation_gives(phi):
    rng = np.random.default_rng(8)
    shocks = rng.normal(size=(20000, 120)) * np.sqrt(1 - phi**2)
    shocks[:, 0] /= np.sqrt(1 - phi**2)
    z = ewma(lfilter([1.0], [1.0, -phi], shocks, axis=1), 0.1)
    at = np.array([1, 2, 5, 20, 120])
    # A variance from 20 000 samples has a standard error of 1 %.
    np.testing.assert_allclose(z[:, at - 1].var(axis=0), ewma_variance(at, 0.1, phi), rtol=0.04)


@settings(deadline=None)
@given(weight=st.floats(0.01, 1.0), phi=st.floats(0.0, 0.95))
def test_the_exact_variance_ends_at_the_published_one(weight, phi):
    long = float(ewma_variance(5000, weight, phi))
    assert long == pytest.approx(ewma_sigma(1.0, weight, phi) ** 2, rel=1e-9)


def test_the_start_up_variance_of_independent_hours_is_the_textbook_s():
    i = np.arange(1, 40)
    textbook = 0.2 / 1.8 * (1 - 0.8 ** (2 * i))  # Montgomery, EWMA control limits; from memory
    np.testing.assert_allclose(ewma_variance(i, 0.2), textbook, rtol=1e-12)
    assert ewma_variance(0, 0.2) == 0.0


def test_limits_for_memory_keep_false_alarms_away():
    rng = np.random.default_rng(14)
    phi, wanted = 0.7, 150.0
    shocks = rng.normal(size=(1500, 3000)) * np.sqrt(1 - phi**2)
    z = ewma(lfilter([1.0], [1.0, -phi], shocks, axis=1), 0.1)
    width = ewma_limit_width(0.1, wanted)
    naive = first_passage(np.abs(z) > width * ewma_sigma(1.0, 0.1))
    right = first_passage(np.abs(z) > width * ewma_sigma(1.0, 0.1, phi))
    assert np.nanmean(naive) < wanted / 3
    assert np.nanmean(right) > wanted


# --- gaps and laws -------------------------------------------------------------------------------


@settings(deadline=None)
@given(residual=residuals, weight=st.floats(0.01, 1.0))
def test_the_ewma_is_its_definition(residual, weight):
    z, expected = 0.0, []
    for r in residual:
        z = (1 - weight) * z + weight * r
        expected.append(z)
    np.testing.assert_allclose(ewma(residual, weight), expected, rtol=1e-9, atol=1e-9)


@settings(deadline=None)
@given(residual=residuals, gaps=st.integers(0, 2**32 - 1))
def test_a_gap_holds_the_statistic_and_counts_for_nothing(residual, gaps):
    rng = np.random.default_rng(gaps)
    holes = rng.random(residual.size) < 0.3
    holed = np.where(holes, np.nan, residual)
    z = ewma(holed, 0.2, start=1.0)
    np.testing.assert_array_equal(z[~holes], ewma(residual[~holes], 0.2, start=1.0))
    held = np.concatenate([[1.0], z[:-1]])
    np.testing.assert_array_equal(z[holes], held[holes])
    up, _ = cusum(holed, 0.5)
    np.testing.assert_allclose(up[~holes], cusum(residual[~holes], 0.5)[0], atol=1e-8)


@settings(deadline=None)
@given(residual=residuals, cut=st.integers(0, 60))
def test_a_chart_goes_on_from_where_it_stood(residual, cut):
    cut = min(cut, residual.size)
    whole = ewma(residual, 0.1)
    before = ewma(residual[:cut], 0.1)
    after = ewma(residual[cut:], 0.1, start=before[-1] if cut else 0.0)
    np.testing.assert_allclose(np.concatenate([before, after]), whole, rtol=1e-12, atol=1e-12)


def test_several_charts_with_gaps_are_each_their_own():
    rows = np.array([[1.0, np.nan, 3.0], [np.nan, np.nan, np.nan]])
    found = ewma(rows, 0.5)
    np.testing.assert_allclose(found, [[0.5, 0.5, 1.75], [0.0, 0.0, 0.0]])


def test_nothing_judged_stays_at_the_start():
    assert ewma([np.nan, np.nan], 0.1, start=2.0).tolist() == [2.0, 2.0]
    assert ewma([], 0.1).size == 0


@pytest.mark.parametrize("weight", [0.0, -0.1, 1.1, np.nan])
def test_an_impossible_weight_is_refused(weight):
    with pytest.raises(ChartError, match="above 0 and at most 1"):
        ewma([1.0], weight)


@pytest.mark.parametrize("hours", [1.0, np.nan, np.inf, 1e30])
def test_a_run_length_that_no_limit_gives_is_refused(hours):
    with pytest.raises(ChartError, match="false alarm every"):
        ewma_limit_width(0.1, hours)


# --- CUSUM and the start of a shift --------------------------------------------------------------


def test_the_handbook_s_cusum_comes_out():
    rows = data("nist_cusum")
    up, down = cusum(rows["x"].to_numpy() - 325.0, 0.3175)
    np.testing.assert_allclose(up, rows["expected_1"], atol=1e-9)
    np.testing.assert_allclose(down, rows["expected_2"], atol=1e-9)
    assert np.argmax(up > 4.1959) + 1 == published("nist_cusum", "first_signal_index")
    assert up[-1] == published("nist_cusum", "S_hi_20")
    assert down.max() == published("nist_cusum", "max_S_lo")


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_the_start_of_a_step_is_dated_within_hours(sign):
    rng = np.random.default_rng(6)
    errors = []
    for _ in range(200):
        residual = rng.normal(0.0, 1.0, 420)
        residual[400:] += sign * 2.0
        errors.append(change_point(residual, sign * 2.0) - 400)
    # A two-sigma step: the most likely start is rarely off by more than a few hours.
    assert abs(np.median(errors)) <= 1
    assert np.mean(np.abs(errors) <= 3) > 0.8


def test_gaps_do_not_shift_the_date():
    residual = np.concatenate([np.zeros(50), np.full(5, np.nan), np.full(10, -2.0)])
    assert change_point(residual, -2.0) == 55


def test_a_shift_that_was_there_from_the_first_hour_starts_there():
    assert change_point(np.full(10, 2.0), 2.0) == 0


@pytest.mark.parametrize(("residual", "size"), [([np.nan], 1.0), ([], 1.0), ([1.0], 0.0)])
def test_nothing_to_date_is_refused(residual, size):
    with pytest.raises(ChartError, match="no shift to date"):
        change_point(residual, size)


# --- the alarm's criterion -----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("worse", "expected"),
    [
        ("low", [True, False, False, False, False]),
        ("high", [False, False, False, True, False]),
        ("both", [True, False, False, True, False]),
    ],
)
def test_an_alarm_needs_a_change_for_the_worse_beyond_limit_and_smallest_change(worse, expected):
    z = np.array([-2.0, -0.8, 0.8, 2.0, np.nan])
    assert alarm_condition(z, 0.5, 1.0, worse).tolist() == expected
    assert not alarm_condition(z, 3.0, 1.0, worse).any()
    assert not alarm_condition(z, np.nan, 1.0, worse).any()
