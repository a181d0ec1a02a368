"""Temperature along an isobar: from pressure and enthalpy, or pressure and entropy, by IF97.

IF97's own backward equations leave up to 25 mK. Here a first estimate comes from a polynomial that
is fitted at first use to the forward equations themselves (within 0.1 mK); one batch of forward
equations at that estimate then gives h, s and v, and the last step goes along the isobar by
dh = T ds. Four polynomials serve regions 1 and 2: each below 350 degC up to the saturation line,
and each above 16.5 MPa up to region 3, which `region3_isobar` looks after. Above 800 degC and in
what little the polynomials leave out, a bracketing root finder works on the forward equations.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import chebyshev

from monitor.thermo import engine, polynomial, region3_isobar
from monitor.thermo.engine import ENTHALPY, ENTROPY
from monitor.thermo.limits import (
    HIGHEST_TEMPERATURE,
    LOWEST_PRESSURE,
    LOWEST_TEMPERATURE,
    REGION_3_TEMPERATURE,
    REGION_5_PRESSURE,
    REGION_5_TEMPERATURE,
)
from monitor.thermo.region3 import boundary_temperature
from monitor.thermo.saturation import SIDE_STEP
from monitor.thermo.saturation_line import saturation_pressure, saturation_temperature

if TYPE_CHECKING:
    from monitor.thermo.arrays import FloatArray

__all__ = ["solve_above_region_3_pressure", "solve_single_phase"]

_X_DEGREE, _Y_DEGREE = 40, 30
_LOWEST_LIQUID_PRESSURE = 2000.0  # below it the liquid isobar is too short to scale by
_LAST_STEP = 1e-3  # [K] the longest step that the slope of the estimate is trusted with
_GAP = 0.01  # how far past its end an isobar is followed where two regions' equations leave a gap


@dataclass(frozen=True, eq=False)
class _Estimate:
    """T of one phase as a polynomial in x (the isobar) and y (h or s, scaled to the isobar).

    Attributes:
        vapour: whether the isobar begins at its near end (saturation, or region 3) and not ends.
        column: `ENTHALPY` or `ENTROPY`, what the isobar is followed by.
        first, last: the coordinate of the first and the last isobar of the fit.
        coefficients: over x (rows), side by side: of T over y, of dT/dy over y, and of h or s at
            the isobar's other end (800 degC, or 0 degC).
    """

    vapour: bool
    column: int
    first: float
    last: float
    coefficients: FloatArray

    def __call__(
        self, coordinate: FloatArray, at_near_end: FloatArray, target: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Return T [K] and its slope along the isobar; NaN outside the fit."""
        x = (coordinate - self.first) * (2.0 / (self.last - self.first)) - 1.0
        along = polynomial.combine(polynomial.terms(x, _X_DEGREE), self.coefficients)
        surface, gradient = along[:, : _Y_DEGREE + 1], along[:, _Y_DEGREE + 1 : -1]
        far_end = along[:, -1]
        low, high = (at_near_end, far_end) if self.vapour else (far_end, at_near_end)
        scale = 2.0 / (high - low)
        y = (target - low) * scale - 1.0
        past_near_end = (-1.0 - y) if self.vapour else (y - 1.0)
        y = np.where(
            (past_near_end > 0.0) & (past_near_end < _GAP), -1.0 if self.vapour else 1.0, y
        )
        inside = (np.abs(x) <= 1.0) & (np.abs(y) <= 1.0)
        # Far outside, the terms would only overflow.
        across = polynomial.terms(np.where(inside, y, 0.0), _Y_DEGREE)
        temperature = polynomial.dot(surface, across)
        slope = polynomial.dot(gradient, across[:, :-1]) * scale
        return np.where(inside, temperature, np.nan), slope


@cache
def _estimate(*, vapour: bool, column: int) -> _Estimate:
    """The estimate below 350 degC; its coordinate is the saturation temperature."""
    lowest = float(saturation_temperature(LOWEST_PRESSURE if vapour else _LOWEST_LIQUID_PRESSURE))
    t_sat = _nodes(lowest, REGION_3_TEMPERATURE)
    near_end = t_sat * (1.0 + SIDE_STEP if vapour else 1.0 - SIDE_STEP)
    isobars = saturation_pressure(t_sat)
    return _fitted(lowest, REGION_3_TEMPERATURE, isobars, near_end, vapour=vapour, column=column)


