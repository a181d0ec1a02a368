"""Generic control volume: whatever has no kind of its own yet, with its balances."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from monitor.equipment.base import ANY_MEDIUM, Drawn, FloatArray, Kind, PortSpec, total

if TYPE_CHECKING:
    from monitor.thermo.dead_state import DeadState

__all__ = ["ControlVolume"]


class ControlVolume(Kind):
    """Any number of streams of any medium in and out."""

    name = "control_volume"
    title = "Control volume"
    ports = (
        PortSpec("inlet", "in", most=None, media=ANY_MEDIUM),
        PortSpec("outlet", "out", most=None, media=ANY_MEDIUM),
    )
    fuel_and_product = "fuel: exergy of all inlets; product: exergy of all outlets"

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow of water in; out where none enters; of fuel where there is no water [kg/s].

        With power and heat alone there is no such load: NaN, and it never counts as out of service.
        """
        choices = (("inlet", "water"), ("outlet", "water"), ("inlet", "fuel"), ("outlet", "fuel"))
        for port, medium in choices:
            flows = [s.mass_flow for s in drawn.at(port) if s.medium == medium]
            if flows:
                return total(flows)
        return np.full(drawn.at("inlet")[0].energy.shape, np.nan)

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy of the inlets, exergy of the outlets [W]."""
        return (
            total([s.exergy(dead) for s in drawn.at("inlet")]),
            total([s.exergy(dead) for s in drawn.at("outlet")]),
        )
