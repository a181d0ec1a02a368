"""Region 3 of IAPWS R7-97: the Helmholtz equation in density and temperature, and its inverses.

Region 3 surrounds the critical point: above 350 degC, between the saturation line or the boundary
to region 2 and the liquid. CoolProp's batch call reaches it only through the supplementary
backward equations v(p, T), which leave 4e-6 in v and 10 kJ/kg in h close to the critical point.
Here the basic equation itself is solved.

Source: IAPWS R7-97(2012), eq. 28 and Table 30; the boundary to region 2, eqs. 5 and 6.
"""

from __future__ import annotations

from functools import cache
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from monitor.thermo import polynomial
from monitor.thermo.limits import (
    CRITICAL_DENSITY,
    CRITICAL_TEMPERATURE,
    HIGHEST_PRESSURE,
    REGION_3_HIGHEST_TEMPERATURE,
    REGION_3_PRESSURE,
    REGION_3_TEMPERATURE,
)
from monitor.thermo.saturation_line import saturation_pressure

if TYPE_CHECKING:
    from monitor.thermo.arrays import BoolArray, FloatArray

__all__ = [
    "HAIR",
    "Helmholtz",
    "boundary_pressure",
    "boundary_temperature",
    "covers",
    "density",
    "helmholtz",
    "saturated_densities",
]

HAIR = 2e-4
"""[K] So close below the critical temperature the two phases are taken as one: the equations of
the saturation line and of region 3 differ by more there than the phases do."""

_GAS_CONSTANT = 461.526
_LEAST_DENSITY, _MOST_DENSITY = 80.0, 850.0  # region 3 itself: 113 to 765
_PLAIN_STEPS = 4
_SETTLED = 1e-7  # of the density, a last step; the error left is as its square
_PATIENT_STEPS = 20  # within 0.1 K of the critical temperature
_SAFE_STEPS = 60

# Orthobaric densities over sqrt(Tc - T), fitted to the basic equation: where Newton starts from.
_LIQUID = (96.6071, -27.9141, 8.02555, -1.21858, 0.0736561)
_VAPOUR = (-97.2827, 25.8791, -3.60245, -0.159041, 0.0584824)

# IAPWS R7-97(2012), Table 30: I, J, n; the first coefficient stands before ln(delta).
_LOGARITHM = 0.10658070028513e1
_TERMS = (
    (0, 0, -0.15732845290239e2),
    (0, 1, 0.20944396974307e2),
    (0, 2, -0.76867707878716e1),
    (0, 7, 0.26185947787954e1),
    (0, 10, -0.28080781148620e1),
    (0, 12, 0.12053369696517e1),
    (0, 23, -0.84566812812502e-2),
    (1, 2, -0.12654315477714e1),
    (1, 6, -0.11524407806681e1),
    (1, 15, 0.88521043984318),
    (1, 17, -0.64207765181607),
    (2, 0, 0.38493460186671),
    (2, 2, -0.85214708824206),
    (2, 6, 0.48972281541877e1),
    (2, 7, -0.30502617256965e1),
    (2, 22, 0.39420536879154e-1),
    (2, 26, 0.12558408424308),
    (3, 0, -0.27999329698710),
    (3, 2, 0.13899799569460e1),
    (3, 4, -0.20189915023570e1),
    (3, 16, -0.82147637173963e-2),
    (3, 26, -0.47596035734923),
    (4, 0, 0.43984074473500e-1),
    (4, 2, -0.44476435428739),
    (4, 4, 0.90572070719733),
    (4, 26, 0.70522450087967),
    (5, 1, 0.10770512626332),
    (5, 3, -0.32913623258954),
    (5, 26, -0.50871062041158),
    (6, 0, -0.22175400873096e-1),
    (6, 2, 0.94260751665092e-1),
    (6, 26, 0.16436278447961),
    (7, 2, -0.13503372241348e-1),
    (8, 26, -0.14834345352472e-1),
    (9, 2, 0.57922953628084e-3),
    (9, 26, 0.32308904703711e-2),
    (10, 0, 0.80964802996215e-4),
    (10, 1, -0.16557679795037e-3),
    (11, 26, -0.44923899061815e-4),
)


class Helmholtz(NamedTuple):
    """The basic equation at some densities and temperatures, arrays of shape (n,).

    Attributes:
        pressure: [Pa].
        enthalpy: [J/kg].
        entropy: [J/(kg K)].
        stiffness: (dp/drho) at constant T [Pa m3/kg]; zero on a spinodal.
        tension: (dp/dT) at constant density [Pa/K].
        capacity: c_v [J/(kg K)].
    """

    pressure: FloatArray
    enthalpy: FloatArray
    entropy: FloatArray
    stiffness: FloatArray
    tension: FloatArray
    capacity: FloatArray