@cache
def _dense_estimate(*, vapour: bool, column: int) -> _Estimate:
    """The estimate from 16.5 MPa on, where region 3 lies between regions 1 and 2."""
    first, last = region3_isobar.RANGE
    isobars = region3_isobar.pressure_of(_nodes(first, last))
    near_end = (
        boundary_temperature(isobars) * (1.0 + SIDE_STEP)
        if vapour
        else np.full_like(isobars, REGION_3_TEMPERATURE)
    )
    return _fitted(first, last, isobars, near_end, vapour=vapour, column=column)


def _nodes(first: float, last: float) -> FloatArray:
    return np.asarray(first + 0.5 * (chebyshev.chebpts1(_X_DEGREE + 1) + 1.0) * (last - first))


def _fitted(
    first: float,
    last: float,
    isobars: FloatArray,
    near_end: FloatArray,
    *,
    vapour: bool,
    column: int,
) -> _Estimate:
    x, y = chebyshev.chebpts1(_X_DEGREE + 1), chebyshev.chebpts1(_Y_DEGREE + 1)
    far_end = np.full_like(isobars, HIGHEST_TEMPERATURE if vapour else LOWEST_TEMPERATURE)
    ends = (near_end, far_end) if vapour else (far_end, near_end)
    low, high = (engine.evaluate_column(isobars, end, column) for end in ends)
    target = low[:, None] + (high - low)[:, None] * 0.5 * (y + 1.0)
    p, coldest, hottest = (np.repeat(v, y.size) for v in (isobars, *ends))
    temperature = _bracketed(p, coldest, hottest, target.ravel(), column).reshape(target.shape)
    surface = polynomial.fit(y, temperature.T)
    over_y = np.vstack([surface, chebyshev.chebder(surface), high if vapour else low])
    return _Estimate(
        vapour=vapour,
        column=column,
        first=first,
        last=last,
        coefficients=polynomial.fit(x, over_y.T),
    )


def solve_single_phase(
    pressure: FloatArray,
    t_sat: FloatArray,
    at_saturation: FloatArray,
    target: FloatArray,
    *,
    column: int,
    vapour: bool,
) -> tuple[FloatArray, FloatArray]:
    """Find T where h or s has the target value, on one side of saturation, below 16.5 MPa.

    Args:
        pressure: [Pa], shape (n,).
        t_sat: saturation temperature [K], up to 623.15 K.
        at_saturation: h or s of this phase at saturation.
        target: h [J/kg] or s [J/(kg K)].
        column: `ENTHALPY` or `ENTROPY`, what the target is.
        vapour: which side of saturation.

    Returns:
        T [K], shape (n,), and h, s, v, shape (n, 3), all NaN where there is no such state. The
        target's own column is the target exactly.
    """
    estimate = _estimate(vapour=vapour, column=column)
    if vapour:
        coldest, hottest = t_sat * (1.0 + SIDE_STEP), np.full_like(t_sat, REGION_5_TEMPERATURE)
    else:
        coldest, hottest = np.full_like(t_sat, LOWEST_TEMPERATURE), t_sat * (1.0 - SIDE_STEP)
    return _solve(estimate, pressure, t_sat, at_saturation, target, (coldest, hottest))


