from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from monitor.drift.baseline import BaselineError
from monitor.drift.judgement import (
    ChartState,
    FigureRule,
    Segment,
    Settings,
    alarm_episodes,
    chart_points,
    excess,
    fit_reference,
    reference_period,
    segments,
)
from monitor.drift.message import finding, message, priority
from monitor.drift.verdict import Verdict

HOUR = 3600
START = 1_700_000_000 // HOUR * HOUR
REFERENCE = 14 * 24
SETTINGS = Settings(
    weight=0.1,
    false_alarm_every=8766 * HOUR,
    reference=None,
    reference_length=REFERENCE * HOUR,
    least_hours=72,
    least_cells=0.5,
    on_delay=3 * HOUR,
    off_delay=12 * HOUR,
)
RULE = FigureRule(
    subject="TG1",
    subject_name="TG1",
    figure="eta_s_hp",
    label="isentropic efficiency HP–IP",
    unit="%",
    worse="low",
    smallest_change=1.0,
)
OPEN = Segment(None, None)


def hours(seed=1, days=60, sigma=0.5, load_shift=0.0):
    """Hourly efficiencies that follow the load and nothing else."""
    rng = np.random.default_rng(seed)
    n = 24 * days
    load = rng.uniform(20.0, 30.0, n)
    load[n // 2 :] += load_shift
    value = 80.0 + 0.15 * load + sigma * rng.normal(size=n)
    return pd.DataFrame(
        {
            "hour": START + HOUR * np.arange(n),
            "value": value,
            "load": load,
            "cells": np.full(n, 12),
        }
    )


def chart(frame, rule=RULE, settings=SETTINGS, segment=OPEN):
    period = reference_period(frame, segment, settings)
    baseline = fit_reference(frame, period, rule, settings)
    return baseline, chart_points(frame, baseline, rule, settings)


def alarms(frame, rule=RULE, settings=SETTINGS):
    baseline, points = chart(frame, rule, settings)
    return [
        ((e.raised - START) // HOUR, None if e.cleared is None else (e.cleared - START) // HOUR)
        for e in alarm_episodes(points, baseline, rule, settings)
    ]


# --- alarms that should and should not come ------------------------------------------------------


def test_a_machine_that_gets_worse_raises_an_alarm_within_hours():
    frame = hours()
    frame.loc[1000:, "value"] -= 2.0  # four sigma, twice the smallest change
    ((raised, cleared),) = alarms(frame)
    # The EWMA passes half of the step after ln 2 / 0.1 = 7 hours; then three hours of delay.
    assert 1007 <= raised <= 1020
    assert cleared is None


def test_an_improvement_is_no_alarm_where_only_low_is_worse():
    frame = hours()
    frame.loc[1000:, "value"] += 2.0
    assert alarms(frame) == []
    assert len(alarms(frame, replace(RULE, worse="both"))) == 1
    assert len(alarms(frame, replace(RULE, worse="high"))) == 1


def test_a_change_that_is_certain_but_small_is_no_alarm():
    frame = hours(sigma=0.1)
    frame.loc[1000:, "value"] -= 0.8  # eight sigma, but under the smallest change of one point
    assert alarms(frame) == []
    assert len(alarms(frame, replace(RULE, smallest_change=0.2))) == 1


def test_a_change_of_load_alone_is_no_alarm():
    frame = hours(load_shift=0.8)
    # Half a point of smallest change: the figure itself moves by 0.12 with the load.
    assert alarms(frame, replace(RULE, smallest_change=0.0)) == []


def test_a_load_beyond_the_reference_is_not_judged():
    frame = hours(load_shift=40.0)
    frame.loc[720:, "value"] -= 20.0  # far outside, and nobody knows what to expect there
    assert alarms(frame) == []
    _, points = chart(frame)
    assert points.loc[720:, ["expected", "residual", "ewma", "limit"]].isna().all(axis=None)
    assert points.loc[720:, "judged"].eq(0).all()
    assert points.loc[720:, "measured"].notna().all()


def test_an_alarm_clears_when_the_machine_is_well_again():
    frame = hours()
    frame.loc[800:999, "value"] -= 3.0
    ((raised, cleared),) = alarms(frame)
    assert 800 < raised < 820
    assert 1012 < cleared < 1050


def test_an_alarm_stays_while_the_machine_is_off():
    frame = hours()
    frame.loc[1000:1030, "value"] -= 3.0
    frame.loc[1031:, ["value", "load"]] = np.nan
    ((_, cleared),) = alarms(frame)
    assert cleared is None


def test_nothing_is_raised_in_the_reference_period_itself():
    frame = hours(days=20)
    frame.loc[100:130, "value"] -= 5.0
    assert alarms(frame, replace(RULE, smallest_change=0.0)) == []


def test_false_alarms_come_about_as_often_as_designed():
    settings = replace(SETTINGS, false_alarm_every=400 * HOUR, on_delay=0.0, off_delay=0.0)
    rule = replace(RULE, smallest_change=0.0, worse="both")
    firsts, watched = 0, 0
    for seed in range(60):
        baseline, points = chart(hours(seed, days=44), rule, settings)
        found = alarm_episodes(points, baseline, rule, settings)
        # Until its first alarm, or to its end: the rate of first alarms is one over the run length.
        end = found[0].raised if found else int(points["hour"].iloc[-1]) + HOUR
        watched += (end - baseline.end) // HOUR
        firsts += bool(found)
    # About 50 first alarms: 14 % standard error. The limits allow for the baseline of two weeks
    # being uncertain itself, which is more than most of them need: rather fewer alarms than more.
    assert 0.8 * 400 < watched / firsts < 2.0 * 400


def test_the_same_hours_give_the_same_chart_and_alarms():
    frame = hours()
    frame.loc[1000:, "value"] -= 2.0
    one, other = chart(frame)[1], chart(frame.copy())[1]
    pd.testing.assert_frame_equal(one, other, check_exact=True)
    assert alarms(frame) == alarms(frame.copy())


def test_more_hours_leave_the_chart_so_far_as_it_was():
    frame = hours()
    short = frame.iloc[:900]
    pd.testing.assert_frame_equal(chart(short)[1], chart(frame)[1].iloc[:900], check_exact=True)


def test_a_chart_goes_on_from_where_it_stood():
    frame = hours()
    frame.loc[500:520, "value"] = np.nan
    baseline, whole = chart(frame)
    before = whole.iloc[:700]
    judged = before["ewma"].dropna()
    state = ChartState(judged.iloc[-1], judged.size)
    rest = chart_points(frame.iloc[700:], baseline, RULE, SETTINGS, state)
    pd.testing.assert_frame_equal(rest, whole.iloc[700:].reset_index(drop=True), rtol=1e-12)


def test_a_chart_with_nothing_judged_is_empty_and_quiet():
    frame = hours()
    baseline, _ = chart(frame)
    frame["value"] = np.nan
    points = chart_points(frame, baseline, RULE, SETTINGS)
    assert points["ewma"].isna().all()
    assert alarm_episodes(points, baseline, RULE, SETTINGS) == []


def test_the_limit_is_never_under_the_smallest_change_and_wider_for_longer_memory():
    frame = hours()
    _, points = chart(frame)
    assert (points["limit"] >= 1.0).all()
    baseline = replace(chart(frame)[0], phi=0.0, covariance=(0.0,) * 9)
    rule = replace(RULE, smallest_change=0.0)
    free = chart_points(frame, baseline, rule, SETTINGS)["limit"]
    remembering = chart_points(frame, replace(baseline, phi=0.8), rule, SETTINGS)["limit"]
    # (1 + 0.72) / (1 - 0.72) = 6.1 in variance once the start is over.
    assert np.median(remembering[100:] / free[100:]) == pytest.approx(np.sqrt(6.1), rel=0.05)
    assert free.iloc[0] < free.iloc[50]


def test_a_figure_that_never_moved_is_judged_by_its_smallest_change():
    frame = hours()
    frame["value"] = 0.0
    rule = replace(RULE, worse="high", smallest_change=0.1, follows_load=False)
    assert alarms(frame, rule) == []
    frame.loc[1000:, "value"] = 0.3
    assert len(alarms(frame, rule)) == 1
    with pytest.raises(BaselineError, match="stuck"):
        chart(frame, replace(rule, smallest_change=0.0))


# --- reference periods and segments --------------------------------------------------------------


def test_the_reference_is_the_first_two_weeks_of_judged_hours():
    frame = hours()
    frame.loc[:9, "value"] = np.nan
    assert reference_period(frame, OPEN, SETTINGS) == (
        START + 10 * HOUR,
        START + (10 + REFERENCE) * HOUR,
    )


def test_a_machine_that_is_mostly_off_takes_longer_to_get_its_baseline():
    frame = hours()
    frame.loc[frame.index % 10 != 0, "value"] = np.nan
    start, end = reference_period(frame, OPEN, SETTINGS)
    assert (start, end) == (START, START + 711 * HOUR)
    assert fit_reference(frame, (start, end), RULE, SETTINGS).points == 72


@pytest.mark.parametrize(
    ("rows", "why"),
    [(0, "0 judged hours of the 72"), (71, "71 judged hours"), (300, "period is not over")],
)
def test_until_the_reference_is_over_there_is_no_baseline(rows, why):
    with pytest.raises(BaselineError, match=why):
        reference_period(hours().iloc[:rows], OPEN, SETTINGS)


def test_a_stated_reference_is_taken_in_its_own_segment_only():
    stated = (START + 480 * HOUR, START + 720 * HOUR)
    settings = replace(SETTINGS, reference=stated)
    frame = hours()
    assert reference_period(frame, OPEN, settings) == stated
    later = Segment(START + 800 * HOUR, None)
    assert reference_period(frame.iloc[800:], later, settings)[0] == START + 800 * HOUR
    with pytest.raises(BaselineError, match="stated reference period is not over"):
        reference_period(frame.iloc[:700], OPEN, settings)
    baseline, points = chart(frame, settings=settings)
    assert points["expected"].notna().to_numpy().nonzero()[0][0] == 480
    assert baseline.points == 240


def test_events_cut_time_and_their_own_hour_belongs_to_neither():
    whole, part = START + 24 * HOUR, START + 48 * HOUR + 600
    assert segments([part, whole, part]) == (
        Segment(None, whole),
        Segment(whole, START + 48 * HOUR),
        Segment(START + 49 * HOUR, None),
    )
    assert segments([]) == (OPEN,)


# --- what a person reads -------------------------------------------------------------------------


def drifted():
    frame = hours()
    frame.loc[1000:, "value"] -= 2.5
    baseline, points = chart(frame)
    (alarm,) = alarm_episodes(points, baseline, RULE, SETTINGS)
    return points[points["hour"] >= baseline.end], alarm


def test_an_alarm_says_what_changed_by_how_much_and_since_when():
    points, alarm = drifted()
    found = finding(points, alarm.raised)
    assert abs(found.since - (START + 1000 * HOUR)) <= 2 * HOUR
    assert found.change == pytest.approx(-2.5, abs=0.4)
    text = message(
        RULE,
        replace(found, measured=81.87, expected=84.0, change=-2.13, since=1_710_212_400),
        Verdict("machine", ()),
        time_zone="Europe/Vienna",
        cost_per_day=1234.5,
        currency="EUR",
    )
    assert text == (
        "TG1: isentropic efficiency HP–IP is 81.9 %, expected 84.0 % at this load: down 2.1 points "
        "since about 12 Mar 04:00. The live weather is not the cause: the figure does not depend "
        "on it. The extra lost work costs about 1 230 EUR a day."
    )


def test_an_instrument_in_doubt_is_named_first():
    points, alarm = drifted()
    text = message(
        replace(RULE, unit="kW/K", follows_load=False),
        finding(points, alarm.raised),
        Verdict("instrument", ("the mass balance moved by +4.0%", "readings are bad")),
        time_zone="UTC",
    )
    assert "kW/K, expected" in text
    assert "at this load" not in text
    assert text.endswith(
        "Look at the instruments first: the mass balance moved by +4.0%; readings are bad."
    )


@pytest.mark.parametrize("cost", [None, 0.0, -5.0, np.nan])
def test_a_cost_that_is_not_known_is_not_said(cost):
    points, alarm = drifted()
    found = finding(points, alarm.raised)
    text = message(RULE, found, Verdict("machine", ()), time_zone="UTC", cost_per_day=cost)
    assert "cost" not in text


@pytest.mark.parametrize(
    ("smallest", "shown"), [(0.02, "81.870"), (0.5, "81.9"), (2.0, "81.9"), (10.0, "82")]
)
def test_numbers_have_the_digits_that_matter(smallest, shown):
    points, alarm = drifted()
    found = replace(finding(points, alarm.raised), measured=81.87)
    text = message(
        replace(RULE, smallest_change=smallest), found, Verdict("machine", ()), time_zone="UTC"
    )
    assert f" {shown} %, expected" in text


def test_the_farther_beyond_the_limit_the_more_urgent():
    points = pd.DataFrame({"ewma": [-1.1, np.nan, -1.5], "limit": [1.0, np.nan, 1.0]})
    assert priority(points) == "low"
    assert priority(points.assign(ewma=[-1.1, np.nan, -2.5])) == "medium"
    assert priority(points.assign(ewma=[1.1, np.nan, 4.5])) == "high"
    assert priority(points.iloc[:0]) == "low"


def test_extra_destruction_is_what_the_load_does_not_explain():
    frame = hours(sigma=5.0)
    frame["value"] = (
        500 + 20 * frame["load"] + 5.0 * np.random.default_rng(5).normal(size=len(frame))
    )
    frame.loc[1000:, "value"] += 60.0
    period = (START, START + REFERENCE * HOUR)
    end = int(frame["hour"].iloc[-1]) + HOUR
    # Means over 24 hours and 336 hours of a scatter of 5 kW.
    day = 24 * HOUR
    before = START + 900 * HOUR
    assert excess(frame, period, end - day, end, least_hours=72) == pytest.approx(60.0, abs=4.0)
    assert excess(frame, period, before - day, before, least_hours=72) == pytest.approx(0, abs=4.0)
    assert np.isnan(excess(frame.iloc[:10], period, end - day, end, least_hours=72))
    assert np.isnan(excess(frame, period, end + day, end + 2 * day, least_hours=72))
