"""The dead state: water at the temperature and pressure of the surroundings.

Exergy holds the dead state only through its Gibbs energy g0 = h0 - T0 s0, which is continuous
where water freezes, although h0 and s0 jump. Below the freezing point the stable dead-state water
is ice Ih; T0 itself is never clamped.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from monitor.thermo.arrays import broadcast
from monitor.thermo.ice import ice_state, melting_temperature
from monitor.thermo.limits import LOWEST_TEMPERATURE
from monitor.thermo.water import state_pt

if TYPE_CHECKING:
    import numpy.typing as npt

    from monitor.thermo.arrays import BoolArray, FloatArray

__all__ = ["DeadState", "dead_state", "live_ambient"]

# Nobody's weather is outside this; a temperature handed over in degC is.
_COLDEST, _WARMEST = 173.15, 373.15
_HEAT_CAPACITY_AT_FREEZING = 4217.0  # [J/(kg K)] liquid water at 0 degC, IAPWS-95


@dataclass(frozen=True, eq=False)
class DeadState:
    """Dead-state water, arrays of one shape (0-d for numbers).

    Attributes:
        temperature: T0 [K], the true one.
        pressure: p0 [Pa].
        enthalpy: h0 [J/kg].
        entropy: s0 [J/(kg K)].
        volume: v0 [m3/kg].
        gibbs: g0 = h0 - T0 s0 = u0 + p0 v0 - T0 s0 [J/kg].
        frozen: whether the water is ice Ih.
    """

    temperature: FloatArray
    pressure: FloatArray
    enthalpy: FloatArray
    entropy: FloatArray
    volume: FloatArray
    gibbs: FloatArray
    frozen: BoolArray


def dead_state(temperature: npt.ArrayLike, pressure: npt.ArrayLike) -> DeadState:
    """Properties of water at T0 and p0, in the phase that is stable there.

    Below the melting temperature at p0 (273.1525 K at one atmosphere, so including 0 degC) it is
    ice Ih by IAPWS R10-06(2009). Above, it is compressed liquid by IF97 at T0 and p0: not the
    saturated liquid at p0, which boils. Where p0 is so high that water melts below 273.15 K (above
    1.35 bar), the few millikelvin that IF97 leaves out are bridged along the isobar from 273.15 K
    with the heat capacity of liquid water.

    Args:
        temperature: T0 [K]. Outside 173.15 to 373.15 K everything computed is NaN, which catches
            a T0 in degC.
        pressure: p0 [Pa].
    """
    T0, p0 = broadcast(temperature, pressure)
    ambient = (T0 >= _COLDEST) & (T0 <= _WARMEST)
    frozen = ambient & (melting_temperature(p0) > T0)
    ice = ice_state(p0, np.where(frozen, T0, np.nan))
    above_zero = np.maximum(T0, LOWEST_TEMPERATURE)
    liquid = state_pt(p0, np.where(ambient & ~frozen, above_zero, np.nan), side="liquid")
    below_zero = np.minimum(T0 - LOWEST_TEMPERATURE, 0.0)
    enthalpy = liquid.enthalpy + _HEAT_CAPACITY_AT_FREEZING * below_zero
    entropy = liquid.entropy + _HEAT_CAPACITY_AT_FREEZING * below_zero / above_zero
    h0 = np.where(frozen, ice.enthalpy, enthalpy)
    s0 = np.where(frozen, ice.entropy, entropy)
    return DeadState(
        temperature=T0,
        pressure=p0,
        enthalpy=h0,
        entropy=s0,
        volume=np.where(frozen, ice.volume, liquid.volume),
        gibbs=np.asarray(h0 - T0 * s0),
        frozen=np.asarray(frozen),
    )


def live_ambient(
    values: npt.ArrayLike,
    usable: npt.ArrayLike,
    hold_cells: int,
    mean_cells: int,
    reference: float,
) -> tuple[FloatArray, BoolArray]:
    """Fill gaps in an ambient reading on a uniform grid, then smooth it.

    A gap holds the last usable value for ``hold_cells`` cells, then the reference stands in. The
    trailing mean, if any, is taken over the filled values (over what there is, at the start).

    Args:
        values: readings in SI, shape (n,), in time order.
        usable: which readings count, shape (n,); a value that is not finite never does.
        hold_cells: how many cells a usable value is carried on.
        mean_cells: cells in the trailing mean, this one included; 1 for no mean.
        reference: what stands in after the hold, in SI.

    Returns:
        The filled values; and the mask of cells that rest on a held or reference value (anywhere
        in their mean).

    Raises:
        ValueError: a negative hold, an empty mean, or a reference that is no number.
    """
    if hold_cells < 0 or mean_cells < 1 or not np.isfinite(reference):
        raise ValueError(
            f"hold_cells {hold_cells}, mean_cells {mean_cells}, reference {reference}: "
            "give a hold of 0 or more, a mean of 1 or more, and a finite reference"
        )
    read = np.asarray(values, dtype=np.float64)
    good = np.asarray(usable, dtype=np.bool_) & np.isfinite(read)
    index = np.arange(read.size)
    last = np.maximum.accumulate(np.where(good, index, -1 - hold_cells))
    fresh = index - last <= hold_cells
    filled = np.where(fresh & (last >= 0), read[np.maximum(last, 0)], reference)
    if mean_cells == 1:
        return filled, ~good
    # Sums of the distance from the reference lose no digits to the ambient's own size.
    total = _trailing_sum(filled - reference, mean_cells)
    count = np.minimum(index + 1, mean_cells)
    stand_ins = _trailing_sum((~good).astype(np.float64), mean_cells)
    return reference + total / count, stand_ins > 0.0


def _trailing_sum(values: FloatArray, cells: int) -> FloatArray:
    """Sum over the last ``cells`` values, this one included.

    Summed offset by offset and not as a difference of running totals, so that a cell's sum is the
    same to the last bit wherever the series begins.
    """
    total = np.zeros_like(values)
    for offset in range(min(cells, values.size)):
        total[offset:] += values[: values.size - offset]
    return total
