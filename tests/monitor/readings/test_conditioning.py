from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from connectors.base import Quality
from monitor.flags import Flag
from monitor.readings.condition import condition
from monitor.readings.grid import Grid
from monitor.site.models import Tag

GRID = Grid(0, 7200, 300)


def _readings(name, seconds, values, quality=None):
    quality = np.zeros(len(seconds)) if quality is None else quality
    return pd.DataFrame(
        {
            "tag": pd.Categorical([name] * len(seconds), categories=[name]),
            "time": pd.to_datetime(np.asarray(seconds), unit="s", utc=True).as_unit("us"),
            "value": np.asarray(values, float),
            "quality": np.asarray(quality, dtype=np.uint8),
        }
    )


def _tag(**keys):
    return Tag.model_validate({"name": "T", "source": "s", "unit": "degC"} | keys)


def _one(readings, tag, least=0.5):
    got = condition(readings, {"T": tag}, GRID, least)
    return got.tags["T"], got.quality


MINUTES = np.arange(0, 7200, 60)


def test_values_come_out_in_si():
    got, _ = _one(_readings("T", MINUTES, np.full(120, 150.0)), _tag())
    assert np.all(got.mean == 423.15)


def test_a_gauge_pressure_still_counts_from_the_barometer():
    got, _ = _one(_readings("T", MINUTES, np.full(120, 11.0)), _tag(unit="bar(g)"))
    assert np.all(got.mean == 11e5)


def test_bad_readings_are_left_out_the_last_good_one_holds_and_the_cell_says_so():
    values = np.full(120, 150.0)
    values[6] = 9999.0
    quality = np.zeros(120)
    quality[6] = Quality.BAD
    got, counts = _one(_readings("T", MINUTES, values, quality), _tag())
    assert np.all(got.mean == 423.15)
    assert got.flag[1] == Flag.BAD
    assert got.flag[2] == 0
    assert counts["bad"].tolist() == [1, 0]


def test_a_reading_that_is_no_number_is_bad_whatever_its_quality():
    values = np.full(120, 150.0)
    values[3], values[4] = np.nan, np.inf
    got, counts = _one(_readings("T", MINUTES, values), _tag())
    assert got.flag[0] == Flag.BAD
    assert counts["bad"].tolist() == [2, 0]


def test_a_reading_outside_the_instrument_is_left_out_but_live_zero_noise_is_not():
    """NAMUR NE 43: 3.8 to 20.5 mA are measured values, -1.25 % to +3.125 % of span."""
    values = np.full(120, 0.0)
    values[1], values[2], values[3] = -0.4, 41.2, 41.3
    got, counts = _one(_readings("T", MINUTES, values), _tag(unit="t/h", range=(0, 40)))
    assert counts["out_of_range"].tolist() == [1, 0]
    assert got.flag[0] == Flag.OUT_OF_RANGE
    # -0.4 and 41.2 count for a minute each, and 41.2 holds over the one left out.
    assert got.mean[0] == pytest.approx((-0.4 + 2 * 41.2) / 5 / 3.6)


def test_an_uncertain_reading_is_used_and_flagged():
    quality = np.zeros(120)
    quality[7] = Quality.UNCERTAIN
    got, _ = _one(_readings("T", MINUTES, np.full(120, 150.0), quality), _tag())
    assert got.flag[1] == Flag.UNCERTAIN
    assert got.mean[1] == 423.15


def test_a_gap_is_held_and_then_missing():
    kept = (MINUTES < 1800) | (MINUTES >= 5400)
    got, counts = _one(
        _readings("T", MINUTES[kept], np.full(kept.sum(), 150.0)), _tag(hold="10 min")
    )
    # The reading of 29:00 stands until 39:00: 1 cell held, 1 with 80 % coverage, then nothing.
    assert got.flag[6] == Flag.HELD
    assert got.flag[7] == Flag.HELD
    assert got.flag[8] == Flag.MISSING
    assert np.isnan(got.mean[8])
    assert got.flag[18] == 0
    assert counts["cells_missing"].sum() == 10
    assert counts["cells_held"].sum() == 2


def test_too_little_coverage_is_missing_and_says_why():
    got, _ = _one(_readings("T", [0, 60], [150.0, 150.0]), _tag(hold="1 min"), least=0.5)
    assert got.flag[0] == Flag.LOW_COVERAGE | Flag.MISSING
    assert np.isnan(got.mean[0])


def test_a_tag_without_any_reading_is_missing_throughout():
    got, counts = _one(_readings("other", [0], [1.0]), _tag())
    assert np.all(got.flag == Flag.MISSING)
    assert counts["cells_missing"].tolist() == [12, 12]
    assert counts["readings"].sum() == 0


def test_without_a_range_an_absolute_pressure_below_nothing_is_refused():
    got, counts = _one(
        _readings("T", MINUTES, np.where(MINUTES == 60, -0.1, 0.08)), _tag(unit="bar(a)")
    )
    assert counts["out_of_range"].sum() == 1
    assert np.all(got.mean == 0.08e5)
