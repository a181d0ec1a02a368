from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.drift.alarms import (
    Action,
    Alarm,
    AlarmError,
    AlarmState,
    Episode,
    OperatorAction,
    act,
    advance,
    episodes,
    replay,
)

S, A = AlarmState, Action
HOUR = 3600
SHOWN = (S.NORMAL, S.UNACKNOWLEDGED, S.ACKNOWLEDGED, S.RETURNED)

# The state diagram of ISA-18.2 / IEC 62682 without latching, written out by hand (from memory).
LEGAL = {
    (S.NORMAL, A.RAISE): S.UNACKNOWLEDGED,
    (S.UNACKNOWLEDGED, A.ACKNOWLEDGE): S.ACKNOWLEDGED,
    (S.UNACKNOWLEDGED, A.CLEAR): S.RETURNED,
    (S.ACKNOWLEDGED, A.CLEAR): S.NORMAL,
    (S.RETURNED, A.ACKNOWLEDGE): S.NORMAL,
    (S.RETURNED, A.RAISE): S.UNACKNOWLEDGED,
} | {
    (state, action): after
    for state in SHOWN
    for action, after in (
        (A.SHELVE, S.SHELVED),
        (A.SUPPRESS, S.SUPPRESSED),
        (A.REMOVE, S.OUT_OF_SERVICE),
    )
}
BACK = {S.SHELVED: A.UNSHELVE, S.SUPPRESSED: A.UNSUPPRESS, S.OUT_OF_SERVICE: A.RESTORE}


def alarm_in(state, *, active=None):
    if active is None:
        active = state in {S.UNACKNOWLEDGED, S.ACKNOWLEDGED}
    return Alarm(state, active, 9000 if state is S.SHELVED else None)


def take(alarm, action, time=100):
    return act(alarm, action, time, until=9999 if action is A.SHELVE else None)


@pytest.mark.parametrize(("state", "action"), sorted(itertools.product(SHOWN, A)))
def test_an_alarm_that_is_shown_takes_the_ways_of_the_standard_and_no_others(state, action):
    alarm = alarm_in(state)
    if (state, action) not in LEGAL:
        with pytest.raises(AlarmError, match=f"cannot {action} an alarm that is {state}; "):
            take(alarm, action)
        return
    moved, step = take(alarm, action)
    assert moved.state == step.after == LEGAL[state, action]
    assert (step.before, step.action, step.time) == (state, action, 100)


@pytest.mark.parametrize("active", [True, False])
@pytest.mark.parametrize(("aside", "action"), sorted(itertools.product(BACK, A)))
def test_an_alarm_put_aside_comes_back_by_its_own_way_only(aside, action, active):
    alarm = alarm_in(aside, active=active)
    if action is BACK[aside]:
        moved, _ = take(alarm, action)
        assert moved == Alarm(S.UNACKNOWLEDGED if active else S.NORMAL, active)
    elif action is (A.CLEAR if active else A.RAISE):
        moved, _ = take(alarm, action)
        assert moved.state == aside
        assert moved.active is not active
    else:
        with pytest.raises(AlarmError, match=str(aside)):
            take(alarm, action)


def test_a_shelving_needs_an_end_in_the_future():
    with pytest.raises(AlarmError, match="give one"):
        act(Alarm(), A.SHELVE, 100)
    for until in (99, 100):
        with pytest.raises(AlarmError, match="give a later one"):
            act(Alarm(), A.SHELVE, 100, until=until)
    with pytest.raises(AlarmError, match="only a shelving"):
        act(alarm_in(S.UNACKNOWLEDGED), A.ACKNOWLEDGE, 100, until=200)


def test_a_condition_that_comes_and_goes_while_shelved_keeps_the_end_of_the_shelving():
    shelved, _ = act(Alarm(), A.SHELVE, 100, until=500)
    raised, step = advance(shelved, True, 200)
    assert (raised.state, raised.active, raised.shelved_until) == (S.SHELVED, True, 500)
    assert step.action == A.RAISE
    assert advance(raised, True, 499) is None


@pytest.mark.parametrize(("active", "state"), [(True, S.UNACKNOWLEDGED), (False, S.NORMAL)])
def test_a_shelving_runs_out_at_its_own_time(active, state):
    shelved, _ = act(Alarm(), A.SHELVE, 100, until=500)
    moved, step = advance(shelved, active, 700)
    assert moved == Alarm(state, active)
    assert (step.action, step.time) == (A.UNSHELVE, 500)


def test_nothing_happens_while_nothing_changes():
    assert advance(Alarm(), False, 5) is None
    assert advance(alarm_in(S.ACKNOWLEDGED), True, 5) is None


def test_the_condition_alone_raises_and_clears():
    raised, step = advance(Alarm(), True, 5)
    assert (raised.state, step.by) == (S.UNACKNOWLEDGED, "lostwork")
    assert advance(raised, False, 6)[0].state == S.RETURNED


# --- delays --------------------------------------------------------------------------------------