@cache
def _plan() -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """The equation as two matrix products.

    First tau^J (n, J) times coefficients gives, for each power of delta, its factor and the
    factor's first two logarithmic derivatives by tau; these times delta^I (n, 3 I), times weights,
    are phi and its derivatives.
    """
    i, j = (np.unique([term[k] for term in _TERMS]).astype(np.float64) for k in (0, 1))
    by_tau = np.zeros((3, j.size, i.size))
    for at, power, n in _TERMS:
        row, col = int(np.searchsorted(j, power)), int(np.searchsorted(i, at))
        by_tau[:, row, col] = n, n * power, n * power * (power - 1)
    by_delta = np.zeros((3, i.size, 6))
    by_delta[0, :, 0], by_delta[0, :, 1], by_delta[0, :, 2] = 1.0, i, i * (i - 1.0)
    by_delta[1, :, 3], by_delta[1, :, 4] = 1.0, i
    by_delta[2, :, 5] = 1.0
    first = np.concatenate(list(by_tau), axis=1)
    return i, j, first, by_delta.reshape(3 * i.size, 6)


def _powers(base: FloatArray, exponents: FloatArray) -> FloatArray:
    """Integer powers as columns, by products: the same to the last bit in any array."""
    highest = int(exponents[-1])
    all_powers = np.empty((base.size, highest + 1))
    all_powers[:, 0] = 1.0
    for k in range(1, highest + 1):
        np.multiply(all_powers[:, k - 1], base, out=all_powers[:, k])
    return all_powers[:, exponents.astype(int)]


def helmholtz(density: FloatArray, temperature: FloatArray) -> Helmholtz:
    """Evaluate the basic equation of region 3, anywhere (also between the phases).

    IAPWS R7-97(2012), eq. 28 and Table 31.

    Args:
        density: [kg/m3], shape (n,).
        temperature: [K], shape (n,).
    """
    out = np.empty((6, density.size))
    for part in polynomial.chunks(density.size):
        out[:, part] = _part(density[part], temperature[part])
    return Helmholtz(*out)


def _part(rho: FloatArray, T: FloatArray) -> tuple[FloatArray, ...]:
    i, j, first, second = _plan()
    delta, tau = rho / CRITICAL_DENSITY, CRITICAL_TEMPERATURE / T
    factors = polynomial.combine(_powers(tau, j), first).reshape(-1, 3, i.size)
    factors *= _powers(delta, i)[:, None, :]
    phi, d, dd, t, dt, tt = polynomial.combine(factors.reshape(-1, second.shape[0]), second).T
    phi = phi + _LOGARITHM * np.log(delta)
    d = d + _LOGARITHM
    dd = dd - _LOGARITHM
    RT = _GAS_CONSTANT * T
    return (
        rho * RT * d,
        RT * (t + d),
        _GAS_CONSTANT * (t - phi),
        RT * (2.0 * d + dd),
        _GAS_CONSTANT * rho * (d - dt),
        -_GAS_CONSTANT * tt,
    )


# IAPWS R7-97(2012), Table 1: the boundary between regions 2 and 3.
_B23 = (
    0.34805185628969e3,
    -0.11671859879975e1,
    0.10192970039326e-2,
    0.57254459862746e3,
    0.13918839778870e2,
)


def boundary_pressure(temperature: FloatArray) -> FloatArray:
    """Pressure [Pa] of the boundary to region 2 at T [K], 623.15 to 863.15 K (eq. 5)."""
    n1, n2, n3, _, _ = _B23
    return np.asarray(1e6 * ((n3 * temperature + n2) * temperature + n1))


def boundary_temperature(pressure: FloatArray) -> FloatArray:
    """Temperature [K] of the boundary to region 2 at p [Pa], from 16.529 MPa on (eq. 6)."""
    _, _, n3, n4, n5 = _B23
    return np.asarray(n4 + np.sqrt((pressure * 1e-6 - n5) / n3))


def covers(pressure: FloatArray, temperature: FloatArray) -> BoolArray:
    """Whether p [Pa] and T [K] lie in region 3 (its boundaries belong to regions 1 and 2)."""
    near = (temperature > REGION_3_TEMPERATURE) & (pressure > REGION_3_PRESSURE)
    if near.any():
        near &= (temperature <= REGION_3_HIGHEST_TEMPERATURE) & (pressure <= HIGHEST_PRESSURE)
        near[near] = pressure[near] > boundary_pressure(temperature[near])
    return near


