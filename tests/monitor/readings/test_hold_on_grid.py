from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.readings.grid import Grid, hold_on_grid

GRID = Grid(0, 3600, 300)


def _by_hand(seconds, values, grid, hold):
    """The same mean, second by second: slow and obvious."""
    in_force = np.full(grid.end - grid.start, np.nan)
    for k, start in enumerate(seconds):
        stop = min(seconds[k + 1] if k + 1 < len(seconds) else np.inf, start + hold)
        a, b = max(int(start), grid.start), min(int(min(stop, grid.end)), grid.end)
        if b > a:
            in_force[a - grid.start : b - grid.start] = values[k]
    cells = in_force.reshape(grid.count, grid.interval)
    covered = np.isfinite(cells).mean(axis=1)
    with np.errstate(invalid="ignore"):
        mean = np.array(
            [np.nan if c == 0 else np.nanmean(r) for r, c in zip(cells, covered, strict=True)]
        )
    return mean, covered


@settings(max_examples=200, deadline=None)
@given(
    st.lists(st.integers(-1200, 4000), unique=True, max_size=60),
    st.integers(1, 2000),
    st.randoms(use_true_random=False),
)
def test_the_mean_is_the_one_counted_second_by_second(times, hold, random):
    seconds = np.array(sorted(times), float)
    values = np.array([random.uniform(-50, 50) for _ in times])
    got = hold_on_grid(seconds, values, GRID, hold)
    mean, covered = _by_hand(seconds, values, GRID, hold)
    np.testing.assert_allclose(got.coverage, covered, atol=1e-12)
    np.testing.assert_allclose(got.mean, mean, atol=1e-9)


@settings(max_examples=100, deadline=None)
@given(st.lists(st.integers(-600, 3600), unique=True, min_size=1, max_size=80), st.integers(0, 11))
def test_a_cell_is_the_same_to_the_last_bit_in_any_window_that_holds_it(times, first):
    seconds = np.array(sorted(times), float)
    values = np.sin(seconds) * 1e3 / 7
    whole = hold_on_grid(seconds, values, GRID, 600.0)
    part = Grid(first * 300, 3600, 300)
    # The part sees only what its lead-in would read: readings not older than the hold.
    near = seconds >= part.start - 600.0
    got = hold_on_grid(seconds[near], values[near], part, 600.0)
    np.testing.assert_array_equal(got.mean, whole.mean[first:])
    np.testing.assert_array_equal(got.edges, whole.edges[first:])


def test_a_constant_signal_has_exactly_that_mean():
    seconds = np.arange(-60.0, 3600.0, 7.0)
    got = hold_on_grid(seconds, np.full(len(seconds), 0.1), GRID, 60.0)
    assert np.all(got.mean == 0.1)
    assert np.all(got.coverage == 1.0)


def test_a_reading_that_is_not_followed_stands_for_its_hold_time_only():
    got = hold_on_grid(np.array([0.0]), np.array([5.0]), GRID, 450.0)
    assert got.coverage[:3].tolist() == [1.0, 0.5, 0.0]
    assert np.isnan(got.mean[2])
    assert got.edges[:3].tolist()[:2] == [5.0, 5.0]
    assert np.isnan(got.edges[2])


def test_an_exception_reported_step_weighs_by_its_time():
    got = hold_on_grid(np.array([0.0, 60.0]), np.array([10.0, 20.0]), GRID, 3600.0)
    assert got.mean[0] == pytest.approx(10 * 0.2 + 20 * 0.8)
    assert got.fresh[:2].tolist() == [2, 0]


def test_no_readings_give_missing_cells_and_not_zeros():
    got = hold_on_grid(np.empty(0), np.empty(0), GRID, 600.0)
    assert np.isnan(got.mean).all()
    assert got.coverage.sum() == 0


def test_a_grid_off_its_marks_is_refused():
    with pytest.raises(ValueError, match="whole number of 300 s cells"):
        Grid(10, 3600, 300)
