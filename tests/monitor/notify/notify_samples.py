"""Alarms, secrets and times for the tests of notifications."""

from __future__ import annotations

from monitor.store.alarms import AlarmRecord, AlarmTransition

PASSWORD = "correct-horse-battery"  # noqa: S105 - made up
SECRET = "a-long-random-secret-for-the-tests"  # noqa: S105 - made up
HOUR = 3600
NOW = 1_780_000_000


def step(time, action, before, after):
    return AlarmTransition(time, action, before, after, "lostwork")


def alarm_of(raised: int, **changes) -> AlarmRecord:
    values = {
        "subject": "TG1", "figure": "eta_s_1", "kind": "drift", "state": "unacknowledged",
        "priority": "medium", "raised": raised,
        "message": "Turbine TG1: isentropic efficiency 79.0 %, expected 82.0 % at this load: down "
        "3.0 points since about 14 Jan 03:00.",
        "value": 79.0, "unit": "%", "cost_per_day": 1234.5,
    }  # fmt: skip
    return AlarmRecord(**(values | changes))
