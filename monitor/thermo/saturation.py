"""The properties on the two sides of the saturation line of IAPWS R7-97.

Below 350 degC the six properties (h, s, v of liquid and vapour) are read from Chebyshev
interpolants of the forward equations in T, made at first use: they reproduce the forward
equations to 1e-8 kJ/kg at a tenth of the cost. Above 350 degC the basic equation of region 3 is
solved for both densities.
"""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import chebyshev

from monitor.thermo import engine, polynomial, region3
from monitor.thermo.limits import LOWEST_TEMPERATURE, REGION_3_TEMPERATURE
from monitor.thermo.saturation_line import saturation_pressure

if TYPE_CHECKING:
    from monitor.thermo.arrays import FloatArray

__all__ = ["LIQUID", "SIDE_STEP", "VAPOUR", "saturation_properties"]

LIQUID = slice(0, 3)
VAPOUR = slice(3, 6)
SIDE_STEP = 1e-11
"""A relative step off the line in T: larger than its rounding, 4e-5 J/kg in h at most."""

_DEGREE = 40


def saturation_properties(pressure: FloatArray, temperature: FloatArray) -> FloatArray:
    """The properties of saturated liquid and saturated vapour.

    Within 0.2 mK (50 Pa) of the critical point the two sides are one.

    Args:
        pressure: [Pa], shape (n,).
        temperature: the saturation temperature at that pressure [K], shape (n,).

    Returns:
        Shape (n, 6): h, s, v of the liquid (`LIQUID`) and of the vapour (`VAPOUR`); NaN where
        there is no saturation.
    """
    out = np.full((pressure.size, 6), np.nan)
    temperature = np.where(np.isnan(pressure), np.nan, temperature)  # off the line: no state
    low = temperature <= REGION_3_TEMPERATURE
    coefficients = _line()
    if low.all():
        for part in polynomial.chunks(pressure.size):
            out[part] = _interpolate(temperature[part], coefficients)
        return out
    if low.any():
        out[low] = saturation_properties(pressure[low], temperature[low])
    high = temperature > REGION_3_TEMPERATURE
    if high.any():
        out[high] = _region_3(pressure[high], temperature[high])
    return out


def _region_3(pressure: FloatArray, temperature: FloatArray) -> FloatArray:
    sides = []
    for density in region3.saturated_densities(pressure, temperature):
        at = region3.helmholtz(density, temperature)
        sides += [at.enthalpy, at.entropy, 1.0 / density]
    return np.column_stack(sides)


@cache
def _line() -> FloatArray:
    nodes = chebyshev.chebpts1(_DEGREE + 1)
    low, high = LOWEST_TEMPERATURE, REGION_3_TEMPERATURE
    temperature = low + 0.5 * (nodes + 1.0) * (high - low)
    values = _both_sides(saturation_pressure(temperature), temperature)
    values[:, 5] = np.log(values[:, 5])  # v'' spans five decades
    return polynomial.fit(nodes, values)


def _interpolate(temperature: FloatArray, coefficients: FloatArray) -> FloatArray:
    low, high = LOWEST_TEMPERATURE, REGION_3_TEMPERATURE
    scaled = (temperature - low) * (2.0 / (high - low)) - 1.0
    values = polynomial.combine(polynomial.terms(scaled, _DEGREE), coefficients)
    np.exp(values[:, 5], out=values[:, 5])
    return values


def _both_sides(pressure: FloatArray, temperature: FloatArray) -> FloatArray:
    return np.hstack(
        [
            engine.evaluate(pressure, temperature * (1.0 - SIDE_STEP)),
            engine.evaluate(pressure, temperature * (1.0 + SIDE_STEP)),
        ]
    )
