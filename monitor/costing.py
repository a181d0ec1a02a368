"""A site's exergy costs over a span of stored figures: in money, in CO2 and in fuel.

`economics.py` has the rules; here they meet the store.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from monitor.economics import (
    cost_of_losses,
    fuel_unit_costs,
    supplied_emissions,
    supplied_fuel,
    supplied_prices,
    unit_costs,
)
from monitor.store.read import means_of

if TYPE_CHECKING:
    from collections.abc import Mapping

    from monitor.economics import Prices, UnitCosts
    from monitor.site.load import Site
    from monitor.store.handle import Instant
    from monitor.store.site import SiteStore

__all__ = ["ChainCosts", "SpanCosts", "span_costs"]


@dataclass(frozen=True)
class ChainCosts:
    """One sort of cost, carried along the chain that supplies each point of the site.

    Attributes:
        prices: of what enters, per MWh of exergy.
        streams: unit cost of each stream's exergy, per MWh.
        equipment: unit cost of the exergy that each piece of equipment takes as its fuel, per MWh:
            what a MWh destroyed there costs.
        losses: cost of each stream that leaves for nothing, per hour.
    """

    prices: Prices
    streams: UnitCosts
    equipment: Mapping[str, float]
    losses: Mapping[str, float]


@dataclass(frozen=True)
class SpanCosts:
    """Costs at mean rates of a span, at the live dead state.

    Attributes:
        rates: mean exergy rate of each stream that has one [kW].
        money: in the site's currency.
        emissions: kg of CO2.
        fuel: MWh of the site's fuel (lower heating value).
    """

    rates: Mapping[str, float]
    money: ChainCosts
    emissions: ChainCosts
    fuel: ChainCosts

    @property
    def supplied_per_day(self) -> float:
        """What all that enters the site costs a day, in its currency."""
        return self._supplied_cost(self.money.prices) * 24 / 1e3

    @property
    def mean_price(self) -> float:
        """Mean cost of the exergy that enters the site, per MWh: with it a ledger adds up."""
        return self._mean(self.money.prices)

    @property
    def mean_emission(self) -> float:
        """Mean CO2 of the exergy that enters the site [kg/MWh]."""
        return self._mean(self.emissions.prices)

    def _mean(self, prices: Prices) -> float:
        entering = sum(self._entering(prices).values())
        return self._supplied_cost(prices) / entering if entering > 0 else prices.flat

    def _supplied_cost(self, prices: Prices) -> float:
        return sum(prices.supplied[s] * rate for s, rate in self._entering(prices).items())

    def _entering(self, prices: Prices) -> dict[str, float]:
        """Exergy rates of the streams that bring some into the site [kW]."""
        return {s: self.rates[s] for s in prices.supplied if self.rates.get(s, 0.0) > 0}


def span_costs(site: Site, store: SiteStore, start: Instant, end: Instant) -> SpanCosts:
    """Carry the costs of what enters over the mean exergy rates of [start, end)."""
    rates = means_of(store.means("stream", start, end), "exergy_live_kw")
    stored = means_of(store.means("equipment", start, end), "stored_rate_live_kw")

    def carried(prices: Prices) -> ChainCosts:
        streams = unit_costs(site, rates, prices, stored)
        return ChainCosts(
            prices,
            streams,
            fuel_unit_costs(site, rates, streams, prices),
            cost_of_losses(site, rates, streams, prices),
        )

    return SpanCosts(
        rates,
        carried(supplied_prices(site)),
        carried(supplied_emissions(site)),
        carried(supplied_fuel(site)),
    )
