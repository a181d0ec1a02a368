from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.drift.trends import degradation_rate, mann_kendall

REFERENCE = Path(__file__).parents[2] / "reference"
CHARTS = pd.read_csv(REFERENCE / "control_charts.csv")
DATA = pd.read_csv(REFERENCE / "control_chart_data.csv")
BY_HAND = DATA[DATA["dataset"] == "mann_kendall_by_hand"]["x"].to_numpy()
MONTH = 365.25 / 12


def published(case, quantity):
    row = CHARTS[(CHARTS["case"] == case) & (CHARTS["quantity"] == quantity)].iloc[0]
    return pytest.approx(row["value"], abs=row["tol"])


def hourly(daily, hours=24):
    """The same value in each hour of a day."""
    days = np.arange(daily.size)
    hour = (86400 * days[:, None] + 3600 * np.arange(hours)).ravel()
    return hour, np.repeat(daily, hours)


def test_the_example_by_hand_comes_out():
    found = mann_kendall(BY_HAND)
    assert found.score == published("mann_kendall", "S")
    assert found.variance == published("mann_kendall", "var_S")
    assert found.z == published("mann_kendall", "Z")
    assert found.p == published("mann_kendall", "p_two_sided")
    assert found.p / 2 == published("mann_kendall", "p_one_sided")


def test_the_slope_of_the_example_is_the_published_one():
    found = degradation_rate(*hourly(BY_HAND))
    assert found.per_month / MONTH == published("theil_sen", "slope")
    assert found.low / MONTH == published("theil_sen", "slope_95_low")
    assert found.high / MONTH == published("theil_sen", "slope_95_high")
    assert found.p == published("mann_kendall", "p_two_sided")
    assert found.days == 14


@settings(deadline=None)
@given(slope=st.floats(-5, 5).filter(lambda s: abs(s) > 1e-6), level=st.floats(-100, 100))
def test_a_straight_line_has_its_own_slope(slope, level):
    found = degradation_rate(*hourly(level + slope * np.arange(30.0)))
    assert found.per_month == pytest.approx(slope * MONTH, rel=1e-6, abs=1e-9)


def test_a_few_odd_days_do_not_fake_a_trend():
    daily = np.random.default_rng(2).normal(0, 0.1, 60)
    daily[-5:] -= 10.0
    assert abs(degradation_rate(*hourly(daily)).per_month) < 0.2


def test_no_change_at_all_is_no_trend():
    found = mann_kendall(np.ones(10))
    assert (found.score, found.variance, found.z, found.p) == (0, 0.0, 0.0, 1.0)


def test_days_with_few_judged_hours_do_not_count():
    hour, value = hourly(np.arange(10.0), hours=6)
    value[:6] = np.nan
    value[6] = np.nan
    assert degradation_rate(hour, value).days == 8


@pytest.mark.parametrize("value", [np.full(24 * 20, np.nan), np.empty(0), np.ones(24 * 6)])
def test_too_few_days_give_no_trend(value):
    assert degradation_rate(3600 * np.arange(value.size), value) is None
