"""Boiler: fuel to steam. Fuel exergy is beta * LHV * m (Szargut and Styrylska).

eta = (H_steam + H_blowdown - H_feedwater) / (m_fuel LHV), the direct method; what stack and casing
take is inside the destroyed exergy unless it is a stream of its own.
Source: Kotas, The Exergy Method of Thermal Plant Analysis (1985), chapter 5 (steam boiler).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

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
    total,
)
from monitor.flags import Flag

if TYPE_CHECKING:
    from monitor.thermo.dead_state import DeadState

__all__ = ["Boiler", "BoilerOptions"]


class BoilerOptions(Options):
    """Keys of a boiler's table; stack and casing losses are the energy residual by default."""

    heat_loss: Literal["none", "balance"] = "balance"


class Boiler(Kind):
    """See the module's docstring."""

    name = "boiler"
    title = "Boiler"
    ports = (
        PortSpec("fuel", "in", most=None, media=frozenset({"fuel"})),
        PortSpec("feedwater", "in", most=None, role="product"),
        PortSpec("steam", "out", most=None),
        PortSpec("blowdown", "out", least=0, most=None),
        PortSpec("loss", "out", least=0, most=None, media=frozenset({"heat"}), role="loss"),
    )
    options = BoilerOptions
    fuel_and_product = (
        "fuel: exergy of the fuel burnt; product: exergy gained from feedwater to steam"
    )

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of steam made [kg/s]."""
        return total([s.mass_flow for s in drawn.at("steam")])

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy of the fuel, exergy gained by the water [W]."""
        gained = total(
            [s.exergy(dead) for s in (*drawn.at("steam"), *drawn.at("blowdown"))]
        ) - total([s.exergy(dead) for s in drawn.at("feedwater")])
        return total([s.exergy(dead) for s in drawn.at("fuel")]), np.asarray(gained)

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Fuel efficiency by the direct method."""
        del item
        return (Figure("fuel_efficiency", "fuel efficiency (direct)", "%", "low", 1.5),)

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        burnt = total([s.energy for s in drawn.at("fuel")])
        gained = total([s.energy for s in (*drawn.at("steam"), *drawn.at("blowdown"))]) - total(
            [s.energy for s in drawn.at("feedwater")]
        )
        with np.errstate(divide="ignore", invalid="ignore"):
            efficiency = np.where(burnt > 0, gained / burnt, np.nan)
        impossible = np.nan_to_num(efficiency, nan=0.5) > 1
        flag = np.where(impossible, np.int32(Flag.SECOND_LAW), np.int32(0))
        return {
            "fuel_efficiency": ConditionFigure(100.0 * efficiency, np.maximum(burnt, 0.0), flag)
        }
