"""Surface condenser: exhaust steam to condensate, its heat to cooling water.

UA = Q / LMTD with the saturation temperature on the steam side; TTD = T_sat - T_cooling,out.
The heat is counted on the cooling water's side, where flow and temperatures are measured.
With a ``design_ua`` the cleanliness factor is UA / UA_design, the design's corrected to the day's
cooling water: by the square root of its flow (velocity in the tubes) over the design's, and by a
stated share per kelvin of its inlet temperature. Beside it stands the TTD above that of clean tubes
at the day's duty, flow and inlet temperature, (T_out - T_in) / (exp(UA / C) - 1), C = Q / (T_out -
T_in): a TTD from which duty and weather have been taken out.
Source: Heat Exchange Institute practice for UA and TTD (from memory); Bejan, Tsatsaronis, Moran
(1996), chapter 3.5: a dissipative component, its product is what the cooling water gains.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING, Annotated, cast

import numpy as np
from pydantic import Field, model_validator

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
    measured,
    total,
)
from monitor.equipment.heat_transfer import conductance, flag_where, share
from monitor.equipment.working import (
    Working,
    boiling_at,
    conductance_of,
    difference,
    heat_taken,
    ratio,
)
from monitor.site.units import Quantity
from monitor.thermo.water import saturation_temperature

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["Condenser", "CondenserOptions"]

_THERMOMETERS = 4.2
"""Two thermometers of the default class, 1.5 K, differ by less: 2 sqrt(2) times it [K]."""


class CondenserOptions(Options):
    """Keys of a condenser's table.

    Attributes:
        design_ua: of clean tubes [W/K].
        design_cooling_flow: at which that holds [kg/s]; None leaves the flow out of it.
        design_cooling_temperature: of the water in, at which that holds [K].
        ua_per_kelvin: share by which UA rises per kelvin of it.
    """

    design_ua: Annotated[float, measured(Quantity.CONDUCTANCE), Field(gt=0)] | None = None
    design_cooling_flow: Annotated[float, measured(Quantity.MASS_FLOW), Field(gt=0)] | None = None
    design_cooling_temperature: Annotated[float, measured(Quantity.TEMPERATURE)] | None = None
    ua_per_kelvin: float = 0.0

    @model_validator(mode="after")
    def _corrections_have_their_design(self) -> CondenserOptions:
        if self.ua_per_kelvin and self.design_cooling_temperature is None:
            raise ValueError("ua_per_kelvin counts from a design_cooling_temperature: give it too")
        return self

    def expected_ua(self, cooling: StreamState) -> FloatArray:
        """UA of clean tubes at the day's cooling water [W/K]; NaN without a design."""
        ua = np.full_like(cooling.temperature, np.nan if self.design_ua is None else self.design_ua)
        if self.design_cooling_flow is not None:
            ua = ua * np.sqrt(np.maximum(cooling.mass_flow, 0.0) / self.design_cooling_flow)
        if self.design_cooling_temperature is not None:
            warmer = cooling.temperature - self.design_cooling_temperature
            ua = ua * (1.0 + self.ua_per_kelvin * warmer)
        return ua

    def clean_working(self, cooling: Mapping[str, float]) -> Working:
        """`expected_ua` of one cell as a step [kW/K]."""
        ua, parts = (math.nan if self.design_ua is None else self.design_ua / 1e3), []
        parts.append(f"{ua:.4f}")
        if self.design_cooling_flow is not None:
            flow = max(cooling["mass_flow_kg_s"], 0.0)
            ua *= math.sqrt(flow / self.design_cooling_flow)
            parts.append(f"sqrt({flow:.4f} / {self.design_cooling_flow:.4f})")
        if self.design_cooling_temperature is not None:
            warmer = cooling["temperature_degc"] + 273.15 - self.design_cooling_temperature
            ua *= 1.0 + self.ua_per_kelvin * warmer
            parts.append(f"(1 + {self.ua_per_kelvin:g} * {warmer:.4f})")
        formula = "UA_clean = UA_design sqrt(m / m_design) [1 + a (T_in - T_design)]"
        return Working("UA of clean tubes", formula, " * ".join(parts), ua, "kW/K")


