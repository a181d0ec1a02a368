"""What happens to the machines, and what only seems to: the demo's known events."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pandas as pd

from monitor.demo.load import STOP_DAYS, TONNE_PER_HOUR
from monitor.demo.signals import ramp
from monitor.demo.weather import HEAT_WAVE_DAYS

if TYPE_CHECKING:
    from monitor.demo.plan import DemoPlan, FloatArray

__all__ = ["degradation", "events", "passing"]

DEGRADATION = 0.02
DEGRADATION_DAYS = 0.5
PASSING = 2.0 * TONNE_PER_HOUR
PASSING_DAYS = 0.25


def degradation(plan: DemoPlan) -> FloatArray:
    """Isentropic efficiency that TG1's first section has lost [1]."""
    return DEGRADATION * ramp(plan.elapsed_days(), plan.drift_day, DEGRADATION_DAYS)


def passing(plan: DemoPlan) -> FloatArray:
    """Steam that LD62 passes although it is closed [kg/s]."""
    return PASSING * ramp(plan.elapsed_days(), plan.passing_day, PASSING_DAYS)


def events(plan: DemoPlan) -> pd.DataFrame:
    """List what happens inside the plan.

    Returns:
        One row an event: ``start``, ``end`` (UTC; an event that lasts ends with the plan),
        ``equipment``, ``what``, ``amount``, ``unit``, and ``is_fault``: whether a machine changed.
    """
    last = plan.days
    rows = (
        (plan.drift_day, last, "TG1", "isentropic efficiency of section 1 falls", 2.0, "%", True),
        (plan.passing_day, last, "LD62", "closed valve passes", 2.0, "t/h", True),
        (plan.heat_wave_day, plan.heat_wave_day + HEAT_WAVE_DAYS, "", "heat wave", 0.0, "", False),
        (plan.stop_day, plan.stop_day + STOP_DAYS, "BM", "planned stop", 8.0, "h", False),
    )
    first = pd.Timestamp(plan.start).tz_convert("UTC")
    inside = [row for row in rows if row[0] < plan.days]
    table = pd.DataFrame(
        inside, columns=["start", "end", "equipment", "what", "amount", "unit", "is_fault"]
    )
    for column in ("start", "end"):
        days = table[column].clip(upper=last).astype("float64")
        table[column] = first + pd.to_timedelta(days, unit="D").dt.round("s")
    return table
