"""Open (mixing) feedwater heater: extraction steam condenses in the water that it heats.

TTD = T_sat(p) - T_out at the heater's pressure. Where the energy balance is spare, the
steam that the energy balance needs, m_s = sum[m_w (h_out - h_w)] / (h_s - h_out), stands beside the
steam that is taken: the excess is a meter, a vent or a leak.

Fuel is what the steam brings above the state it leaves at, product what the water gains to it:
E_F = E_s - m_s e_out, E_P = m_w e_out - E_w.
Source: Bejan, Tsatsaronis, Moran (1996), table 3.3 (mixing unit); Moran and Shapiro, chapter 8
(open feedwater heater).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, ClassVar

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
from monitor.equipment.heat_transfer import flag_where, share
from monitor.equipment.working import Working, boiling_at, difference
from monitor.thermo.water import saturation_temperature

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["OpenFeedwaterHeater"]


class OpenFeedwaterHeater(Kind):
    """See the module's docstring."""

    name = "open_feedwater_heater"
    title = "Open feedwater heater"
    ports: ClassVar[tuple[PortSpec, ...]] = (
        PortSpec("steam", "in", most=None),
        PortSpec("water", "in", most=None, role="product"),
        PortSpec("feedwater", "out"),
    )
    fuel_and_product = (
        "fuel: exergy of the steam above what it carries at the outlet's state; "
        "product: exergy gained by the water"
    )

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of feed water out [kg/s]."""
        return drawn.only("feedwater").mass_flow

    def vented(self, drawn: Drawn) -> tuple[FloatArray, FloatArray]:
        """Steam that leaves uncondensed: its flow [kg/s] and energy [W]."""
        nothing = np.zeros_like(drawn.only("feedwater").mass_flow)
        return nothing, nothing

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy given up by the steam that condenses, gained by the water [W]."""
        out = drawn.only("feedwater")
        specific = out.enthalpy - dead.temperature * out.entropy - dead.gibbs
        steam, water = drawn.at("steam"), drawn.at("water")
        condensed = total([s.mass_flow for s in steam]) - self.vented(drawn)[0]
        given_up = total([s.exergy(dead) for s in steam]) - condensed * specific
        heated = total([s.mass_flow for s in water]) * specific
        return np.asarray(given_up), np.asarray(heated - total([s.exergy(dead) for s in water]))

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """TTD where the outlet's temperature is read, and the steam beyond the energy balance."""
        (out,) = item.ports["feedwater"]
        saturated = item.states(out, "phase") is not None or item.states(out, "dryness") is not None
        ttd = Figure(
            "ttd",
            "terminal temperature difference",
            "K",
            "high",
            1.0,
            advice="Check the steam supply's valve and the venting.",
        )
        excess = Figure(
            "steam_excess",
            "steam beyond the energy balance",
            "%",
            "high",
            5.0,
            advice="Check the vent and the steam meter.",
        )
        spare = "energy" in item.spare and item.options.heat_loss == "none"
        return ((ttd,) if not saturated else ()) + ((excess,) if spare else ())

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        out = drawn.only("feedwater")
        inside = drawn.signals.get("pressure")
        pressure = out.pressure if inside is None else inside.value
        approach = saturation_temperature(pressure) - out.temperature
        steam, water = drawn.at("steam"), drawn.at("water")
        vent, vent_energy = self.vented(drawn)
        needed_by_water = total([s.mass_flow * (out.enthalpy - s.enthalpy) for s in water])
        needed_by_vent = vent_energy - vent * out.enthalpy
        given = total([s.mass_flow * (s.enthalpy - out.enthalpy) for s in steam])
        needed = needed_by_water + needed_by_vent
        excess = share(given, needed) - 100.0
        ones, nothing = np.ones_like(given), np.zeros_like(out.flag)
        superheated = np.nan_to_num(approach, nan=0.0) < -_THERMOMETER
        return {
            "ttd": ConditionFigure(approach, ones, flag_where(superheated)),
            "steam_excess": ConditionFigure(excess, np.maximum(needed, 0.0), nothing),
        }

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure."""
        out = at.only("feedwater")
        if figure == "ttd":
            inside = at.signals.get("pressure")
            boiling = boiling_at(out["pressure_bar"] if inside is None else inside.value / 1e5)
            yield boiling
            name = "terminal temperature difference"
            yield difference(name, "T_sat - T_out", boiling.value, out["temperature_degc"])
            return
        h = out["enthalpy_kj_kg"]

        def above(*ports: str) -> float:
            return at.total("energy_kw", *ports) - h * at.total("mass_flow_kg_s", *ports)

        needed = above("vent") - above("water")
        formula = "sum[m (h - h_out)] of the steam / what water and vent need of it"
        excess = 100.0 * above("steam") / needed - 100.0 if needed > 0 else math.nan
        numbers = f"{above('steam'):.3f} / {needed:.3f} - 1"
        yield Working("steam beyond need", formula, numbers, excess, "%", is_figure=True)


# Water out of an open heater cannot be hotter than saturation by more than a thermometer's error.
_THERMOMETER = 2.0  # [K]