def density(pressure: FloatArray, temperature: FloatArray, guess: FloatArray) -> FloatArray:
    """Density [kg/m3] of a single phase of region 3: the basic equation gives p back.

    Newton steps from the guess; the few points that do not settle on a stable root of the right
    phase (close to the critical point) are found between bounds.

    Args:
        pressure: [Pa], shape (n,).
        temperature: [K], shape (n,).
        guess: a density close by, shape (n,).
    """
    start = np.where((guess > _LEAST_DENSITY) & (guess < _MOST_DENSITY), guess, CRITICAL_DENSITY)
    rho, settled = _newton(pressure, temperature, start)
    below = np.flatnonzero(temperature < CRITICAL_TEMPERATURE)
    if below.size:
        liquid = pressure[below] > saturation_pressure(temperature[below])
        settled[below] &= liquid == (rho[below] > CRITICAL_DENSITY)
    rest = np.flatnonzero(~settled & np.isfinite(pressure) & np.isfinite(temperature))
    if rest.size:
        rho[rest] = _between_bounds(pressure[rest], temperature[rest])
    return rho


def saturated_densities(
    pressure: FloatArray, temperature: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Densities [kg/m3] of saturated liquid and vapour above 350 degC.

    As IAPWS R7-97(2012) defines them: both densities at which the basic equation of region 3 gives
    the pressure of the saturation line. Within `HAIR` of the critical temperature both are the
    critical density.

    Args:
        pressure: p_sat(T) [Pa], shape (n,).
        temperature: T [K], shape (n,).
    """
    distance = np.sqrt(np.maximum(CRITICAL_TEMPERATURE - temperature, 0.0))
    joined = temperature > CRITICAL_TEMPERATURE - HAIR
    both = []
    for coefficients in (_LIQUID, _VAPOUR):
        start = CRITICAL_DENSITY + distance * _horner(coefficients, distance)
        rho, settled = _newton(pressure, temperature, start)
        rest = np.flatnonzero(~settled & ~joined)
        if rest.size:
            rho[rest], settled[rest] = _newton(
                pressure[rest], temperature[rest], start[rest], steps=_PATIENT_STEPS
            )
        both.append(np.where(joined, CRITICAL_DENSITY, np.where(settled, rho, np.nan)))
    return both[0], both[1]


def _horner(coefficients: tuple[float, ...], x: FloatArray) -> FloatArray:
    total = np.zeros_like(x)
    for coefficient in reversed(coefficients):
        total = total * x + coefficient
    return total


def _newton(
    pressure: FloatArray, temperature: FloatArray, start: FloatArray, steps: int = _PLAIN_STEPS
) -> tuple[FloatArray, BoolArray]:
    """Density after a few Newton steps, and whether they settled on a stable root."""
    rho = start
    for _ in range(steps):
        at = helmholtz(rho, temperature)
        step = (pressure - at.pressure) / np.where(at.stiffness == 0.0, np.nan, at.stiffness)
        rho = np.clip(rho + step, _LEAST_DENSITY, _MOST_DENSITY)
    return rho, (np.abs(step) <= _SETTLED * rho) & (at.stiffness > 0.0)


def _between_bounds(pressure: FloatArray, temperature: FloatArray) -> FloatArray:
    """Density by Newton steps that fall back on halving, between the bounds of the phase."""
    low = np.full_like(pressure, _LEAST_DENSITY)
    high = np.full_like(pressure, _MOST_DENSITY)
    below = np.flatnonzero(temperature < CRITICAL_TEMPERATURE - HAIR)
    if below.size:
        saturation = saturation_pressure(temperature[below])
        liquid, vapour = saturated_densities(saturation, temperature[below])
        is_liquid = pressure[below] > saturation
        low[below] = np.where(is_liquid, liquid, low[below])
        high[below] = np.where(is_liquid, high[below], vapour)
    rho = 0.5 * (low + high)
    for _ in range(_SAFE_STEPS):
        at = helmholtz(rho, temperature)
        short = at.pressure < pressure
        low, high = np.where(short, rho, low), np.where(short, high, rho)
        with np.errstate(divide="ignore", invalid="ignore"):
            newton = rho + (pressure - at.pressure) / at.stiffness
        inside = (newton > low) & (newton < high)
        rho = np.where(inside, newton, 0.5 * (low + high))
    return rho
