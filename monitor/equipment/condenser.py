"""Surface condenser: exhaust steam to condensate, its heat to cooling water.

UA = Q / LMTD with the saturation temperature on the steam side; TTD = T_sat - T_cooling,out.
The heat is counted on the cooling water's side, where flow and temperatures are measured.
Source: Heat Exchange Institute practice for UA and TTD (from memory); Bejan, Tsatsaronis, Moran
(1996), chapter 3.5: a dissipative component, its product is what the cooling water gains.
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
from monitor.flags import Flag
from monitor.thermo.water import saturation_temperature

if TYPE_CHECKING:
    from monitor.thermo.dead_state import DeadState

__all__ = ["Condenser"]


class Condenser(Kind):
    """See the module's docstring."""

    name = "condenser"
    title = "Condenser"
    ports = (
        PortSpec("steam", "in", most=None),
        PortSpec("cooling_in", "in", role="product"),
        PortSpec("condensate", "out", role="fuel"),
        PortSpec("cooling_out", "out"),
    )
    fuel_and_product = (
        "fuel: exergy given up by the steam; product: exergy gained by the cooling water"
    )

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
        """Overall heat transfer and terminal temperature difference."""
        del item
        return (
            Figure("ua", "heat transfer UA", "kW/K", "low", 60.0),
            Figure("ttd", "terminal temperature difference", "K", "high", 0.5, judged=False),
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        cold, warm = drawn.only("cooling_in"), drawn.only("cooling_out")
        boiling = saturation_temperature(drawn.at("steam")[0].pressure)
        approach_in, approach_out = boiling - cold.temperature, boiling - warm.temperature
        duty = warm.mass_flow * (warm.enthalpy - cold.enthalpy)
        crossed = ~((approach_in > approach_out) & (approach_out > 0))
        with np.errstate(divide="ignore", invalid="ignore"):
            mean_difference = (approach_in - approach_out) / np.log(approach_in / approach_out)
            ua = np.where(crossed, np.nan, duty / mean_difference / 1e3)
        measured = np.isfinite(approach_in) & np.isfinite(approach_out)
        flag = np.where(crossed & measured, np.int32(Flag.SECOND_LAW), np.int32(0))
        ones = np.ones_like(duty)
        return {
            "ua": ConditionFigure(ua, ones, flag),
            "ttd": ConditionFigure(approach_out, ones, np.zeros_like(flag)),
        }
