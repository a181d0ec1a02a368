"""Pump: shaft power to pressure.

On the power eta_s = m [h(p2, s1) - h1] / W. Where W is a motor's electrical power, eta_s is that of
pump and drive together; with ``motor_efficiency`` the shaft's power takes its place, and what the
drive turns into heat at the dead state has a line of its own instead of being an imbalance.

On pressure and temperature rise (the thermodynamic method) eta_s = [h(p2, s1) - h1] / (h2 - h1), of
the pump alone: it needs no flow and no power, but thermometers good to some hundredths of a kelvin.
Where the power is left to the energy balance, the first is the second.
Source: Moran and Shapiro, Fundamentals of Engineering Thermodynamics, eq. 6.48 (isentropic pump
efficiency); ISO 5198 (thermodynamic method; from memory).
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
    measured,
)
from monitor.equipment.heat_transfer import flag_where, share
from monitor.equipment.working import Working, isentropic_end, ratio
from monitor.flags import Flag
from monitor.site.units import Quantity
from monitor.thermo.water import state_ps

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["Pump", "PumpOptions"]

_ROUNDING = 1e-9
"""A pump without a loss comes to one, give or take the last digits of its enthalpies."""


class PumpOptions(Options):
    """Keys of a pump's table.

    Attributes:
        motor_efficiency: shaft power / measured power: motor, coupling, gear, converter.
    """

    motor_efficiency: Annotated[float, measured(Quantity.FRACTION), Field(gt=0, le=1)] = 1.0


class Pump(Kind):
    """See the module's docstring."""

    name = "pump"
    title = "Pump"
    ports = (
        PortSpec("inlet", "in", role="product"),
        PortSpec("power", "in", media=frozenset({"power"})),
        PortSpec("outlet", "out"),
    )
    options = PumpOptions
    fuel_and_product = "fuel: shaft or motor power; product: exergy gained by the water"

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of water pumped [kg/s]."""
        return drawn.only("inlet").mass_flow

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Power, exergy gained by the water [W]."""
        gained = drawn.only("outlet").exergy(dead) - drawn.only("inlet").exergy(dead)
        return drawn.only("power").energy, np.asarray(gained)

    def drive_efficiency(self, item: Item) -> float:
        """Measured power / shaft power, above one."""
        return 1.0 / cast("PumpOptions", item.options).motor_efficiency

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Isentropic efficiency on the power and, where both are read, on the temperature rise."""
        (power,) = item.ports["power"]
        known = cast("PumpOptions", item.options).motor_efficiency < 1
        alone = known or item.states(power, "power") == "balance"
        label = "isentropic efficiency" if alone else "isentropic efficiency with drive"
        drive = Figure("drive_loss", "loss of motor and drive", "kW", "high", 0.0, judged=False)
        thermodynamic = Figure(
            "thermodynamic_efficiency",
            "isentropic efficiency from the temperature rise",
            "%",
            "low",
            2.0,
            judged=False,
        )
        main = Figure(
            "eta_s",
            label,
            "%",
            "low",
            2.0,
            advice=(
                "Check the minimum-flow valve and the flow meter, then wear rings and impeller."
            ),
        )
        return (
            main,
            *((thermodynamic,) if "energy" in item.spare else ()),
            *((drive,) if known else ()),
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        inlet, outlet = drawn.only("inlet"), drawn.only("outlet")
        power = drawn.only("power").energy
        shaft = power / self.drive_efficiency(drawn.item)
        ideal = state_ps(outlet.pressure, inlet.entropy).enthalpy - inlet.enthalpy
        with np.errstate(divide="ignore", invalid="ignore"):
            efficiency = np.where(shaft > 0, inlet.mass_flow * ideal / shaft, np.nan)
        impossible = np.nan_to_num(efficiency, nan=0.5) > 1 + _ROUNDING
        flag = np.where(impossible, np.int32(Flag.SECOND_LAW), np.int32(0))
        rise = outlet.enthalpy - inlet.enthalpy
        by_rise = share(ideal, rise)
        uphill = flag_where(np.nan_to_num(by_rise, nan=50.0) > 100.0 * (1 + _ROUNDING))
        return {
            "eta_s": ConditionFigure(100.0 * efficiency, np.maximum(shaft, 0.0), flag),
            "drive_loss": ConditionFigure(
                (power - shaft) / 1e3, np.ones_like(power), np.zeros_like(flag)
            ),
            "thermodynamic_efficiency": ConditionFigure(by_rise, np.maximum(rise, 0.0), uphill),
        }

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure, Moran and Shapiro eq. 6.48."""
        before, after = at.only("inlet"), at.only("outlet")
        measured = at.only("power")["energy_kw"]
        shaft = measured / self.drive_efficiency(at.item)
        if figure == "drive_loss":
            yield Working(
                "loss of motor and drive",
                "W - W motor_efficiency",
                f"{measured:.4f} - {shaft:.4f}",
                measured - shaft,
                "kW",
                is_figure=True,
            )
            return
        names = (at.item.ports["inlet"][0], at.item.ports["outlet"][0])
        end = isentropic_end(before, after["pressure_bar"], names)
        yield end
        gain = end.value - before["enthalpy_kj_kg"]
        if figure == "eta_s":
            flow = before["mass_flow_kg_s"]
            formula = f"eta_s = m (h_s - h_in) / W, m = {flow:.5f} kg/s, W that of the shaft"
            yield from ratio("isentropic efficiency", formula, flow * gain, shaft)
        else:
            rise = after["enthalpy_kj_kg"] - before["enthalpy_kj_kg"]
            formula = "eta_s = (h_s - h_in) / (h_out - h_in)"
            yield from ratio("isentropic efficiency", formula, gain, rise)
