from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import lfilter
from statsmodels.regression.linear_model import OLS

from monitor.drift.baseline import LARGEST_AUTOCORRELATION, Baseline, BaselineError, fit_baseline

HOURS = 336
START = 1_700_000_000 // 3600 * 3600


def noise(seed, phi=0.0, n=HOURS):
    rng = np.random.default_rng(seed)
    shocks = rng.normal(size=n) * np.sqrt(1 - phi**2)
    shocks[0] /= np.sqrt(1 - phi**2)
    return lfilter([1.0], [1.0, -phi], shocks)


def hours(n=HOURS):
    return START + 3600 * np.arange(n)


def loads(seed=7, n=HOURS):
    return np.random.default_rng(seed).uniform(18.0, 32.0, n)


def figure(seed=1, phi=0.0, sigma=0.5):
    load = loads()
    return 80.0 + 0.15 * load + sigma * noise(seed, phi), load, hours()


def slope(baseline):
    return baseline.linear / baseline.load_scale


def test_a_clean_reference_gives_what_least_squares_gives():
    value, load, hour = figure()
    fitted = fit_baseline(value, load, hour)
    ols = OLS(value, np.column_stack([np.ones(HOURS), load])).fit()
    at = np.array([20.0, 25.0, 30.0])
    # Estimators of 95 % and 100 % efficiency differ by a part of a standard error (0.05 at the
    # ends).
    np.testing.assert_allclose(fitted.expected(at), ols.params[0] + ols.params[1] * at, atol=0.03)
    assert fitted.sigma == pytest.approx(np.sqrt(ols.scale), rel=0.05)
    assert np.sqrt(fitted.covariance[0]) == pytest.approx(0.5 / np.sqrt(HOURS), rel=0.15)


