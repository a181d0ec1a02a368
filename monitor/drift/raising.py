"""From charts to stored alarms: raised and cleared by the data, moved on by what people did."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from monitor.drift.alarms import Action, AlarmState, Episode, OperatorAction, Transition, replay
from monitor.drift.evidence import extra_destroyed, gather
from monitor.drift.judgement import FigureRule, Segment, Settings, alarm_episodes
from monitor.drift.message import finding, message, priority
from monitor.drift.verdict import verdict
from monitor.store.alarms import AlarmRecord, AlarmTransition

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    import pandas as pd

    from monitor.drift.baseline import Baseline
    from monitor.store.site import SiteStore

__all__ = ["ALARM_KIND", "Chart", "Money", "Raising"]

HOUR = 3600
ALARM_KIND = "drift"
_LOOK_BACK = 24 * HOUR


@dataclass(frozen=True)
class Money:
    """What lost work costs, in the site's currency.

    Attributes:
        unit_cost: of a MWh destroyed in a piece of equipment, by its id, over a reference period
            (integer UTC seconds). A fixed period, so that an alarm's cost stays what it was.
        currency: for people.
    """

    unit_cost: Callable[[str, tuple[int, int]], float]
    currency: str


@dataclass(frozen=True)
class Chart:
    """One segment judged: its points from the baseline's start on."""

    segment: Segment
    baseline: Baseline | None
    reference: tuple[int, int]
    points: pd.DataFrame
    reason: str = ""


@dataclass(frozen=True)
class Raising:
    """One figure's alarms.

    Attributes:
        store: where they go.
        rule: the figure.
        settings: how it is judged.
        now: integer UTC seconds, up to when shelvings have run.
        money: what lost work costs, None to leave costs out.
    """

    store: SiteStore
    rule: FigureRule
    settings: Settings
    now: int
    money: Money | None

    def replace_alarms(
        self, charts: Sequence[Chart], since: int
    ) -> tuple[tuple[AlarmRecord, ...], tuple[tuple[OperatorAction, str], ...]]:
        """Make the figure's stored alarms raised at or after a time those of these charts.

        Args:
            charts: segments in order of time, the last one the present.
            since: start of the first of them, integer UTC seconds.

        Returns:
            The alarms, and recorded actions of that time that do not fit them any more.
        """
        found: list[tuple[Episode, Chart]] = []
        for chart in charts:
            if chart.baseline is None:
                continue
            for episode in alarm_episodes(chart.points, chart.baseline, self.rule, self.settings):
                cleared = episode.cleared
                if chart.segment.end is not None and cleared is None:
                    # What was wrong before the event is judged no further.
                    cleared = chart.segment.end
                found.append((Episode(episode.raised, cleared), chart))
        actions = [
            OperatorAction(a.time, Action(a.action), a.who, a.note, a.until)
            for a in self.store.alarm_actions(self.rule.subject, self.rule.figure)
            if a.kind == ALARM_KIND
        ]
        played = replay([episode for episode, _ in found], actions, self.now)
        records = []
        for index, (episode, chart) in enumerate(found):
            later = found[index + 1][0].raised if index + 1 < len(found) else None
            steps = [
                step
                for step in played.transitions
                if step.time >= episode.raised and (later is None or step.time < later)
            ]
            # A new alarm of the same figure takes over what was still to be acknowledged.
            state = played.alarm.state if later is None else AlarmState.NORMAL
            records.append((self._alarm(episode, chart, state, steps), _as_stored(steps)))
        numbers = self.store.replace_alarms(
            self.rule.subject, self.rule.figure, ALARM_KIND, since, records
        )
        refused = tuple(pair for pair in played.refused if pair[0].time >= since)
        alarms = [
            replace(record, alarm_id=number)
            for (record, _), number in zip(records, numbers, strict=True)
        ]
        return tuple(alarms), refused

    def _alarm(
        self, episode: Episode, chart: Chart, state: AlarmState, steps: Sequence[Transition]
    ) -> AlarmRecord:
        rule = self.rule
        watched = chart.points
        if chart.baseline is not None:
            watched = watched[watched["hour"] >= chart.baseline.end]
        shown = finding(watched, episode.raised)
        # Hours before the change would dilute what it costs, and what it comes with.
        stretch = max(shown.since, episode.raised - _LOOK_BACK), episode.raised
        cost = self._cost(chart.reference, *stretch)
        evidence = gather(self.store, rule, chart.reference, *stretch, drifts=True)
        active = (watched["hour"] < (episode.cleared or self.now)) & (
            watched["hour"] >= episode.raised - HOUR
        )
        acknowledged = [s.time for s in steps if s.action is Action.ACKNOWLEDGE]
        shelved = [s.until for s in steps if s.action is Action.SHELVE]
        return AlarmRecord(
            subject=rule.subject,
            figure=rule.figure,
            kind=ALARM_KIND,
            state=str(state),
            priority=priority(watched[active]),
            raised=episode.raised,
            message=message(
                rule,
                shown,
                verdict(evidence),
                time_zone=self.store.time_zone,
                cost_per_day=cost,
                currency=self.money.currency if self.money else "",
            ),
            cleared=episode.cleared,
            acknowledged=acknowledged[0] if acknowledged else None,
            shelved_until=shelved[-1] if state is AlarmState.SHELVED and shelved else None,
            value=shown.measured,
            unit=rule.unit,
            cost_per_day=cost,
        )

    def _cost(self, reference: tuple[int, int], since: int, until: int) -> float | None:
        if self.money is None:
            return None
        extra = extra_destroyed(
            self.store, self.rule, reference, since, until, self.settings.least_hours
        )
        if not np.isfinite(extra):
            return None
        return max(extra, 0.0) / 1000 * 24 * self.money.unit_cost(self.rule.subject, reference)


def _as_stored(steps: Sequence[Transition]) -> list[AlarmTransition]:
    return [
        AlarmTransition(
            time=step.time,
            action=str(step.action),
            from_state=str(step.before),
            to_state=str(step.after),
            who=step.by,
            note=step.note,
            until=step.until,
        )
        for step in steps
    ]
