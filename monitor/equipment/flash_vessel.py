"""Flash vessel: condensate let down into a vessel, where part of it boils off as steam to use.

Adiabatic flash: x = [sum(m h)in / m_in - h_f(p)] / h_fg(p). The recovery is the steam that leaves
over the steam that this gives; it is listed where the energy balance is spare (without a spare one
it is 100 % by construction). With ``volume``, ``level`` and ``pressure`` the content is counted.
Source: Moran and Shapiro, Fundamentals of Engineering Thermodynamics, chapter 4 (throttling
into the two-phase region); Bejan, Tsatsaronis, Moran (1996), chapter 3.5 (fuel and product).
"""

from __future__ import annotations

from typing import TYPE_CHECKING, cast

import numpy as np

from monitor.equipment.base import (
    ConditionFigure,
    Content,
    Drawn,
    Figure,
    FloatArray,
    Item,
    Kind,
    PortSpec,
    Signal,
    total,
)
from monitor.equipment.heat_transfer import flag_where, share
from monitor.equipment.saturated_vessel import VesselOptions, exergy_rise
from monitor.equipment.working import Working, enthalpies_at_boiling, ratio
from monitor.thermo.water import saturated

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["FlashVessel"]


class FlashVessel(Kind):
    """See the module's docstring."""

    name = "flash_vessel"
    title = "Flash vessel"
    ports = (
        PortSpec("inlet", "in", most=None),
        PortSpec("steam", "out"),
        PortSpec("condensate", "out", role="fuel"),
    )
    options = VesselOptions
    fuel_and_product = (
        "fuel: exergy of the condensate in less what leaves as condensate or is stored; "
        "product: exergy of the flash steam"
    )

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of condensate in [kg/s]."""
        return total([s.mass_flow for s in drawn.at("inlet")])

    def content(self, item: Item, signals: Mapping[str, Signal]) -> Content | None:
        """What the vessel holds, when the site file gives its volume, level and pressure."""
        return cast("VesselOptions", item.options).content(signals)

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy of the condensate that is spent, exergy of the flash steam [W]."""
        brought = total([s.exergy(dead) for s in drawn.at("inlet")])
        left = drawn.only("condensate").exergy(dead)
        spent = brought - left - exergy_rise(drawn, dead)
        return np.asarray(spent), drawn.only("steam").exergy(dead)

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Share that flashes, and the recovery where a balance is spare to tell it."""
        flash = Figure("flash_share", "share that flashes", "%", "both", 1.0, judged=False)
        recovery = Figure(
            "flash_recovery",
            "flash steam recovered",
            "%",
            "low",
            5.0,
            advice="Check the level, the drain's valve and the pressure that is held.",
        )
        spare = "energy" in item.spare and item.options.heat_loss == "none"
        return (flash, *((recovery,) if spare else ()))

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`."""
        del dead
        inlets, steam = drawn.at("inlet"), drawn.only("steam")
        flow = total([s.mass_flow for s in inlets])
        energy = total([s.energy for s in inlets])
        liquid, vapour = saturated(steam.pressure)
        ideal = (energy - flow * liquid.enthalpy) / (vapour.enthalpy - liquid.enthalpy)
        cold = np.nan_to_num(ideal, nan=0.0) < 0
        weight = np.maximum(flow, 0.0)
        flag = flag_where(cold & (steam.mass_flow > 0))
        # More than all of it flashes: what comes in is superheated steam.
        steamy = flag_where((np.nan_to_num(ideal, nan=0.0) > flow) & (flow > 0))
        return {
            "flash_share": ConditionFigure(share(ideal, flow), weight, flag | steamy),
            "flash_recovery": ConditionFigure(
                share(steam.mass_flow, ideal), np.maximum(ideal, 0.0), flag
            ),
        }

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure."""
        h_f, h_g = enthalpies_at_boiling(at.only("steam")["pressure_bar"])
        flow, energy = at.total("mass_flow_kg_s", "inlet"), at.total("energy_kw", "inlet")
        ideal = Working(
            "steam that flashes",
            "m_s = (sum(m h)_in - m_in h_f) / (h_g - h_f)",
            f"({energy:.3f} - {flow:.5f} * {h_f:.4f}) / ({h_g:.4f} - {h_f:.4f})",
            (energy - flow * h_f) / (h_g - h_f),
            "kg/s",
        )
        yield ideal
        if figure == "flash_share":
            yield from ratio("share that flashes", "m_s / m_in", ideal.value, flow)
        else:
            taken = at.only("steam")["mass_flow_kg_s"]
            yield from ratio("flash steam recovered", "m_steam / m_s", taken, ideal.value)
