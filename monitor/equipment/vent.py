"""Vent or leak: steam that leaves through a valve or a hole and makes nothing.

The passing flow of a closed valve is its condition, as for a let-down. With the hole's diameter,
what it would pass choked (`nozzle`) stands beside the flow: the estimate of an unmetered leak, or
the check of a metered vent. A vent has no product: everything it takes is destroyed in throttling
or lost to the surroundings.
Source: Kotas, The Exergy Method of Thermal Plant Analysis (1985), chapter 4.2 (throttling).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, cast

import numpy as np
from pydantic import Field

from monitor.equipment.base import (
    ConditionFigure,
    Drawn,
    Figure,
    FloatArray,
    Item,
    Kind,
    PortSpec,
    measured,
)
from monitor.equipment.nozzle import Orifice, zeuner_exponent
from monitor.equipment.valve import (
    ValveOptions,
    passing_figure,
    passing_flow,
    passing_working,
)
from monitor.equipment.working import Working, boiling_at, through_an_orifice
from monitor.site.units import Quantity
from monitor.thermo.water import saturation_temperature

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["Vent", "VentOptions"]


class VentOptions(ValveOptions):
    """Keys of a vent's table, beside those of its valve.

    Attributes:
        orifice: diameter of the hole [m].
        discharge_coefficient: flow / isentropic flow through it.
    """

    orifice: Annotated[float, measured(Quantity.LENGTH), Field(gt=0)] | None = None
    discharge_coefficient: Annotated[float, measured(Quantity.FRACTION), Field(gt=0, le=1)] = 0.7


class Vent(Kind):
    """See the module's docstring."""

    name = "vent"
    title = "Vent or leak"
    ports = (
        PortSpec("inlet", "in"),
        PortSpec("outlet", "out", role="loss"),
    )
    options = VentOptions
    fuel_and_product = "fuel: exergy of the steam let go; product: none"

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of steam let go [kg/s]."""
        return drawn.only("inlet").mass_flow

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy of the steam let go, and nothing [W]."""
        let_go = drawn.only("inlet").exergy(dead)
        return let_go, np.zeros_like(let_go)

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Passing flow when closed (with a position), and what the hole would pass (with one)."""
        options = cast("VentOptions", item.options)
        passing = passing_figure(
            item, "Have the valve's seat looked at; a lifting safety valve is reported at once."
        )
        orifice = Figure(
            "orifice_flow",
            "flow that the orifice would pass",
            "t/h",
            "high",
            0.5,
            judged=False,
            needs_load=False,
            follows_load=False,
        )
        return (*passing, *((orifice,) if options.orifice is not None else ()))

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        options = cast("VentOptions", drawn.item.options)
        inlet, outlet = drawn.only("inlet"), drawn.only("outlet")
        ones, nothing = np.ones_like(inlet.mass_flow), np.zeros_like(inlet.flag)
        found = passing_flow(drawn, inlet.mass_flow)
        if options.orifice is not None:
            superheat = inlet.temperature - saturation_temperature(inlet.pressure)
            flow = Orifice(options.orifice, options.discharge_coefficient).flow(
                inlet.pressure,
                inlet.volume,
                zeuner_exponent(inlet.dryness, superheated=superheat),
                outlet.pressure,
            )
            found["orifice_flow"] = ConditionFigure(flow * 3.6, ones, nothing)
        return found

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure."""
        if figure == "passing_flow":
            yield from passing_working(at)
            return
        inlet = at.only("inlet")
        boiling = boiling_at(inlet["pressure_bar"])
        yield boiling
        superheat = np.asarray(inlet["temperature_degc"] - boiling.value)
        k = float(zeuner_exponent(np.asarray(inlet["dryness"]), superheated=superheat))
        options = cast("VentOptions", at.item.options)
        *steps, flow = through_an_orifice(
            options.orifice or 0.0,
            options.discharge_coefficient,
            (inlet["pressure_bar"], inlet["volume_m3_kg"]),
            at.only("outlet")["pressure_bar"],
            k,
        )
        yield from (*steps, flow)
        name, numbers = "flow that the orifice would pass", f"3.6 * {flow.value:.6f}"
        yield Working(name, "3.6 m", numbers, 3.6 * flow.value, "t/h", is_figure=True)
