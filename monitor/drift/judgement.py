"""One condition figure judged over one segment of its life: reference period, chart, alarms.

A segment lies between two events that restart a baseline (a wash, an overhaul, a calibration). All
of it is computed from hourly values, so judging the same hours again gives the same points, and
judging on from where the last judgement ended gives what judging everything would.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from monitor.drift.alarms import Episode, episodes
from monitor.drift.baseline import Baseline, BaselineError, fit_baseline
from monitor.drift.charts import Worse, alarm_condition, ewma, ewma_limit_width, ewma_variance

if TYPE_CHECKING:
    import numpy.typing as npt

__all__ = [
    "POINT_COLUMNS",
    "ChartState",
    "FigureRule",
    "Segment",
    "Settings",
    "alarm_episodes",
    "chart_points",
    "excess",
    "fit_reference",
    "reference_period",
    "segments",
]

HOUR = 3600
POINT_COLUMNS = (
    "hour",
    "measured",
    "expected",
    "residual",
    "ewma",
    "limit",
    "cells",
    "judged",
)


@dataclass(frozen=True)
class Settings:
    """How figures are judged; times in seconds.

    Attributes:
        weight: of the EWMA.
        false_alarm_every: average time between false alarms of one figure.
        reference: the stated reference period (integer UTC seconds, half open), or None.
        reference_length: length of the reference period where none is stated.
        least_hours: fewest judged hours that a baseline rests on.
        least_cells: share of an hour's grid cells that a judged hour has.
        on_delay, off_delay: of alarms.
    """

    weight: float
    false_alarm_every: float
    reference: tuple[int, int] | None
    reference_length: float
    least_hours: int
    least_cells: float
    on_delay: float
    off_delay: float


@dataclass(frozen=True)
class FigureRule:
    """One figure of one piece of equipment and how it is judged.

    Attributes:
        subject: the equipment's id. subject_name: its name for a person.
        figure: the figure's name. label: for a person. unit: its values'.
        worse: which way is worse.
        smallest_change: smallest change worth a person's time, in ``unit``.
        follows_load: the baseline has the load as regressor.
        load_streams: signed streams whose flows are that load; empty for the equipment's own.
        advice: what a person looks at first.
    """

    subject: str
    subject_name: str
    figure: str
    label: str
    unit: str
    worse: Worse
    smallest_change: float
    follows_load: bool = True
    load_streams: tuple[tuple[float, str], ...] = ()
    advice: str = ""


@dataclass(frozen=True)
class Segment:
    """A stretch of time with one baseline, integer UTC seconds, half open; None is open-ended."""

    start: int | None
    end: int | None

    def holds(self, time: int) -> bool:
        """Tell whether a time lies in the segment."""
        return (self.start is None or time >= self.start) and (self.end is None or time < self.end)


@dataclass(frozen=True)
class ChartState:
    """Where a chart stood: its EWMA after ``count`` judged hours since the baseline's start."""

    ewma: float = 0.0
    count: int = 0


