"""What a flow meter shows to the mass that flows.

A differential-pressure meter shows the root of dp times the density it was scaled for, a velocity
meter a volume; one that is not compensated is wrong by the density's departure from design (ISO
5167-1:2022, eq. 1, for dp; a velocity meter's mass flow is density times volume).
"""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING

import numpy as np

from monitor.site.units import Quantity
from monitor.thermo.water import state_pt, state_px

if TYPE_CHECKING:
    from monitor.equipment.base import FloatArray
    from monitor.site.tags import Meter

__all__ = ["design_density", "mass_flow"]


def mass_flow(
    shown: FloatArray,
    quantity: Quantity,
    meter: Meter | None,
    stated_density: float | None,
    density: FloatArray | float,
) -> FloatArray:
    """Mass flow [kg/s] from what a meter shows; a reading of no flow stays none.

    Args:
        shown: mass flow [kg/s], volume flow [m^3/s] or norm volume flow [norm m^3/s].
        quantity: which of these.
        meter: None for a meter that needs no correction.
        stated_density: mass of a unit of shown volume, where the site file gives it.
        density: of what flows [kg/m^3]; used only where neither statement nor kind make it
            needless.
    """
    factor: FloatArray | float = 1.0
    if quantity is not Quantity.MASS_FLOW:
        factor = density if stated_density is None else stated_density
    if meter is not None and meter.needs_density:
        design = design_density(meter)
        if meter.kind == "dp":
            # A volume was worked out with the density that the meter was scaled for.
            root = np.sqrt(density / design)
            factor = root if quantity is Quantity.MASS_FLOW else design * root
        elif quantity is Quantity.MASS_FLOW:
            factor = density / design
    with np.errstate(invalid="ignore"):
        return np.asarray(np.where(shown == 0, 0.0, shown * factor), dtype=np.float64)


@cache
def design_density(meter: Meter) -> float:
    """Density that an uncompensated meter was scaled for [kg/m^3]; NaN where there is none."""
    if meter.design_density is not None:
        return meter.design_density
    if meter.design_pressure is None:
        return float("nan")
    if meter.design_dryness is not None:
        state = state_px(meter.design_pressure, meter.design_dryness)
    elif meter.design_temperature is not None:
        state = state_pt(meter.design_pressure, meter.design_temperature)
    else:
        return float("nan")
    return float(1.0 / state.volume)
