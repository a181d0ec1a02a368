"""Judge a site's condition figures: hourly values in, chart points and alarms out.

Each figure's life is cut into segments at the events that restart a baseline. A segment gets its
baseline once its reference period is over; until then its hours are stored without one. Judging on
reads only the new hours; whatever makes the stored chart stale (new settings, a late event, hours
of the reference period computed again) makes the segment's chart anew from its first hour. Either
way the same figures and events give the same points and alarms.
"""

from __future__ import annotations

import functools
import json
import operator
from dataclasses import asdict, dataclass, field
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import pandas as pd

from monitor.drift.baseline import Baseline, BaselineError
from monitor.drift.hourly import hourly_means
from monitor.drift.judgement import (
    POINT_COLUMNS,
    ChartState,
    FigureRule,
    Segment,
    Settings,
    chart_points,
    fit_reference,
    reference_period,
    segments,
)
from monitor.drift.raising import Chart, Raising
from monitor.store.baselines import BaselineRecord

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping, Sequence

    from monitor.drift.alarms import OperatorAction
    from monitor.drift.raising import Money
    from monitor.store.alarms import AlarmRecord
    from monitor.store.site import SiteStore

__all__ = ["RESTARTING_EVENTS", "FigureStatus", "baseline_of", "judge"]

HOUR = 3600
RESTARTING_EVENTS = frozenset({"wash", "overhaul", "calibration"})
"""Kinds of events after which a machine, or its instruments, are not what they were."""


@dataclass(frozen=True)
class FigureStatus:
    """How one figure stands after judging.

    Attributes:
        subject, figure: which.
        state: as the pages say it.
        reason: why there is no baseline; empty when there is one.
        alarms: of the segments looked at.
        refused: recorded actions that do not fit the alarms any more, each with the reason.
    """

    subject: str
    figure: str
    state: Literal["steady", "drifting", "no baseline", "not judged"]
    reason: str = ""
    alarms: tuple[AlarmRecord, ...] = ()
    refused: tuple[tuple[OperatorAction, str], ...] = ()


def baseline_of(record: BaselineRecord) -> Baseline:
    """Return the baseline that a stored record holds.

    Raises:
        BaselineError: the record is not of this version.
    """
    return Baseline.from_json(json.dumps(record.coefficients.get("baseline")))


def judge(
    store: SiteStore,
    rules: Iterable[FigureRule],
    settings: Settings,
    start: int,
    end: int,
    now: int,
    *,
    money: Money | None = None,
    tags: Mapping[str, frozenset[str]] | None = None,
) -> tuple[FigureStatus, ...]:
    """Judge figures whose cells in [start, end) are new or have changed, and store the outcome.

    After an event has been recorded, judge from the event's time.

    Args:
        store: the site's store.
        rules: the figures.
        settings: how.
        start: integer UTC seconds.
        end: integer UTC seconds; only hours that are over by then are judged.
        now: integer UTC seconds: when baselines are made, and up to when shelvings have run.
        money: what lost work costs, None to leave costs out of alarms.
        tags: the tags behind each piece of equipment: a calibration of one restarts its baselines.

    Returns:
        One status a figure, in the order of the rules.
    """
    first, last = start // HOUR * HOUR, end // HOUR * HOUR
    events = [e for e in store.events() if e.kind in RESTARTING_EVENTS and e.time < last]
    statuses = []
    loads = _Loads(store)
    for rule in rules:
        behind = {"", rule.subject} | (tags or {}).get(rule.subject, frozenset())
        restarts = [event.time for event in events if event.subject in behind]
        one = _FigureJudge(store, rule, settings, now, money, loads)
        statuses.append(one.judge(segments(restarts), first, last))
    return tuple(statuses)


@dataclass
class _Loads:
    """Loads of equipment by time, read once for all figures of a piece."""

    store: SiteStore
    known: dict[tuple[str, int, int], pd.Series[float]] = field(default_factory=dict)

    def of(self, rule: FigureRule, start: int, end: int) -> pd.Series[float]:
        """The load that a figure follows: its equipment's, or the sum of its own streams."""
        if not rule.load_streams:
            return self.read(rule.subject, start, end)
        flows = (
            sign * self.store.streams(stream, start, end)["mass_flow_kg_s"]
            for sign, stream in rule.load_streams
        )
        return functools.reduce(operator.add, flows)

    def read(self, subject: str, start: int, end: int) -> pd.Series[float]:
        key = (subject, start, end)
        if key not in self.known:
            # Figures are judged piece by piece: the last piece's loads are not needed again.
            self.known = {k: v for k, v in self.known.items() if k[0] == subject}
            self.known[key] = self.store.equipment(subject, start, end)["load_kg_s"]
        return self.known[key]


