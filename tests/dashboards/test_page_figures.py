"""Figures before they are drawn: valid, honest about gaps, and safe inside a page."""

from __future__ import annotations

import json
import math
from dataclasses import replace

import numpy as np
import page_views
import pandas as pd
import plotly.graph_objects as go
import pytest
from hypothesis import given
from hypothesis import strategies as st

from dashboards import dead_state, expansion, figures, flows, marks, series, shift
from dashboards.embed import figure_json
from dashboards.overview import ranked_conditions
from dashboards.theme import COLOURS


def charts():
    view = page_views.dead_state()
    return [
        flows.flow_diagram(page_views.flows(), page_views.NODE_NAMES),
        flows.ranked_destruction(page_views.equipment_rows(), "EUR"),
        figures.ledger_trend(page_views.ledger_trend()),
        figures.trend_chart(page_views.trend(), "a"),
        figures.trend_chart(page_views.power_trend(), "b"),
        figures.residual_chart(page_views.residual(), "c"),
        expansion.expansion_chart(page_views.expansion()),
        dead_state._ambient_chart(view, "temperature", "degC", 15.0, "T0"),
        dead_state._pair_chart(view, "destroyed", "Destroyed"),
    ]


@pytest.mark.parametrize("place", range(9))
def test_every_figure_is_valid_by_plotlys_own_schema(place):
    # go.Figure checks every key and value against the library's schema and raises on a wrong one.
    chart = charts()[place]
    assert len(go.Figure(chart.figure).data) == len(chart.figure["data"])


@given(st.recursive(st.text(max_size=30), lambda inner: st.lists(inner, max_size=3), max_leaves=8))
def test_no_text_in_a_figure_can_end_its_script_element(text):
    written = str(figure_json({"data": [], "layout": {"title": text}}))
    assert written.isascii()
    assert not set(written) & set("<>&")
    assert json.loads(written)["figure"]["layout"]["title"] == text


def _decoded(axis: dict[str, object]) -> list[int]:
    count, steps = axis["count"], axis.get("steps", [axis.get("step", 0)] * axis["count"])
    return [axis["start"] + 1000 * sum(steps[:place]) for place in range(count)]


@given(
    st.lists(
        st.integers(0, 4_000_000_000).map(lambda second: pd.Timestamp(second, unit="s")),
        min_size=1,
        max_size=20,
    )
)
def test_coded_times_read_back_as_they_were(times):
    index = pd.DatetimeIndex(times)
    packed = json.loads(str(figure_json({"data": [{"x": index}, {"x": index}], "layout": {}})))
    assert len(packed["times"]) == 1
    assert _decoded(packed["times"][0]) == index.as_unit("ms").asi8.tolist()


def test_missing_numbers_become_null_and_the_rest_keeps_five_digits():
    values = np.array([1.0, math.nan, math.inf, 1234567.0, 0.1234567])
    packed = json.loads(str(figure_json({"data": [{"y": values}], "layout": {}})))
    assert packed["figure"]["data"][0]["y"] == [1, None, None, 1234600, 0.12346]


def test_the_hour_that_happens_twice_does_not_draw_a_line_backwards():
    # Clocks in Helsinki went back from 04:00 to 03:00 on 25 October 2026 (EU directive 2000/84/EC).
    index = pd.date_range("2026-10-25 00:00", periods=8, freq="h", tz="Europe/Helsinki")
    table = pd.DataFrame({"value": np.arange(8.0)}, index=index)
    clock = series.local(table)
    # Midnight, 1, 2, 3 in summer time, then the break, and 3 again in winter time.
    assert [time.hour for time in clock.index] == [0, 1, 2, 3, 3, 3, 4, 5, 6]
    assert np.flatnonzero(clock["value"].isna()).tolist() == [4]
    assert clock["value"].dropna().tolist() == table["value"].tolist()


@given(
    st.lists(st.one_of(st.floats(-1e3, 1e3), st.just(math.nan)), min_size=50, max_size=400),
    st.integers(2, 12),
)
def test_thinning_keeps_ends_extremes_and_gaps(values, buckets):
    table = pd.DataFrame({"value": values}, index=page_views.hours(len(values)))
    kept = series.thinned(table, "value", buckets)
    assert len(kept) <= 5 * buckets or len(kept) == len(table)
    assert kept.index.is_monotonic_increasing
    assert (kept.index[0], kept.index[-1]) == (table.index[0], table.index[-1])
    assert kept["value"].isna().any() == table["value"].isna().any()
    if table["value"].notna().any():
        assert kept["value"].min() == table["value"].min()
        assert kept["value"].max() == table["value"].max()


