"""Let-down station: a reducing valve, with or without desuperheating spray.

A valve makes nothing of the pressure it takes away. What a turbine without losses would have made
between the same states is shown as the work bypassed: m [h1 - h(p2, s1)].

Flow against position: the flow coefficient Kv = m / [Y sqrt(x p1 rho1)] of a gas, x = dp / p1 held
at its choked value, Y = 1 - x / (3 F_k x_T), over the share of it that the valve's characteristic
gives at its position. A sound valve keeps it; a worn or blocked trim does not.
Source: IEC 60534-2-1 (flow capacity, compressible fluids) and IEC 60534-2-4 (inherent
characteristics and rangeability), both from memory; Kotas, The Exergy Method of Thermal Plant
Analysis (1985), chapter 4.2 (throttling).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Annotated, Literal, cast

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
    total,
)
from monitor.equipment.valve import (
    ValveOptions,
    passing_figure,
    passing_flow,
    passing_working,
)
from monitor.equipment.working import Working, isentropic_end
from monitor.site.units import Quantity
from monitor.thermo.water import state_ps

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.base import StreamState
    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["Letdown", "LetdownOptions"]

_STEAM_EXPONENT = 1.3  # superheated steam


class LetdownOptions(ValveOptions):
    """Keys of a let-down station's table, beside those of its valve.

    Attributes:
        characteristic: how the flow coefficient follows the position.
        rangeability: largest flow coefficient / smallest, of an equal-percentage valve.
        choking_ratio: x_T of the valve, dp / p1 at which it chokes [0 to 1].
    """

    characteristic: Literal["linear", "equal_percentage"] = "linear"
    rangeability: float = Field(default=50.0, gt=1)
    choking_ratio: Annotated[float, measured(Quantity.FRACTION), Field(gt=0, lt=1)] = 0.7


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
        passing = passing_figure(
            item,
            "Confirm with the downstream thermometer, close the isolating "
            "valve if operation allows, and have seat and plug looked at.",
        )
        if not passing:
            return (bypassed,)
        coefficient = Figure(
            "flow_coefficient",
            "flow coefficient Kv, valve full open",
            "m^3/h",
            "both",
            0.0,
            judged=False,
        )
        return (*passing, bypassed, coefficient)

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
            options = cast("LetdownOptions", drawn.item.options)
            coefficient = np.where(
                options.is_closed(position.value),
                np.nan,
                _flow_coefficient(inlet, outlet.pressure, position.value, options),
            )
            found["flow_coefficient"] = ConditionFigure(
                coefficient, np.maximum(inlet.mass_flow, 0.0), position.flag
            )
        return found | passing_flow(drawn, inlet.mass_flow)

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure."""
        inlet, outlet = at.only("inlet"), at.only("outlet")
        if figure == "passing_flow":
            yield from passing_working(at)
            return
        if figure == "flow_coefficient":
            yield from _coefficient_working(at)
            return
        names = (at.item.ports["inlet"][0], at.item.ports["outlet"][0])
        end = isentropic_end(inlet, outlet["pressure_bar"], names)
        yield end
        flow, h1 = inlet["mass_flow_kg_s"], inlet["enthalpy_kj_kg"]
        yield Working(
            "work of a turbine without losses",
            "m [h1 - h(p2, s1)]",
            f"{flow:.5f} * ({h1:.4f} - {end.value:.4f})",
            flow * (h1 - end.value),
            "kW",
            is_figure=True,
        )


def _coefficient_working(at: AtHand) -> Iterator[Working]:
    """Steps to Kv; none while the valve is closed or nothing can flow."""
    options = cast("LetdownOptions", at.item.options)
    inlet, position = at.only("inlet"), at.signals["position"].value
    p1, p2 = inlet["pressure_bar"], at.only("outlet")["pressure_bar"]
    choked = _STEAM_EXPONENT / 1.4 * options.choking_ratio
    x = min(1.0 - p2 / p1, choked)
    if not (position >= options.closed_below and x > 0):
        return
    expansion = Working(
        "expansion factor",
        "Y = 1 - x / (3 F_k x_T), x = dp / p1 not above F_k x_T",
        f"1 - {x:.6f} / (3 * {choked:.6f})",
        1.0 - x / (3.0 * choked),
        "",
    )
    linear = options.characteristic == "linear"
    opening = Working(
        "share of the flow coefficient at the position",
        "position" if linear else "R^(position - 1)",
        f"{position:.5f}" if linear else f"{options.rangeability:g}^({position:.5f} - 1)",
        position if linear else options.rangeability ** (position - 1.0),
        "",
    )
    yield from (expansion, opening)
    flow, volume = inlet["mass_flow_kg_s"], inlet["volume_m3_kg"]
    root = math.sqrt(x * p1 * 1e5 / volume)
    yield Working(
        "flow coefficient",
        "Kv = 36000 m / [Y sqrt(x p1 rho1) share]",
        f"36000 * {flow:.5f} / ({expansion.value:.6f} * {root:.3f} * {opening.value:.6f})",
        36000.0 * flow / (expansion.value * root * opening.value),
        "m^3/h",
        is_figure=True,
    )


def _flow_coefficient(
    inlet: StreamState, behind: FloatArray, position: FloatArray, options: LetdownOptions
) -> FloatArray:
    """Kv of the full open valve [m^3/h] from steam flow and position; NaN where nothing can flow.

    Kv is the water flow at 1 bar and 1000 kg/m^3, so in SI m = Kv / 36000 Y sqrt(x p1 rho1).
    """
    choked = _STEAM_EXPONENT / 1.4 * options.choking_ratio
    ratio = np.minimum(1.0 - behind / inlet.pressure, choked)
    expansion = 1.0 - ratio / (3.0 * choked)
    share = (
        position if options.characteristic == "linear" else options.rangeability ** (position - 1.0)
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        root = np.sqrt(ratio * inlet.pressure / inlet.volume)
        coefficient = 36000.0 * inlet.mass_flow / (expansion * root * share)
    return np.where(ratio > 0, coefficient, np.nan)
