"""Heat exchanger with water or steam on both sides: superheater, cooler, process exchanger.

UA = Q / LMTD from the four end temperatures. Effectiveness = Q / Q_max, where Q_max is the duty of
the side that would first reach the other's inlet temperature, in enthalpies, so that it holds for
boiling and condensing too (a pinch inside the exchanger may leave less).

What it destroys has two causes, counted on entropy: each side is throttled from its inlet to its
outlet pressure, S_p = m [s(p2, h1) - s1], then exchanges heat, S_T = m [s2 - s(p2, h1)]. The sum
over both sides is all the entropy generated; T0 times each part is shown.
Source: Incropera and DeWitt, Fundamentals of Heat and Mass Transfer, chapter 11;
Kotas, The Exergy Method of Thermal Plant Analysis (1985), chapter 4 (the parts of a heat
exchanger's irreversibility); Bejan, Tsatsaronis, Moran (1996), table 3.3 (fuel and product).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal, cast

import numpy as np

from monitor.equipment.base import (
    ConditionFigure,
    Drawn,
    Figure,
    FloatArray,
    Item,
    Kind,
    Options,
    PortSpec,
    StreamState,
)
from monitor.equipment.heat_transfer import conductance, flag_where, share
from monitor.equipment.working import Working, conductance_of, heat_taken
from monitor.thermo.water import state_ph, state_pt

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["Exchanger", "ExchangerOptions"]


class ExchangerOptions(Options):
    """Keys of an exchanger's table.

    Attributes:
        arrangement: which ends face each other.
    """

    arrangement: Literal["counterflow", "parallel"] = "counterflow"


class Exchanger(Kind):
    """See the module's docstring."""

    name = "exchanger"
    title = "Heat exchanger"
    ports = (
        PortSpec("hot_in", "in", fluid="hot"),
        PortSpec("cold_in", "in", role="product", fluid="cold"),
        PortSpec("hot_out", "out", role="fuel", fluid="hot"),
        PortSpec("cold_out", "out", fluid="cold"),
    )
    options = ExchangerOptions
    fuel_and_product = (
        "fuel: exergy given up by the hot side; product: exergy gained by the cold side"
    )

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow on the hot side [kg/s]."""
        return drawn.only("hot_in").mass_flow

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy given up by the hot side, gained by the cold side [W]."""
        return (
            np.asarray(drawn.only("hot_in").exergy(dead) - drawn.only("hot_out").exergy(dead)),
            np.asarray(drawn.only("cold_out").exergy(dead) - drawn.only("cold_in").exergy(dead)),
        )

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """UA, effectiveness, and the two parts of what is destroyed where pressures are read."""
        parts = (
            ("destroyed_by_temperature", "destroyed by temperature difference"),
            ("destroyed_by_pressure", "destroyed by pressure drop"),
        )
        drops = any(_drops(item, side) for side in ("hot", "cold"))
        split = tuple(Figure(n, label, "kW", "high", 10.0, judged=False) for n, label in parts)
        return (
            Figure(
                "ua",
                "heat transfer UA",
                "kW/K",
                "low",
                5.0,
                advice="Check venting and drainage, then plan a cleaning of the surfaces.",
            ),
            Figure("effectiveness", "effectiveness", "%", "low", 2.0, judged=False),
            *(split if drops else ()),
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`; the duty is the cold side's, which no heat loss passes by."""
        hot_in, hot_out = drawn.only("hot_in"), drawn.only("hot_out")
        cold_in, cold_out = drawn.only("cold_in"), drawn.only("cold_out")
        duty = cold_out.mass_flow * (cold_out.enthalpy - cold_in.enthalpy)
        options = cast("ExchangerOptions", drawn.item.options)
        ends = (cold_out, cold_in) if options.arrangement == "counterflow" else (cold_in, cold_out)
        one_end = hot_in.temperature - ends[0].temperature
        other_end = hot_out.temperature - ends[1].temperature
        uphill = flag_where((duty > 0) & ((one_end <= 0) | (other_end <= 0)))
        throttled, exchanged = _generated(hot_in, hot_out), _generated(cold_in, cold_out)
        T0 = dead.temperature
        by_pressure = T0 * (throttled[0] + exchanged[0])
        by_temperature = T0 * (throttled[1] + exchanged[1])
        ones, nothing = np.ones_like(duty), np.zeros_like(uphill)
        most = _largest_duty(hot_in, hot_out, cold_in, cold_out)
        with np.errstate(invalid="ignore"):
            too_much = flag_where((duty > most) & (duty > 0)) | uphill
        return {
            "ua": ConditionFigure(conductance(duty, one_end, other_end) / 1e3, ones, uphill),
            "effectiveness": ConditionFigure(share(duty, most), np.maximum(most, 0.0), too_much),
            "destroyed_by_temperature": ConditionFigure(by_temperature / 1e3, ones, nothing),
            "destroyed_by_pressure": ConditionFigure(by_pressure / 1e3, ones, nothing),
        }

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to the heat transfer."""
        if figure != "ua":
            return
        duty = heat_taken(at.only("cold_in"), at.only("cold_out"))
        yield duty
        counter = cast("ExchangerOptions", at.item.options).arrangement == "counterflow"
        ends = ("cold_out", "cold_in") if counter else ("cold_in", "cold_out")
        differences = [
            at.only(hot)["temperature_degc"] - at.only(cold)["temperature_degc"]
            for hot, cold in zip(("hot_in", "hot_out"), ends, strict=True)
        ]
        yield from conductance_of(duty.value, *differences)


def _drops(item: Item, side: str) -> bool:
    """Whether the site file gives a side two pressures, read or fixed."""
    (one,), (other,) = item.ports[f"{side}_in"], item.ports[f"{side}_out"]
    before, after = item.states(one, "pressure"), item.states(other, "pressure")
    return before is None or after is None or before != after


def _generated(inlet: StreamState, outlet: StreamState) -> tuple[FloatArray, FloatArray]:
    """Entropy that one side gains by throttling, and by heat [W/K]."""
    throttled = state_ph(outlet.pressure, inlet.enthalpy).entropy
    return (
        np.asarray(inlet.mass_flow * (throttled - inlet.entropy)),
        np.asarray(outlet.mass_flow * outlet.entropy - inlet.mass_flow * throttled),
    )


def _largest_duty(
    hot_in: StreamState, hot_out: StreamState, cold_in: StreamState, cold_out: StreamState
) -> FloatArray:
    """Duty that an exchanger without end would reach between the two inlets [W]."""
    coldest = state_pt(hot_out.pressure, cold_in.temperature, side="liquid").enthalpy
    hottest = state_pt(cold_out.pressure, hot_in.temperature, side="vapour").enthalpy
    return np.minimum(
        hot_in.mass_flow * (hot_in.enthalpy - coldest),
        cold_in.mass_flow * (hottest - cold_in.enthalpy),
    )
