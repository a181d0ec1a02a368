"""Wet steam accumulator: a closed vessel of boiling water, charged and discharged.

Liquid and vapour are in equilibrium at the vessel's pressure; with the volume V and the liquid's
share y of it, m = V [y / v_f + (1 - y) / v_g], and likewise U and S. What is stored is non-flow
exergy E = U + p0 V - T0 S - g0 m: never flow exergy, which would count (p - p0) V too much.
Source: Bejan, Tsatsaronis, Moran (1996), eq. 3.8 (physical exergy of a closed system).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, cast

import numpy as np

from monitor.equipment.base import (
    ConditionFigure,
    Content,
    Drawn,
    Figure,
    FloatArray,
    Item,
    Kind,
    Options,
    PortSpec,
    Signal,
    measured,
    total,
)
from monitor.site.models import Reference
from monitor.site.units import Quantity
from monitor.thermo.water import saturated

if TYPE_CHECKING:
    from collections.abc import Mapping

    from monitor.thermo.dead_state import DeadState

__all__ = ["Accumulator", "AccumulatorOptions"]


class AccumulatorOptions(Options):
    """Keys of an accumulator's table.

    Attributes:
        volume: of the vessel [m^3].
        level: tag of the liquid's share of the volume.
        pressure: tag of the vessel's pressure.
    """

    volume: Annotated[float, measured(Quantity.VOLUME)]
    level: Reference
    pressure: Reference

    def signals(self) -> dict[str, tuple[Reference, Quantity]]:
        """Level and pressure."""
        return {
            "level": (self.level, Quantity.FRACTION),
            "pressure": (self.pressure, Quantity.PRESSURE),
        }


class Accumulator(Kind):
    """See the module's docstring."""

    name = "accumulator"
    title = "Steam accumulator"
    ports = (
        PortSpec("charge", "in", least=0, most=None),
        PortSpec("discharge", "out", most=None),
    )
    options = AccumulatorOptions
    fuel_and_product = (
        "fuel: exergy charged less the rise of what is stored; product: exergy discharged"
    )

    def content(self, item: Item, signals: Mapping[str, Signal]) -> Content:
        """Mass, energy and entropy in the vessel at the cells' ends."""
        options = cast("AccumulatorOptions", item.options)
        share = signals["level"].edges
        liquid, vapour = saturated(signals["pressure"].edges)
        liquid_mass = options.volume * share / liquid.volume
        vapour_mass = options.volume * (1.0 - share) / vapour.volume
        return Content(
            mass=liquid_mass + vapour_mass,
            internal_energy=liquid_mass * liquid.internal_energy
            + vapour_mass * vapour.internal_energy,
            entropy=liquid_mass * liquid.entropy + vapour_mass * vapour.entropy,
            volume=np.full_like(share, options.volume),
        )

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow in or out, whichever is larger [kg/s]."""
        out = total([s.mass_flow for s in drawn.at("discharge")])
        charges = [s.mass_flow for s in drawn.at("charge")]
        return np.maximum(total(charges), out) if charges else out

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy charged less what stays in the vessel, exergy discharged [W]."""
        out = total([s.exergy(dead) for s in drawn.at("discharge")])
        charged = [s.exergy(dead) for s in drawn.at("charge")]
        into = total(charged) if charged else np.zeros_like(out)
        held = drawn.content
        if held is None:
            raise TypeError(f"accumulator '{drawn.item.id}' was drawn without its content")
        stored = (
            np.diff(held.internal_energy)
            - dead.temperature * np.diff(held.entropy)
            - dead.gibbs * np.diff(held.mass)
        )
        return np.asarray(into - stored / drawn.interval), out

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Standing loss while nothing flows."""
        del item
        return (
            Figure(
                "standing_loss",
                "standing heat loss",
                "kW",
                "high",
                20.0,
                judged=False,
                needs_load=False,
                follows_load=False,
            ),
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`: the fall of internal energy where no stream flows."""
        del dead
        held = drawn.content
        if held is None:
            raise TypeError(f"accumulator '{drawn.item.id}' was drawn without its content")
        idle = np.abs(self.load(drawn)) < drawn.item.options.off_below
        loss = -np.diff(held.internal_energy) / drawn.interval / 1e3
        flag = drawn.signals["level"].flag | drawn.signals["pressure"].flag
        return {
            "standing_loss": ConditionFigure(np.where(idle, loss, np.nan), np.ones_like(loss), flag)
        }
