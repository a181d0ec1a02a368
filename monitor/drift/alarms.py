"""Alarms: when one is raised and cleared, and what an operator may do with it.

The states and the ways between them are those of ISA-18.2 / IEC 62682 (alarms here do not latch).
What the process does (raise, clear) follows from the control chart alone, so judging the same data
again gives the same alarms. What people do (acknowledge, shelve, ...) is recorded and replayed on
top. Everything is pure: times come in, nothing reads a clock.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from enum import StrEnum
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

if TYPE_CHECKING:
    from collections.abc import Sequence

__all__ = [
    "PROCESS_ACTIONS",
    "Action",
    "Alarm",
    "AlarmError",
    "AlarmState",
    "Episode",
    "OperatorAction",
    "Replay",
    "Transition",
    "act",
    "advance",
    "episodes",
    "replay",
]

HOUR = 3600
SYSTEM = "lostwork"
"""Who acts where no person does."""


class AlarmError(Exception):
    """An alarm cannot do what is asked in its state; the message says what it can do."""


class AlarmState(StrEnum):
    """States of an alarm (ISA-18.2 / IEC 62682)."""

    NORMAL = "normal"
    UNACKNOWLEDGED = "unacknowledged"
    """Active, and nobody has seen it."""
    ACKNOWLEDGED = "acknowledged"
    """Active, and seen."""
    RETURNED = "returned"
    """The condition is gone again, and nobody has seen it."""
    SHELVED = "shelved"
    """Put aside by an operator until a stated time."""
    SUPPRESSED = "suppressed by design"
    """Put aside by the site's own rules, for example while a machine is off."""
    OUT_OF_SERVICE = "out of service"
    """Put aside for maintenance of the alarm or its instruments."""


class Action(StrEnum):
    """Ways from one state to another."""

    RAISE = "raise"
    CLEAR = "clear"
    ACKNOWLEDGE = "acknowledge"
    SHELVE = "shelve"
    UNSHELVE = "unshelve"
    SUPPRESS = "suppress"
    UNSUPPRESS = "unsuppress"
    REMOVE = "remove from service"
    RESTORE = "return to service"


PROCESS_ACTIONS = frozenset({Action.RAISE, Action.CLEAR})
"""What follows from the data; everything else is somebody's decision."""

_S, _A = AlarmState, Action
_SEEN = (_S.NORMAL, _S.UNACKNOWLEDGED, _S.ACKNOWLEDGED, _S.RETURNED)
_NEXT: dict[tuple[AlarmState, Action], AlarmState] = {
    (_S.NORMAL, _A.RAISE): _S.UNACKNOWLEDGED,
    (_S.RETURNED, _A.RAISE): _S.UNACKNOWLEDGED,
    (_S.UNACKNOWLEDGED, _A.CLEAR): _S.RETURNED,
    (_S.ACKNOWLEDGED, _A.CLEAR): _S.NORMAL,
    (_S.UNACKNOWLEDGED, _A.ACKNOWLEDGE): _S.ACKNOWLEDGED,
    (_S.RETURNED, _A.ACKNOWLEDGE): _S.NORMAL,
    **{(state, _A.SHELVE): _S.SHELVED for state in _SEEN},
    **{(state, _A.SUPPRESS): _S.SUPPRESSED for state in _SEEN},
    **{(state, _A.REMOVE): _S.OUT_OF_SERVICE for state in _SEEN},
}
_WAY_BACK = {
    (_S.SHELVED, _A.UNSHELVE),
    (_S.SUPPRESSED, _A.UNSUPPRESS),
    (_S.OUT_OF_SERVICE, _A.RESTORE),
}
_ASIDE = (_S.SHELVED, _S.SUPPRESSED, _S.OUT_OF_SERVICE)


@dataclass(frozen=True)
class Alarm:
    """An alarm as it stands.

    Attributes:
        state: see `AlarmState`.
        active: the condition calls for an alarm, whether or not it is shown.
        shelved_until: integer UTC seconds; None unless shelved.
    """

    state: AlarmState = AlarmState.NORMAL
    active: bool = False
    shelved_until: int | None = None


