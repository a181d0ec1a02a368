"""Boiler: fuel to steam. Fuel exergy is beta * LHV * m (Szargut and Styrylska).

eta = (H_steam + H_blowdown - H_feedwater) / (m_fuel LHV), the direct method; what stack and casing
take is inside the destroyed exergy unless it is a stream of its own. The exergetic efficiency
psi = (E_steam + E_blowdown - E_feedwater) / E_fuel beside it is taken at 15 degC and 1.01325 bar,
whatever the weather, so that it tells the boiler and not the day.
Source: Kotas, The Exergy Method of Thermal Plant Analysis (1985), chapter 5 (steam boiler).
"""

from __future__ import annotations

import math
from functools import cache
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
from monitor.equipment.heat_transfer import share
from monitor.equipment.working import Working, ratio
from monitor.flags import Flag
from monitor.thermo.dead_state import dead_state

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["Boiler", "BoilerOptions"]


@cache
def _standard() -> DeadState:
    """The dead state of the exergetic efficiency: the standard day, 15 degC and 1 atm."""
    return dead_state(288.15, 101325.0)


class BoilerOptions(Options):
    """Keys of a boiler's table; stack and casing losses are the energy residual by default."""

    heat_loss: Literal["none", "balance"] = "balance"


class Boiler(Kind):
    """See the module's docstring."""

    name = "boiler"
    title = "Boiler"
    ports = (
        PortSpec("fuel", "in", most=None, media=frozenset({"fuel"})),
        PortSpec("feedwater", "in", most=None, role="product"),
        PortSpec("steam", "out", most=None),
        PortSpec("blowdown", "out", least=0, most=None),
        PortSpec("loss", "out", least=0, most=None, media=frozenset({"heat"}), role="loss"),
    )
    options = BoilerOptions
    fuel_and_product = (
        "fuel: exergy of the fuel burnt; product: exergy gained from feedwater to steam"
    )

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of steam made [kg/s]."""
        return total([s.mass_flow for s in drawn.at("steam")])

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy of the fuel, exergy gained by the water [W]."""
        gained = total(
            [s.exergy(dead) for s in (*drawn.at("steam"), *drawn.at("blowdown"))]
        ) - total([s.exergy(dead) for s in drawn.at("feedwater")])
        return total([s.exergy(dead) for s in drawn.at("fuel")]), np.asarray(gained)

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Fuel and exergetic efficiency, and what blowdown and measured losses take."""
        losses = item.ports.get("loss", ())
        # A loss found from the energy balance is 100 % less the efficiency by construction.
        metered = losses and all(item.states(s, "heat") != "balance" for s in losses)
        blowdown = Figure(
            "blowdown_share", "blowdown, share of the feed water", "%", "high", 1.0, judged=False
        )
        loss = Figure(
            "loss_share",
            "measured losses, share of the fuel",
            "%",
            "high",
            1.0,
            advice=(
                "Check flue-gas temperature and oxygen, soot blowing and the casing's insulation."
            ),
        )
        return (
            Figure(
                "fuel_efficiency",
                "fuel efficiency (direct)",
                "%",
                "low",
                1.5,
                advice=(
                    "Check the fuel and steam meters against each other, then "
                    "flue-gas temperature, oxygen and soot blowing."
                ),
            ),
            Figure(
                "exergetic_efficiency",
                "exergetic efficiency at 15 degC",
                "%",
                "low",
                1.0,
                judged=False,
            ),
            *((blowdown,) if item.ports.get("blowdown") else ()),
            *((loss,) if metered else ()),
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        burnt = total([s.energy for s in drawn.at("fuel")])
        gained = total([s.energy for s in (*drawn.at("steam"), *drawn.at("blowdown"))]) - total(
            [s.energy for s in drawn.at("feedwater")]
        )
        with np.errstate(divide="ignore", invalid="ignore"):
            efficiency = np.where(burnt > 0, gained / burnt, np.nan)
        impossible = np.nan_to_num(efficiency, nan=0.5) > 1
        flag = np.where(impossible, np.int32(Flag.SECOND_LAW), np.int32(0))
        weight, nothing = np.maximum(burnt, 0.0), np.zeros_like(flag)
        spent, made = self.fuel(drawn, _standard())
        water = total([s.mass_flow for s in drawn.at("feedwater")])
        off = np.zeros_like(burnt)
        blown = total([off, *(s.mass_flow for s in drawn.at("blowdown"))])
        lost = total([off, *(s.energy for s in drawn.at("loss"))])
        return {
            "exergetic_efficiency": ConditionFigure(
                share(made, spent), np.maximum(spent, 0.0), flag
            ),
            "blowdown_share": ConditionFigure(share(blown, water), np.maximum(water, 0.0), nothing),
            "loss_share": ConditionFigure(share(lost, burnt), weight, nothing),
            "fuel_efficiency": ConditionFigure(100.0 * efficiency, np.maximum(burnt, 0.0), flag),
        }

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure."""
        burnt = at.total("energy_kw", "fuel")
        feed = at.total("energy_kw", "feedwater")
        if figure == "fuel_efficiency":
            made = at.total("energy_kw", "steam", "blowdown")
            formula = "eta = (H_steam + H_blowdown - H_feedwater) / (m_fuel LHV), direct method"
            yield from ratio("fuel efficiency", formula, made - feed, burnt)
        elif figure == "blowdown_share":
            part, whole = (at.total("mass_flow_kg_s", port) for port in ("blowdown", "feedwater"))
            yield from ratio("share of the feed water", "m_blowdown / m_feedwater", part, whole)
        elif figure == "exergetic_efficiency":
            yield from _exergetic_working(at)
        elif figure == "loss_share":
            lost = at.total("energy_kw", "loss")
            yield from ratio("share of the fuel", "Q_loss / (m_fuel LHV)", lost, burnt)


def _exergetic_working(at: AtHand) -> Iterator[Working]:
    """Steps to psi at the standard day: m (h - T0 s - g0) of the water, the fuel's own exergy."""
    T0, g0 = float(_standard().temperature), float(_standard().gibbs) / 1e3

    def of(*ports: str) -> tuple[float, str]:
        rows = [r for r in at.at(*ports) if r["mass_flow_kg_s"]]
        terms = [
            (r["mass_flow_kg_s"], r["enthalpy_kj_kg"] - T0 * r["entropy_kj_kgk"] - g0) for r in rows
        ]
        text = " + ".join(f"{m:.5f} * {e:.4f}" for m, e in terms)
        return math.fsum(m * e for m, e in terms), text or "0"

    formula = f"sum m (h - T0 s - g0), T0 = {T0:.2f} K, g0 = {g0:.5f} kJ/kg at 1.01325 bar(a)"
    made, brought = of("steam", "blowdown"), of("feedwater")
    yield Working("exergy of steam and blowdown", formula, made[1], made[0], "kW")
    yield Working("exergy of the feed water", formula, brought[1], brought[0], "kW")
    # A fuel's exergy knows no dead state: beta times its heating value.
    fuel = at.total("exergy_live_kw", "fuel")
    name, formula = "exergetic efficiency", "(E_steam + E_blowdown - E_feedwater) / E_fuel"
    yield from ratio(name, formula, made[0] - brought[0], fuel)
