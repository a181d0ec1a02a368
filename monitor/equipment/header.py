"""Steam header: several inlets and outlets that mix, lose heat and sometimes lose steam.

The energy that the outlets do not carry leaves as heat (``heat_loss = "balance"`` by default); the
mass that they do not carry is the unaccounted flow: a leak, an open drain, or a flow meter. Where
inlets and outlets have gauges of their own, the pressure loss gives K = (p_in - p_out) / (m^2 v),
which flow and density have been taken out of (Darcy: dp = K m^2 v in turbulent flow).
Source: Bejan, Tsatsaronis, Moran (1996), chapter 3.2 (mass, energy, exergy of a control volume).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

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
    total,
)

if TYPE_CHECKING:
    from monitor.thermo.dead_state import DeadState

__all__ = ["Header", "HeaderOptions"]


class HeaderOptions(Options):
    """Keys of a header's table; the heat loss is the energy residual unless stated otherwise."""

    heat_loss: Literal["none", "balance"] = "balance"


class Header(Kind):
    """See the module's docstring."""

    name = "header"
    title = "Steam header"
    ports = (
        PortSpec("inlet", "in", most=None),
        PortSpec("outlet", "out", most=None),
    )
    options = HeaderOptions
    fuel_and_product = "fuel: exergy of all inlets; product: exergy of all outlets"

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow into the header [kg/s]."""
        return total([s.mass_flow for s in drawn.at("inlet")])

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy of the inlets, exergy of the outlets [W]."""
        return (
            total([s.exergy(dead) for s in drawn.at("inlet")]),
            total([s.exergy(dead) for s in drawn.at("outlet")]),
        )

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Heat-loss coefficient, and unaccounted flow where no flow is solved from the mass."""
        heat = Figure(
            "heat_loss_coefficient",
            "heat-loss coefficient",
            "kW/K",
            "high",
            1.0,
            judged=False,
            follows_load=False,
        )
        unaccounted = Figure(
            "unaccounted_flow",
            "unaccounted flow",
            "t/h",
            "both",
            1.5,
            follows_load=True,
            advice=(
                "Look for an open drain, a leak or a lifting safety valve, and "
                "compare the flow meters at equal load."
            ),
        )
        loss = Figure(
            "pressure_loss_coefficient",
            "pressure-loss coefficient",
            "1/m^4",
            "high",
            0.0,
            judged=False,
            follows_load=False,
        )
        gauged = item.any_differ("inlet", "outlet", "pressure")
        cools = gauged or item.any_differ("inlet", "outlet", "temperature")
        by_balance = item.options.heat_loss == "balance"
        return (
            *((heat,) if by_balance and cools else ()),
            *((unaccounted,) if "mass" in item.spare else ()),
            *((loss,) if gauged else ()),
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        from monitor.equipment.account import balances  # noqa: PLC0415 - account builds on base

        counted = balances(drawn)
        nothing = np.zeros_like(drawn.at("inlet")[0].flag)
        ones = np.ones(nothing.shape)
        found = {"unaccounted_flow": ConditionFigure(counted.mass_imbalance * 3.6, ones, nothing)}
        if drawn.item.options.heat_loss == "balance":
            outlets = drawn.at("outlet")
            flow = np.stack([s.mass_flow for s in outlets])
            warmth = (np.stack([s.temperature for s in outlets]) * flow).sum(axis=0)
            with np.errstate(divide="ignore", invalid="ignore"):
                excess = warmth / flow.sum(axis=0) - dead.temperature
                coefficient = counted.heat_loss / excess / 1e3
            found["heat_loss_coefficient"] = ConditionFigure(coefficient, ones, nothing)
        found["pressure_loss_coefficient"] = ConditionFigure(_pressure_loss(drawn), ones, nothing)
        return found


def _pressure_loss(drawn: Drawn) -> FloatArray:
    """K = dp / (m^2 v) [1/m^4] between the flow-weighted pressures; NaN where nothing flows."""
    inlets, outlets = drawn.at("inlet"), drawn.at("outlet")
    flow = total([s.mass_flow for s in inlets])
    out = total([s.mass_flow for s in outlets])
    with np.errstate(divide="ignore", invalid="ignore"):
        before = total([s.mass_flow * s.pressure for s in inlets]) / flow
        after = total([s.mass_flow * s.pressure for s in outlets]) / out
        volume = total([s.mass_flow * s.volume for s in inlets]) / flow
        return np.where((flow > 0) & (out > 0), (before - after) / (flow**2 * volume), np.nan)
