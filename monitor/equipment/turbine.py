"""Steam turbine of any number of sections, back-pressure or condensing.

Section k expands the flow that is left after the extractions before it:
eta_s = (h_in - h_out) / (h_in - h(p_out, s_in)). A wet exhaust has no temperature that tells its
enthalpy; its stream says ``enthalpy = "balance"`` and takes it from the shaft power.
Source: Moran and Shapiro, Fundamentals of Engineering Thermodynamics, eq. 6.46 (isentropic turbine
efficiency); Bejan, Tsatsaronis, Moran (1996), table 3.3 (fuel and product of a turbine).
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
    Options,
    PortSpec,
    StreamState,
    measured,
    total,
)
from monitor.flags import Flag
from monitor.site.units import Quantity
from monitor.thermo.water import state_ps

if TYPE_CHECKING:
    from monitor.thermo.dead_state import DeadState

__all__ = ["Turbine", "TurbineOptions", "sections"]


class TurbineOptions(Options):
    """Keys of a turbine's table.

    Attributes:
        drive_efficiency: measured power / power given by the steam: bearings, gear and generator.
    """

    drive_efficiency: Annotated[float, measured(Quantity.FRACTION), Field(gt=0, le=1)] = 1.0


class Turbine(Kind):
    """See the module's docstring."""

    name = "turbine"
    title = "Steam turbine"
    ports = (
        PortSpec("inlet", "in"),
        PortSpec("extraction", "out", least=0, most=None, role="fuel"),
        PortSpec("exhaust", "out", role="fuel"),
        PortSpec("power", "out", media=frozenset({"power"})),
    )
    options = TurbineOptions
    fuel_and_product = "fuel: exergy given up by the steam; product: shaft or generator power"

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of steam into the turbine [kg/s]."""
        return drawn.only("inlet").mass_flow

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy given up by the steam, and power [W]."""
        given_up = drawn.only("inlet").exergy(dead) - total(
            [s.exergy(dead) for s in (*drawn.at("extraction"), drawn.only("exhaust"))]
        )
        return np.asarray(given_up), drawn.only("power").energy

    def drive_efficiency(self, item: Item) -> float:
        """Measured power / power given by the steam."""
        return cast("TurbineOptions", item.options).drive_efficiency

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Isentropic efficiency of each section, and steam per kWh."""
        names = ["inlet", *item.ports.get("extraction", ()), "exhaust"]
        single = len(names) == 2  # noqa: PLR2004
        per_section = tuple(
            Figure(
                name=f"eta_s_{number}",
                label="isentropic efficiency"
                if single
                else f"isentropic efficiency, section {number}",
                unit="%",
                worse="low",
                smallest_change=0.7,
            )
            for number in range(1, len(names))
        )
        steam_rate = Figure(
            "steam_rate", "specific steam consumption", "kg/kWh", "high", 0.1, judged=False
        )
        return (*per_section, steam_rate)

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        figures = {
            f"eta_s_{number}": _efficiency(start, end, flow)
            for number, (start, end, flow) in enumerate(sections(drawn), start=1)
        }
        inlet, power = drawn.only("inlet"), drawn.only("power")
        with np.errstate(divide="ignore", invalid="ignore"):
            rate = np.where(power.energy > 0, inlet.mass_flow / power.energy * 3.6e6, np.nan)
        nothing = np.zeros_like(inlet.flag)
        figures["steam_rate"] = ConditionFigure(rate, np.maximum(power.energy, 0.0), nothing)
        return figures


def sections(drawn: Drawn) -> list[tuple[StreamState, StreamState, FloatArray]]:
    """The expansion in order: state before, state after, flow through [kg/s] of each section."""
    flow = drawn.only("inlet").mass_flow
    before = drawn.only("inlet")
    found = []
    for after in (*drawn.at("extraction"), drawn.only("exhaust")):
        found.append((before, after, flow))
        flow = flow - after.mass_flow
        before = after
    return found


def _efficiency(before: StreamState, after: StreamState, flow: FloatArray) -> ConditionFigure:
    ideal = state_ps(after.pressure, before.entropy).enthalpy
    available = before.enthalpy - ideal
    with np.errstate(divide="ignore", invalid="ignore"):
        efficiency = np.where(available > 0, (before.enthalpy - after.enthalpy) / available, np.nan)
    impossible = np.nan_to_num(efficiency, nan=0.5)
    flag = np.where((impossible > 1) | (impossible < 0), np.int32(Flag.SECOND_LAW), np.int32(0))
    return ConditionFigure(100.0 * efficiency, np.maximum(flow * available, 0.0), flag)
