"""Runs, baselines, control charts, alarms and events: kept with their history."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import store_samples as samples
from store_samples import at

from monitor.store.alarms import AlarmAction, AlarmRecord, AlarmTransition
from monitor.store.baselines import BaselineRecord
from monitor.store.drift_points import DRIFT_COLUMNS
from monitor.store.errors import StoreError
from monitor.store.events import Event

START = at("2025-06-01")
HOUR = 3600
ALARM = AlarmRecord(
    "tg1", "eta_s_1", "drift", "unacknowledged", "medium", START, "Efficiency is 1.2 points low",
    value=-1.2, unit="%", cost_per_day=310.0,
)  # fmt: skip
RAISED = AlarmTransition(START, "raise", "normal", "unacknowledged", "lostwork")
SEEN = AlarmTransition(
    START + HOUR, "acknowledge", "unacknowledged", "acknowledged", "A. Keeper", "wash on Friday"
)


def test_a_run_tells_what_it_did(site):
    first = site.begin_run("cycle", "1.2", "abc", START, START + HOUR)
    second = site.begin_run("backfill", "1.2", "abc")
    site.finish_run(first, "done", readings=100, bad=3, missing=2, message="fine")
    assert [run.run_id for run in site.runs()] == [second, first]
    run = site.runs()[1]
    assert (run.status, run.readings, run.bad, run.missing) == ("done", 100, 3, 2)
    assert (run.window_start, run.window_end, run.message) == (START, START + HOUR, "fine")
    assert site.runs()[0].status == "running"


def test_a_run_of_another_site_cannot_be_finished(store, site):
    other = samples.register(store, "other")
    with pytest.raises(StoreError, match="no run"):
        other.finish_run(site.begin_run("cycle", "0", "abc"), "done")
    assert site.runs()[0].status == "running"


BASELINE = BaselineRecord(
    "tg1", "eta_s_1", START, START - 14 * 86400, START, {"intercept": 0.8125, "notes": ["ü"]},
    sigma=0.01, phi=0.4, points=300, reason="first",
)  # fmt: skip


def test_a_new_baseline_retires_the_one_before_and_both_are_kept(site):
    first = site.add_baseline(BASELINE)
    other = site.add_baseline(replace(BASELINE, figure="steam_rate"))
    second = site.add_baseline(replace(BASELINE, made=START + HOUR, reason="after the wash"))
    current = site.current_baselines()
    assert current["tg1", "eta_s_1"].baseline_id == second
    assert current["tg1", "steam_rate"].baseline_id == other
    history = site.baseline_history("tg1", "eta_s_1")
    assert history[0] == replace(BASELINE, baseline_id=first, retired=START + HOUR)
    assert history[1].retired is None
    assert site.retire_baseline("tg1", "eta_s_1", START + 2 * HOUR)
    assert not site.retire_baseline("tg1", "eta_s_1", START + 2 * HOUR)
    assert ("tg1", "eta_s_1") not in site.current_baselines()


def chart(hours):
    number = np.arange(hours, dtype=float)
    return pd.DataFrame(
        {
            "hour": START + HOUR * np.arange(hours),
            "measured": number / 3,
            "expected": number / 7,
            "residual": number / 3 - number / 7,
            "ewma": np.where(number == 1, np.nan, number / 9),
            "limit": 0.5,
            "cells": 12,
            "judged": number != 1,
            "baseline_id": pd.array([None, *range(1, hours)][:hours], dtype="Int64"),
        }
    )


def test_a_charts_points_come_back_and_are_replaced_by_stretch(site):
    end = START + 10 * HOUR
    assert site.replace_drift_points("tg1", "eta_s_1", START, end, chart(10)) == 10
    assert site.replace_drift_points("tg1", "eta_s_1", START, end, chart(10)) == 0
    found = site.drift_points("tg1", "eta_s_1", START, end)
    assert list(found) == list(DRIFT_COLUMNS)
    pd.testing.assert_frame_equal(
        found.reset_index(drop=True), chart(10)[list(DRIFT_COLUMNS)], check_exact=True
    )
    assert found.index[1] == pd.Timestamp("2025-06-01T01:00Z")
    # Other figures, and hours outside the stretch, stay.
    site.replace_drift_points("tg1", "steam_rate", START, end, chart(4))
    site.replace_drift_points("tg1", "eta_s_1", START + 2 * HOUR, end, chart(0))
    assert len(site.drift_points("tg1", "eta_s_1", START, end)) == 2
    assert len(site.drift_points("tg1", "steam_rate", START, end)) == 4
    with pytest.raises(StoreError, match="outside the stretch, or twice"):
        site.replace_drift_points("tg1", "eta_s_1", START, START + HOUR, chart(2))


def test_an_alarm_put_twice_is_one_alarm(site):
    number = site.put_alarm(ALARM)
    again = site.put_alarm(replace(ALARM, state="acknowledged", acknowledged=START + HOUR))
    assert again == number
    assert site.open_alarms() == [
        replace(ALARM, state="acknowledged", acknowledged=START + HOUR, alarm_id=number)
    ]
    assert site.put_alarm(replace(ALARM, raised=START + 9 * HOUR)) != number
    with pytest.raises(StoreError, match="no alarm 999"):
        site.alarm(999)


def test_every_step_of_an_alarm_is_kept_once_and_sets_its_state(site):
    number = site.put_alarm(ALARM)
    for step in (RAISED, SEEN, SEEN):
        site.record_transition(number, step)
    steps = site.alarm_transitions(number)
    assert [replace(step, recorded=0) for step in steps] == [RAISED, SEEN]
    assert all(step.recorded > START for step in steps)
    assert site.alarm(number).state == "acknowledged"
    with pytest.raises(StoreError, match="no alarm 999"):
        site.record_transition(999, RAISED)


def test_alarms_judged_again_keep_their_numbers_and_lose_what_is_no_more(site):
    later = replace(ALARM, raised=START + 48 * HOUR)
    other = site.put_alarm(replace(ALARM, figure="steam_rate"))
    first = site.replace_alarms(
        "tg1", "eta_s_1", "drift", START, [(ALARM, [RAISED, SEEN]), (later, [RAISED])]
    )
    recorded = [step.recorded for step in site.alarm_transitions(first[0])]
    cleared = AlarmTransition(START + 5 * HOUR, "clear", "acknowledged", "normal", "lostwork")
    over = replace(ALARM, state="normal", cleared=START + 5 * HOUR)
    second = site.replace_alarms(
        "tg1", "eta_s_1", "drift", START, [(over, [RAISED, SEEN, cleared])]
    )
    assert second == first[:1]
    assert [alarm.alarm_id for alarm in site.open_alarms()] == [other]
    steps = site.alarm_transitions(first[0])
    assert [replace(step, recorded=0) for step in steps] == [RAISED, SEEN, cleared]
    assert [step.recorded for step in steps[:2]] == recorded
    assert site.alarm_transitions(first[1]) == []
    # Earlier than the stretch: not touched.
    site.replace_alarms("tg1", "eta_s_1", "drift", START + HOUR, [])
    assert site.alarm(first[0]).state == "normal"
    with pytest.raises(StoreError, match="before the stretch"):
        site.replace_alarms("tg1", "eta_s_1", "drift", START + HOUR, [(ALARM, [])])
    with pytest.raises(StoreError, match="another's place"):
        site.replace_alarms("tg1", "steam_rate", "drift", START, [(ALARM, [])])


def test_the_history_has_what_was_open_at_any_time_of_the_stretch(site):
    over = replace(ALARM, state="normal", cleared=START + 5 * HOUR)
    number = site.put_alarm(over)
    open_one = site.put_alarm(replace(ALARM, figure="steam_rate", raised=START + HOUR))

    def found(first, last, **of):
        alarms = site.alarm_history(START + first * HOUR, START + last * HOUR, **of)
        return [alarm.alarm_id for alarm in alarms]

    assert found(-5, 0) == []
    assert found(0, 1) == [number]
    assert found(4, 5) == [open_one, number]
    assert found(6, 7) == [open_one]
    assert found(4, 5, subject="hp_header") == []


def test_what_people_did_outlasts_alarms_that_are_judged_away(site):
    action = AlarmAction(
        "tg1", "eta_s_1", "drift", START + HOUR, "shelve", "A. Keeper", "overhaul", START + 99
    )
    site.replace_alarms("tg1", "eta_s_1", "drift", START, [(ALARM, [RAISED])])
    site.record_action(action)
    site.record_action(action)
    site.replace_alarms("tg1", "eta_s_1", "drift", START, [])
    (kept,) = site.alarm_actions("tg1", "eta_s_1")
    assert replace(kept, recorded=0) == action
    assert site.alarm_actions("hp_header") == []


def test_events_come_back_in_order_of_time(site):
    late = Event("tg1", "overhaul", START + HOUR, "A. Keeper", "<b>not markup</b>; '; drop table--")
    early = Event("", "outage", START, "B. Keeper")
    numbers = [site.add_event(late), site.add_event(early)]
    assert site.events() == [
        replace(early, event_id=numbers[1]),
        replace(late, event_id=numbers[0]),
    ]
    assert site.events(START, START + HOUR) == [replace(early, event_id=numbers[1])]
    assert [event.kind for event in site.events(subject="tg1")] == ["overhaul"]


def test_nothing_of_another_site_is_seen(store, site):
    other = samples.register(store, "other")
    site.add_event(Event("tg1", "wash", START, "A. Keeper"))
    site.add_baseline(BASELINE)
    number = site.put_alarm(ALARM)
    site.record_transition(number, RAISED)
    assert other.events() == []
    assert other.current_baselines() == {}
    assert other.open_alarms() == []
    assert other.alarm_transitions(number) == []
    with pytest.raises(StoreError, match="no alarm"):
        other.record_transition(number, SEEN)