@dataclass(frozen=True)
class _FigureJudge:
    store: SiteStore
    rule: FigureRule
    settings: Settings
    now: int
    money: Money | None
    loads: _Loads

    def judge(self, parts: Sequence[Segment], start: int, end: int) -> FigureStatus:
        # An event that is new ends the segment before it, whose open alarm ends with it.
        at = max(index for index, s in enumerate(parts) if s.start is None or s.start <= start)
        charts = [
            self._chart(part, parts[i - 1].end if i else None, start, end, last=part is parts[-1])
            for i, part in enumerate(parts)
            if i >= at - 1
        ]
        since = charts[0].segment.start or 0
        raising = Raising(self.store, self.rule, self.settings, self.now, self.money)
        alarms, refused = raising.replace_alarms(charts, since)
        current = charts[-1]
        return FigureStatus(
            self.rule.subject,
            self.rule.figure,
            self._state(current, alarms),
            current.reason,
            alarms,
            refused,
        )

    def _state(
        self, chart: Chart, alarms: Sequence[AlarmRecord]
    ) -> Literal["steady", "drifting", "no baseline", "not judged"]:
        if chart.baseline is None:
            return "no baseline"
        if any(alarm.cleared is None for alarm in alarms):
            return "drifting"
        recent = chart.points.tail(24)
        return "steady" if recent["ewma"].notna().any() else "not judged"

    # --- charts ----------------------------------------------------------------------------------

    def _chart(
        self, segment: Segment, gap_from: int | None, start: int, end: int, *, last: bool
    ) -> Chart:
        end = end if segment.end is None else min(end, segment.end)
        record = self._record(segment, last=last)
        if record is not None and start >= record.reference_end:
            going_on = self._go_on(segment, record, start, end)
            if going_on is not None:
                return going_on
        # From the event itself: the hour that it falls into belongs to no segment.
        return self._anew(segment, gap_from or 0, end, record, last=last)

    def _go_on(
        self, segment: Segment, record: BaselineRecord, start: int, end: int
    ) -> Chart | None:
        """Continue the stored chart; None when it is not this baseline's."""
        try:
            baseline = baseline_of(record)
        except BaselineError:
            return None  # made by another version: fitted anew
        stored = self.store.drift_points(
            self.rule.subject,
            self.rule.figure,
            baseline.start,
            max(min(start, end), baseline.start),
        )
        if stored.empty or not bool((stored["baseline_id"] == record.baseline_id).all()):
            return None
        before = _plain(stored)
        judged = before["ewma"].dropna()
        state = ChartState(float(judged.iloc[-1]), judged.size) if judged.size else ChartState()
        points = before
        # A judgement that failed in between leaves hours to catch up with.
        start = min(start, int(before["hour"].iloc[-1]) + HOUR)
        if start < end:
            new = chart_points(self._hours(start, end), baseline, self.rule, self.settings, state)
            self._store(start, end, new, record.baseline_id)
            points = pd.concat([before, new], ignore_index=True) if len(new) else before
        reference = (record.reference_start, record.reference_end)
        return Chart(segment, baseline, reference, points)

    def _anew(
        self,
        segment: Segment,
        clear_from: int,
        end: int,
        record: BaselineRecord | None,
        *,
        last: bool,
    ) -> Chart:
        """Make the segment's whole chart, and its baseline if its reference period is over."""
        hours = self._hours(segment.start or 0, end)
        try:
            reference = reference_period(hours, segment, self.settings)
            baseline = fit_reference(hours, reference, self.rule, self.settings)
        except BaselineError as error:
            if last:
                self.store.retire_baseline(self.rule.subject, self.rule.figure, self.now)
            self._store(clear_from, end, _without_baseline(hours), None)
            return Chart(segment, None, (0, 0), _without_baseline(hours), str(error))
        number = self._keep(baseline, reference, record, last=last)
        points = chart_points(hours, baseline, self.rule, self.settings)
        self._store(clear_from, end, points, number, from_hour=baseline.start)
        return Chart(segment, baseline, reference, points[points["hour"] >= baseline.start])

    def _hours(self, start: int, end: int) -> pd.DataFrame:
        rule = self.rule
        cells = self.store.conditions(rule.subject, rule.figure, start, end)
        load = self.loads.of(rule, start, end).reindex(cells.index)
        return hourly_means(
            _seconds(cells.index),
            cells["value"].to_numpy(dtype=np.float64),
            cells["weight"].to_numpy(dtype=np.float64),
            np.asarray(load, dtype=np.float64),
            cells["flag"].to_numpy(dtype=np.int32),
            cells_per_hour=HOUR // self.store.interval_s,
            least_cells=self.settings.least_cells,
        )

    def _store(
        self,
        start: int,
        end: int,
        points: pd.DataFrame,
        number: int | None,
        from_hour: int = 0,
    ) -> None:
        numbers = pd.array([number] * len(points), dtype="Int64")
        numbers[(points["hour"] < from_hour).to_numpy()] = pd.NA
        self.store.replace_drift_points(
            self.rule.subject, self.rule.figure, start, max(end, start),
            points.assign(baseline_id=numbers),
        )  # fmt: skip

    # --- baselines -------------------------------------------------------------------------------

    def _asked(self) -> dict[str, Any]:
        """Everything that a chart depends on beside its hours, as JSON would give it back."""
        asked = asdict(self.settings) | {
            "worse": self.rule.worse,
            "smallest_change": self.rule.smallest_change,
            "follows_load": self.rule.follows_load,
        }
        if self.rule.load_streams:
            asked["load_streams"] = self.rule.load_streams
        # Delays move alarms, which are found again each time, and not the chart.
        del asked["on_delay"], asked["off_delay"]
        loaded: dict[str, Any] = json.loads(json.dumps(asked))
        return loaded

    def _record(self, segment: Segment, *, last: bool) -> BaselineRecord | None:
        """The newest stored baseline of the segment that was made as it would be made now."""
        records = self.store.baseline_history(self.rule.subject, self.rule.figure)
        fitting = [
            record
            for record in records
            if segment.holds(record.reference_start)
            and record.coefficients.get("asked") == self._asked()
            and (record.retired is None or not last)
        ]
        return fitting[-1] if fitting else None

    def _keep(
        self,
        baseline: Baseline,
        reference: tuple[int, int],
        record: BaselineRecord | None,
        *,
        last: bool,
    ) -> int:
        """Store a baseline unless it is stored already, and return its number."""
        fitted = json.loads(baseline.to_json())
        if record is not None and record.coefficients["baseline"] == fitted:
            return record.baseline_id
        made = BaselineRecord(
            subject=self.rule.subject,
            figure=self.rule.figure,
            made=self.now,
            reference_start=reference[0],
            reference_end=reference[1],
            coefficients={"baseline": fitted, "asked": self._asked()},
            sigma=baseline.sigma,
            phi=baseline.phi,
            points=baseline.points,
            reason="the reference period's hours changed" if record else "reference period over",
            retired=None if last else self.now,
        )
        return self.store.add_baseline(made)


def _plain(stored: pd.DataFrame) -> pd.DataFrame:
    """Stored points as `chart_points` gives them."""
    points = stored.reset_index(drop=True).drop(columns="baseline_id")
    points.insert(0, "hour", _seconds(stored.index))
    return points.astype({"judged": "int64"})[list(POINT_COLUMNS)]


def _without_baseline(hours: pd.DataFrame) -> pd.DataFrame:
    """Points that show what was measured and judge nothing."""
    return pd.DataFrame(
        {
            "hour": hours["hour"],
            "measured": hours["value"],
            "expected": np.nan,
            "residual": np.nan,
            "ewma": np.nan,
            "limit": np.nan,
            "cells": hours["cells"],
            "judged": 0,
        },
        columns=list(POINT_COLUMNS),
    )


def _seconds(times: pd.Index[Any]) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
    return pd.DatetimeIndex(times).as_unit("s").asi8
