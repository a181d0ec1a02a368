"""Deaerator: an open feedwater heater with a vent, and storage below it.

Gases leave with a little steam through the vent; too little vent leaves oxygen in the water, too
much wastes steam. The vent may be metered, or left to the mass or the energy balance, as may the
heating steam. With ``volume``, ``level`` and ``pressure`` what the storage holds is counted.
Source: as `open_feedwater_heater`; vent rates of 0.1 to 0.5 % of the feed water are common practice
(from memory).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, ClassVar, cast

import numpy as np

from monitor.equipment.base import (
    ConditionFigure,
    Content,
    Drawn,
    Figure,
    FloatArray,
    Item,
    PortSpec,
    Signal,
    total,
)
from monitor.equipment.heat_transfer import share
from monitor.equipment.open_feedwater_heater import OpenFeedwaterHeater
from monitor.equipment.saturated_vessel import VesselOptions, exergy_rise, mass_rise
from monitor.equipment.working import Working, ratio

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["Deaerator"]


class Deaerator(OpenFeedwaterHeater):
    """See the module's docstring."""

    name = "deaerator"
    title = "Deaerator"
    ports: ClassVar[tuple[PortSpec, ...]] = (
        PortSpec("steam", "in", most=None),
        PortSpec("water", "in", most=None, role="product"),
        PortSpec("feedwater", "out"),
        PortSpec("vent", "out", least=0, role="loss"),
    )
    options = VesselOptions
    fuel_and_product = (
        "fuel: exergy of the steam above what its condensed part carries at the outlet's state; "
        "product: exergy gained by the water"
    )

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Those of an open heater; what the storage gains above the outlet's state is product [W].

        So fuel less product is what is destroyed and vented, while the storage fills too.
        """
        spent, made = super().fuel(drawn, dead)
        out = drawn.only("feedwater")
        specific = out.enthalpy - dead.temperature * out.entropy - dead.gibbs
        return spent, np.asarray(made + exergy_rise(drawn, dead) - mass_rise(drawn) * specific)

    def vented(self, drawn: Drawn) -> tuple[FloatArray, FloatArray]:
        """Flow [kg/s] and energy [W] of the vent."""
        if not drawn.at("vent"):
            return super().vented(drawn)
        vent = drawn.only("vent")
        return vent.mass_flow, vent.energy

    def content(self, item: Item, signals: Mapping[str, Signal]) -> Content | None:
        """What the storage holds, when the site file gives its volume, level and pressure."""
        return cast("VesselOptions", item.options).content(signals)

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Those of an open heater, and the vent's share of the feed water."""
        vent = Figure(
            "vent_share",
            "vent, share of the feed water",
            "%",
            "both",
            0.2,
            advice=("Check the vent's orifice and valve against the oxygen in the feed water."),
        )
        return (*super().figures(item), *((vent,) if item.ports.get("vent") else ()))

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        found = super().condition(drawn, dead)
        feedwater = total([drawn.only("feedwater").mass_flow])
        vented = share(self.vented(drawn)[0], feedwater)
        nothing = np.zeros_like(drawn.only("feedwater").flag)
        found["vent_share"] = ConditionFigure(vented, np.maximum(feedwater, 0.0), nothing)
        return found

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Those of an open heater, and the vent's share."""
        if figure == "vent_share":
            part, whole = (at.total("mass_flow_kg_s", port) for port in ("vent", "feedwater"))
            yield from ratio("vent, share of the feed water", "m_vent / m_feedwater", part, whole)
        else:
            yield from super().working(at, figure)