@dataclass(frozen=True)
class Transition:
    """One step of an alarm; ``time`` in integer UTC seconds, ``until`` only for a shelving."""

    time: int
    action: Action
    before: AlarmState
    after: AlarmState
    by: str = SYSTEM
    note: str = ""
    until: int | None = None


@dataclass(frozen=True)
class OperatorAction:
    """What somebody did to an alarm, as recorded; ``until`` only for a shelving."""

    time: int
    action: Action
    by: str
    note: str = ""
    until: int | None = None


@dataclass(frozen=True)
class Episode:
    """One time an alarm's condition held: when it was raised, and cleared (None: still active)."""

    raised: int
    cleared: int | None


@dataclass(frozen=True)
class Replay:
    """An alarm's history: where it stands, every step, and recorded actions that no longer fit."""

    alarm: Alarm
    transitions: tuple[Transition, ...]
    refused: tuple[tuple[OperatorAction, str], ...]


def act(
    alarm: Alarm,
    action: Action,
    time: int,
    *,
    by: str = SYSTEM,
    note: str = "",
    until: int | None = None,
) -> tuple[Alarm, Transition]:
    """Take one step.

    A raise or a clear while the alarm is put aside changes only ``active``: coming back, it is
    unacknowledged if the condition still holds and normal if not.

    Args:
        alarm: as it stands.
        action: what happens to it.
        time: integer UTC seconds.
        by: who.
        note: why.
        until: end of a shelving, integer UTC seconds; asked for with ``shelve`` and only there.

    Raises:
        AlarmError: the state does not allow the action, or a shelving has no end in the future.
    """
    if (until is not None) != (action is Action.SHELVE):
        raise AlarmError(
            "an alarm is shelved until a stated time; give one"
            if action is Action.SHELVE
            else f"only a shelving ends at a stated time, not '{action}'"
        )
    if until is not None and until <= time:
        raise AlarmError(
            "an alarm cannot be shelved until a time that has passed; give a later one"
        )
    after = _after(alarm, action)
    active = action is Action.RAISE if action in PROCESS_ACTIONS else alarm.active
    kept = alarm.shelved_until if after is AlarmState.SHELVED else None
    moved = Alarm(after, active, until if until is not None else kept)
    return moved, Transition(time, action, alarm.state, after, by, note, until)


def _after(alarm: Alarm, action: Action) -> AlarmState:
    key = (alarm.state, action)
    if key in _WAY_BACK:
        return AlarmState.UNACKNOWLEDGED if alarm.active else AlarmState.NORMAL
    if alarm.state in _ASIDE and action in PROCESS_ACTIONS:
        if alarm.active == (action is Action.RAISE):
            raise AlarmError(f"a {alarm.state} alarm's condition is already so: cannot {action}")
        return alarm.state
    if key not in _NEXT:
        known = [a for a in Action if (alarm.state, a) in _NEXT or (alarm.state, a) in _WAY_BACK]
        # What the data do, nobody can be told to do.
        possible = ", ".join(a for a in known if a not in PROCESS_ACTIONS) or "nothing"
        raise AlarmError(f"cannot {action} an alarm that is {alarm.state}; possible is: {possible}")
    return _NEXT[key]


def advance(alarm: Alarm, condition_active: bool, time: int) -> tuple[Alarm, Transition] | None:  # noqa: FBT001
    """Do what happens by itself at a time: a shelving runs out, or the condition comes or goes.

    Args:
        alarm: as it stands.
        condition_active: whether the condition calls for an alarm, delays already applied.
        time: integer UTC seconds.

    Returns:
        The alarm after the step and the step, or None when nothing happens. A shelving that runs
        out takes the condition of that moment with it, so one call is enough.
    """
    if alarm.shelved_until is not None and time >= alarm.shelved_until:
        freed = replace(alarm, active=condition_active)
        return act(freed, Action.UNSHELVE, alarm.shelved_until, note="the shelving ran out")
    if condition_active == alarm.active:
        return None
    return act(alarm, Action.RAISE if condition_active else Action.CLEAR, time)