@given(st.integers(1, 5_000))
def test_means_over_steps_add_up_to_the_same_total(count):
    table = pd.DataFrame({"kw": np.linspace(0.0, 1.0, count)}, index=page_views.hours(count))
    means, step = series.regular_means(table, 100)
    assert len(means) <= 100
    hours = step / pd.Timedelta(hours=1)
    # The last step may hold fewer hours than the others.
    weights = np.full(len(means), hours)
    weights[-1] = count - hours * (len(means) - 1)
    assert float(means["kw"] @ weights) == pytest.approx(float(table["kw"].sum()), rel=1e-9)


def test_rows_that_are_missing_leave_a_gap_in_the_ledger():
    table = page_views.ledger_trend(page_views.hours(48)).drop(page_views.hours(48)[10:14])
    means, _ = series.regular_means(table)
    assert len(means) == 48
    assert means["used"].isna().sum() == 4


def test_a_band_is_closed_once_for_every_stretch():
    times = pd.DatetimeIndex(page_views.hours(6)).tz_localize(None)
    low = np.array([0.0, 0.0, np.nan, 1.0, 1.0, 1.0])
    xs, ys = series.band(times, low, low + 2.0)
    assert len(xs) == len(ys) == 2 * (2 + 3) + 2
    assert ys[:4].tolist() == [2.0, 2.0, 0.0, 0.0]
    assert np.isnan(ys).sum() == 2


def test_a_value_between_two_gaps_gets_a_dot():
    values = np.array([np.nan, 1.0, np.nan, 1.0, 2.0])
    assert series.isolated(values).tolist() == [False, True, False, False, False]


def test_nothing_to_draw_gives_no_figure():
    assert flows.flow_diagram((), {}) is None
    assert flows.ranked_destruction((), "EUR") is None
    assert figures.ledger_trend(page_views.ledger_trend() * np.nan) is None
    assert figures.ledger_trend(page_views.ledger_trend(page_views.hours(0))) is None
    silent = page_views.trend()
    assert figures.trend_chart(replace(silent, data=silent.data * np.nan), "t") is None


def test_flows_that_cannot_be_drawn_are_counted():
    chart = flows.flow_diagram(page_views.flows(), page_views.NODE_NAMES)
    assert "2 of 35 flows are not drawn" in chart.note


def test_the_ranking_shows_most_destroyed_first_whatever_the_order_of_the_rows():
    rows = tuple(reversed(page_views.equipment_rows()))
    bars = flows.ranked_destruction(rows, "EUR").figure["data"][0]
    assert bars["x"] == sorted(bars["x"], reverse=True)
    assert bars["customdata"][0] == "Boiler 1"


def test_the_chart_line_ends_at_the_machine_not_at_the_ideal():
    chart = expansion.expansion_chart(page_views.expansion())
    measured = next(trace for trace in chart.figure["data"] if trace["name"] == "measured")
    points = page_views.expansion().points
    assert measured["y"].tolist() == points["enthalpy"].tolist()
    assert "x 0." in measured["text"][-1]
    assert "°C" in measured["text"][0]


def test_marks_that_stand_close_share_a_label_and_each_is_explained():
    chart = figures.residual_chart(page_views.residual(), "r")
    labels = [note["text"] for note in chart.figure["layout"]["annotations"]]
    assert labels == ["E1, E2", "A1", "E3"]
    assert [mark for mark, _ in chart.marks] == ["E1", "E2", "A1", "E3"]


def test_a_bullet_puts_the_limits_at_a_quarter_and_three_quarters():
    drifting, steady = page_views.conditions()[:2]
    mark = marks.bullet(steady)
    # 0.19 below expected with a limit of 0.55: 50 - 0.19 / 0.55 * 25.
    assert mark.start == pytest.approx(41.36, abs=0.01)
    assert (mark.low, mark.high, mark.beyond) == (25.0, 75.0, "")
    assert mark.colour == COLOURS["blue"]
    off = marks.bullet(drifting)
    assert (off.start, off.width, off.beyond) == (0.0, 50.0, "left")
    assert off.colour == COLOURS["vermilion"]
    assert marks.bullet(replace(steady, limit=math.nan)) is None
    assert marks.bullet(replace(steady, limit=0.0)) is None


@given(st.lists(st.one_of(st.floats(-0.5, 2.0), st.just(math.nan)), min_size=4, max_size=4))
def test_a_quality_bar_never_leaves_its_frame(shares):
    good, uncertain, bad, missing = shares
    row = replace(page_views.quality()[0], good=good, uncertain=uncertain, bad=bad, missing=missing)
    segments = marks.quality_segments(row)
    assert sum(part.width for part in segments) <= 100.0 + 1e-9
    assert all(part.start >= 0.0 and part.width > 0.0 for part in segments)


def test_drifting_figures_stand_first_and_those_without_a_baseline_last():
    states = [row.state for row in ranked_conditions(page_views.conditions())]
    assert states == ["drifting", "drifting", "steady", "steady", "not judged", "no baseline"]


