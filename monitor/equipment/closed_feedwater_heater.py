"""Closed feedwater heater: steam condenses outside the tubes, its drains leave by themselves.

TTD = T_sat(p_steam) - T_feedwater,out (below zero where a desuperheating zone allows it);
DCA = T_drain - T_feedwater,in. UA is taken on the saturation temperature, as for a condenser, since
most of the duty is condensing: Q / LMTD(T_sat - T_in, T_sat - T_out).
Source: Heat Exchange Institute practice for TTD and DCA (from memory); Bejan, Tsatsaronis, Moran
(1996), table 3.3 (fuel and product of a heat exchanger).
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from monitor.equipment.base import (
    ConditionFigure,
    Drawn,
    Figure,
    FloatArray,
    Item,
    Kind,
    PortSpec,
    total,
)
from monitor.equipment.heat_transfer import conductance, flag_where
from monitor.equipment.working import Working, boiling_at, conductance_of, difference, heat_taken
from monitor.thermo.water import saturation_temperature

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["ClosedFeedwaterHeater"]


class ClosedFeedwaterHeater(Kind):
    """See the module's docstring."""

    name = "closed_feedwater_heater"
    title = "Closed feedwater heater"
    ports = (
        PortSpec("steam", "in", most=None, fluid="steam"),
        PortSpec("drain_in", "in", least=0, most=None, fluid="steam"),
        PortSpec("feedwater_in", "in", role="product", fluid="feedwater"),
        PortSpec("drain", "out", role="fuel", fluid="steam"),
        PortSpec("feedwater_out", "out", fluid="feedwater"),
    )
    fuel_and_product = (
        "fuel: exergy given up from steam and drains in to the drain out; "
        "product: exergy gained by the feed water"
    )

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of feed water [kg/s]."""
        return drawn.only("feedwater_in").mass_flow

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy given up by steam and drains, gained by the feed water [W]."""
        brought = total([s.exergy(dead) for s in (*drawn.at("steam"), *drawn.at("drain_in"))])
        gained = drawn.only("feedwater_out").exergy(dead) - drawn.only("feedwater_in").exergy(dead)
        return np.asarray(brought - drawn.only("drain").exergy(dead)), np.asarray(gained)

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """TTD, drain cooler approach, UA."""
        (drain,) = item.ports["drain"]
        dca = Figure(
            "dca",
            "drain cooler approach",
            "K",
            "high",
            2.0,
            advice="Check the drain level and its control valve, then for leaking tubes.",
        )
        # A drain stated as saturated follows the steam's pressure alone.
        stated = item.states(drain, "temperature") is not None or drain not in item.statements
        return (
            Figure(
                "ttd",
                "terminal temperature difference",
                "K",
                "high",
                1.0,
                advice=("Check the venting and the drain level, then for fouled or plugged tubes."),
            ),
            *((dca,) if stated else ()),
            Figure("ua", "heat transfer UA", "kW/K", "low", 20.0, judged=False),
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        cold, warm = drawn.only("feedwater_in"), drawn.only("feedwater_out")
        steam, drain = drawn.at("steam")[0], drawn.only("drain")
        boiling = saturation_temperature(steam.pressure)
        ttd = boiling - warm.temperature
        dca = drain.temperature - cold.temperature
        duty = warm.mass_flow * (warm.enthalpy - cold.enthalpy)
        ua = conductance(duty, boiling - cold.temperature, ttd)
        heating = duty > 0
        ones = np.ones_like(duty)
        return {
            "ttd": ConditionFigure(
                ttd, ones, flag_where(heating & (warm.temperature > steam.temperature))
            ),
            "dca": ConditionFigure(dca, ones, flag_where(heating & (dca < 0))),
            "ua": ConditionFigure(
                ua / 1e3, ones, flag_where(heating & (cold.temperature > boiling))
            ),
        }

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure."""
        cold, warm = at.only("feedwater_in"), at.only("feedwater_out")
        if figure == "dca":
            drain, entering = at.only("drain")["temperature_degc"], cold["temperature_degc"]
            yield difference("drain cooler approach", "T_drain - T_in", drain, entering)
            return
        boiling = boiling_at(at.only("steam")["pressure_bar"])
        yield boiling
        if figure == "ttd":
            formula = "T_sat - T_feedwater,out"
            leaving = warm["temperature_degc"]
            yield difference("terminal temperature difference", formula, boiling.value, leaving)
        else:
            duty = heat_taken(cold, warm)
            yield duty
            ends = [boiling.value - row["temperature_degc"] for row in (cold, warm)]
            yield from conductance_of(duty.value, *ends)
