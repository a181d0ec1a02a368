"""Steam header: several inlets and outlets that mix, lose heat and sometimes lose steam.

The energy that the outlets do not carry leaves as heat (``heat_loss = "balance"`` by default); the
mass that they do not carry is the unaccounted flow: a leak, an open drain, or a flow meter. Where
inlets have gauges of their own, each is the end of a pipe to the header with p_in - p_out = K m^2 v
(Darcy: turbulent flow), which flow and density have been taken out of. Of several pipes
K = sum m (p_in - p_out) / sum m^3 v: each weighs with m^3 v, the power that it dissipates but for
the density, which the pipes share.
Source: Bejan, Tsatsaronis, Moran (1996), chapter 3.2 (mass, energy, exergy of a control volume).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Literal, cast

import numpy as np

from monitor.equipment.account import balances
from monitor.equipment.base import (
    ConditionFigure,
    Drawn,
    Figure,
    FloatArray,
    Item,
    Kind,
    Options,
    PortSpec,
    flow_mean,
    total,
)
from monitor.equipment.working import Working, ratio

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from monitor.equipment.base import Medium
    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["Header", "HeaderOptions"]


class HeaderOptions(Options):
    """Keys of a header's table; the heat loss is the energy residual unless stated otherwise.

    Attributes:
        pressure_loss_from: inlets with no valve between their gauge and the header, which tell its
            pressure loss; empty for all.
    """

    heat_loss: Literal["none", "balance"] = "balance"
    pressure_loss_from: tuple[str, ...] = ()


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

    def complain(self, item: Item, media: Mapping[str, Medium]) -> list[str]:
        """Name an inlet that is none."""
        del media
        inlets = item.ports.get("inlet", ())
        chosen = cast("HeaderOptions", item.options).pressure_loss_from
        return [
            f"pressure_loss_from names '{stream}', which is no inlet: {', '.join(inlets)}"
            for stream in chosen
            if stream not in inlets
        ]

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
        chosen = cast("HeaderOptions", item.options).pressure_loss_from
        gauged = any(
            item.differ(one, other, "pressure")
            for one in chosen or item.ports["inlet"]
            for other in item.ports["outlet"]
        )
        cools = item.any_differ("inlet", "outlet", "pressure") or item.any_differ(
            "inlet", "outlet", "temperature"
        )
        by_balance = item.options.heat_loss == "balance"
        return (
            *((heat,) if by_balance and cools else ()),
            *((unaccounted,) if "mass" in item.spare else ()),
            *((loss,) if gauged else ()),
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        counted = balances(drawn)
        nothing = np.zeros_like(drawn.at("inlet")[0].flag)
        ones = np.ones(nothing.shape)
        found = {"unaccounted_flow": ConditionFigure(counted.mass_imbalance * 3.6, ones, nothing)}
        if drawn.item.options.heat_loss == "balance":
            excess = flow_mean(drawn.at("outlet"), "temperature") - dead.temperature
            with np.errstate(divide="ignore", invalid="ignore"):
                coefficient = counted.heat_loss / excess / 1e3
            found["heat_loss_coefficient"] = ConditionFigure(coefficient, ones, nothing)
        found["pressure_loss_coefficient"] = ConditionFigure(_pressure_loss(drawn), ones, nothing)
        return found

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure."""
        if figure == "unaccounted_flow":
            into, out = (at.total("mass_flow_kg_s", port) for port in ("inlet", "outlet"))
            yield Working(
                "unaccounted flow",
                "3.6 (sum m_in - sum m_out)",
                f"3.6 * ({into:.6f} - {out:.6f})",
                3.6 * (into - out),
                "t/h",
                is_figure=True,
            )
        elif figure == "heat_loss_coefficient":
            outlets = [s for s in at.at("outlet") if s["mass_flow_kg_s"] > 0]
            flow = sum(s["mass_flow_kg_s"] for s in outlets)
            warmth = sum(s["mass_flow_kg_s"] * s["temperature_degc"] for s in outlets)
            mean = Working(
                "mean temperature of the outlets",
                "sum(m T) / sum(m)",
                f"{warmth:.4f} / {flow:.5f}",
                warmth / flow if flow else math.nan,
                "degC",
            )
            yield mean
            lost = at.account["heat_loss_kw"]
            formula = "Q / (T - T0), Q the energy residual of the header"
            excess = mean.value - at.ambient
            yield from ratio("heat-loss coefficient", formula, lost, excess, "kW/K")
        else:
            yield from _loss_working(at)


def _loss_working(at: AtHand) -> Iterator[Working]:
    """Steps to K."""
    chosen = cast("HeaderOptions", at.item.options).pressure_loss_from
    outlets = [s for s in at.at("outlet") if s["mass_flow_kg_s"] > 0]
    flow = math.fsum(s["mass_flow_kg_s"] for s in outlets)
    weighted = math.fsum(s["mass_flow_kg_s"] * s["pressure_bar"] for s in outlets)
    behind = Working(
        "mean pressure of the outlets",
        "sum(m p) / sum(m)",
        f"{weighted:.6f} / {flow:.5f}",
        weighted / flow if flow else math.nan,
        "bar(a)",
    )
    yield behind
    power, measure, terms = 0.0, 0.0, []
    for name in chosen or at.item.ports["inlet"]:
        pipe = at.streams[name]
        m, p, v = (pipe[n] for n in ("mass_flow_kg_s", "pressure_bar", "volume_m3_kg"))
        if m > 0:
            power += m * (p - behind.value) * 1e5
            measure += m**3 * v
            terms.append((f"{m:.4f} * ({p:.5f} - {behind.value:.5f})", f"{m:.4f}^3 * {v:.6f}"))
    if measure > 0:
        above, below = (" + ".join(side) for side in zip(*terms, strict=True))
        yield Working(
            "pressure-loss coefficient",
            "K = sum m (p_in - p_out) / sum m^3 v, 1 bar = 1e5 Pa",
            f"1e5 [{above}] / [{below}]",
            power / measure,
            "1/m^4",
            is_figure=True,
        )


def _pressure_loss(drawn: Drawn) -> FloatArray:
    """K = sum m (p_in - p_out) / sum m^3 v over the inlets' pipes [1/m^4]; NaN at no flow."""
    chosen = cast("HeaderOptions", drawn.item.options).pressure_loss_from
    pipes = [s for s in drawn.at("inlet") if not chosen or s.id in chosen]
    after = flow_mean(drawn.at("outlet"), "pressure")
    flowing = [s.mass_flow > 0 for s in pipes]
    power = total(
        [
            np.where(on, s.mass_flow * (s.pressure - after), 0.0)
            for on, s in zip(flowing, pipes, strict=True)
        ]
    )
    measure = total(
        [np.where(on, s.mass_flow**3 * s.volume, 0.0) for on, s in zip(flowing, pipes, strict=True)]
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(measure > 0, power / measure, np.nan)