class Condenser(Kind):
    """See the module's docstring."""

    name = "condenser"
    title = "Condenser"
    ports = (
        PortSpec("steam", "in", most=None, fluid="steam"),
        PortSpec("cooling_in", "in", role="product", fluid="cooling"),
        PortSpec("condensate", "out", role="fuel", fluid="steam"),
        PortSpec("cooling_out", "out", fluid="cooling"),
    )
    options = CondenserOptions
    fuel_and_product = (
        "fuel: exergy given up by the steam; product: exergy gained by the cooling water"
    )

    dissipates = True

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of steam into the condenser [kg/s]."""
        return total([s.mass_flow for s in drawn.at("steam")])

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy given up by the steam, gained by the cooling water [W]."""
        steam = total([s.exergy(dead) for s in drawn.at("steam")])
        return (
            np.asarray(steam - drawn.only("condensate").exergy(dead)),
            np.asarray(
                drawn.only("cooling_out").exergy(dead) - drawn.only("cooling_in").exergy(dead)
            ),
        )

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Heat transfer, terminal difference, duty; with a design how far from clean tubes."""
        designed = cast("CondenserOptions", item.options).design_ua is not None
        cleanliness = Figure(
            "cleanliness",
            "cleanliness factor",
            "%",
            "low",
            3.0,
            advice=(
                "Check for air in-leakage and the cooling-water flow, then "
                "plan a cleaning of the tubes."
            ),
        )
        above = Figure(
            "ttd_above_clean",
            "terminal temperature difference above that of clean tubes",
            "K",
            "high",
            0.5,
            judged=False,
        )
        return (
            # One alarm for one fouling: the cleanliness says the same with less of the weather.
            Figure(
                "ua",
                "heat transfer UA",
                "kW/K",
                "low",
                60.0,
                judged=not designed,
                advice=(
                    "Check for air in-leakage and the cooling-water flow, then "
                    "plan a cleaning of the tubes."
                ),
            ),
            Figure("ttd", "terminal temperature difference", "K", "high", 0.5, judged=False),
            Figure("duty", "heat to the cooling water", "kW", "both", 0.0, judged=False),
            *((cleanliness, above) if designed else ()),
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        cold, warm = drawn.only("cooling_in"), drawn.only("cooling_out")
        boiling = saturation_temperature(drawn.at("steam")[0].pressure)
        approach_in, approach_out = boiling - cold.temperature, boiling - warm.temperature
        duty = warm.mass_flow * (warm.enthalpy - cold.enthalpy)
        crossed = ~((approach_in > approach_out) & (approach_out > 0))
        ua = np.where(crossed, np.nan, conductance(duty, approach_in, approach_out))
        expected = cast("CondenserOptions", drawn.item.options).expected_ua(cold)
        rise = warm.temperature - cold.temperature
        # Cooling water that heats the steam: hotter than it, or cooled by it. An idle condenser's
        # two thermometers differ a little either way.
        flag = flag_where(
            ((duty > 0) & (approach_out <= 0)) | ((rise < -_THERMOMETERS) & (approach_out > 0))
        )
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            clean = rise / np.expm1(expected * rise / duty)
        ones = np.ones_like(duty)
        return {
            "ua": ConditionFigure(ua / 1e3, ones, flag),
            "cleanliness": ConditionFigure(share(ua, expected), ones, flag),
            "ttd": ConditionFigure(approach_out, ones, flag),
            "duty": ConditionFigure(duty / 1e3, ones, np.zeros_like(flag)),
            "ttd_above_clean": ConditionFigure(approach_out - clean, ones, flag),
        }

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure."""
        cold, warm = at.only("cooling_in"), at.only("cooling_out")
        duty = heat_taken(cold, warm)
        if figure == "duty":
            yield replace(duty, is_figure=True)
            return
        boiling = boiling_at(at.only("steam")["pressure_bar"])
        ends = [boiling.value - row["temperature_degc"] for row in (cold, warm)]
        approach = difference(
            "terminal temperature difference",
            "T_sat - T_cooling,out",
            boiling.value,
            warm["temperature_degc"],
        )
        if figure == "ttd":
            yield from (boiling, approach)
            return
        *mean, measured = conductance_of(duty.value, *ends)
        if figure == "ua":
            yield from (duty, boiling, *mean, measured)
            return
        clean = cast("CondenserOptions", at.item.options).clean_working(cold)
        if figure == "cleanliness":
            yield from (duty, boiling, *mean, replace(measured, is_figure=False), clean)
            yield from ratio("cleanliness", "UA / UA_clean", measured.value, clean.value)
            return
        rise = warm["temperature_degc"] - cold["temperature_degc"]
        exponent = clean.value * rise / duty.value if duty.value else math.nan
        expected = Working(
            "terminal temperature difference of clean tubes",
            "(T_out - T_in) / (exp(UA_clean (T_out - T_in) / Q) - 1)",
            f"{rise:.4f} / (exp({exponent:.5f}) - 1)",
            rise / math.expm1(exponent) if exponent else math.nan,
            "K",
        )
        yield from (duty, boiling, replace(approach, is_figure=False), clean, expected)
        name, formula = "above that of clean tubes", "TTD - TTD_clean"
        yield difference(name, formula, approach.value, expected.value)
