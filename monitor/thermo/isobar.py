"""Temperature along an isobar: from pressure and enthalpy, or pressure and entropy, by IF97.

IF97's own backward equations leave up to 25 mK. Here a first estimate comes from a polynomial that
is fitted at first use to the forward equations themselves (within 0.1 mK over the subcritical
plant range); one batch of forward equations at that estimate then gives h, s and v, and the last
step goes along the isobar by dh = T ds. Where the polynomial does not reach (region 3, above
16.5 MPa, above 800 degC), a bracketing root finder works on the forward equations.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import chebyshev

from monitor.thermo import engine, polynomial
from monitor.thermo.engine import ENTHALPY, ENTROPY
from monitor.thermo.saturation import (
    CRITICAL_PRESSURE,
    REGION_3_TEMPERATURE,
    SIDE_STEP,
    saturation_pressure,
    saturation_temperature,
)

if TYPE_CHECKING:
    from monitor.thermo.arrays import FloatArray

__all__ = ["solve_single_phase"]

_X_DEGREE, _Y_DEGREE = 40, 30
_LOWEST_LIQUID_PRESSURE = 2000.0  # below it the liquid isobar is too short to scale by
_LAST_STEP = 1e-3  # [K] the longest step that the slope of the estimate is trusted with


@dataclass(frozen=True, eq=False)
class _Estimate:
    """T of one phase as a polynomial in x (from T_sat) and y (from h or s, scaled to the isobar).

    Attributes:
        vapour: whether the phase is vapour.
        column: `ENTHALPY` or `ENTROPY`, what the isobar is followed by.
        lowest: the lowest T_sat of the fit [K].
        coefficients: over x (rows), side by side: of T over y, of dT/dy over y, and of h or s at
            the isobar's other end (800 degC, or 0 degC).
    """

    vapour: bool
    column: int
    lowest: float
    coefficients: FloatArray

    def __call__(
        self, t_sat: FloatArray, at_saturation: FloatArray, target: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        """Return T [K] and its slope along the isobar; NaN outside the fit."""
        x = (t_sat - self.lowest) * (2.0 / (REGION_3_TEMPERATURE - self.lowest)) - 1.0
        along = polynomial.combine(polynomial.terms(x, _X_DEGREE), self.coefficients)
        surface, gradient = along[:, : _Y_DEGREE + 1], along[:, _Y_DEGREE + 1 : -1]
        far_end = along[:, -1]
        low, high = (at_saturation, far_end) if self.vapour else (far_end, at_saturation)
        scale = 2.0 / (high - low)
        y = (target - low) * scale - 1.0
        inside = (np.abs(x) <= 1.0) & (np.abs(y) <= 1.0)
        # Far outside, the terms would only overflow.
        across = polynomial.terms(np.where(inside, y, 0.0), _Y_DEGREE)
        temperature = np.einsum("ij,ij->i", surface, across)
        slope = np.einsum("ij,ij->i", gradient, across[:, :-1]) * scale
        return np.where(inside, temperature, np.nan), slope


@cache
def _estimate(*, vapour: bool, column: int) -> _Estimate:
    lowest = float(
        saturation_temperature(engine.LOWEST_PRESSURE if vapour else _LOWEST_LIQUID_PRESSURE)
    )
    x, y = chebyshev.chebpts1(_X_DEGREE + 1), chebyshev.chebpts1(_Y_DEGREE + 1)
    t_sat = lowest + 0.5 * (x + 1.0) * (REGION_3_TEMPERATURE - lowest)
    pressure = saturation_pressure(t_sat)
    if vapour:
        ends = t_sat * (1.0 + SIDE_STEP), np.full_like(t_sat, engine.HIGHEST_TEMPERATURE)
    else:
        ends = np.full_like(t_sat, engine.LOWEST_TEMPERATURE), t_sat * (1.0 - SIDE_STEP)
    low, high = (engine.evaluate_column(pressure, end, column) for end in ends)
    target = low[:, None] + (high - low)[:, None] * 0.5 * (y + 1.0)
    p, first, last = (np.repeat(v, y.size) for v in (pressure, *ends))
    temperature = _bracketed(p, first, last, target.ravel(), column).reshape(target.shape)
    surface = polynomial.fit(y, temperature.T)
    far_end = high if vapour else low
    over_y = np.vstack([surface, chebyshev.chebder(surface), far_end])
    return _Estimate(
        vapour=vapour, column=column, lowest=lowest, coefficients=polynomial.fit(x, over_y.T)
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
    """Find T where h or s has the target value, on one side of saturation or above critical.

    Args:
        pressure: [Pa], shape (n,).
        t_sat: saturation temperature [K]; NaN above the critical pressure.
        at_saturation: h or s of this phase at saturation; NaN above the critical pressure.
        target: h [J/kg] or s [J/(kg K)].
        column: `ENTHALPY` or `ENTROPY`, what the target is.
        vapour: which side of saturation; above the critical pressure either will do.

    Returns:
        T [K], shape (n,), and h, s, v, shape (n, 3), all NaN where there is no such state. The
        target's own column is the target exactly.
    """
    temperature = np.full(pressure.size, np.nan)
    values = np.full((pressure.size, 3), np.nan)
    if pressure.size == 0:
        return temperature, values
    estimate = _estimate(vapour=vapour, column=column)
    for part in polynomial.chunks(pressure.size):
        first, slope = estimate(t_sat[part], at_saturation[part], target[part])
        temperature[part], values[part] = _finish(
            pressure[part], first, slope, target[part], column
        )
    rest = np.isnan(temperature) & np.isfinite(target)
    if rest.any():
        low, high = _brackets(pressure[rest], t_sat[rest], vapour=vapour)
        found = _bracketed(pressure[rest], low, high, target[rest], column)
        # No slope: what is left over at a found root is a jump between two regions' equations.
        temperature[rest], values[rest] = _finish(
            pressure[rest], found, np.zeros_like(found), target[rest], column
        )
    return temperature, values


def _finish(
    pressure: FloatArray, first: FloatArray, slope: FloatArray, target: FloatArray, column: int
) -> tuple[FloatArray, FloatArray]:
    """Evaluate at a close temperature and go the last step along the isobar: dh = T ds."""
    values = engine.evaluate(pressure, first)
    left_over = target - values[:, column]
    step = left_over * slope
    temperature = first + step
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


def _brackets(
    pressure: FloatArray, t_sat: FloatArray, *, vapour: bool
) -> tuple[FloatArray, FloatArray]:
    highest = np.where(
        pressure <= engine.REGION_5_PRESSURE,
        engine.REGION_5_TEMPERATURE,
        engine.HIGHEST_TEMPERATURE,
    )
    lowest = np.full_like(pressure, engine.LOWEST_TEMPERATURE)
    subcritical = pressure <= CRITICAL_PRESSURE
    if vapour:
        return np.where(subcritical, t_sat * (1.0 + SIDE_STEP), lowest), highest
    return lowest, np.where(subcritical, t_sat * (1.0 - SIDE_STEP), highest)


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
