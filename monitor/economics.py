"""What exergy costs at each point of the site: unit costs, passed on from stream to stream.

A kW destroyed behind a turbine is dearer than one destroyed in a boiler, since it has been paid for
on the way. The cost of what enters the site is carried over the site's graph of streams, with no
cost of capital, by four rules:

- a stream that enters costs its own price (a fuel's price per heating value over its exergy ratio),
  or the site's flat price;
- what leaves on the fuel's side of a piece of equipment (a turbine's exhaust, a user's returned
  condensate) keeps the mean unit cost of the fuel that came in (the F rule);
- what leaves through a port for losses costs nothing, so the products bear it;
- the products share one unit cost, from the cost balance: all that comes in, less what leaves on
  the fuel's side, less what a vessel stores at the fuel's unit cost, is what the products cost
  (the P rule).

A condenser whose cooling water goes to waste makes nothing that anyone pays for: it is there so
that the turbine can expand further. What it costs is charged to the products of what sends it its
steam (the turbine's power), and the water that it warms costs nothing: so what comes in is paid for
by what is used. Steam that a turbine did not let out (dumped from a header) has nobody to charge;
there the water carries the cost away, as if it were used.

These are linear equations, one a stream, solved together, so loops (condensate back to the boiler)
need nothing of their own. What is destroyed or lost in a piece of equipment is charged at the unit
cost of the fuel that it takes. Emissions are passed on in the same way.

Where the rules give no cost (nothing flows, no fuel is spent, a reading is absent) the flat price
stands in, and `UnitCosts.flat` says for which stream and why.

Source: Bejan, Tsatsaronis, Moran, Thermal Design and Optimization (1996), chapter 8 (exergy
costing, auxiliary relations, cost of exergy destruction); the F and P rules by that name after
Lazzaretto and Tsatsaronis, Energy 31, 1257 (2006), who charge dissipative components to those that
they serve.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from monitor.thermo.fuels import exergy_ratio

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

    from monitor.equipment.base import FloatArray, Item
    from monitor.site.load import Site
    from monitor.site.models import Stream

__all__ = [
    "Prices",
    "UnitCosts",
    "cost_of_losses",
    "fuel_unit_costs",
    "supplied_emissions",
    "supplied_fuel",
    "supplied_prices",
    "unit_costs",
]

# Exergy below this share of all that enters the site is nothing: a closed valve's meter.
_NOTHING = 1e-9
# Balances that determine the costs worse than this have no single solution.
_ILL_CONDITIONED = 1e12


@dataclass(frozen=True)
class Prices:
    """What exergy costs that enters the site, per MWh of exergy.

    Attributes:
        supplied: by the id of each stream that enters.
        flat: for whatever the rules give no cost.
    """

    supplied: Mapping[str, float]
    flat: float


@dataclass(frozen=True)
class UnitCosts:
    """Unit cost of every stream, per MWh of exergy.

    Attributes:
        streams: by stream id.
        flat: streams that the flat price stands in for, and why.
    """

    streams: Mapping[str, float]
    flat: Mapping[str, str]


def supplied_prices(site: Site) -> Prices:
    """Money per MWh of exergy, from the streams' ``price`` and the site's ``exergy_price``."""
    return _supplied(site, "price", site.file.economics.exergy_price)


def supplied_emissions(site: Site) -> Prices:
    """CO2 in kg per MWh of exergy, from the streams' ``co2`` and the site's."""
    return _supplied(site, "co2", site.file.economics.co2)


def supplied_fuel(site: Site) -> Prices:
    """MWh of fuel, by its lower heating value, per MWh of exergy: nothing but fuel has any.

    There is no flat value to stand in, since a site may take no fuel at all.
    """
    streams = [s for s in site.streams.values() if s.id not in site.producer]
    return Prices({s.id: 1.0 / _ratio(s) if s.medium == "fuel" else 0.0 for s in streams}, 0.0)


def unit_costs(
    site: Site,
    rates: Mapping[str, float],
    prices: Prices,
    stored: Mapping[str, float] | None = None,
) -> UnitCosts:
    """Unit cost of the exergy of every stream.

    Args:
        site: whose streams and equipment.
        rates: mean exergy rate of each stream, all in one unit; over a period long enough that
            what vessels store has come and gone, or with ``stored``. An absent or NaN rate counts
            as no flow, and a stream without one gets the flat price unless it has its own.
        prices: of what enters the site.
        stored: mean rate at which each vessel's exergy rises, by equipment id, in the same unit.

    Returns:
        The unit costs, per MWh of exergy in the prices' own unit (money, kg of CO2).
    """
    known = {s: _positive(rates.get(s, math.nan)) for s in site.streams}
    entering = sum(known[s] for s in site.streams if s not in site.producer)
    system = _System(list(site.streams), known, prices, nothing=_NOTHING * entering)
    for stream in site.streams:
        if stream not in site.producer:
            system.price(stream, prices.supplied.get(stream, prices.flat))
    for item in site.items.values():
        _rules_of(system, item, (stored or {}).get(item.id, 0.0))
    for item in site.items.values():
        if item.kind.dissipates and not _is_wanted(site, item):
            _charge_those_served(system, site, item)
    for stream in site.producer:
        if math.isnan(rates.get(stream, math.nan)):
            system.flat_price(stream, "its exergy rate is absent")
    return system.solved(kept=[s for s in site.streams if s not in site.producer])


def fuel_unit_costs(
    site: Site, rates: Mapping[str, float], costs: UnitCosts, prices: Prices
) -> dict[str, float]:
    """Mean unit cost of the fuel that each piece of equipment takes, per MWh of exergy."""
    found = {}
    for item in site.items.values():
        fuel = {s: _positive(rates.get(s, math.nan)) for s in _at(item, "in", "fuel")}
        total = sum(fuel.values())
        found[item.id] = (
            sum(costs.streams[s] * rate for s, rate in fuel.items()) / total
            if total > 0
            else prices.flat
        )
    return found


def cost_of_losses(
    site: Site, rates_kw: Mapping[str, float], costs: UnitCosts, prices: Prices
) -> dict[str, float]:
    """Cost of each stream that leaves the site for nothing, per hour.

    A loss is charged like destruction, at the unit cost of its producer's fuel; what was in the
    product before the producer added to it (cooling water, feed water) at its own. So a lost
    product costs what it would if its producer destroyed nothing: that is charged already.
    """
    fuel_costs = fuel_unit_costs(site, rates_kw, costs, prices)
    found = {}
    for stream in site.streams:
        if stream in site.consumer or stream not in rates_kw or site.counts_as_used(stream):
            continue
        item = site.items.get(site.producer.get(stream, ""))
        unit = prices.flat
        if item is not None:
            unit = fuel_costs[item.id]
            products, before = _at(item, "out", "product"), _at(item, "in", "product")
            made = sum(_positive(rates_kw.get(s, math.nan)) for s in products)
            if stream in products and made > 0:
                cheaper = (
                    (unit - costs.streams[s]) * _positive(rates_kw.get(s, math.nan)) for s in before
                )
                unit -= sum(cheaper) / made
        found[stream] = unit * rates_kw[stream] / 1e3
    return found


def _supplied(site: Site, key: Literal["price", "co2"], flat: float) -> Prices:
    found = {}
    for stream in site.streams.values():
        if stream.id in site.producer:
            continue
        own = getattr(stream, key)
        if own is None:
            found[stream.id] = flat
        elif stream.medium == "fuel":
            found[stream.id] = own / _ratio(stream)
        else:
            found[stream.id] = own
    return Prices(found, flat)


def _ratio(fuel: Stream) -> float:
    """Exergy per lower heating value of a stream of fuel."""
    return exergy_ratio(fuel.fuel) if fuel.exergy_ratio is None else fuel.exergy_ratio


def _positive(rate: float) -> float:
    """A rate that can carry cost; less than nothing is an error of readings near the dead state."""
    return rate if rate > 0 else 0.0


def _is_wanted(site: Site, item: Item) -> bool:
    """Whether any product of a piece of equipment goes on to something, or counts as used."""
    products = _at(item, "out", "product")
    return any(s in site.consumer or site.counts_as_used(s) for s in products)


def _at(
    item: Item, direction: Literal["in", "out"], side: Literal["fuel", "product", "loss"]
) -> list[str]:
    return [
        stream
        for port in item.kind.ports
        if port.direction == direction and port.side == side
        for stream in item.ports.get(port.name, ())
    ]


class _System:
    """One linear equation a stream: unit cost = a sum of unit costs + a number."""

    def __init__(
        self, streams: list[str], rates: Mapping[str, float], prices: Prices, *, nothing: float
    ) -> None:
        self.index = {stream: k for k, stream in enumerate(streams)}
        self.rates = rates
        self.prices = prices
        self.nothing = nothing
        self.weights: FloatArray = np.zeros((len(streams), len(streams)))
        self.constants: FloatArray = np.zeros(len(streams))
        self.flat: dict[str, str] = {}

    def total(self, streams: Iterable[str]) -> float:
        return sum(self.rates[s] for s in streams)

    def price(self, stream: str, cost: float) -> None:
        self.weights[self.index[stream]] = 0.0
        self.constants[self.index[stream]] = cost

    def flat_price(self, stream: str, reason: str) -> None:
        self.price(stream, self.prices.flat)
        self.flat[stream] = reason

    def mix(self, stream: str, parts: Mapping[str, float]) -> None:
        for part, weight in parts.items():
            self.weights[self.index[stream], self.index[part]] += weight

    def charge(self, worthless: list[str], payers: Mapping[str, list[str]]) -> None:
        """Move the cost of streams that are worth nothing to the products of others.

        Args:
            worthless: what one piece of equipment makes.
            payers: by each stream of its fuel, the products of whoever sends it. Who sends more
                exergy pays more; where there is none to pay, the cost stays.
        """
        if any(stream in self.flat for stream in worthless):
            return
        rows = [self.index[stream] for stream in worthless]
        costs = np.array([self.rates[stream] for stream in worthless]) @ self.weights[rows]
        brought, charged = self.total(payers), 0.0
        for stream, products in payers.items():
            made = self.total(products)
            if made <= self.nothing or any(product in self.flat for product in products):
                continue
            share = self.rates[stream] / brought
            for product in products:
                self.weights[self.index[product]] += share / made * costs
            charged += share
        self.weights[rows] *= max(1.0 - charged, 0.0)

    def solved(self, kept: Iterable[str]) -> UnitCosts:
        """Solve; where the balances have no single solution, every stream but ``kept`` is flat."""
        matrix = np.eye(len(self.index)) - self.weights
        if np.linalg.cond(matrix) < _ILL_CONDITIONED:
            costs = np.linalg.solve(matrix, self.constants)
            return UnitCosts({s: float(costs[k]) for s, k in self.index.items()}, self.flat)
        supplied = {s: float(self.constants[self.index[s]]) for s in kept}
        reason = (
            "the cost balances have no single solution: streams feed one another and none leaves"
        )
        made = {s: self.prices.flat for s in self.index if s not in supplied}
        return UnitCosts(supplied | made, self.flat | dict.fromkeys(made, reason))


def _rules_of(system: _System, item: Item, stored: float) -> None:
    """Write the equations of all streams that leave one piece of equipment."""
    fuel, before = _at(item, "in", "fuel"), _at(item, "in", "product")
    kept, products = _at(item, "out", "fuel"), _at(item, "out", "product")
    brought = system.total(fuel)
    mean = {s: system.rates[s] / brought for s in fuel} if brought > system.nothing else None
    for stream in _at(item, "out", "loss"):
        system.price(stream, 0.0)
    for stream in kept:
        if mean is None:
            system.flat_price(stream, f"'{item.id}' takes no fuel")
        else:
            system.mix(stream, mean)
    made = system.total(products)
    spent = brought - system.total(kept) - stored
    for stream in products:
        if made <= system.nothing:
            system.flat_price(stream, f"'{item.id}' makes no product")
        elif mean is None or spent <= system.nothing:
            system.flat_price(stream, f"'{item.id}' spends no fuel")
        else:
            # What is spent of the fuel costs its mean; what the product was before, its own.
            system.mix(stream, {s: share * spent / made for s, share in mean.items()})
            system.mix(stream, {s: system.rates[s] / made for s in before})


def _charge_those_served(system: _System, site: Site, item: Item) -> None:
    """Charge a condenser to the products of what lets its steam out on the fuel's side."""
    payers: dict[str, list[str]] = {}
    for stream in _at(item, "in", "fuel"):
        sender = site.items.get(site.producer.get(stream, ""))
        let_out = sender is not None and stream in _at(sender, "out", "fuel")
        payers[stream] = _at(sender, "out", "product") if sender is not None and let_out else []
    system.charge(_at(item, "out", "product"), payers)
