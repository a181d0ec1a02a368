"""Process user: steam in, condensate back or lost, heat delivered at the process temperature.

What leaves through ``lost`` (live steam into the process, condensate to drain) is no product and is
not given back to the fuel. Where the process temperature is known, UA = Q / (T_sat - T_process)
tells fouling and condensate that backs up, since steam condenses at the saturation temperature.

Source: Bejan, Tsatsaronis, Moran (1996), eq. 3.5 (exergy of heat at a boundary temperature).
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
from monitor.equipment.heat_transfer import flag_where, share
from monitor.equipment.working import Working, boiling_at, ratio
from monitor.thermo.water import saturation_temperature

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["User"]


class User(Kind):
    """See the module's docstring."""

    name = "user"
    title = "Process user"
    ports = (
        PortSpec("steam", "in", most=None),
        PortSpec("condensate", "out", least=0, most=None, role="fuel"),
        PortSpec("lost", "out", least=0, most=None, role="loss"),
        PortSpec("heat", "out", media=frozenset({"heat"})),
    )
    fuel_and_product = (
        "fuel: exergy given up from steam to condensate; "
        "product: exergy of the heat at the process temperature"
    )

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of steam used [kg/s]."""
        return total([s.mass_flow for s in drawn.at("steam")])

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy given up by the steam, exergy of the heat delivered [W]."""
        steam = total([s.exergy(dead) for s in drawn.at("steam")])
        back = [s.exergy(dead) for s in drawn.at("condensate")]
        given_up = steam - total(back) if back else steam
        return np.asarray(given_up), drawn.only("heat").exergy(dead)

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Share of the steam that comes back, and UA, where they are more than assumptions.

        When the mass balance gives the condensate and nothing is lost, the share is 100 % by
        construction and tells nothing.
        """
        known = item.ports.get("lost") or "mass" in item.spare
        returned = Figure(
            "condensate_return",
            "condensate returned",
            "%",
            "low",
            5.0,
            advice=("Look for condensate going to drain, failed traps and stopped return pumps."),
        )
        (heat,) = item.ports["heat"]
        ua = Figure("ua", "heat transfer UA", "kW/K", "low", 0.0, judged=False)
        return (
            *((returned,) if item.ports.get("condensate") and known else ()),
            *((ua,) if item.states(heat, "boundary_temperature") != "dead_state" else ()),
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        steam, heat = self.load(drawn), drawn.only("heat")
        back = total([np.zeros_like(steam), *(s.mass_flow for s in drawn.at("condensate"))])
        difference = saturation_temperature(drawn.at("steam")[0].pressure) - heat.temperature
        uphill = (heat.energy > 0) & (difference <= 0)
        with np.errstate(divide="ignore", invalid="ignore"):
            ua = np.where(difference > 0, heat.energy / difference, np.nan)
        nothing = np.zeros_like(drawn.at("steam")[0].flag)
        return {
            "condensate_return": ConditionFigure(
                share(back, steam), np.maximum(steam, 0.0), nothing
            ),
            "ua": ConditionFigure(ua / 1e3, np.ones_like(ua), flag_where(uphill)),
        }

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure."""
        if figure == "condensate_return":
            part, whole = (at.total("mass_flow_kg_s", port) for port in ("condensate", "steam"))
            yield from ratio("condensate returned", "sum m_condensate / sum m_steam", part, whole)
            return
        boiling = boiling_at(at.only("steam")["pressure_bar"])
        yield boiling
        heat = at.only("heat")
        formula = "UA = Q / (T_sat - T_process)"
        gap = boiling.value - heat["temperature_degc"]
        yield from ratio("heat transfer", formula, heat["energy_kw"], gap, "kW/K")
