"""Region 3 along an isobar: T, h, s and v from pressure and enthalpy, or pressure and entropy.

In p and s, or p and h, nothing is singular at the critical point nor at the saturation line: the
Jacobian (d(p, s) / d(rho, T)) is c_v times the square of the speed of sound, which stays clear of
zero even between the phases. So one polynomial over the whole of region 3, fitted at first use to
the basic equation of IAPWS R7-97, gives T and the density closely enough for two Newton steps.
"""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from numpy.polynomial import chebyshev

from monitor.thermo import engine, polynomial, region3
from monitor.thermo.engine import ENTHALPY, ENTROPY, VOLUME
from monitor.thermo.limits import HIGHEST_PRESSURE, REGION_3_PRESSURE, REGION_3_TEMPERATURE

if TYPE_CHECKING:
    from monitor.thermo.arrays import FloatArray

__all__ = ["RANGE", "Edges", "coordinate", "edges", "pressure_of", "solve"]

_SIDE = 1e-11  # a relative step into a region
_DEGREE = 40  # of the ends of the isobars
_X_DEGREE, _Y_DEGREE = 20, 28
_FIT_STEPS = 8
_ROUNDING = 1e-14
_ORIGIN = 13.9e6  # where the boundary to region 2, a parabola, has its vertex [Pa]


def coordinate(pressure: FloatArray) -> FloatArray:
    """What isobars are told apart by: the root of the distance from the boundary's vertex."""
    return np.asarray(np.sqrt(pressure - _ORIGIN))


def pressure_of(coordinate: FloatArray) -> FloatArray:
    """The inverse of `coordinate`."""
    return np.asarray(_ORIGIN + coordinate * coordinate)


RANGE = (
    float(coordinate(np.asarray(REGION_3_PRESSURE))),
    float(coordinate(np.asarray(HIGHEST_PRESSURE))),
)
"""The first and the last isobar of region 3, as coordinates."""


class Edges(NamedTuple):
    """h or s on the two boundaries of region 3 along isobars, arrays of shape (n,).

    Attributes:
        region_1, cold: at 350 degC, by the equation of region 1 and by that of region 3.
        hot, region_2: at the boundary to region 2, by the equations of regions 3 and 2.
    """

    region_1: FloatArray
    cold: FloatArray
    hot: FloatArray
    region_2: FloatArray


def edges(pressure: FloatArray, column: int) -> Edges:
    """Where isobars enter and leave region 3.

    Args:
        pressure: [Pa], 16.529 to 100 MPa, shape (n,).
        column: `ENTHALPY` or `ENTROPY`.
    """
    x = _scaled(pressure)
    return Edges(*polynomial.combine(polynomial.terms(x, _DEGREE), _edges(column)).T)


def solve(
    pressure: FloatArray, edge: Edges, target: FloatArray, *, column: int
) -> tuple[FloatArray, FloatArray]:
    """Find T and the density where the basic equation has both the pressure and the target.

    Args:
        pressure: [Pa], shape (n,).
        edge: `edges` of these isobars.
        target: h [J/kg] or s [J/(kg K)], between ``edge.cold`` and ``edge.hot``.
        column: `ENTHALPY` or `ENTROPY`, what the target is.

    Returns:
        T [K], shape (n,), and h, s, v, shape (n, 3); the target's own column is the target exactly.
        Below the critical pressure they are those of a single phase, stable or not.
    """
    temperature = np.empty(pressure.size)
    values = np.empty((pressure.size, 3))
    for part in polynomial.chunks(pressure.size):
        p, t = pressure[part], target[part]
        y = 2.0 * (t - edge.cold[part]) / (edge.hot[part] - edge.cold[part]) - 1.0
        along = polynomial.combine(polynomial.terms(_scaled(p), _X_DEGREE), _surface(column))
        across = polynomial.terms(y, _Y_DEGREE)
        T = polynomial.dot(along[:, : _Y_DEGREE + 1], across)
        rho = np.exp(polynomial.dot(along[:, _Y_DEGREE + 1 :], across))
        rho, T, _ = _step(p, rho, T, t, column)
        rho, T, values[part] = _step(p, rho, T, t, column)
        temperature[part] = _inside(p, T)
    return temperature, values


