"""Process user: steam in, condensate back or lost, heat delivered at the process temperature.

What leaves through ``lost`` (live steam into the process, condensate to drain) is no product and is
not given back to the fuel.

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

if TYPE_CHECKING:
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
        """Share of the steam that comes back as condensate, where that is more than an assumption.

        When the mass balance gives the condensate and nothing is lost, the share is 100 % by
        construction and tells nothing.
        """
        known = item.ports.get("lost") or "mass" in item.spare
        if not item.ports.get("condensate") or not known:
            return ()
        return (Figure("condensate_return", "condensate returned", "%", "low", 5.0),)

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        if not drawn.at("condensate"):
            return {}
        steam = self.load(drawn)
        back = total([s.mass_flow for s in drawn.at("condensate")])
        with np.errstate(divide="ignore", invalid="ignore"):
            share = np.where(steam > 0, 100.0 * back / steam, np.nan)
        nothing = np.zeros_like(drawn.at("steam")[0].flag)
        return {"condensate_return": ConditionFigure(share, np.maximum(steam, 0.0), nothing)}
