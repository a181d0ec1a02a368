"""What an alarm says to a person: what changed, by how much, since when, what it costs."""

from __future__ import annotations

import math
import zoneinfo
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from monitor.drift.charts import change_point

if TYPE_CHECKING:
    from monitor.drift.judgement import FigureRule
    from monitor.drift.verdict import Verdict

__all__ = ["Finding", "cost_sentence", "finding", "message", "priority"]

_SPAN = 24


@dataclass(frozen=True)
class Finding:
    """What a chart shows at one hour.

    Attributes:
        measured, expected: means of the last 24 judged hours, in the figure's unit.
        change: measured minus expected.
        since: start of the hour in which the change most likely began, integer UTC seconds.
    """

    measured: float
    expected: float
    change: float
    since: int


def finding(points: pd.DataFrame, known: int) -> Finding:
    """Look at a chart as it was at a time.

    Args:
        points: chart points since the end of the reference period, see `judgement.chart_points`;
            at least one of them judged.
        known: integer UTC seconds; later hours are not looked at.
    """
    judged = points[points["residual"].notna() & (points["hour"] < known)]
    recent = judged.tail(_SPAN)
    start = change_point(judged["residual"].to_numpy(), float(judged["ewma"].iloc[-1]))
    since = judged["hour"].iloc[start]
    # A day of means would dilute a change that is younger than a day.
    shown = recent[recent["hour"] >= since]
    measured, expected = float(shown["measured"].mean()), float(shown["expected"].mean())
    return Finding(measured, expected, measured - expected, int(since))


def message(
    rule: FigureRule,
    found: Finding,
    judged: Verdict,
    *,
    time_zone: str,
    cost_per_day: float | None = None,
    currency: str = "",
) -> str:
    """Say a finding in a few sentences: what, why it is so, what to do, what it costs a day.

    Args:
        rule: the figure.
        found: what its chart shows.
        judged: the verdict on it.
        time_zone: the site's own, for the time said.
        cost_per_day: what the extra lost work costs, None where not known.
        currency: of the cost.
    """
    decimals = _decimals(rule.smallest_change, found.expected)
    unit = f" {rule.unit}" if rule.unit not in {"", "1"} else ""
    change_unit = " points" if rule.unit == "%" else unit
    since = pd.Timestamp(found.since, unit="s", tz="UTC").tz_convert(zoneinfo.ZoneInfo(time_zone))
    at_load = " at this load" if rule.follows_load else ""
    direction = "down" if found.change < 0 else "up"
    what = (
        f"{rule.subject_name}: {rule.label} is {found.measured:.{decimals}f}{unit}, expected "
        f"{found.expected:.{decimals}f}{unit}{at_load}: {direction} "
        f"{abs(found.change):.{decimals}f}{change_unit} since about {since.day} {since:%b %H:%M}."
    )
    why = "The live weather is not the cause: the figure does not depend on it."
    if judged.cause == "instrument":
        why = f"Look at the instruments first: {'; '.join(judged.reasons)}."
    sentences = [what, why, *([rule.advice] if rule.advice else [])]
    if cost_per_day is not None and math.isfinite(cost_per_day) and cost_per_day > 0:
        sentences.append(cost_sentence(cost_per_day, currency))
    return " ".join(sentences)


def cost_sentence(cost_per_day: float, currency: str) -> str:
    """Say what a finding costs; a page that shows the cost beside the message leaves it out."""
    return f"The extra lost work costs about {_three_digits(cost_per_day)} {currency} a day."


def priority(points: pd.DataFrame) -> str:
    """Rank an alarm by how far its chart has gone past the limit: low, medium from 2, high from 4.

    Args:
        points: the alarm's own chart points.
    """
    ratio = np.nanmax((points["ewma"].abs() / points["limit"]).to_numpy(), initial=0.0)
    return "high" if ratio >= 4 else "medium" if ratio >= 2 else "low"  # noqa: PLR2004


def _decimals(smallest_change: float, value: float) -> int:
    """Digits after the point that show the smallest change, or four digits without one."""
    if smallest_change > 0:
        return max(0, math.ceil(0.5 - math.log10(smallest_change)))
    if value == 0 or not math.isfinite(value):
        return 2
    return max(0, 3 - math.floor(math.log10(abs(value))))


def _three_digits(value: float) -> str:
    digits = max(0, 2 - math.floor(math.log10(value)))
    return f"{round(value, 2 - math.floor(math.log10(value))):,.{digits}f}".replace(",", " ")
