"""The saturation line of IAPWS R7-97: T_sat(p), p_sat(T), and how near to it a reading lies."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from monitor.thermo.limits import (
    CRITICAL_PRESSURE,
    CRITICAL_TEMPERATURE,
    LOWEST_PRESSURE,
    LOWEST_TEMPERATURE,
)

if TYPE_CHECKING:
    import numpy.typing as npt

    from monitor.thermo.arrays import BoolArray, FloatArray

__all__ = ["near_saturation", "saturation_pressure", "saturation_temperature"]

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
    T = np.where((T >= LOWEST_TEMPERATURE) & (T <= CRITICAL_TEMPERATURE), T, np.nan)
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
    p = np.where((p >= LOWEST_PRESSURE) & (p <= CRITICAL_PRESSURE), p, np.nan)
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
