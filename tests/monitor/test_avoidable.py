"""The avoidable part of destruction, by hand and by what must hold for any numbers."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.avoidable import avoidable, best_demonstrated

DAYS = 14


def hours(count=24 * DAYS, *, ratio=0.2, noise=0.0, load=None, seed=3):
    """Hours of a machine that destroys ``ratio`` of its product, which goes with the load."""
    rng = np.random.default_rng(seed)
    load = rng.uniform(20, 30, count) if load is None else np.full(count, load)
    product = 100.0 * load
    destroyed = ratio * product * (1 + noise * rng.normal(size=count))
    return pd.DataFrame(
        {"destroyed": destroyed, "product": product, "fuel": product + destroyed, "load": load}
    )


def test_a_tenth_more_destruction_at_like_load_is_what_is_avoidable():
    best = best_demonstrated(hours())
    assert best.ratios == pytest.approx(0.2)
    found = avoidable(best, hours(48, ratio=0.22, seed=4))
    assert found.share == pytest.approx(1 - 0.2 / 0.22)
    assert found.compared == 1.0


@given(
    factor=st.floats(1.0, 5.0),
    scale=st.floats(1e-3, 1e6),
    seed=st.integers(0, 50),
)
@settings(max_examples=30, deadline=None)
def test_the_share_does_not_depend_on_the_machines_size(factor, scale, seed):
    small, large = hours(seed=seed), hours(seed=seed) * [scale, scale, scale, 1.0]
    worse = [table.assign(destroyed=table["destroyed"] * factor) for table in (small, large)]
    shares = [
        avoidable(best_demonstrated(was), now).share
        for was, now in zip((small, large), worse, strict=True)
    ]
    assert shares[0] == pytest.approx(1 - 1 / factor, abs=1e-9)
    assert shares[1] == pytest.approx(shares[0], abs=1e-9)


def test_the_luckiest_hour_is_not_the_best_demonstrated():
    """Of hours that scatter by 10 % the best tenth lies 13 % low; of half-days 4 %."""
    best = best_demonstrated(hours(noise=0.10))
    assert best.ratios.mean() == pytest.approx(0.2, rel=0.06)
    assert avoidable(best, hours(seed=9)).share < 0.06


def test_a_machine_that_is_better_than_before_has_nothing_to_avoid():
    assert avoidable(best_demonstrated(hours()), hours(ratio=0.15)).share == 0.0


def test_less_than_nothing_was_demonstrated_by_no_machine():
    """At low load the readings were impossible: that excuses nothing at high load, and takes
    nothing off what has to be destroyed there.

    Now 0.3 of the product: at low load all of it is avoidable, at high load a third.
    """
    was = hours()
    low = was["load"] < was["load"].median()
    was["destroyed"] = np.where(low, -0.4, 0.2) * was["product"]
    best = best_demonstrated(was)
    assert best.ratios[[0, -1]] == pytest.approx([0.0, 0.2])
    now = [hours(48, ratio=0.3, load=load) for load in (21.0, 29.0)]
    assert [avoidable(best, one).share for one in now] == pytest.approx([1.0, 1 / 3])
    both = (21 * 1.0 + 29 / 3) / (21 + 29)
    assert avoidable(best, pd.concat(now)).share == pytest.approx(both)


def test_destruction_that_goes_with_the_load_is_not_taken_for_waste():
    was = hours()
    was["destroyed"] *= was["load"] / 25.0
    same = hours(seed=8)
    same["destroyed"] *= same["load"] / 25.0
    assert avoidable(best_demonstrated(was), same).share < 0.02


def test_loads_that_the_reference_period_never_saw_are_not_compared():
    best = best_demonstrated(hours())
    both = pd.concat([hours(24, ratio=0.3, load=50.0), hours(24, ratio=0.25, load=25.0)])
    found = avoidable(best, both)
    assert found.compared == 0.5
    assert found.share == pytest.approx(0.2)


def test_what_makes_no_product_is_compared_by_its_fuel():
    was = hours().assign(product=0.0, fuel=1000.0, destroyed=1000.0)
    best = best_demonstrated(was)
    assert best.basis == "fuel"
    assert avoidable(best, was.assign(destroyed=900.0)).share == 0.0


def test_a_vessel_works_by_the_day():
    """It takes all morning and gives all evening: no hour by itself has a ratio."""
    count = 24 * DAYS
    giving = np.arange(count) % 24 >= 12
    table = pd.DataFrame(
        {
            "destroyed": 10.0,
            "product": np.where(giving, 200.0, 0.0),
            "fuel": np.where(giving, 0.0, 220.0),
            "load": np.where(giving, 1.0, 2.0),
        },
        index=range(count),
    )
    best = best_demonstrated(table, stores=True)
    assert best.ratios == pytest.approx([0.1])
    assert avoidable(best, table.assign(destroyed=15.0)).share == pytest.approx(1 / 3)


@pytest.mark.parametrize("count", [0, 23])
def test_less_than_a_day_demonstrates_nothing(count):
    assert best_demonstrated(hours(count)) is None


def test_hours_without_a_figure_are_left_out():
    holed = hours()
    holed.loc[::3, "destroyed"] = np.nan
    holed.loc[1::5, "load"] = np.nan
    assert best_demonstrated(holed).ratios == pytest.approx(0.2)
    nothing = avoidable(best_demonstrated(hours()), holed.assign(load=np.nan))
    assert np.isnan(nothing.share)
    assert nothing.compared == 0.0


def test_a_machine_that_stands_has_nothing_demonstrated():
    assert best_demonstrated(hours() * [0.0, 0.0, 0.0, 1.0]) is None
