from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from connectors.base import Mark, Quality
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


def test_a_spike_is_left_out_and_counted_and_the_last_good_reading_holds():
    values = np.full(120, 150.0)
    values[33] = 190.0
    got, counts = _one(_readings("T", MINUTES, values), _tag(uncertainty="0.5 K"))
    assert np.all(got.mean == 423.15)
    assert got.flag[6] == Flag.SPIKE
    assert counts["spike"].tolist() == [1, 0]
    assert counts["good"].tolist() == [59, 60]


def test_without_a_notion_of_its_size_nothing_is_called_a_spike():
    values = np.full(120, 150.0)
    values[33] = 190.0
    got, counts = _one(_readings("T", MINUTES, values), _tag())
    assert counts["spike"].sum() == 0
    assert got.mean[6] == pytest.approx(423.15 + 40 / 5)


def test_a_flow_that_trips_is_no_spike_by_default():
    values = np.where(MINUTES < 3600, 80.0, 0.0)
    got, counts = _one(_readings("T", MINUTES, values), _tag(unit="t/h", range=(0, 100)))
    assert counts["spike"].sum() == 0
    assert np.all(got.mean[12:] == 0)
    asked = _tag(unit="t/h", range=(0, 100), spike_window="30 min")
    assert _one(_readings("T", MINUTES, values), asked)[1]["spike"].tolist() == [0, 1]


def test_a_reading_that_moved_too_fast_is_left_out_and_counted():
    values = np.full(120, 80.0)
    values[33] = 95.0
    tag = _tag(unit="t/h", rate_limit="10 t/h/min")
    got, counts = _one(_readings("T", MINUTES, values), tag)
    assert got.flag[6] == Flag.TOO_FAST
    assert counts["too_fast"].tolist() == [1, 0]
    assert got.mean[6] == pytest.approx(80 / 3.6)


def test_numbers_at_the_ends_of_what_a_float_holds_do_not_stop_the_others():
    values = np.full(120, 80.0)
    values[33], values[34] = 1.7e308, -1.7e308
    tag = _tag(unit="t/h", rate_limit="10 t/h/min", spike_least="9 t/h", spike_window="30 min")
    got, counts = _one(_readings("T", MINUTES, values), tag)
    # There, and to the other end, and back: only the return from a single one is known for one.
    assert counts["too_fast"].sum() == 3
    assert np.all(got.mean == got.mean[0])


def test_each_reading_is_counted_once_however_much_is_wrong_with_it():
    rng = np.random.default_rng(5)
    values = rng.choice([100.0, 101.0, 180.0, 900.0, np.nan], 120, p=[0.4, 0.4, 0.1, 0.05, 0.05])
    tag = _tag(range=(0, 200), rate_limit="50 K/min")
    quality = rng.choice([0, 1, 2], 120)
    _, counts = _one(_readings("T", MINUTES, values, quality), tag)
    kinds = ["good", "uncertain", "bad", "out_of_range", "too_fast", "spike"]
    assert counts[kinds].sum(axis=1).tolist() == counts["readings"].tolist() == [60, 60]
    assert (counts[kinds].sum() > 0).sum() >= 5


def test_a_sources_remarks_are_flagged_and_counted():
    readings = _readings("T", MINUTES, np.full(120, 150.0))
    marks = np.zeros(120)
    marks[7], marks[70] = Mark.AMBIGUOUS_TIME, Mark.OUT_OF_ORDER
    got, counts = _one(readings.assign(marks=np.where(marks > 0, marks, np.nan)), _tag())
    assert got.flag[1] == Flag.AMBIGUOUS_TIME
    assert got.flag[14] == Flag.OUT_OF_ORDER
    assert counts["ambiguous"].tolist() == [1, 0]
    assert counts["out_of_order"].tolist() == [0, 1]
    assert counts["good"].tolist() == [60, 60]


def test_below_its_cut_off_a_meter_reads_exactly_nothing():
    values = np.where(MINUTES < 3600, 0.3, 0.6)
    got, _ = _one(_readings("T", MINUTES, values), _tag(unit="t/h", meter={"cut_off": "500 kg/h"}))
    assert np.all(got.mean[:12] == 0)
    assert got.mean[12:] == pytest.approx(0.6 / 3.6)