def test_the_first_page_shows_only_conditions_that_moved():
    first = shift.first_page(page_views.shift())
    assert [row.label for row in first.conditions] == [
        "Isentropic efficiency, section 2",
        "Terminal temperature difference",
        "Heat-loss coefficient",
    ]


def test_a_shift_is_compared_with_the_same_line_before():
    first = shift.first_page(page_views.shift())
    destroyed = next(row for row in first.ledger if row.line.key == "destroyed")
    assert destroyed.before == pytest.approx(46_120 * 0.981)
    assert destroyed.change == pytest.approx(46_120 * 0.019)
    alone = shift.first_page(page_views.shift(previous_ledger=()))
    assert all(math.isnan(row.change) for row in alone.ledger)


def test_digits_follow_the_smallest_change_that_matters_then_the_limit():
    drifting = page_views.conditions()[0]
    assert marks.matters(replace(drifting, smallest_change=0.05)) == 0.05
    assert marks.matters(drifting) == drifting.limit
    assert marks.matters(replace(drifting, limit=math.nan)) == 0.0
    alone = replace(drifting, smallest_change=0.05, state="not judged")
    assert marks.matters(alone) == pytest.approx(0.005)


def spiked(values):
    trend = page_views.trend(len(values), baseline=False)
    return replace(trend, data=trend.data.assign(value=values))


def test_a_stop_of_minutes_does_not_press_a_trend_flat_and_is_told():
    values = 80.0 + np.sin(np.arange(720) / 9.0)
    values[300:303] = [12.0, 5.0, 31.0]
    chart = figures.trend_chart(spiked(values), "t")
    low, high = chart.figure["layout"]["yaxis"]["range"]
    assert 77.0 < low < 79.0
    assert 81.0 < high < 83.0
    assert "3 of 720 values lie outside" in chart.note
    assert "5.00\u00a0%" in chart.note
    marked = chart.figure["data"][-1]
    assert marked["marker"]["symbol"] == ["triangle-down"] * 3
    assert all(low < y < high for y in marked["y"])


@given(st.lists(st.floats(-1e4, 1e4), min_size=2, max_size=150))
def test_every_value_is_shown_or_counted(values):
    chart = figures.trend_chart(spiked(np.array(values)), "t")
    shown = chart.figure["layout"]["yaxis"].get("range")
    if shown is None:
        assert chart.note == ""
    else:
        outside = sum(not shown[0] <= value <= shown[1] for value in values)
        assert outside > 0
        assert chart.note.startswith(f"{outside} of {len(values)} ")


def test_the_expansion_fills_its_chart_and_lines_end_at_its_edge():
    chart = expansion.expansion_chart(page_views.expansion())
    (s_low, s_high), (h_low, h_high) = (
        chart.figure["layout"][name]["range"] for name in ("xaxis", "yaxis")
    )
    points = page_views.expansion().points
    assert np.ptp(points["enthalpy"]) > 0.6 * (h_high - h_low)
    assert np.ptp(points["entropy"]) > 0.3 * (s_high - s_low)
    isobars = [trace for trace in chart.figure["data"] if "bar" in trace["name"]]
    assert isobars
    for line in isobars:
        inside = (line["x"] > s_low) & (line["x"] < s_high) & (line["y"] > h_low)
        # One point beyond either end carries the line to the edge.
        assert (~(inside & (line["y"] < h_high))).sum() <= 2


def test_a_single_wild_residual_is_marked_and_the_smoothed_line_always_fits():
    view = page_views.residual()
    wild = view.data.copy()
    wild.iloc[300, wild.columns.get_loc("residual")] = 700.0
    chart = figures.residual_chart(replace(view, data=wild), "r")
    low, high = chart.figure["layout"]["yaxis"]["range"]
    assert high < 5.0
    residuals = wild["residual"].dropna()
    outside = int(((residuals < low) | (residuals > high)).sum())
    assert f"{outside} of {len(residuals)} residuals lie outside" in chart.note
    assert "700" in chart.note
    smooth = wild["ewma"].dropna()
    assert low <= min(smooth.min(), wild["low"].min())
    assert high >= max(smooth.max(), wild["high"].max())
    assert "range" not in figures.residual_chart(view, "r").figure["layout"]["yaxis"]


def test_a_heading_begins_with_a_capital_and_keeps_the_rest():
    view = replace(page_views.residual(), label="heat transfer UA")
    assert figures.residual_chart(view, "r").heading.startswith("Heat transfer UA: measured")


def test_extremes_that_would_flood_the_chart_are_left_out():
    trend = page_views.power_trend()
    names = [trace["name"] for trace in figures.trend_chart(trend, "t").figure["data"]]
    assert "Lowest to highest" in names
    wide = trend.data.assign(minimum=-1e6, maximum=1e6)
    names = [
        trace["name"]
        for trace in figures.trend_chart(replace(trend, data=wide), "t").figure["data"]
    ]
    assert "Lowest to highest" not in names
