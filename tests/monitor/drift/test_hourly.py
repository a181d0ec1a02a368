from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.drift.hourly import HOURLY_COLUMNS, hourly_means
from monitor.flags import Flag

START = 1_700_000_000 // 3600 * 3600


def table(value, weight=None, load=None, flag=None, *, least_cells=0.5, time=None):
    value = np.asarray(value, dtype=float)
    n = value.size
    return hourly_means(
        START + 900 * np.arange(n) if time is None else time,
        value,
        np.ones(n) if weight is None else np.asarray(weight, dtype=float),
        np.full(n, 20.0) if load is None else np.asarray(load, dtype=float),
        np.zeros(n, dtype=np.int32) if flag is None else np.asarray(flag, dtype=np.int32),
        cells_per_hour=4,
        least_cells=least_cells,
    )


def test_an_hour_s_efficiency_is_the_one_of_the_hour_s_totals():
    work, ideal = np.array([8.0, 9.0, 1.0, 8.5]), np.array([10.0, 10.0, 2.0, 10.0])
    (row,) = table(work / ideal, weight=ideal).to_dict("records")
    assert row["value"] == pytest.approx(work.sum() / ideal.sum(), rel=1e-12)


def test_cells_that_may_not_be_judged_do_not_count_in_value_or_load():
    flag = [0, Flag.UNSTEADY, 0, Flag.HELD]
    hours = table([80, 20, 82, 84], load=[10, 99, 11, 12], flag=flag)
    assert hours.to_dict("records") == [
        {"hour": START, "value": pytest.approx(82.0), "load": pytest.approx(11.0), "cells": 3}
    ]


def test_an_hour_with_too_few_cells_is_not_judged():
    flag = [0, Flag.OFF, Flag.OFF, Flag.OFF, 0, 0, 0, 0]
    hours = table(np.full(8, 80.0), flag=flag)
    assert hours["value"].isna().tolist() == [True, False]
    assert hours["load"].isna().tolist() == [True, False]
    assert hours["cells"].tolist() == [1, 4]


def test_cells_without_weight_or_value_do_not_count():
    hours = table([80, np.nan, 70, 82], weight=[1, 1, 0, 1])
    assert hours["value"].tolist() == [81.0]
    assert hours["cells"].tolist() == [2]


def test_an_equipment_without_a_load_still_has_a_value():
    hours = table([1, 2, 3, 4], load=np.full(4, np.nan))
    assert hours["value"].tolist() == [2.5]
    assert hours["load"].isna().all()


def test_no_cells_give_no_hours():
    hours = table([])
    assert len(hours) == 0
    assert tuple(hours.columns) == HOURLY_COLUMNS


@settings(deadline=None)
@given(seed=st.integers(0, 10_000))
def test_the_order_of_the_cells_does_not_matter(seed):
    rng = np.random.default_rng(seed)
    value, weight = rng.normal(80, 1, 24), rng.uniform(0, 2, 24)
    time, order = START + 900 * np.arange(24), rng.permutation(24)
    one, other = table(value, weight), table(value[order], weight[order], time=time[order])
    np.testing.assert_allclose(one.to_numpy(float), other.to_numpy(float), rtol=1e-12)
