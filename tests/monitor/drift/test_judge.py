"""Judging against a real store, with cells every half hour and a turbine of our own invention."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from monitor.drift.judge import baseline_of, judge
from monitor.drift.judgement import FigureRule, Settings
from monitor.drift.raising import ALARM_KIND, Money
from monitor.drift.rules import figure_rules, settings_of
from monitor.equipment.base import Figure
from monitor.flags import Flag
from monitor.site.models import Alarms, Drift, DriftFigure, Shifts
from monitor.site.shifts import ShiftCalendar
from monitor.store.alarms import AlarmAction
from monitor.store.batch import (
    CONDITION_COLUMNS,
    EQUIPMENT_COLUMNS,
    LEDGER_COLUMNS,
    QUALITY_COLUMNS,
    STREAM_COLUMNS,
    FigureBatch,
)
from monitor.store.events import Event
from monitor.store.open import open_store

HOUR, CELL = 3600, 1800
START = 1_700_000_000 // HOUR * HOUR
DAYS = 40
END = START + DAYS * 24 * HOUR
NOW = END + 1000
STEP = START + 600 * HOUR
CALENDAR = ShiftCalendar.of(Shifts(), "Europe/Vienna")
RULE = FigureRule("TG1", "Turbine 1", "eta_s_hp", "isentropic efficiency", "%", "low", 1.0)
SETTINGS = Settings(
    weight=0.1,
    false_alarm_every=8766 * HOUR,
    reference=None,
    reference_length=14 * 24 * HOUR,
    least_hours=72,
    least_cells=0.5,
    on_delay=3 * HOUR,
    off_delay=12 * HOUR,
)
MONEY = Money(unit_cost=lambda _subject, _reference: 50.0, currency="EUR")


def cells(loss=2.5, flag=0):
    """Times, efficiency [%], load [kg/s] and destroyed exergy [kW]: worse from STEP on."""
    rng = np.random.default_rng(12)
    time = np.arange(START, END, CELL)
    load = rng.uniform(20, 30, time.size)
    worse = time >= STEP
    value = 80 + 0.15 * load + 0.6 * rng.normal(size=time.size) - loss * worse
    destroyed = 40 * load + 5 * rng.normal(size=time.size) + 100 * (loss / 2.5) * worse
    return time, value, load, destroyed, np.where(worse, flag, 0)


def batch(data, start=START, end=END):
    time, value, load, destroyed, flag = (a[(data[0] >= start) & (data[0] < end)] for a in data)
    equipment = pd.DataFrame(dict.fromkeys(EQUIPMENT_COLUMNS, 0.0), index=range(time.size)).assign(
        subject="TG1",
        time=time,
        flag=0,
        load_kg_s=load,
        destroyed_live_kw=destroyed,
        destroyed_reference_kw=destroyed,
    )
    conditions = pd.DataFrame(
        {
            "subject": "TG1",
            "figure": "eta_s_hp",
            "time": time,
            "value": value,
            "weight": 1.0,
            "u_value": np.nan,
            "flag": flag,
        }
    )
    assert set(CONDITION_COLUMNS) <= set(conditions.columns)
    return FigureBatch(
        start=start,
        end=end,
        streams=pd.DataFrame(columns=["subject", "time", *STREAM_COLUMNS, "flag"]),
        equipment=equipment,
        conditions=conditions,
        ledger=pd.DataFrame(columns=["time", *LEDGER_COLUMNS, "flag"]),
        tag_quality=pd.DataFrame(columns=["tag", "hour", *QUALITY_COLUMNS]),
    )


@pytest.fixture
def site(tmp_path):
    with open_store(f"sqlite:///{tmp_path / 'store.sqlite'}", tmp_path) as store:
        yield store.register(
            "plant",
            "Plant",
            CELL,
            "Europe/Vienna",
            CALENDAR,
            equipment=[("TG1", "Turbine 1", "turbine")],
            figures=[("TG1", "eta_s_hp", "isentropic efficiency", "%", "low")],
        )


def write(site, data, start=START, end=END):
    site.write(batch(data, start, end), site.begin_run("test", "0", "hash", start, end))


def judged(site, start=START, end=END, now=NOW, rule=RULE, settings=SETTINGS, **other):
    (status,) = judge(site, [rule], settings, start, end, now, money=MONEY, **other)
    return status


def points(site):
    return site.drift_points("TG1", "eta_s_hp", START, END)


def alarms(site):
    return site.alarm_history(START, END)


def test_a_worn_section_is_found_stored_and_explained(site):
    write(site, cells())
    status = judged(site)
    assert status.state == "drifting"
    (alarm,) = site.open_alarms()
    assert alarm.alarm_id == status.alarms[0].alarm_id
    assert alarm.state == "unacknowledged"
    assert STEP < alarm.raised < STEP + 20 * HOUR
    assert alarm.message.startswith("Turbine 1: isentropic efficiency is 81.")
    assert "The live weather is not the cause" in alarm.message
    # 100 kW more at the same load: 100 kW x 24 h x 50 EUR / MWh, if the start is dated to the hour.
    assert alarm.cost_per_day == pytest.approx(120.0, rel=0.15)
    (step,) = site.alarm_transitions(alarm.alarm_id)
    assert (step.action, step.from_state, step.to_state) == ("raise", "normal", "unacknowledged")
    (record,) = site.baseline_history("TG1", "eta_s_hp")
    baseline = baseline_of(record)
    stored = points(site)
    assert len(stored) == 24 * DAYS
    assert (stored["baseline_id"] == record.baseline_id).all()
    # Two cells an hour of 0.6 each; 80 + 0.15 x 25.
    assert baseline.sigma == pytest.approx(0.6 / np.sqrt(2), rel=0.15)
    assert baseline.expected([25.0])[0] == pytest.approx(83.75, abs=0.1)


def test_a_healthy_machine_is_steady(site):
    write(site, cells(loss=0.0))
    assert judged(site).state == "steady"
    assert alarms(site) == []


def test_judging_again_changes_nothing(site):
    write(site, cells())
    judged(site)
    before, old = points(site), alarms(site)
    judged(site, now=NOW + 500)
    pd.testing.assert_frame_equal(points(site), before, check_exact=True)
    assert alarms(site) == old
    assert len(site.baseline_history("TG1", "eta_s_hp")) == 1
    assert len(site.alarm_transitions(old[0].alarm_id)) == 1


@pytest.mark.parametrize("step", [24 * 7 * HOUR, 91 * HOUR])
def test_judging_window_by_window_gives_what_judging_all_at_once_gives(site, step):
    data = cells()
    for start in range(START, END, step):
        end = min(start + step, END)
        write(site, data, start, end)
        judged(site, start, end, now=end)
    piecewise, old = points(site), alarms(site)
    judged(site)
    pd.testing.assert_frame_equal(points(site), piecewise, rtol=1e-9)
    assert [(a.raised, a.message) for a in alarms(site)] == [(a.raised, a.message) for a in old]


def test_hours_that_a_failed_judgement_left_out_are_caught_up_with(site):
    write(site, cells())
    judged(site, end=START + 700 * HOUR)
    judged(site, start=START + 800 * HOUR)
    assert len(points(site)) == 24 * DAYS


def test_judging_with_nothing_new_plays_actions_and_leaves_the_chart(site):
    write(site, cells())
    judged(site)
    before = points(site)
    later = END + 50 * HOUR + 7
    assert judged(site, start=later, end=later, now=later).state == "drifting"
    pd.testing.assert_frame_equal(points(site), before, check_exact=True)


def test_an_hour_that_is_not_over_is_not_judged(site):
    write(site, cells())
    judged(site, end=START + 500 * HOUR + CELL)
    assert len(points(site)) == 500


def test_until_the_reference_period_is_over_hours_are_shown_and_not_judged(site):
    write(site, cells())
    status = judged(site, end=START + 200 * HOUR)
    assert (status.state, status.reason) == (
        "no baseline",
        "no baseline yet: the reference period is not over",
    )
    stored = points(site)
    assert len(stored) == 200
    assert stored["measured"].notna().all()
    assert stored[["expected", "ewma", "limit"]].isna().all(axis=None)
    assert not stored["judged"].any()


def test_a_wash_ends_the_alarm_and_restarts_the_baseline(site):
    write(site, cells())
    judged(site)
    wash = STEP + 100 * HOUR + 60
    site.add_event(Event("TG1", "wash", wash, "A. Operator"))
    status = judged(site, start=wash)
    # 260 hours are left: fewer than the two weeks of a reference period.
    assert status.state == "no baseline"
    (alarm,) = alarms(site)
    assert alarm.cleared == wash // HOUR * HOUR
    assert alarm.state == "returned"
    stored = points(site)
    hour = stored.index.as_unit("s").asi8
    assert stored.loc[hour >= wash, "expected"].isna().all()
    assert stored.loc[hour < wash // HOUR * HOUR, "expected"].notna().all()
    assert wash // HOUR * HOUR not in hour
    assert site.current_baselines() == {}
    short = replace(SETTINGS, reference_length=100 * HOUR)
    assert judged(site, start=wash, settings=short).state == "steady"
    assert site.current_baselines()["TG1", "eta_s_hp"].reference_start > wash


@pytest.mark.parametrize(
    ("subject", "kind", "restarts"),
    [
        ("", "overhaul", True),
        ("FT-101", "calibration", True),
        ("FT-999", "calibration", False),
        ("TG2", "wash", False),
        ("TG1", "inspection", False),
    ],
)
def test_only_events_that_concern_the_machine_restart_its_baseline(site, subject, kind, restarts):
    write(site, cells(loss=0.0))
    site.add_event(Event(subject, kind, END - 100 * HOUR, "A. Operator"))
    status = judged(site, tags={"TG1": frozenset({"FT-101"})})
    assert (status.state == "no baseline") is restarts


def test_what_an_operator_did_survives_judging_again(site):
    write(site, cells())
    judged(site)
    (alarm,) = alarms(site)
    site.record_action(
        AlarmAction(
            "TG1", "eta_s_hp", ALARM_KIND, alarm.raised + 7200, "acknowledge", "A. Operator"
        )
    )
    judged(site)
    (again,) = alarms(site)
    assert (again.alarm_id, again.state) == (alarm.alarm_id, "acknowledged")
    assert again.acknowledged == alarm.raised + 7200
    assert [s.who for s in site.alarm_transitions(alarm.alarm_id)] == ["lostwork", "A. Operator"]


def test_a_shelved_alarm_comes_back_when_its_time_is_up(site):
    write(site, cells())
    judged(site)
    (alarm,) = alarms(site)
    site.record_action(
        AlarmAction(
            "TG1", "eta_s_hp", ALARM_KIND, alarm.raised + 60, "shelve", "A. Operator", "", NOW
        )
    )
    judged(site, now=NOW - 1)
    assert [(a.state, a.shelved_until) for a in alarms(site)] == [("shelved", NOW)]
    judged(site, now=NOW)
    assert [(a.state, a.shelved_until) for a in alarms(site)] == [("unacknowledged", None)]


def test_corrected_readings_take_a_wrong_alarm_away_and_say_which_action_no_longer_fits(site):
    write(site, cells())
    judged(site)
    (alarm,) = alarms(site)
    site.record_action(
        AlarmAction("TG1", "eta_s_hp", ALARM_KIND, alarm.raised + 60, "acknowledge", "A. Operator")
    )
    write(site, cells(loss=0.0))
    status = judged(site)
    assert (status.state, alarms(site)) == ("steady", [])
    ((action, reason),) = status.refused
    assert action.by == "A. Operator"
    assert "normal" in reason


def test_new_settings_make_the_chart_anew(site):
    write(site, cells())
    judged(site)
    status = judged(site, start=END - HOUR, rule=replace(RULE, smallest_change=3.0))
    assert status.state == "steady"
    assert (points(site)["limit"] >= 3.0).all()
    assert len(site.baseline_history("TG1", "eta_s_hp")) == 2


def test_reference_hours_computed_again_make_the_baseline_anew(site):
    write(site, cells(loss=0.0))
    judged(site)
    time, value, *rest = cells(loss=0.0)
    write(site, (time, value + 1.0, *rest))
    judged(site, start=START + 50 * HOUR)
    old, new = site.baseline_history("TG1", "eta_s_hp")
    assert (old.retired, new.retired) == (NOW, None)
    assert baseline_of(new).intercept == pytest.approx(baseline_of(old).intercept + 1.0)
    assert (points(site)["baseline_id"] == new.baseline_id).all()


def test_readings_that_break_the_second_law_are_blamed_on_the_instruments(site):
    data = cells()
    late = data[0] >= STEP
    flag = np.where(late & (np.arange(data[0].size) % 2 == 0), int(Flag.SECOND_LAW), 0)
    write(site, (*data[:4], flag))
    judged(site)
    (alarm,) = alarms(site)
    assert "Look at the instruments first: the readings contradict the second law" in alarm.message


def test_a_stuck_figure_says_why_it_has_no_baseline(site):
    time, value, *rest = cells()
    write(site, (time, np.full_like(value, 81.0), *rest))
    status = judged(site, rule=replace(RULE, smallest_change=0.0))
    assert status.state == "no baseline"
    assert "stuck" in status.reason


def test_a_machine_that_is_off_is_not_judged(site):
    time, value, load, destroyed, _ = cells(loss=0.0)
    flag = np.where(time >= END - 48 * HOUR, int(Flag.OFF), 0)
    write(site, (time, value, load, destroyed, flag))
    assert judged(site).state == "not judged"


def test_a_site_without_figures_yet_has_no_baseline(site):
    status = judged(site)
    assert (status.state, status.reason) == (
        "no baseline",
        "no baseline yet: 0 judged hours of the 72 needed",
    )


# --- what the site file asks for -----------------------------------------------------------------


class _Kind:
    def figures(self, _):
        return (
            Figure("eta_s_hp", "isentropic efficiency", "%", "low", 1.0),
            Figure("steam_rate", "steam rate", "kg/kWh", "high", 0.1, follows_load=False),
            Figure("vacuum", "vacuum", "mbar", "high", 1.0, judged=False),
        )


class _Item:
    id, name, kind = "TG1", "", _Kind()


def test_the_site_s_own_smallest_changes_and_choices_win():
    drift = Drift(
        figure=(
            DriftFigure(equipment="TG1", figure="eta_s_hp", smallest_change=0.4),
            DriftFigure(equipment="TG2", figure="steam_rate", judged=False),
        )
    )
    efficiency, rate = figure_rules([_Item()], drift)
    assert (efficiency.figure, efficiency.smallest_change) == ("eta_s_hp", 0.4)
    assert (rate.figure, rate.smallest_change, rate.follows_load) == ("steam_rate", 0.1, False)
    assert rate.subject_name == "TG1"
    none = Drift(figure=(DriftFigure(equipment="TG1", figure="eta_s_hp", judged=False),))
    assert [rule.figure for rule in figure_rules([_Item()], none)] == ["steam_rate"]


def test_a_stated_reference_without_an_offset_is_local_time():
    drift = Drift(reference_from="2024-07-01T00:00:00", reference_to="2024-07-15T00:00:00Z")
    settings = settings_of(drift, Alarms(), "Europe/Vienna")
    # Vienna is two hours ahead in July.
    assert settings.reference == (
        pd.Timestamp("2024-06-30T22:00Z").timestamp(),
        pd.Timestamp("2024-07-15T00:00Z").timestamp(),
    )
    assert settings_of(Drift(), Alarms(), "UTC").reference is None


@pytest.mark.parametrize(
    "stated",
    [{"reference_from": "2024-07-01T00:00:00Z"}, {"reference_to": "2024-07-15T00:00:00Z"}],
)
def test_a_reference_with_one_end_stated_gets_the_other_from_its_length(stated):
    reference = settings_of(Drift(**stated), Alarms(), "UTC").reference
    # Two weeks is the default length.
    assert reference == (
        pd.Timestamp("2024-07-01T00:00Z").timestamp(),
        pd.Timestamp("2024-07-15T00:00Z").timestamp(),
    )
