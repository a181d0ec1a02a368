"""What a vessel of boiling water holds, from its level and its pressure.

Liquid and vapour are in equilibrium at the vessel's pressure; with the volume V and the liquid's
share y of it, m = V [y / v_f + (1 - y) / v_g], and likewise U and S.
Source: Moran and Shapiro, Fundamentals of Engineering Thermodynamics, chapter 3 (two-phase
mixtures); Bejan, Tsatsaronis, Moran (1996), eq. 3.8 for the exergy of what is stored.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated

import numpy as np
from pydantic import model_validator

from monitor.equipment.base import Content, Options, measured
from monitor.site.models import Reference
from monitor.site.units import Quantity
from monitor.thermo.water import saturated

if TYPE_CHECKING:
    from collections.abc import Mapping

    from monitor.equipment.base import Drawn, FloatArray, Signal
    from monitor.thermo.dead_state import DeadState

__all__ = ["VesselOptions", "exergy_rise", "mass_rise", "saturated_content"]


class VesselOptions(Options):
    """Keys of a vessel whose content may be counted: all three, or none of them.

    Attributes:
        volume: of the vessel [m^3].
        level: tag of the liquid's share of the volume.
        pressure: tag of the vessel's pressure.
    """

    volume: Annotated[float, measured(Quantity.VOLUME)] | None = None
    level: Reference | None = None
    pressure: Reference | None = None

    @model_validator(mode="after")
    def _all_or_none(self) -> VesselOptions:
        given = (self.volume, self.level, self.pressure)
        if any(g is None for g in given) and any(g is not None for g in given):
            raise ValueError("volume, level and pressure go together: give all three, or none")
        return self

    def signals(self) -> dict[str, tuple[Reference, Quantity]]:
        """Level and pressure, when the content is counted."""
        if self.level is None or self.pressure is None:
            return {}
        return {
            "level": (self.level, Quantity.FRACTION),
            "pressure": (self.pressure, Quantity.PRESSURE),
        }

    def content(self, signals: Mapping[str, Signal]) -> Content | None:
        """What the vessel holds at the cells' ends; None when it is not counted."""
        if self.volume is None or not signals:
            return None
        return saturated_content(self.volume, signals["level"].edges, signals["pressure"].edges)


def exergy_rise(drawn: Drawn, dead: DeadState) -> FloatArray | float:
    """Rate at which the non-flow exergy of what a vessel holds rises [W]; 0.0 if not counted.

    d(U + p0 V - T0 S - g0 m) / dt at each cell's own dead state: never with dT0.
    """
    held = drawn.content
    if held is None:
        return 0.0
    stored = (
        np.diff(held.internal_energy)
        - dead.temperature * np.diff(held.entropy)
        - dead.gibbs * np.diff(held.mass)
    )
    return np.asarray(stored / drawn.interval)


def mass_rise(drawn: Drawn) -> FloatArray | float:
    """Rate at which the mass in a vessel rises [kg/s]; 0.0 if not counted."""
    held = drawn.content
    return 0.0 if held is None else np.asarray(np.diff(held.mass) / drawn.interval)


def saturated_content(volume: float, liquid_share: FloatArray, pressure: FloatArray) -> Content:
    """Mass, internal energy and entropy of boiling water in a vessel.

    Args:
        volume: of the vessel [m^3].
        liquid_share: share of the volume that is liquid, 0 to 1, shape (n + 1,).
        pressure: [Pa], shape (n + 1,).
    """
    liquid, vapour = saturated(pressure)
    liquid_mass = volume * liquid_share / liquid.volume
    vapour_mass = volume * (1.0 - liquid_share) / vapour.volume
    return Content(
        mass=liquid_mass + vapour_mass,
        internal_energy=liquid_mass * liquid.internal_energy + vapour_mass * vapour.internal_energy,
        entropy=liquid_mass * liquid.entropy + vapour_mass * vapour.entropy,
        volume=np.full_like(liquid_share, volume),
    )
