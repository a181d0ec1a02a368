"""Wet steam accumulator: a closed vessel of boiling water, charged and discharged.

What it holds follows from level and pressure (`saturated_vessel`). What is stored is non-flow
exergy E = U + p0 V - T0 S - g0 m: never flow exergy, which would count (p - p0) V too much.

Exergy returned / exergy stored belongs to a period, not to a cell: over a shift or a day it is the
period's product over its fuel (discharged over charged less the rise of what is stored), which the
roll-ups give as psi. A period of a few full cycles tells the vessel; one with more discharge than
charge tells how it was run.

While nothing but little flows, what the balance misses is the standing loss. Mass that the gauges
find or miss is valued as liquid, h_f, so that a level's noise of half a per cent does not pass for
megawatts: Q = sum m (h - h_f) in - out - (dU - h_f dm) / dt.
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
from monitor.equipment.saturated_vessel import exergy_rise, saturated_content
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
        volume = cast("AccumulatorOptions", item.options).volume
        return saturated_content(volume, signals["level"].edges, signals["pressure"].edges)

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
        return np.asarray(into - exergy_rise(drawn, dead)), out

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Exergy held; standing loss while nothing flows, whole and per kelvin of difference."""
        del item
        both = (
            ("standing_loss", "standing heat loss", "kW", 20.0),
            ("heat_loss_coefficient", "heat-loss coefficient", "kW/K", 0.2),
        )
        held = Figure(
            "stored_exergy",
            "exergy stored, at the cell's end",
            "kWh",
            "both",
            0.0,
            judged=False,
            needs_load=False,
            follows_load=False,
        )
        return held, *(
            Figure(
                name,
                label,
                unit,
                "high",
                smallest,
                judged=False,
                needs_load=False,
                follows_load=False,
            )
            for name, label, unit, smallest in both
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`: what the energy balance misses where next to nothing flows."""
        held = drawn.content
        if held is None:
            raise TypeError(f"accumulator '{drawn.item.id}' was drawn without its content")
        idle = np.abs(self.load(drawn)) < drawn.item.options.off_below
        pressure = drawn.signals["pressure"]
        liquid = saturated(pressure.value)[0]
        brought = [s.energy - s.mass_flow * liquid.enthalpy for s in drawn.facing("in")]
        taken = [s.energy - s.mass_flow * liquid.enthalpy for s in drawn.facing("out")]
        fall = liquid.enthalpy * np.diff(held.mass) - np.diff(held.internal_energy)
        missed = fall / drawn.interval - total(taken)
        loss = np.where(idle, total([missed, *brought]), np.nan) / 1e3
        flag = drawn.signals["level"].flag | pressure.flag
        ones = np.ones_like(loss)
        stored = (
            held.internal_energy[..., 1:]
            + dead.pressure * held.volume[..., 1:]
            - dead.temperature * held.entropy[..., 1:]
            - dead.gibbs * held.mass[..., 1:]
        )
        return {
            "stored_exergy": ConditionFigure(stored / 3.6e6, ones, flag),
            "standing_loss": ConditionFigure(loss, ones, flag),
            "heat_loss_coefficient": ConditionFigure(
                loss / (liquid.temperature - dead.temperature), ones, flag
            ),
        }
