"""Rate, spike and stuck checks: what they find, what they leave alone, and that they never revise.

The Hampel identifier is checked against its definition written out one reading at a time, with
scipy's median absolute deviation (F. R. Hampel, J. Am. Stat. Assoc. 69, 383, 1974; R. K. Pearson,
IEEE Trans. Control Syst. Technol. 10, 55, 2002).
"""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import median_abs_deviation

from monitor.readings.checks import MOST_READINGS, spikes, too_fast, trailing_spread

WINDOW, THRESHOLD, LEAST = 1800.0, 3.0, (0.6, 0.0)
MINUTES = np.arange(0.0, 7200.0, 60.0)

signals = st.lists(
    st.tuples(st.integers(1, 900), st.floats(-100, 100)), min_size=1, max_size=60
).map(
    lambda steps: (
        np.cumsum([float(gap) for gap, _ in steps]),
        np.array([value for _, value in steps]),
    )
)


def _spikes(seconds, values, least=LEAST):
    return spikes(seconds, values, WINDOW, THRESHOLD, least)


def _by_definition(seconds, values, least):
    """One reading at a time: is it off, and does the one before agree with it?"""
    off, found = [], []
    for k, now in enumerate(seconds):
        first = max(0, k - MOST_READINGS)
        before = values[first:k][now - seconds[first:k] <= WINDOW]
        off.append(0)
        found.append(False)
        if len(before) < 5:
            continue
        middle = np.median(before)
        smallest = least[0] + least[1] * abs(middle)
        above = values[k] - middle
        if abs(above) > max(THRESHOLD * 1.4826 * median_abs_deviation(before), smallest):
            off[k] = int(np.sign(above))
            agrees = off[k - 1] == off[k] or abs(values[k] - values[k - 1]) <= smallest
            found[k] = not (agrees and now - seconds[k - 1] <= WINDOW)
    return found


@settings(max_examples=150, deadline=None)
@given(signals, st.sampled_from([(0.6, 0.0), (0.0, 0.2), (30.0, 0.01)]))
def test_spikes_are_those_of_the_definition(signal, least):
    assert _spikes(*signal, least).tolist() == _by_definition(*signal, least)


@settings(max_examples=100, deadline=None)
@given(signals, st.integers(0, 60), st.data())
def test_a_verdict_does_not_depend_on_later_readings(signal, cut, data):
    seconds, values = signal
    cut = min(cut, len(seconds))
    later = values.copy()
    later[cut:] = data.draw(
        st.lists(st.floats(-1e6, 1e6), min_size=len(values) - cut, max_size=len(values) - cut)
    )
    for check in (_spikes, lambda s, v: too_fast(s, v, 0.05, 600.0)):
        assert check(seconds, values)[:cut].tolist() == check(seconds[:cut], values[:cut]).tolist()
        assert check(seconds, values)[:cut].tolist() == check(seconds, later)[:cut].tolist()


@settings(max_examples=100, deadline=None)
@given(signals, st.floats(0, 20000))
def test_a_verdict_does_not_depend_on_readings_from_before_its_reach(signal, start):
    """Two windows of the filter, or the hold time of the rate limit: what the lead-in holds."""
    seconds, values = signal
    for check, reach in ((_spikes, 2 * WINDOW), (lambda s, v: too_fast(s, v, 0.05, 600.0), 600.0)):
        read = seconds >= start - reach
        asked = seconds >= start
        assert check(seconds, values)[asked].tolist() == (
            check(seconds[read], values[read])[asked[read]].tolist()
        )


@given(st.floats(-1e6, 1e6), st.floats(0, 100))
def test_a_constant_is_no_spike_however_small_a_spike_may_be(level, least):
    assert not _spikes(MINUTES, np.full(len(MINUTES), level), (least, 0.0)).any()


@given(st.floats(-10, 10), st.floats(-500, 500))
def test_a_steady_ramp_is_no_spike_however_steep(slope, level):
    assert not _spikes(MINUTES, level + slope * MINUTES).any()


@given(st.floats(-0.01, 0.01), st.floats(-500, 500))
def test_a_ramp_below_the_limit_is_not_too_fast(slope, level):
    assert not too_fast(MINUTES, level + slope * MINUTES, 0.0100001, 600.0).any()


@given(st.integers(5, 119), st.floats(1.0, 1e4), st.booleans(), st.integers(0, 2**31 - 1))
def test_a_lone_spike_is_found_and_nothing_else(place, height, up, seed):
    """The noise stays within 0.09, and 3 S of it within 0.4; the smallest spike is 1."""
    rng = np.random.default_rng(seed)
    values = 50 + np.clip(0.03 * rng.standard_normal(len(MINUTES)), -0.09, 0.09)
    values[place] += height if up else -height
    assert np.flatnonzero(_spikes(MINUTES, values)).tolist() == [place]


def test_a_step_loses_one_reading_and_is_then_believed():
    values = np.where(MINUTES < 3600, 60.0, 12.0)
    assert np.flatnonzero(_spikes(MINUTES, values)).tolist() == [60]
    assert np.flatnonzero(too_fast(MINUTES, values, 0.1, 600.0)).tolist() == [60]


def test_a_steep_start_up_loses_one_reading():
    values = np.maximum(0.0, 5.0 * (np.arange(120) - 60))
    assert np.flatnonzero(_spikes(MINUTES, values)).tolist() == [61]


def test_a_swift_but_gradual_change_is_no_spike():
    """0.5 a minute where a spike is 0.6 at least: off after two minutes, and still no jump."""
    values = np.clip(0.5 * (np.arange(120) - 60), 0.0, 4.0)
    assert not _spikes(MINUTES, values).any()


def test_two_spikes_to_opposite_sides_are_both_found():
    values = np.full(120, 50.0)
    values[[40, 41]] = 70.0, 30.0
    assert np.flatnonzero(_spikes(MINUTES, values)).tolist() == [40, 41]


def test_the_return_from_a_spike_is_not_too_fast():
    values = np.full(120, 50.0)
    values[40] = 90.0
    assert np.flatnonzero(too_fast(MINUTES, values, 0.1, 600.0)).tolist() == [40]


def test_after_a_gap_longer_than_its_reach_a_reading_starts_afresh():
    seconds, values = np.array([0.0, 60.0, 4000.0]), np.array([10.0, 10.0, 500.0])
    assert not too_fast(seconds, values, 0.01, 600.0).any()
    assert not _spikes(seconds, values).any()


def test_none_one_and_two_readings_are_no_trouble():
    for count in (0, 1, 2):
        seconds, values = MINUTES[:count], np.array([1.0, 900.0])[:count]
        assert not _spikes(seconds, values).any()
        assert len(too_fast(seconds, values, 0.1, 600.0)) == count


@given(
    st.lists(st.one_of(st.floats(-5, 5), st.just(np.nan)), min_size=1, max_size=40),
    st.integers(1, 12),
)
def test_the_trailing_spread_is_the_one_counted_cell_by_cell(low, cells):
    low = np.array(low)
    high = low + 0.5
    got = trailing_spread(low, high, cells)
    for k in range(len(low)):
        part = slice(k - cells + 1, k + 1)
        whole = k + 1 >= cells and np.isfinite(low[part]).all()
        assert got[k] == (high[part].max() - low[part].min() if whole else np.inf)