def found(pattern, on=1, off=1):
    """Episodes of a pattern such as '..##.', as hour numbers."""
    calls = np.array([c == "#" for c in pattern])
    times = HOUR * np.arange(1, calls.size + 1)
    return [
        (e.raised // HOUR, None if e.cleared is None else e.cleared // HOUR)
        for e in episodes(calls, times, on * HOUR, off * HOUR)
    ]


def test_without_delays_an_alarm_follows_its_condition():
    assert found("..##.#", on=0, off=0) == [(3, 5), (6, None)]


def test_an_alarm_waits_for_its_on_delay():
    assert found("..##....", on=3) == []
    assert found("..###...", on=3) == [(5, 6)]


def test_an_interruption_starts_the_on_delay_again():
    assert found("##.##.###", on=3) == [(9, None)]


def test_an_alarm_stays_through_a_pause_shorter_than_its_off_delay():
    assert found("###...###....##", on=1, off=4) == [(1, 13), (14, None)]


def test_part_of_an_hour_of_delay_is_a_whole_hour():
    assert found("###", on=1.5) == [(2, None)]


def test_an_alarm_that_never_clears_is_open():
    assert found("#" * 10, on=3, off=12) == [(3, None)]


@pytest.mark.parametrize("pattern", ["", "....."])
def test_no_call_is_no_alarm(pattern):
    assert found(pattern) == []


def by_hand(calls, times, on, off):
    """The same rule, hour by hour."""
    result, raised, run_on, run_off = [], None, 0, 0
    for call, time in zip(calls, times, strict=True):
        run_on, run_off = (run_on + 1, 0) if call else (0, run_off + 1)
        if raised is None and run_on >= on:
            raised = time
        elif raised is not None and run_off >= off:
            result.append(Episode(int(raised), int(time)))
            raised = None
    return result if raised is None else [*result, Episode(int(raised), None)]


@settings(deadline=None)
@given(
    calls=st.lists(st.booleans(), max_size=80),
    on=st.integers(1, 5),
    off=st.integers(1, 5),
    gaps=st.lists(st.integers(1, 4), min_size=80, max_size=80),
)
def test_episodes_are_what_watching_hour_by_hour_gives(calls, on, off, gaps):
    times = HOUR * np.cumsum(gaps)[: len(calls)]
    assert episodes(calls, times, on * HOUR, off * HOUR) == by_hand(calls, times, on, off)


@settings(deadline=None)
@given(calls=st.lists(st.booleans(), max_size=60), more=st.lists(st.booleans(), max_size=20))
def test_more_hours_never_change_what_has_happened(calls, more):
    times = HOUR * np.arange(1, len(calls) + len(more) + 1)
    before = episodes(calls, times[: len(calls)], 2 * HOUR, 3 * HOUR)
    after = episodes(calls + more, times, 2 * HOUR, 3 * HOUR)
    closed = [e for e in before if e.cleared is not None]
    assert after[: len(closed)] == closed
    assert [e.raised for e in after[: len(before)]] == [e.raised for e in before]


def test_hours_out_of_order_are_refused():
    with pytest.raises(AlarmError, match="in order of time"):
        episodes([True, True], [7200, 3600], 0, 0)
    with pytest.raises(AlarmError, match="do not match"):
        episodes([True], [1, 2], 0, 0)


# --- replay --------------------------------------------------------------------------------------


def done(time, action, until=None):
    return OperatorAction(time, action, "A. Operator", "looked at", until)


def test_an_acknowledgement_is_kept_when_the_same_alarms_come_out_again():
    alarms = [Episode(100, 900)]
    first = replay(alarms, [done(300, A.ACKNOWLEDGE)], now=1000)
    assert first == replay(alarms, [done(300, A.ACKNOWLEDGE)], now=1000)
    assert first.alarm.state == S.NORMAL
    assert [(t.time, t.after, t.by) for t in first.transitions] == [
        (100, S.UNACKNOWLEDGED, "lostwork"),
        (300, S.ACKNOWLEDGED, "A. Operator"),
        (900, S.NORMAL, "lostwork"),
    ]


def test_nobody_looked_so_the_alarm_waits_after_it_has_cleared():
    assert replay([Episode(100, 900)], [], now=1000).alarm.state == S.RETURNED


def test_a_step_later_than_now_has_not_happened():
    assert replay([Episode(100, 900)], [], now=500).alarm.state == S.UNACKNOWLEDGED


def test_a_shelving_outlasts_an_episode_and_then_runs_out():
    actions = [done(200, A.SHELVE, until=1000)]
    alarms = [Episode(100, 300), Episode(600, None)]
    assert replay(alarms, actions, now=700).alarm == Alarm(S.SHELVED, True, 1000)
    later = replay(alarms, actions, now=1500)
    assert later.alarm == Alarm(S.UNACKNOWLEDGED, active=True)
    assert (later.transitions[-1].action, later.transitions[-1].time) == (A.UNSHELVE, 1000)


def test_a_shelving_runs_out_between_two_steps():
    steps = replay(
        [Episode(100, 300), Episode(600, None)], [done(200, A.SHELVE, until=400)], now=700
    ).transitions
    assert [t.time for t in steps] == [100, 200, 300, 400, 600]
    assert steps[-1].after == S.UNACKNOWLEDGED


def test_an_action_that_no_longer_fits_is_given_back_with_the_reason():
    late = done(50, A.ACKNOWLEDGE)
    result = replay([Episode(100, None)], [late], now=1000)
    assert result.alarm.state == S.UNACKNOWLEDGED
    ((action, reason),) = result.refused
    assert action == late
    assert "cannot acknowledge an alarm that is normal" in reason


def test_a_person_is_offered_what_a_person_can_do():
    with pytest.raises(AlarmError, match=r"possible is: shelve, suppress, remove from service$"):
        take(alarm_in(S.ACKNOWLEDGED), A.ACKNOWLEDGE)