def _scaled(pressure: FloatArray) -> FloatArray:
    first, last = RANGE
    x = (coordinate(pressure) - first) * (2.0 / (last - first)) - 1.0
    return np.asarray(np.clip(x, -1.0, 1.0))  # rounding alone goes past


def _inside(pressure: FloatArray, temperature: FloatArray) -> FloatArray:
    """Rounding must not carry a temperature over a boundary, where h jumps."""
    coldest = REGION_3_TEMPERATURE * (1.0 + _ROUNDING)
    hottest = region3.boundary_temperature(pressure) * (1.0 - _ROUNDING)
    return np.asarray(np.clip(temperature, coldest, hottest))


def _step(
    pressure: FloatArray, rho: FloatArray, T: FloatArray, target: FloatArray, column: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """One Newton step in density and temperature; and h, s, v at its end, by dh = T ds + v dp."""
    at = region3.helmholtz(rho, T)
    dp = pressure - at.pressure
    by_entropy = column == ENTROPY
    ds = target - at.entropy if by_entropy else (target - at.enthalpy - dp / rho) / T
    heating, stretching = at.capacity / T, at.tension / (rho * rho)
    determinant = at.stiffness * heating + at.tension * stretching
    to_rho = rho + (dp * heating - at.tension * ds) / determinant
    to_T = T + (at.stiffness * ds + stretching * dp) / determinant
    mean_T, mean_v = 0.5 * (T + to_T), 0.5 * (1.0 / rho + 1.0 / to_rho)
    values = np.empty((pressure.size, 3))
    values[:, VOLUME] = 1.0 / to_rho
    if by_entropy:
        values[:, ENTHALPY] = at.enthalpy + mean_T * ds + mean_v * dp
        values[:, ENTROPY] = target
    else:
        values[:, ENTHALPY] = target
        values[:, ENTROPY] = at.entropy + (target - at.enthalpy - mean_v * dp) / mean_T
    return to_rho, to_T, values


@cache
def _edges(column: int) -> FloatArray:
    pressure = _isobars(_DEGREE)
    cold, hot = _boundaries(pressure)
    region_1 = np.full_like(pressure, REGION_3_TEMPERATURE)
    region_2 = region3.boundary_temperature(pressure) * (1.0 + _SIDE)
    sides = [engine.evaluate_column(pressure, T, column) for T in (region_1, cold, hot, region_2)]
    return polynomial.fit(chebyshev.chebpts1(_DEGREE + 1), np.column_stack(sides))


@cache
def _surface(column: int) -> FloatArray:
    """T and ln(rho) over x (rows) and y (columns, one after the other).

    Each isobar is followed from 350 degC on, node by node, by Newton steps from the node before.
    """
    pressure = _isobars(_X_DEGREE)
    x, y = (chebyshev.chebpts1(degree + 1) for degree in (_X_DEGREE, _Y_DEGREE))
    T, hot = _boundaries(pressure)
    rho = 1.0 / engine.evaluate_column(pressure, T, VOLUME)
    low, high = (engine.evaluate_column(pressure, t, column) for t in (T, hot))
    found = []
    for node in y:
        target = low + (high - low) * 0.5 * (node + 1.0)
        for _ in range(_FIT_STEPS):
            rho, T, _values = _step(pressure, rho, T, target, column)
        found.append((T, np.log(rho)))
    both = np.array(found)  # (y, 2, x)
    over_y = polynomial.fit(y, both.reshape(y.size, -1)).reshape(both.shape)
    return polynomial.fit(x, over_y.transpose(2, 1, 0).reshape(x.size, -1))


def _isobars(degree: int) -> FloatArray:
    first, last = RANGE
    return pressure_of(first + 0.5 * (chebyshev.chebpts1(degree + 1) + 1.0) * (last - first))


def _boundaries(pressure: FloatArray) -> tuple[FloatArray, FloatArray]:
    cold = np.full_like(pressure, REGION_3_TEMPERATURE * (1.0 + _SIDE))
    return cold, region3.boundary_temperature(pressure) * (1.0 - _SIDE)
