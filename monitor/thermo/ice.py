"""Ice Ih, the stable water below the freezing point.

Sources: IAPWS R10-06(2009), the Gibbs equation of state of ice Ih; IAPWS R14-08(2011), the melting
pressure of ice Ih.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from monitor.thermo.arrays import broadcast

if TYPE_CHECKING:
    import numpy.typing as npt

    from monitor.thermo.arrays import FloatArray

__all__ = ["IceState", "ice_state", "melting_temperature"]

# IAPWS R10-06(2009), Tables 1 and 2.
_TRIPLE_TEMPERATURE = 273.16
_TRIPLE_PRESSURE = 611.657
_NORMAL_PRESSURE = 101325.0
_HIGHEST_PRESSURE = 210e6
_G0 = (
    -0.632020233335886e6,
    0.655022213658955,
    -0.189369929326131e-7,
    0.339746123271053e-14,
    -0.556464869058991e-21,
)
_S0 = -0.332733756492168e4
_T1 = complex(0.368017112855051e-1, 0.510878114959572e-1)
_R1 = complex(0.447050716285388e2, 0.656876847463481e2)
_T2 = complex(0.337315741065416, 0.335449415919309)
_R2 = (
    complex(-0.725974574329220e2, -0.781008427112870e2),
    complex(-0.557107698030123e-4, 0.464578634580806e-4),
    complex(0.234801409215913e-10, -0.285651142904972e-10),
)

# IAPWS R14-08(2011), eq. 1: coefficients and exponents of the melting pressure of ice Ih.
_MELTING = ((0.119539337e7, 3.0), (0.808183159e5, 25.75), (0.333826860e4, 103.75))
_LOWEST_MELTING_TEMPERATURE = 251.165
_NEWTON_STEPS = 8  # two at ambient pressure, more towards 208 MPa


@dataclass(frozen=True, eq=False)
class IceState:
    """States of ice Ih, arrays of one shape; NaN outside the equation's range.

    Attributes:
        enthalpy: [J/kg].
        entropy: [J/(kg K)].
        volume: [m3/kg].
        gibbs: h - T s [J/kg].
    """

    enthalpy: FloatArray
    entropy: FloatArray
    volume: FloatArray
    gibbs: FloatArray


def ice_state(pressure: npt.ArrayLike, temperature: npt.ArrayLike) -> IceState:
    """Enthalpy, entropy, volume and Gibbs energy of ice Ih.

    The reference state is that of IAPWS-95 (and, within 1e-4 kJ/kg, of IF97), so that differences
    from liquid water and steam are physical. Whether ice is the stable phase is not asked.

    IAPWS R10-06(2009), eq. 1 and its derivatives of Table 4.

    Args:
        pressure: [Pa], above 0 to 210 MPa.
        temperature: [K], above 0 to 273.16 K.
    """
    p, T = broadcast(pressure, temperature)
    covered = (p > 0.0) & (p <= _HIGHEST_PRESSURE) & (T > 0.0) & (T <= _TRIPLE_TEMPERATURE)
    p, T = np.where(covered, p, np.nan), np.where(covered, T, np.nan)
    tau = T / _TRIPLE_TEMPERATURE
    excess = (p - _NORMAL_PRESSURE) / _TRIPLE_PRESSURE
    g0, g0_p = _power_series(_G0, excess)
    r2, r2_p = _power_series(_R2, excess)
    first, second = _term(_T1, tau), _term(_T2, tau)
    gibbs = g0 - _S0 * T + _TRIPLE_TEMPERATURE * np.real(_R1 * first + r2 * second)
    entropy = _S0 - np.real(_R1 * _term_slope(_T1, tau) + r2 * _term_slope(_T2, tau))
    volume = g0_p + _TRIPLE_TEMPERATURE * np.real(r2_p * second)
    return IceState(*(np.asarray(v) for v in (gibbs + T * entropy, entropy, volume, gibbs)))


def melting_temperature(pressure: npt.ArrayLike) -> FloatArray:
    """Temperature [K] at which ice Ih melts, at a pressure [Pa].

    IAPWS R14-08(2011), eq. 1, solved for T by Newton steps: 273.1525 K at one atmosphere. NaN
    outside 611.657 Pa (the triple point) to 208.566 MPa.
    """
    p = np.asarray(pressure, dtype=np.float64)
    inside = (p >= _TRIPLE_PRESSURE) & (p <= _melting_pressure(_LOWEST_MELTING_TEMPERATURE)[0])
    p = np.where(inside, p, np.nan)
    T = np.full_like(p, _TRIPLE_TEMPERATURE)
    for _ in range(_NEWTON_STEPS):
        melting, slope = _melting_pressure(T)
        T = T - (melting - p) / slope
    return np.asarray(T)


def _melting_pressure(temperature: npt.ArrayLike) -> tuple[FloatArray, FloatArray]:
    theta = np.asarray(temperature, dtype=np.float64) / _TRIPLE_TEMPERATURE
    ratio = 1.0 + sum(a * (1.0 - theta**b) for a, b in _MELTING)
    slope = -sum(a * b * theta ** (b - 1.0) for a, b in _MELTING)
    return (
        np.asarray(_TRIPLE_PRESSURE * ratio),
        np.asarray(_TRIPLE_PRESSURE / _TRIPLE_TEMPERATURE * slope),
    )


def _power_series(
    coefficients: tuple[complex, ...], excess: FloatArray
) -> tuple[FloatArray, FloatArray]:
    value = sum(c * excess**k for k, c in enumerate(coefficients))
    slope = sum(k * c * excess ** (k - 1) for k, c in enumerate(coefficients) if k)
    return np.asarray(value), np.asarray(slope) / _TRIPLE_PRESSURE


def _term(t: complex, tau: FloatArray) -> FloatArray:
    return np.asarray(
        (t - tau) * np.log(t - tau)
        + (t + tau) * np.log(t + tau)
        - 2.0 * t * np.log(t)
        - tau * tau / t
    )


def _term_slope(t: complex, tau: FloatArray) -> FloatArray:
    return np.asarray(np.log(t + tau) - np.log(t - tau) - 2.0 * tau / t)