def episodes(
    active: npt.ArrayLike,
    times: npt.ArrayLike,
    on_delay: float,
    off_delay: float,
) -> list[Episode]:
    """Find when alarms are raised and cleared.

    An alarm is raised when the condition has held for ``on_delay`` judged hours in a row (at least
    one), and cleared when it has been absent for ``off_delay`` judged hours in a row (at least
    one). Hours that were not judged must be left out by the caller: they count for neither.

    Args:
        active: whether each judged hour calls for an alarm, shape (n,).
        times: when each of these hours was known (its end), integer UTC seconds, increasing, (n,).
        on_delay: seconds.
        off_delay: seconds.
    """
    calls = np.asarray(active, dtype=np.bool_)
    known = np.asarray(times, dtype=np.int64)
    if calls.shape != known.shape or calls.ndim != 1:
        raise AlarmError(f"{calls.shape} conditions do not match {known.shape} times")
    if (np.diff(known) <= 0).any():
        raise AlarmError("the hours of a chart must be in order of time, each once")
    raises = _run_length(calls) == _hours(on_delay)
    clears = _run_length(~calls) == _hours(off_delay)
    # Of the moments that call for a state, only those that change it matter; before the first
    # there is no alarm.
    at = np.flatnonzero(raises | clears)
    wanted = raises[at]
    changes = at[wanted != np.concatenate([[False], wanted[:-1]])]
    moments = [int(t) for t in known[changes]]
    ends: list[int | None] = [*moments[1::2]]
    if len(ends) < len(moments[::2]):
        ends.append(None)
    return [Episode(start, end) for start, end in zip(moments[::2], ends, strict=True)]


def _hours(delay: float) -> int:
    return max(1, math.ceil(delay / HOUR - 1e-9))


def _run_length(held: npt.NDArray[np.bool_]) -> npt.NDArray[np.int64]:
    """How many hours in a row, up to each, the condition has held."""
    index = np.arange(1, held.size + 1)
    last_break = np.maximum.accumulate(np.where(held, 0, index)) if held.size else index
    return np.asarray(index - last_break)


def replay(found: Sequence[Episode], actions: Sequence[OperatorAction], now: int) -> Replay:
    """Put what people did on top of what the data say, in order of time.

    Args:
        found: all episodes of one figure, from `episodes`: a shelving outlasts an episode.
        actions: what is recorded for this figure; those later than ``now`` are left for later.
        now: integer UTC seconds; a shelving that has run out by then is over.

    Returns:
        The alarm as it stands. An action that does not fit any more (the data were corrected, and
        the alarm had cleared before) is returned with the reason, not lost.
    """
    due: list[tuple[int, int, OperatorAction]] = []
    for episode in found:
        due.append((episode.raised, 0, OperatorAction(episode.raised, Action.RAISE, SYSTEM)))
        if episode.cleared is not None:
            due.append((episode.cleared, 0, OperatorAction(episode.cleared, Action.CLEAR, SYSTEM)))
    due += [(a.time, 1, a) for a in actions]
    alarm, steps = Alarm(), list[Transition]()
    refused: list[tuple[OperatorAction, str]] = []
    for time, _, action in sorted(due, key=lambda entry: entry[:2]):
        if time > now:
            break
        alarm = _let_run_out(alarm, time, steps)
        try:
            alarm, step = act(
                alarm, action.action, time, by=action.by, note=action.note, until=action.until
            )
        except AlarmError as error:
            refused.append((action, str(error)))
        else:
            steps.append(step)
    alarm = _let_run_out(alarm, now, steps)
    return Replay(alarm, tuple(steps), tuple(refused))


def _let_run_out(alarm: Alarm, time: int, steps: list[Transition]) -> Alarm:
    if alarm.shelved_until is None or time < alarm.shelved_until:
        return alarm
    moved = advance(alarm, alarm.active, time)
    if moved is None:
        return alarm
    steps.append(moved[1])
    return moved[0]