def test_a_fifth_of_the_hours_wrong_to_one_side_hardly_moves_the_baseline():
    value, load, hour = figure()
    clean = fit_baseline(value, load, hour)
    spoilt = value.copy()
    spoilt[np.random.default_rng(3).permutation(HOURS)[: HOURS // 5]] -= 6.0
    fitted = fit_baseline(spoilt, load, hour)
    at = np.linspace(18.5, 31.5, 5)
    # Least squares would be off by 1.2; one standard error of the mean is 0.03.
    np.testing.assert_allclose(fitted.expected(at), clean.expected(at), atol=0.06)
    assert fitted.sigma == pytest.approx(0.5, rel=0.15)
    assert fitted.left_out == pytest.approx(HOURS // 5, abs=3)


def test_more_than_a_quarter_left_out_is_noted():
    value, load, hour = figure()
    value[: int(0.3 * HOURS)] -= 6.0
    assert "do not fit the rest" in fit_baseline(value, load, hour).notes[0]


def test_a_parabola_is_used_only_where_it_earns_its_keep():
    straight, load, hour = figure()
    assert fit_baseline(straight, load, hour).quadratic == 0.0
    bent = straight - 0.03 * (load - 25.0) ** 2
    fitted = fit_baseline(bent, load, hour)
    at = np.array([19.0, 25.0, 31.0])
    np.testing.assert_allclose(
        fitted.expected(at), 80.0 + 0.15 * at - 0.03 * (at - 25.0) ** 2, atol=0.2
    )


def test_two_clusters_of_load_carry_no_parabola():
    value, _, hour = figure()
    load = np.where(np.arange(HOURS) % 2, 20.0, 30.0)
    assert fit_baseline(value - 0.1 * load, load, hour).quadratic == 0.0


@pytest.mark.parametrize(("phi", "tolerance"), [(0.0, 0.12), (0.5, 0.12), (0.8, 0.1)])
def test_the_autocorrelation_of_the_residuals_is_found(phi, tolerance):
    value, load, hour = figure(seed=11, phi=phi)
    # Standard error sqrt((1 - phi^2) / n) = 0.055 at phi = 0, for the best estimator.
    assert fit_baseline(value, load, hour).phi == pytest.approx(phi, abs=tolerance)


def test_outliers_do_not_hide_the_autocorrelation():
    value, load, hour = figure(seed=11, phi=0.7)
    value[::10] += 8.0
    assert fit_baseline(value, load, hour).phi == pytest.approx(0.7, abs=0.15)


def test_only_neighbouring_hours_tell_an_autocorrelation():
    value, load, _ = figure(phi=0.8)
    apart = START + 7200 * np.arange(HOURS)
    fitted = fit_baseline(value, load, apart)
    assert fitted.phi == 0.0
    assert "neighbouring hours" in fitted.notes[0]


def test_a_slow_swing_is_clipped_to_the_largest_autocorrelation():
    swing = np.sin(np.arange(HOURS) / 30.0) + 0.001 * noise(2)
    assert fit_baseline(80 + swing, None, hours()).phi == LARGEST_AUTOCORRELATION


def test_autocorrelated_hours_know_the_mean_less_well():
    independent = fit_baseline(*figure(seed=5))
    remembering = fit_baseline(*figure(seed=5, phi=0.8))
    # The variance of a mean grows by (1 + phi) / (1 - phi) = 9, known to a third here.
    ratio = remembering.covariance[0] / independent.covariance[0]
    assert 4 < ratio < 16


@settings(max_examples=15, deadline=None)
@given(shift=st.floats(-1e4, 1e4), scale=st.floats(1e-3, 1e3))
def test_a_figure_in_another_unit_gives_the_same_baseline_in_that_unit(shift, scale):
    value, load, hour = figure(phi=0.4)
    one, other = fit_baseline(value, load, hour), fit_baseline(scale * value + shift, load, hour)
    # Rounding: about 1e-16 of the larger of shift and value, over residuals of 0.5.
    accuracy = 1e-7 * (1 + abs(shift) / scale)
    assert other.intercept == pytest.approx(scale * one.intercept + shift, rel=1e-6, abs=accuracy)
    assert other.linear == pytest.approx(scale * one.linear, rel=1e-4)
    assert other.sigma == pytest.approx(scale * one.sigma, rel=1e-4)
    assert other.phi == pytest.approx(one.phi, abs=1e-4)


@settings(max_examples=15, deadline=None)
@given(factor=st.floats(0.01, 100.0))
def test_a_load_in_another_unit_gives_the_same_expected_values(factor):
    value, load, hour = figure()
    one, other = fit_baseline(value, load, hour), fit_baseline(value, factor * load, hour)
    np.testing.assert_allclose(other.expected(factor * load), one.expected(load), rtol=1e-9)


@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 1000))
def test_the_order_of_the_hours_does_not_matter(seed):
    value, load, hour = figure(phi=0.5)
    order = np.random.default_rng(seed).permutation(HOURS)
    assert fit_baseline(value[order], load[order], hour[order]) == fit_baseline(value, load, hour)


def test_hours_without_a_value_or_a_load_are_passed_over():
    value, load, hour = figure()
    holed, unloaded = value.copy(), load.copy()
    holed[10:40] = np.nan
    holed[50] = np.inf
    unloaded[60:70] = np.nan
    keep = np.isfinite(holed) & np.isfinite(unloaded)
    fitted = fit_baseline(holed, unloaded, hour)
    assert fitted == fit_baseline(value[keep], load[keep], hour[keep])
    assert fitted.points == HOURS - 41


def test_too_few_hours_are_refused_with_both_numbers():
    value, load, hour = figure()
    value[71:] = np.nan
    with pytest.raises(BaselineError, match=r"71 usable hours .* 72 are needed"):
        fit_baseline(value, load, hour, least_hours=72)


def test_no_value_at_all_is_refused():
    with pytest.raises(BaselineError, match="0 usable hours"):
        fit_baseline(np.full(HOURS, np.nan), loads(), hours())


def test_arrays_that_do_not_match_are_refused():
    with pytest.raises(BaselineError, match="do not match"):
        fit_baseline(np.ones(5), np.ones(4), np.arange(5))
    with pytest.raises(BaselineError, match="do not match"):
        fit_baseline(np.ones(5), None, np.arange(4))


def test_one_load_gives_an_intercept_that_is_judged_near_that_load_only():
    value, _, hour = figure()
    fitted = fit_baseline(value, np.full(HOURS, 25.0), hour)
    assert (fitted.linear, fitted.quadratic) == (0.0, 0.0)
    assert "load hardly varied" in fitted.notes[0]
    assert fitted.covers([25.0, 25.4, 30.0]).tolist() == [True, True, False]
    assert np.isnan(fitted.expected([30.0]))[0]


def test_a_load_beyond_the_reference_is_not_judged():
    fitted = fit_baseline(*figure())
    # Reference loads 18 to 32: ten percent of their span on each side.
    assert fitted.covers([16.0, 17.0, 25.0, 33.0, 34.0, np.nan]).tolist() == [
        False,
        True,
        True,
        True,
        False,
        False,
    ]


def test_a_figure_that_does_not_follow_the_load_is_judged_at_every_load():
    value, _, hour = figure()
    fitted = fit_baseline(value, None, hour)
    assert fitted.covers([0.0, 1e9, np.nan]).all()
    np.testing.assert_array_equal(fitted.expected([0.0, np.nan]), [fitted.intercept] * 2)


def test_a_stuck_figure_is_refused():
    with pytest.raises(BaselineError, match=r"same value 81\.5.*stuck"):
        fit_baseline(np.full(HOURS, 81.5), loads(), hours())


def test_a_valve_that_never_passed_is_judged_by_its_smallest_change():
    value = np.zeros(HOURS)
    value[5] = 0.2
    fitted = fit_baseline(value, None, hours(), smallest_change=0.1)
    assert (fitted.intercept, fitted.sigma, fitted.left_out) == (0.0, 0.0, 1)
    assert "did not move" in fitted.notes[0]


def test_a_figure_that_is_exactly_a_function_of_load_is_refused():
    with pytest.raises(BaselineError, match="calculated from the load"):
        fit_baseline(80 + 0.1 * loads(), loads(), hours())


def test_a_baseline_is_written_and_read_without_a_digit_lost():
    for fitted in (fit_baseline(*figure(phi=0.3)), fit_baseline(figure()[0], None, hours())):
        assert Baseline.from_json(fitted.to_json()) == fitted


@settings(max_examples=15, deadline=None)
@given(
    number=st.floats(allow_nan=False, allow_infinity=False),
    notes=st.lists(st.text(), max_size=3),
)
def test_any_finite_baseline_survives_the_store(number, notes):
    fitted = replace(fit_baseline(*figure()), intercept=number, notes=tuple(notes))
    assert Baseline.from_json(fitted.to_json()) == fitted


@pytest.mark.parametrize("text", ["", "[]", "{}", "null", '{"intercept": 1}', "{"])
def test_a_spoilt_stored_baseline_is_refused(text):
    with pytest.raises(BaselineError, match="refit it"):
        Baseline.from_json(text)


def test_a_stored_baseline_with_a_spoilt_covariance_is_refused():
    found = json.loads(fit_baseline(*figure()).to_json())
    for covariance in ([1.0], ["x"] * 9, None):
        with pytest.raises(BaselineError, match="refit it"):
            Baseline.from_json(json.dumps(found | {"covariance": covariance}))
