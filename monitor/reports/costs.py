"""The page of costs: destruction by the chain that supplies it, and what of it is avoidable."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, cast

import numpy as np

from dashboards.views import CostRow, CostsView, LossRow, StreamCostRow
from monitor.avoidable import Avoidable, avoidable, best_demonstrated

if TYPE_CHECKING:
    import pandas as pd

    from monitor.equipment.base import Item
    from monitor.reports.gather import Gathered

__all__ = ["costs_view"]

_HOURS_PER_DAY = 24.0
_COMPARED = {
    "destroyed_reference_kw": "destroyed",
    "product_reference_kw": "product",
    "fuel_reference_kw": "fuel",
    "load_kg_s": "load",
}
_NOT_COMPARED = Avoidable(np.nan, 0.0)


def costs_view(gathered: Gathered) -> CostsView:
    """Gather the page of costs."""
    costs, demonstrated = gathered.costs, _Demonstrated(gathered)
    means = gathered.equipment_means["mean"]
    destroyed = {
        i.id: float(cast("float", means.get((i.id, "destroyed_live_kw"), np.nan)))
        for i in gathered.items
    }
    rows = [
        _cost_row(gathered, item, destroyed[item.id], demonstrated.avoidable(item))
        for item in gathered.items
    ]
    return CostsView(
        context=gathered.context,
        equipment=tuple(sorted(rows, key=lambda r: -np.nan_to_num(r.cost_per_day, nan=-np.inf))),
        losses=_loss_rows(gathered),
        streams=_stream_rows(gathered),
        supplied_per_day=costs.supplied_per_day,
        mean_price=costs.mean_price,
        reference=demonstrated.reference_local,
        currency=gathered.site.file.economics.currency,
    )


def _cost_row(gathered: Gathered, item: Item, destroyed: float, part: Avoidable) -> CostRow:
    costs = gathered.costs
    mwh = destroyed * _HOURS_PER_DAY / 1e3
    unit_cost = costs.money.equipment[item.id]
    return CostRow(
        id=item.id,
        name=item.name,
        destroyed_kw=destroyed,
        unit_cost=unit_cost,
        cost_per_day=mwh * unit_cost,
        mean_per_day=mwh * costs.mean_price,
        fuel_kw=destroyed * costs.fuel.equipment[item.id],
        co2_t_per_day=mwh * costs.emissions.equipment[item.id] / 1e3,
        # The reference dead state says which part; the live one how much that is.
        avoidable_kw=destroyed * part.share,
        avoidable_per_day=mwh * part.share * unit_cost,
        compared=part.compared,
    )


def _loss_rows(gathered: Gathered) -> tuple[LossRow, ...]:
    costs = gathered.costs
    rows = [
        LossRow(
            name=gathered.site.streams[stream].name or stream,
            exergy_kw=costs.rates[stream],
            cost_per_day=hourly * _HOURS_PER_DAY,
            co2_t_per_day=costs.emissions.losses[stream] * _HOURS_PER_DAY / 1e3,
        )
        for stream, hourly in costs.money.losses.items()
    ]
    rows += [row for item in gathered.items if (row := _heat_row(gathered, item)) is not None]
    return tuple(sorted(rows, key=lambda r: -np.nan_to_num(r.cost_per_day, nan=-np.inf)))


def _heat_row(gathered: Gathered, item: Item) -> LossRow | None:
    """Heat that leaves above (or below) T0 by a stated boundary: it is lost, not destroyed."""
    if item.options.boundary_temperature is None or item.options.heat_loss != "balance":
        return None
    costs, mean = gathered.costs, gathered.equipment_means["mean"]
    exergy = float(cast("float", mean.get((item.id, "heat_loss_exergy_live_kw"), np.nan)))
    mwh = exergy * _HOURS_PER_DAY / 1e3
    return LossRow(
        name=f"Heat lost by {item.name}",
        exergy_kw=exergy,
        cost_per_day=mwh * costs.money.equipment[item.id],
        co2_t_per_day=mwh * costs.emissions.equipment[item.id] / 1e3,
    )


def _stream_rows(gathered: Gathered) -> tuple[StreamCostRow, ...]:
    costs = gathered.costs
    means = gathered.store.means("stream", gathered.start, gathered.end)["mean"]
    rows = []
    for stream, table in gathered.site.streams.items():
        exergy = costs.rates.get(stream, np.nan)
        unit_cost = costs.money.streams.streams[stream]
        flow = float(cast("float", means.get((stream, "mass_flow_kg_s"), np.nan))) * 3.6
        rows.append(
            StreamCostRow(
                name=table.name or stream,
                exergy_kw=exergy,
                unit_cost=unit_cost,
                per_tonne=unit_cost * exergy / 1e3 / flow if flow > 0 else np.nan,
                co2=costs.emissions.streams.streams[stream],
                fuel=costs.fuel.streams.streams[stream],
                note=costs.money.streams.flat.get(stream, ""),
            )
        )
    return tuple(rows)


@dataclass(frozen=True)
class _Demonstrated:
    """What the equipment has shown in the reference periods of its baselines."""

    gathered: Gathered

    @cached_property
    def references(self) -> dict[str, tuple[int, int]]:
        """Reference period of each piece of equipment that has a baseline, integer UTC seconds."""
        baselines = self.gathered.store.current_baselines().values()
        # One with several figures may have several; the newest is its present state's.
        ordered = sorted(baselines, key=lambda b: b.reference_start)
        return {b.subject: (b.reference_start, b.reference_end) for b in ordered}

    @cached_property
    def usual(self) -> tuple[int, int] | None:
        """The oldest reference period: stands in for equipment without a figure that is judged."""
        return min(self.references.values(), default=None)

    @property
    def reference_local(self) -> tuple[pd.Timestamp, pd.Timestamp] | None:
        """The usual one in local time."""
        if self.usual is None:
            return None
        start, end = self.usual
        return self.gathered.local(start), self.gathered.local(end)

    @cached_property
    def span(self) -> dict[str, pd.DataFrame]:
        """Hours of the page's span, by equipment."""
        return self._hours(self.gathered.start, self.gathered.end)

    @cached_property
    def reference_hours(self) -> dict[tuple[int, int], dict[str, pd.DataFrame]]:
        """Hours of every reference period in use, by equipment."""
        spans = {*self.references.values()} | ({self.usual} if self.usual else set())
        return {span: self._hours(*span) for span in spans}

    def avoidable(self, item: Item) -> Avoidable:
        """Compare the span with the best of the item's reference period."""
        reference = self.references.get(item.id, self.usual)
        if reference is None or item.id not in self.span:
            return _NOT_COMPARED
        before = self.reference_hours[reference].get(item.id)
        best = None if before is None else best_demonstrated(before, stores=self._stores(item))
        return _NOT_COMPARED if best is None else avoidable(best, self.span[item.id])

    def _stores(self, item: Item) -> bool:
        """Whether what it holds changed over the span: a vessel works by the day."""
        means = self.gathered.equipment_means
        key = (item.id, "stored_rate_live_kw")
        return key in means.index and bool(means.loc[key, ["minimum", "maximum"]].any())

    def _hours(self, start: int | pd.Timestamp, end: int | pd.Timestamp) -> dict[str, pd.DataFrame]:
        figures = tuple(_COMPARED)
        rolled = self.gathered.store.rollups("equipment", "hour", start, end, figures=figures)
        wide = rolled.pivot_table(
            index=["subject", "start"], columns="figure", values="mean", observed=True
        )
        wide = wide.reindex(columns=list(figures)).rename(columns=_COMPARED)
        groups = wide.groupby(level="subject", observed=True)
        return {str(subject): table.droplevel("subject") for subject, table in groups}