def segments(restarts: npt.ArrayLike) -> tuple[Segment, ...]:
    """Cut time at the events that restart a baseline; an event's own hour belongs to neither.

    An hour that an event falls into mixes before and after: the next segment begins with the hour
    after it.
    """
    times = np.unique(np.asarray(restarts, dtype=np.int64))
    starts = [None, *(int(-(-t // HOUR) * HOUR) for t in times)]
    ends = [*(int(t // HOUR * HOUR) for t in times), None]
    return tuple(Segment(start, end) for start, end in zip(starts, ends, strict=True))


def reference_period(hours: pd.DataFrame, segment: Segment, settings: Settings) -> tuple[int, int]:
    """Return the reference period of a segment.

    The stated one if it begins in the segment. Otherwise the first ``reference_length`` from the
    first judged hour on, longer if it takes longer to collect ``least_hours`` judged hours.

    Args:
        hours: the segment's hours from its first, see `hourly.hourly_means`.
        segment: where they lie.
        settings: what the site asks for.

    Raises:
        BaselineError: the period is not over yet; the message says what is missing.
    """
    newest = int(hours["hour"].max()) + HOUR if len(hours) else None
    if settings.reference is not None and segment.holds(settings.reference[0]):
        start, end = settings.reference
        end = end if segment.end is None else min(end, segment.end)
        if newest is None or newest < end:
            raise BaselineError("no baseline yet: the stated reference period is not over")
        return start, end
    judged = hours.loc[hours["value"].notna(), "hour"].to_numpy()
    if newest is None or judged.size < settings.least_hours:
        raise BaselineError(
            f"no baseline yet: {judged.size} judged hours of the {settings.least_hours} needed"
        )
    start = int(judged[0])
    end = max(start + int(settings.reference_length), int(judged[settings.least_hours - 1]) + HOUR)
    if newest < end:
        raise BaselineError("no baseline yet: the reference period is not over")
    return start, end


def fit_reference(
    hours: pd.DataFrame, period: tuple[int, int], rule: FigureRule, settings: Settings
) -> Baseline:
    """Fit a figure's baseline on the hours of a reference period.

    Raises:
        BaselineError: too few hours, or hours that do not vary.
    """
    return _fit(
        hours,
        period,
        follows_load=rule.follows_load,
        least_hours=settings.least_hours,
        smallest_change=rule.smallest_change,
    )


def _fit(
    hours: pd.DataFrame,
    period: tuple[int, int],
    *,
    follows_load: bool,
    least_hours: int,
    smallest_change: float,
) -> Baseline:
    chosen = hours[(hours["hour"] >= period[0]) & (hours["hour"] < period[1])]
    loads = chosen["load"].to_numpy(dtype=np.float64)
    # An equipment without a load of its own (power, heat) has nothing to regress on.
    follows = follows_load and bool(np.isfinite(loads).any())
    return fit_baseline(
        chosen["value"].to_numpy(dtype=np.float64),
        loads if follows else None,
        chosen["hour"].to_numpy(dtype=np.int64),
        least_hours=least_hours,
        smallest_change=smallest_change,
    )


def chart_points(
    hours: pd.DataFrame,
    baseline: Baseline,
    rule: FigureRule,
    settings: Settings,
    before: ChartState | None = None,
) -> pd.DataFrame:
    """Return a figure's control chart, one row an hour.

    The limit is the larger of the smallest change and the statistical limit, whose variance is that
    of the EWMA of the residuals, plus that of the expected value at the hour's load, as far as
    the EWMA has taken it up.

    Args:
        hours: in order of time, from the baseline's start or from where the chart stood.
        baseline: of the segment.
        rule: the figure.
        settings: what the site asks for.
        before: where the chart stood before the first of these hours; None at the start.

    Returns:
        `POINT_COLUMNS`, ``judged`` as 0 or 1. Expected, residual, EWMA and limit are NaN where the
        hour is not judged: no value, or a load beyond the reference period's.
    """
    state = before or ChartState()
    value = hours["value"].to_numpy(dtype=np.float64)
    load = hours["load"].to_numpy(dtype=np.float64)
    inside = hours["hour"].to_numpy(dtype=np.int64) >= baseline.start
    expected = np.where(inside, baseline.expected(load), np.nan)
    residual = value - expected
    judged = np.isfinite(residual)
    count = state.count + np.cumsum(judged)
    statistic = ewma(residual, settings.weight, state.ewma)
    taken_up = 1 - (1 - settings.weight) ** count
    variance = baseline.sigma**2 * ewma_variance(
        count, settings.weight, baseline.phi
    ) + taken_up**2 * baseline.variance_of_mean(baseline.design(load))
    width = ewma_limit_width(settings.weight, settings.false_alarm_every / HOUR, rule.worse)
    limit = np.maximum(width * np.sqrt(variance), rule.smallest_change)
    return pd.DataFrame(
        {
            "hour": hours["hour"].to_numpy(dtype=np.int64),
            "measured": value,
            "expected": np.where(judged, expected, np.nan),
            "residual": residual,
            "ewma": np.where(judged, statistic, np.nan),
            "limit": np.where(judged, limit, np.nan),
            "cells": hours["cells"].to_numpy(dtype=np.int64),
            "judged": judged.astype(np.int64),
        },
        columns=list(POINT_COLUMNS),
    )


def alarm_episodes(
    points: pd.DataFrame, baseline: Baseline, rule: FigureRule, settings: Settings
) -> list[Episode]:
    """Find a figure's alarms from all chart points of its segment; none in the reference period."""
    judged = points[points["ewma"].notna() & (points["hour"] >= baseline.end)]
    # The stored limit already holds the smallest change.
    active = alarm_condition(judged["ewma"].to_numpy(), judged["limit"].to_numpy(), 0.0, rule.worse)
    known = judged["hour"].to_numpy(dtype=np.int64) + HOUR
    return episodes(active, known, settings.on_delay, settings.off_delay)


def excess(
    hours: pd.DataFrame,
    period: tuple[int, int],
    since: int,
    until: int,
    *,
    least_hours: int,
    follows_load: bool = True,
) -> float:
    """Return how far a quantity lies above what it was in a reference period at the same load.

    Args:
        hours: hourly ``value`` and ``load``, for example of destroyed exergy in kW.
        period: reference period.
        since: the mean is over the hours from here ...
        until: ... to here.
        least_hours: fewest hours to compare with.
        follows_load: compare at the same load; else with the plain level, which is right where
            the load itself is what went wrong (a closed valve that passes).

    Returns:
        Mean of measured minus expected; NaN when it cannot be told.
    """
    try:
        baseline = _fit(
            hours,
            period,
            follows_load=follows_load,
            least_hours=least_hours,
            smallest_change=np.inf,
        )
    except BaselineError:
        return float("nan")
    recent = hours[(hours["hour"] >= since) & (hours["hour"] < until)]
    difference = recent["value"].to_numpy() - baseline.expected(recent["load"].to_numpy())
    difference = difference[np.isfinite(difference)]
    return float(difference.mean()) if difference.size else float("nan")
