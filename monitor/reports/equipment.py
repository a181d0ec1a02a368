"""One equipment's view: condition against baseline, control charts, trends, expansion line."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, cast

import numpy as np
import pandas as pd

from dashboards.formats import unit_of_change
from dashboards.views import EquipmentView, ResidualView, TrendView
from monitor.reports.expansion import expansion_view

if TYPE_CHECKING:
    from dashboards.views import ConditionRow, EquipmentRow
    from monitor.equipment.base import Figure, Item
    from monitor.reports.gather import Gathered
    from monitor.store.baselines import BaselineRecord

__all__ = ["equipment_view"]

_RATES = (
    ("destroyed_live_kw", "Destroyed exergy, live dead state", "destroyed exergy", "kW"),
    ("destroyed_reference_kw", "Destroyed exergy, reference dead state", "destroyed exergy", "kW"),
    ("load_kg_s", "Load", "flow", "kg/s"),
)


def equipment_view(
    gathered: Gathered, item: Item, row: EquipmentRow, conditions: tuple[ConditionRow, ...]
) -> EquipmentView:
    """Gather the page of one piece of equipment."""
    start, end = gathered.start, gathered.end
    rolled = gathered.store.rollups("equipment", "hour", start, end, subject=item.id)
    return EquipmentView(
        context=gathered.context,
        row=row,
        conditions=conditions,
        trends=_trends(gathered, item, rolled),
        residuals=tuple(
            view
            for figure in item.kind.figures(item)
            if figure.judged and (view := _residuals(gathered, item, figure)) is not None
        ),
        expansion=expansion_view(gathered, item),
        alarms=gathered.alarms_between(start, end, item.id),
        events=gathered.events(start, end, item.id),
        streams=_streams(gathered, item),
        currency=gathered.site.file.economics.currency,
    )


def _trends(gathered: Gathered, item: Item, rolled: pd.DataFrame) -> tuple[TrendView, ...]:
    trends = []
    for figure in item.kind.figures(item):
        data = _series(rolled, figure.name)
        if data.empty:
            continue
        points = gathered.drift_points(item.id, figure.name)
        if len(points):
            framed = pd.DataFrame(
                {
                    "expected": points["expected"],
                    "low": points["expected"] - points["limit"],
                    "high": points["expected"] + points["limit"],
                }
            )
            data = data.join(framed)
        trends.append(
            TrendView(
                title=figure.label[:1].upper() + figure.label[1:],
                label=figure.label,
                unit=figure.unit,
                data=gathered.localised(data),
            )
        )
    for name, title, label, unit in _RATES:
        data = _series(rolled, name)
        if not data.empty:
            trends.append(TrendView(title, label, unit, gathered.localised(data)))
    return tuple(trends)


def _series(rolled: pd.DataFrame, figure: str) -> pd.DataFrame:
    rows = rolled[rolled["figure"] == figure].set_index("start")
    named = rows[["mean", "minimum", "maximum"]].rename(columns={"mean": "value"})
    # Gaps stay gaps: an hour without a value must not be bridged by a line.
    return named.asfreq("h") if len(named) else named


def _residuals(gathered: Gathered, item: Item, figure: Figure) -> ResidualView | None:
    points = gathered.drift_points(item.id, figure.name)
    if points.empty:
        return None
    judged = points["judged"].astype(bool)
    data = pd.DataFrame(
        {
            "residual": points["residual"].where(judged),
            "ewma": points["ewma"],
            # The limits belong to the baseline and hold between judged hours too.
            "low": -points["limit"].ffill(),
            "high": points["limit"].ffill(),
        }
    )
    alarms = gathered.alarms_between(gathered.start, gathered.end, item.id)
    raised = tuple((a.raised, a.message) for a in alarms if a.figure_label == figure.label)
    baseline = gathered.store.current_baselines().get((item.id, figure.name))
    return ResidualView(
        figure=figure.name,
        label=figure.label,
        unit=figure.unit,
        data=gathered.localised(data),
        alarms=raised,
        events=gathered.events(gathered.start, gathered.end, item.id),
        reference=_reference(gathered, baseline),
        design=_design(gathered, item, figure),
    )


def _reference(
    gathered: Gathered, baseline: BaselineRecord | None
) -> tuple[pd.Timestamp, pd.Timestamp] | None:
    if baseline is None:
        return None
    return gathered.local(baseline.reference_start), gathered.local(baseline.reference_end)


def _design(gathered: Gathered, item: Item, figure: Figure) -> str:
    drift = gathered.site.file.drift
    days = drift.false_alarm_every / 86400.0
    return (
        f"EWMA with weight {drift.weight:g}; limits designed for one false alarm in {days:.0f} "
        "days of judged hours (average run length, Crowder 1987), widened for autocorrelation "
        f"and never narrower than {gathered.smallest_change(item, figure):g} "
        f"{unit_of_change(figure.unit)}."
    )


def _streams(gathered: Gathered, item: Item) -> pd.DataFrame:
    """Means of the streams at the ports over the last day of the span."""
    day = max(gathered.start, gathered.end - pd.Timedelta(days=1))
    recent = replace(gathered, start=day)
    means = gathered.store.means("stream", day, gathered.end)
    words = recent.stream_flags()

    def mean(stream: str, figure: str) -> float:
        at = (stream, figure)
        return float(cast("float", means.loc[at, "mean"])) if at in means.index else np.nan

    rows = [
        {
            "port": port,
            "stream": gathered.site.streams[stream].name or stream,
            # Power and heat have no mass to flow; a nought would read as a stopped stream.
            "flow": np.nan
            if gathered.site.streams[stream].medium in {"power", "heat"}
            else mean(stream, "mass_flow_kg_s") * 3.6,
            "pressure": mean(stream, "pressure_bar"),
            "temperature": mean(stream, "temperature_degc"),
            "dryness": mean(stream, "dryness"),
            "exergy": mean(stream, "exergy_live_kw"),
            "flags": words.get(stream, "no figures"),
        }
        for port, streams in item.ports.items()
        for stream in streams
    ]
    columns = ["port", "stream", "flow", "pressure", "temperature", "dryness", "exergy", "flags"]
    return pd.DataFrame(rows, columns=columns)
