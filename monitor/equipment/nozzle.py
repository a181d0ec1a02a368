"""Steam through an orifice: what a hole of known size passes, choked or not.

Isentropic flow of a gas with exponent k: m = C A sqrt(2 k / (k - 1) p / v (r^(2/k) - r^((k+1)/k)))
with r = p2 / p, held at the critical ratio (2 / (k + 1))^(k / (k - 1)) below it. k is 1.3 for
superheated steam and 1.035 + 0.1 x at saturation (Zeuner).
Source: Moran and Shapiro, Fundamentals of Engineering Thermodynamics, chapter 9 (flow in
nozzles); Zeuner's exponent from memory.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from monitor.equipment.base import FloatArray

__all__ = ["Orifice", "zeuner_exponent"]

_SUPERHEATED = 1.3


@dataclass(frozen=True)
class Orifice:
    """A hole.

    Attributes:
        diameter: [m].
        discharge_coefficient: flow / isentropic flow; 0.6 for a sharp edge, near 1 for a nozzle.
    """

    diameter: float
    discharge_coefficient: float

    def flow(
        self, pressure: FloatArray, volume: FloatArray, exponent: FloatArray, behind: FloatArray
    ) -> FloatArray:
        """Mass flow [kg/s] from a state (Pa, m^3/kg) to the pressure behind the hole [Pa].

        Nothing flows where the pressure behind is the higher one.
        """
        k = exponent
        critical = (2.0 / (k + 1.0)) ** (k / (k - 1.0))
        ratio = np.clip(behind / pressure, critical, 1.0)
        expansion = ratio ** (2.0 / k) - ratio ** ((k + 1.0) / k)
        flux = np.sqrt(2.0 * k / (k - 1.0) * pressure / volume * np.maximum(expansion, 0.0))
        area = np.pi / 4.0 * self.diameter**2
        return np.asarray(self.discharge_coefficient * area * flux)


def zeuner_exponent(dryness: FloatArray, *, superheated: FloatArray) -> FloatArray:
    """Isentropic exponent of steam.

    Args:
        dryness: 0 to 1.
        superheated: temperature above saturation [K]; above zero the exponent is that of a gas.
    """
    return np.where(superheated > 0, _SUPERHEATED, 1.035 + 0.1 * dryness)