def test_a_cell_takes_its_last_value_where_the_tag_says_so():
    values = np.where(MINUTES % 300 == 240, 5.0, 1.0)
    mean, _ = _one(_readings("T", MINUTES, values), _tag(unit="%"))
    last, _ = _one(_readings("T", MINUTES, values), _tag(unit="%", method="last"))
    assert np.all(mean.mean == pytest.approx(0.018))
    assert np.all(last.mean == 0.05)


def test_what_a_vessel_holds_is_taken_at_the_cells_end_and_a_flow_as_its_mean():
    values = MINUTES / 60.0
    level, _ = _one(_readings("T", MINUTES, values), _tag(unit="mm"))
    flow, _ = _one(_readings("T", MINUTES, values), _tag(unit="kg/s"))
    assert level.mean[:2] == pytest.approx([0.004, 0.009])
    assert flow.mean[:2].tolist() == [2.0, 7.0]


def test_a_last_value_that_expired_before_the_cells_end_still_counts_for_its_cell():
    got, _ = _one(_readings("T", [0, 60], [1.0, 2.0]), _tag(unit="mm", hold="3 min"))
    assert got.mean[0] == 0.002
    assert np.isnan(got.mean[1])


STILL = np.full(120, 150.0)
MOVING = 40 + np.sin(MINUTES / 900)


def _pair(values, beside, *, kept=None, **keys):
    """Two tags of one piece of equipment; the first may be stuck."""
    kept = np.ones(120, dtype=bool) if kept is None else kept
    readings = pd.concat(
        [_readings("T", MINUTES[kept], values[kept]), _readings("N", MINUTES, beside)]
    )
    readings["tag"] = readings["tag"].astype(pd.CategoricalDtype(["N", "T"]))
    tags = {"T": _tag(stuck_after="1 h", **keys), "N": _tag(unit="t/h")}
    got = condition(readings, tags, GRID, 0.5, {"T": ("N",), "N": ("T",)})
    flag = got.tags["T"].flag
    counts = got.quality[got.quality["tag"] == "T"]["cells_stuck"].tolist()
    assert sum(counts) == (flag & Flag.STUCK > 0).sum()
    return (flag & Flag.STUCK) > 0, got.tags["T"].mean


def test_a_value_that_stands_still_while_its_neighbour_moves_is_stuck_and_still_used():
    stuck, mean = _pair(STILL, MOVING)
    assert stuck.tolist() == [False] * 11 + [True] * 13
    assert np.all(mean == 423.15)


def test_a_plant_that_stands_still_as_a_whole_is_not_stuck():
    stuck, _ = _pair(STILL, np.full(120, 40.0))
    assert not stuck.any()


def test_movement_within_the_deadband_is_none():
    wobble = 150 + 0.1 * (np.arange(120) % 2)
    assert not _pair(wobble, MOVING)[0].any()
    assert _pair(wobble, MOVING, deadband="0.1001 K")[0].any()


def test_a_held_value_is_held_and_not_stuck():
    stuck, _ = _pair(STILL, MOVING, kept=MINUTES < 1200, hold="3 h")
    assert not stuck.any()


@pytest.mark.parametrize("keys", [{"unit": "t/h"}, {"unit": "bar(g)"}, {"range": (0, 200)}])
def test_a_plant_at_rest_reads_zero_and_is_not_stuck(keys):
    stuck, _ = _pair(np.zeros(120), MOVING, **keys)
    assert not stuck.any()


def test_a_valve_may_stand_where_it_stands():
    readings = _readings("T", MINUTES, STILL)
    got = condition(readings, {"T": _tag(unit="%")}, GRID, 0.5, {"T": ("T",)})
    assert got.quality["cells_stuck"].sum() == 0


def test_rows_of_a_source_without_remarks_may_stand_beside_those_of_one_with():
    """As the cycle joins them: a column that only one source has is empty for the other."""
    marked = _readings("T", MINUTES, np.full(120, 150.0)).assign(marks=np.uint8(0))
    marked.loc[7, "marks"] = int(Mark.AMBIGUOUS_TIME)
    plain = _readings("N", MINUTES, np.full(120, 40.0))
    both = pd.concat([plain, marked], ignore_index=True)
    both["tag"] = both["tag"].astype(pd.CategoricalDtype(["N", "T"]))
    got = condition(both, {"T": _tag(), "N": _tag()}, GRID, 0.5)
    assert got.quality.groupby("tag", observed=True)["ambiguous"].sum().to_dict() == {
        "T": 1,
        "N": 0,
    }
