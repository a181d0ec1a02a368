"""Spread and drift over a trailing window, against their definitions and their laws."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import linregress

from monitor.readings.steadiness import drift, just_started, spread, unsteady

series = st.lists(st.one_of(st.floats(-100, 100), st.just(np.nan)), min_size=1, max_size=40).map(
    np.array
)


@settings(max_examples=150, deadline=None)
@given(series, st.integers(2, 12))
def test_the_drift_is_the_regression_lines_rise_over_the_window(values, cells):
    """Against scipy's linear regression, window by window."""
    got = drift(values, cells)
    for k in range(len(values)):
        part = values[max(0, k - cells + 1) : k + 1]
        known = np.isfinite(part)
        if known.sum() < 3 or not known[-1]:
            assert np.isnan(got[k])
            continue
        at = np.flatnonzero(known)
        rise = linregress(at, part[known]).slope * (at[-1] - at[0])
        np.testing.assert_allclose(got[k], rise, atol=1e-9, rtol=1e-9)


@given(st.floats(1, 1e3), st.floats(-0.01, 0.01), st.integers(3, 12))
def test_a_ramp_drifts_by_its_own_rise(level, slope, cells):
    values = level * (1 + slope * np.arange(40))
    rise = level * slope * (cells - 1)
    np.testing.assert_allclose(drift(values, cells)[cells - 1 :], rise, atol=1e-9 * level)
    np.testing.assert_allclose(spread(values, cells)[cells - 1 :], abs(rise), atol=1e-9 * level)


@given(series, st.integers(2, 12), st.integers(0, 39))
def test_a_verdict_is_the_same_to_the_last_bit_in_any_window(values, cells, first):
    first = min(first, len(values) - 1)
    read = max(0, first - cells + 1)
    for measure in (spread, drift):
        whole, part = measure(values, cells), measure(values[read:], cells)
        np.testing.assert_array_equal(part[first - read :], whole[first:])


@given(st.floats(0.1, 1e6), st.integers(2, 12), st.floats(1e-6, 1), st.floats(1e-6, 1))
def test_a_constant_is_steady_by_any_limits(level, cells, spread_limit, drift_limit):
    assert not unsteady(np.full(20, level), cells, spread_limit, drift_limit).any()


def test_a_slow_drift_is_told_where_the_spread_still_passes():
    values = 100.0 + np.arange(24.0)
    assert unsteady(values, 7, 0.08, 0.04)[6:18].all()
    assert not unsteady(values, 7, 0.08, 0.07).any()


def test_scatter_about_a_mean_is_told_where_nothing_drifts():
    values = 100.0 + 6.0 * (np.arange(24) % 2)
    assert unsteady(values, 7, 0.05, 0.05)[1:].all()
    assert not unsteady(values, 7, 0.08, 0.05).any()


def test_missing_cells_neither_help_nor_harm():
    values = np.array([100.0, np.nan, 100.0, np.nan, np.nan, 100.0, 140.0])
    assert unsteady(values, 4, 0.08, 0.05).tolist() == [False] * 6 + [True]


def test_a_start_is_told_for_the_window_after_it_and_a_stop_is_not_one():
    off = np.array([False, True, True, False, False, False, False, True])
    assert just_started(off, 3).tolist() == [
        False, False, False, True, True, False, False, False,
    ]  # fmt: skip
