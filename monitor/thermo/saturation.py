"""The saturation line of IAPWS R7-97: T_sat(p), p_sat(T), and the properties on its two sides.

Below 350 degC the six properties (h, s, v of liquid and vapour) are read from Chebyshev
interpolants of the forward equations in T, made at first use: they reproduce the forward
equations to 1e-8 kJ/kg at a tenth of the cost. Above 350 degC (region 3) the forward equations are
evaluated on either side of the line.
"""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import chebyshev

from monitor.thermo import engine, polynomial

if TYPE_CHECKING:
    import numpy.typing as npt

    from monitor.thermo.arrays import BoolArray, FloatArray

__all__ = [
    "CRITICAL_PRESSURE",
    "CRITICAL_TEMPERATURE",
    "LIQUID",
    "REGION_3_TEMPERATURE",
    "SIDE_STEP",
    "VAPOUR",
    "near_saturation",
    "saturation_pressure",
    "saturation_properties",
    "saturation_temperature",
]

CRITICAL_PRESSURE = 22.064e6
CRITICAL_TEMPERATURE = 647.096
REGION_3_TEMPERATURE = 623.15
LIQUID = slice(0, 3)
VAPOUR = slice(3, 6)
SIDE_STEP = 1e-11
"""A relative step off the line in T: larger than its rounding, 4e-5 J/kg in h at most."""

_DEGREE = 40

# IAPWS R7-97(2012), Table 34.
_N = (
    0.11670521452767e4,
    -0.72421316703206e6,
    -0.17073846940092e2,
    0.12020824702470e5,
    -0.32325550322333e7,
    0.14915108613530e2,
    -0.48232657361591e4,
    0.40511340542057e6,
    -0.23855557567849,
    0.65017534844798e3,
)


def saturation_pressure(temperature: npt.ArrayLike) -> FloatArray:
    """Saturation pressure [Pa] at a temperature [K].

    IAPWS R7-97(2012), eq. 30. NaN outside its range, 273.15 K to the critical 647.096 K.
    """
    T = np.asarray(temperature, dtype=np.float64)
    T = np.where((T >= engine.LOWEST_TEMPERATURE) & (T <= CRITICAL_TEMPERATURE), T, np.nan)
    n1, n2, n3, n4, n5, n6, n7, n8, n9, n10 = _N
    theta = T + n9 / (T - n10)
    a = (theta + n1) * theta + n2
    b = (n3 * theta + n4) * theta + n5
    c = (n6 * theta + n7) * theta + n8
    ratio = 2.0 * c / (np.sqrt(b * b - 4.0 * a * c) - b)
    return np.asarray(1e6 * (ratio * ratio) ** 2)


def saturation_temperature(pressure: npt.ArrayLike) -> FloatArray:
    """Saturation temperature [K] at a pressure [Pa].

    IAPWS R7-97(2012), eq. 31. NaN outside its range, 611.213 Pa to the critical 22.064 MPa.
    """
    p = np.asarray(pressure, dtype=np.float64)
    p = np.where((p >= engine.LOWEST_PRESSURE) & (p <= CRITICAL_PRESSURE), p, np.nan)
    n1, n2, n3, n4, n5, n6, n7, n8, n9, n10 = _N
    beta = np.sqrt(np.sqrt(p * 1e-6))
    e = (beta + n3) * beta + n6
    f = (n1 * beta + n4) * beta + n7
    g = (n2 * beta + n5) * beta + n8
    d = 2.0 * g / (-f - np.sqrt(f * f - 4.0 * e * g))
    total = n10 + d
    return np.asarray(0.5 * (total - np.sqrt(total * total - 4.0 * (n9 + n10 * d))))


def near_saturation(
    pressure: npt.ArrayLike, temperature: npt.ArrayLike, band: npt.ArrayLike
) -> BoolArray:
    """Whether p [Pa] and T [K] lie within a band [K] of saturation, where they fix no state.

    False at and above the critical pressure, and where a reading is absent.
    """
    distance = np.abs(np.asarray(temperature) - saturation_temperature(pressure))
    return np.asarray(distance <= np.asarray(band))


def saturation_properties(pressure: FloatArray, temperature: FloatArray) -> FloatArray:
    """The properties of saturated liquid and saturated vapour.

    Limits: in region 3 (above 350 degC) the values are those of the backward equations v(p, T):
    within 0.01 kJ/kg of the basic equation up to 21 MPa, 0.5 kJ/kg at 21.5 MPa, 10 kJ/kg beyond.

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
        out[high] = _both_sides(pressure[high], temperature[high])
    return out


@cache
def _line() -> FloatArray:
    nodes = chebyshev.chebpts1(_DEGREE + 1)
    low, high = engine.LOWEST_TEMPERATURE, REGION_3_TEMPERATURE
    temperature = low + 0.5 * (nodes + 1.0) * (high - low)
    values = _both_sides(saturation_pressure(temperature), temperature)
    values[:, 5] = np.log(values[:, 5])  # v'' spans five decades
    return polynomial.fit(nodes, values)


def _interpolate(temperature: FloatArray, coefficients: FloatArray) -> FloatArray:
    low, high = engine.LOWEST_TEMPERATURE, REGION_3_TEMPERATURE
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
