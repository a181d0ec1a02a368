"""Let-down station: a reducing valve, with or without desuperheating spray.

A valve makes nothing of the pressure it takes away. What a turbine without losses would have made
between the same states is shown as the work bypassed: m [h1 - h(p2, s1)].
Source: Kotas, The Exergy Method of Thermal Plant Analysis (1985), chapter 4.2 (throttling).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, cast

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
    measured,
    total,
)
from monitor.site.models import Reference
from monitor.site.units import Quantity
from monitor.thermo.water import state_ps

if TYPE_CHECKING:
    from monitor.thermo.dead_state import DeadState

__all__ = ["Letdown", "LetdownOptions"]


class LetdownOptions(Options):
    """Keys of a let-down station's table.

    Attributes:
        position: tag of the valve's position.
        closed_below: position under which the valve counts as closed [0 to 1].
    """

    position: Reference | None = None
    closed_below: Annotated[float, measured(Quantity.FRACTION)] = 0.02

    def signals(self) -> dict[str, tuple[Reference, Quantity]]:
        """The valve position, when the site has one."""
        if self.position is None:
            return {}
        return {"position": (self.position, Quantity.FRACTION)}


class Letdown(Kind):
    """See the module's docstring."""

    name = "letdown"
    title = "Let-down station"
    ports = (
        PortSpec("inlet", "in"),
        PortSpec("spray", "in", least=0),
        PortSpec("outlet", "out"),
    )
    options = LetdownOptions
    fuel_and_product = "fuel: exergy of steam and spray; product: exergy of the reduced steam"

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of steam into the station [kg/s]."""
        return drawn.only("inlet").mass_flow

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy of steam and spray, exergy of the reduced steam [W]."""
        return (
            total([s.exergy(dead) for s in drawn.facing("in")]),
            drawn.only("outlet").exergy(dead),
        )

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Passing flow when closed (with a position tag), and the work bypassed."""
        bypassed = Figure(
            "work_bypassed", "work potential bypassed", "kW", "high", 0.0, judged=False
        )
        if cast("LetdownOptions", item.options).position is None:
            return (bypassed,)
        passing = Figure(
            "passing_flow",
            "passing flow when closed",
            "t/h",
            "high",
            0.5,
            needs_load=False,
            follows_load=False,
        )
        return (passing, bypassed)

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        inlet, outlet = drawn.only("inlet"), drawn.only("outlet")
        ideal = state_ps(outlet.pressure, inlet.entropy).enthalpy
        work = inlet.mass_flow * (inlet.enthalpy - ideal) / 1e3
        ones = np.ones_like(work)
        nothing = np.zeros_like(inlet.flag)
        found = {"work_bypassed": ConditionFigure(work, ones, nothing)}
        position = drawn.signals.get("position")
        if position is not None:
            closed = position.value < cast("LetdownOptions", drawn.item.options).closed_below
            passing = np.where(closed, inlet.mass_flow * 3.6, np.nan)
            found["passing_flow"] = ConditionFigure(passing, ones, position.flag)
        return found
