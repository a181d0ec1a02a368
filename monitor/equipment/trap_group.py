"""Steam trap group: condensate passes from steam pressure to the condensate line.

A trap throttles, and one that failed blows. Condensate that arrives with an enthalpy h above that
of saturated liquid carries live steam, x = (h - h_f(p)) / h_fg(p): the blow-through, where the
inlet's enthalpy is found from a balance downstream (below zero the condensate is subcooled and
nothing blows). Beside it stands what the stated number of failed traps would pass through their
orifices, choked (`nozzle`).
Source: Kotas, The Exergy Method of Thermal Plant Analysis (1985), chapter 4.2 (throttling).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, cast

import numpy as np
from pydantic import Field, model_validator

from monitor.equipment.base import (
    ConditionFigure,
    Drawn,
    Figure,
    FloatArray,
    Item,
    Kind,
    Options,
    PortSpec,
    mean_specific,
    measured,
    total,
)
from monitor.equipment.heat_transfer import flag_where
from monitor.equipment.nozzle import Orifice, zeuner_exponent
from monitor.equipment.working import (
    Working,
    enthalpies_at_boiling,
    ratio,
    through_an_orifice,
)
from monitor.site.units import Quantity
from monitor.thermo.water import saturated

if TYPE_CHECKING:
    from collections.abc import Iterator

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["TrapGroup", "TrapGroupOptions"]


class TrapGroupOptions(Options):
    """Keys of a trap group's table.

    Attributes:
        failed_traps: number of traps that the last survey found blowing.
        orifice: diameter of a trap's orifice [m].
        discharge_coefficient: flow / isentropic flow through it.
    """

    failed_traps: float | None = Field(default=None, ge=0)
    orifice: Annotated[float, measured(Quantity.LENGTH), Field(gt=0)] | None = None
    discharge_coefficient: Annotated[float, measured(Quantity.FRACTION), Field(gt=0, le=1)] = 0.7

    @model_validator(mode="after")
    def _together(self) -> TrapGroupOptions:
        if (self.failed_traps is None) != (self.orifice is None):
            raise ValueError("failed_traps and orifice go together: give both, or neither")
        return self


class TrapGroup(Kind):
    """See the module's docstring."""

    name = "trap_group"
    title = "Steam trap group"
    ports = (
        PortSpec("inlet", "in", most=None),
        PortSpec("outlet", "out"),
    )
    options = TrapGroupOptions
    fuel_and_product = (
        "fuel: exergy of the condensate at steam pressure; "
        "product: exergy of what enters the condensate line"
    )

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow through the traps [kg/s]."""
        return total([s.mass_flow for s in drawn.at("inlet")])

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy before and after the traps [W]."""
        return (
            total([s.exergy(dead) for s in drawn.at("inlet")]),
            drawn.only("outlet").exergy(dead),
        )

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Blow-through, measured where an inlet's enthalpy is, and what failed traps would pass."""
        inlets = item.ports["inlet"]
        # Condensate stated as saturated has no blow-through by construction.
        told = any(s not in item.statements or item.states(s, "enthalpy") for s in inlets)
        share = Figure(
            "blow_through",
            "blow-through, share of the flow",
            "%",
            "high",
            1.0,
            advice="Have the traps of the group surveyed and the failed ones replaced.",
        )
        flow = Figure("blow_through_flow", "blow-through", "t/h", "high", 0.2, judged=False)
        expected = Figure(
            "orifice_flow",
            "blow-through that the failed traps would pass",
            "t/h",
            "high",
            0.2,
            judged=False,
            follows_load=False,
        )
        counted = cast("TrapGroupOptions", item.options).failed_traps is not None
        return ((share, flow) if told else ()) + ((expected,) if counted else ())

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        options = cast("TrapGroupOptions", drawn.item.options)
        inlets = drawn.at("inlet")
        pressure, flow = inlets[0].pressure, self.load(drawn)
        liquid, vapour = saturated(pressure)
        latent = vapour.enthalpy - liquid.enthalpy
        blown = (mean_specific(inlets).enthalpy - liquid.enthalpy) / latent
        nothing = np.zeros_like(inlets[0].flag)
        weight = np.maximum(flow, 0.0)
        # A dryness above one: the traps would pass nothing but superheated steam.
        impossible = flag_where(np.nan_to_num(blown, nan=0.0) > 1)
        found = {
            "blow_through": ConditionFigure(100.0 * blown, weight, impossible),
            "blow_through_flow": ConditionFigure(
                np.maximum(blown, 0.0) * flow * 3.6, np.ones_like(flow), nothing
            ),
        }
        if options.failed_traps is not None and options.orifice is not None:
            ones = np.ones_like(flow)
            one = Orifice(options.orifice, options.discharge_coefficient).flow(
                pressure,
                vapour.volume,
                zeuner_exponent(ones, superheated=0.0 * ones),
                drawn.only("outlet").pressure,
            )
            found["orifice_flow"] = ConditionFigure(options.failed_traps * one * 3.6, ones, nothing)
        return found

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure; to the blow-through of a group with one inlet."""
        inlet = at.only("inlet")
        if figure == "orifice_flow":
            yield from self._orifices(at)
            return
        if len(at.at("inlet")) > 1:
            return
        h_f, h_g = enthalpies_at_boiling(inlet["pressure_bar"])
        live, formula = inlet["enthalpy_kj_kg"] - h_f, "x = (h - h_f) / (h_g - h_f)"
        if figure == "blow_through":
            yield from ratio("live steam in the condensate", formula, live, h_g - h_f)
        else:
            flow = 3.6 * inlet["mass_flow_kg_s"] * max(live, 0.0)
            yield from ratio("blow-through", f"3.6 m x, {formula}", flow, h_g - h_f, "t/h")

    def _orifices(self, at: AtHand) -> Iterator[Working]:
        """Saturated steam through the orifices of the failed traps."""
        options = cast("TrapGroupOptions", at.item.options)
        p, one = at.only("inlet")["pressure_bar"], np.ones(())
        volume = float(saturated(p * 1e5)[1].volume)
        *steps, flow = through_an_orifice(
            options.orifice or 0.0,
            options.discharge_coefficient,
            (p, volume),
            at.only("outlet")["pressure_bar"],
            float(zeuner_exponent(one, superheated=0.0 * one)),
        )
        yield from (*steps, flow)
        count = options.failed_traps or 0.0
        yield Working(
            "blow-through that the failed traps would pass",
            "3.6 n m",
            f"3.6 * {count:g} * {flow.value:.6f}",
            3.6 * count * flow.value,
            "t/h",
            is_figure=True,
        )