def solve_above_region_3_pressure(
    pressure: FloatArray, target: FloatArray, *, column: int
) -> tuple[FloatArray, FloatArray]:
    """Find T where h or s has the target value, from 16.5 MPa on, as if water never boiled.

    Between the phases (p below critical) the temperature and the values are those of the equation
    of region 3 alone: the caller knows the saturation properties and puts the mixture there.
    Where the equations of two regions leave a gap in h or s at their boundary (up to 0.14 kJ/kg),
    T is that of the boundary.

    Args:
        pressure: [Pa], 16.529 to 100 MPa, shape (n,).
        target: h [J/kg] or s [J/(kg K)].
        column: `ENTHALPY` or `ENTROPY`, what the target is.

    Returns:
        T and values as `solve_single_phase`.
    """
    temperature = np.full(pressure.size, np.nan)
    values = np.full((pressure.size, 3), np.nan)
    edge = region3_isobar.edges(pressure, column)
    cold = target <= np.maximum(edge.region_1, edge.cold)
    hot = ~cold & (target >= np.minimum(edge.hot, edge.region_2))
    boundary = boundary_temperature(pressure)
    highest = np.where(pressure <= REGION_5_PRESSURE, REGION_5_TEMPERATURE, HIGHEST_TEMPERATURE)
    for vapour, where, near_end in ((False, cold, edge.region_1), (True, hot, edge.region_2)):
        index = np.flatnonzero(where)
        if index.size == 0:
            continue
        if vapour:
            coldest, hottest = boundary * (1.0 + SIDE_STEP), highest
        else:
            coldest = np.full_like(highest, LOWEST_TEMPERATURE)
            hottest = np.full_like(highest, REGION_3_TEMPERATURE)
        temperature[index], values[index] = _solve(
            _dense_estimate(vapour=vapour, column=column),
            pressure[index],
            region3_isobar.coordinate(pressure[index]),
            near_end[index],
            target[index],
            (coldest[index], hottest[index]),
        )
    between = np.flatnonzero((target > edge.cold) & ~cold & ~hot)
    if between.size:
        on = region3_isobar.Edges(*(e[between] for e in edge))
        temperature[between], values[between] = region3_isobar.solve(
            pressure[between], on, target[between], column=column
        )
    return temperature, values


def _solve(
    estimate: _Estimate,
    pressure: FloatArray,
    coordinate: FloatArray,
    at_near_end: FloatArray,
    target: FloatArray,
    bounds: tuple[FloatArray, FloatArray],
) -> tuple[FloatArray, FloatArray]:
    temperature = np.full(pressure.size, np.nan)
    values = np.full((pressure.size, 3), np.nan)
    column = estimate.column
    for part in polynomial.chunks(pressure.size):
        first, slope = estimate(coordinate[part], at_near_end[part], target[part])
        within = bounds[0][part], bounds[1][part]
        temperature[part], values[part] = _finish(
            pressure[part], first, slope, target[part], column, within
        )
    rest = np.flatnonzero(np.isnan(temperature) & np.isfinite(target))
    if rest.size:
        within = bounds[0][rest], bounds[1][rest]
        found = _bracketed(pressure[rest], *within, target[rest], column)
        # No slope: what is left over at a found root is a jump between two regions' equations.
        temperature[rest], values[rest] = _finish(
            pressure[rest], found, np.zeros_like(found), target[rest], column, within
        )
    return temperature, values


def _finish(
    pressure: FloatArray,
    close: FloatArray,
    slope: FloatArray,
    target: FloatArray,
    column: int,
    within: tuple[FloatArray, FloatArray],
) -> tuple[FloatArray, FloatArray]:
    """Evaluate at a close temperature and go the last step along the isobar: dh = T ds."""
    first = np.clip(close, *within)
    values = engine.evaluate(pressure, first)
    left_over = target - values[:, column]
    temperature = np.clip(first + left_over * slope, *within)
    step = temperature - first
    mean = first + 0.5 * step
    if column == ENTROPY:
        values[:, ENTHALPY] += mean * left_over
    else:
        values[:, ENTROPY] += left_over / mean
    values[:, column] = target
    bad = ~(np.abs(step) <= _LAST_STEP)
    temperature[bad] = np.nan
    values[bad] = np.nan
    return temperature, values


def _bracketed(
    pressure: FloatArray, low: FloatArray, high: FloatArray, target: FloatArray, column: int
) -> FloatArray:
    """T between low and high by Chandrupatla's method; NaN where the target is not between."""
    # Half a second of import that the usual path does not need.
    from scipy.optimize.elementwise import find_root  # noqa: PLC0415

    def excess(temperature: FloatArray, p: FloatArray, wanted: FloatArray) -> FloatArray:
        found = engine.evaluate_column(p.ravel(), temperature.ravel(), column)
        return np.asarray(found.reshape(p.shape) - wanted)

    ends = excess(low, pressure, target), excess(high, pressure, target)
    between = (ends[0] <= 0.0) & (ends[1] >= 0.0)
    temperature = np.full(pressure.size, np.nan)
    if between.any():
        root = find_root(
            excess,
            (low[between], high[between]),
            args=(pressure[between], target[between]),
            tolerances={"xatol": 1e-10, "xrtol": 0.0, "fatol": 0.0, "frtol": 0.0},
        )
        temperature[between] = root.x
    return temperature
