"""Steam by libraries that the project does not use: seuif97, iapws, and iapws's tables in batch.

seuif97 (MIT) and iapws (GPL, tests only) are two implementations of IAPWS R7-97, made apart from
each other and from CoolProp.
"""

from __future__ import annotations

import numpy as np
import seuif97
from iapws.iapws97 import Const, _Bound_TP, _Region1, _Region2, _Region3, _Region5, _TSat_P

__all__ = ["by_iapws", "by_seuif97", "contributions", "regions", "sample"]

GAS_CONSTANT = 461.526


def sample(count, *, lowest, highest, coldest, hottest, seed):
    """Random states: pressures [Pa] even in their logarithm, temperatures [K]; off saturation."""
    rng = np.random.default_rng(seed)
    pressure = np.exp(rng.uniform(np.log(lowest), np.log(highest), 2 * count))
    temperature = rng.uniform(coldest, hottest, 2 * count)
    boiling = np.array([_TSat_P(p / 1e6) if p < 22.064e6 else 0.0 for p in pressure])
    clear = np.flatnonzero(np.abs(temperature - boiling) > 0.01)[:count]
    return pressure[clear], temperature[clear]


def by_seuif97(pressure, temperature):
    """h [J/kg], s [J/(kg K)] and v [m3/kg] of each state, shape (n, 3)."""
    points = zip(pressure / 1e6, temperature - 273.15, strict=True)
    found = [[seuif97.pt(p, t, 4), seuif97.pt(p, t, 5), seuif97.pt(p, t, 3)] for p, t in points]
    return np.array(found) * [1e3, 1e3, 1.0]


def by_iapws(pressure, temperature, volume):
    """The same by iapws's basic equations; in region 3, of the state of this volume and T.

    Returns:
        h, s, v, shape (n, 3), and the pressure [Pa] that the basic equation gives.
    """
    rows = []
    for p, T, v in zip(pressure / 1e6, temperature, volume, strict=True):
        region = _Bound_TP(T, p)
        if region == 3:
            state = _Region3(1.0 / v, T)
        else:
            state = {1: _Region1, 2: _Region2, 5: _Region5}[region](T, p) | {"P": p}
        rows.append([state["h"], state["s"], state["v"], state["P"]])
    table = np.array(rows) * [1e3, 1e3, 1.0, 1e6]
    return table[:, :3], table[:, 3]


def regions(pressure, temperature):
    """The region of each state, 1, 2, 3 or 5, by iapws."""
    return np.array([_Bound_TP(T, p) for p, T in zip(pressure / 1e6, temperature, strict=True)])


def contributions(region, pressure, temperature, volume):
    """What each coefficient of iapws's tables adds to h, s and v of states of one region.

    In region 3, whose equation is in density and temperature, the third is the pressure [Pa].

    Returns:
        Shape (n, coefficients, 3), and the same for what no coefficient scales, (n, 3).
    """
    p, T, v = (np.asarray(a)[:, None] for a in (pressure, temperature, volume))
    RT = GAS_CONSTANT * T
    none = np.zeros((len(p), 3))
    if region == 3:
        return _helmholtz(1.0 / v, T), none
    if region == 1:
        pi, tau = p / 16.53e6, 1386.0 / T
        i, j, n = Const.Region1_Li, Const.Region1_Lj, Const.Region1_n
        gamma = n * (7.1 - pi) ** i * (tau - 1.222) ** j
        by_pi, by_tau = -i / (7.1 - pi) * gamma, j / (tau - 1.222) * gamma
        return _gibbs(RT, p, pi, tau, gamma, by_pi, by_tau), none
    pi, tau, shift = (p / 1e6, 540.0 / T, 0.5) if region == 2 else (p / 1e6, 1000.0 / T, 0.0)
    i, j, n, j0, n0 = (
        getattr(Const, f"Region{region}_{name}") for name in ("Li", "Lj", "n", "cp0_Jo", "cp0_no")
    )
    ideal = n0 * tau**j0
    first = _gibbs(RT, p, pi, tau, ideal, 0.0 * ideal, j0 / tau * ideal)
    real = n * pi**i * (tau - shift) ** j
    second = _gibbs(RT, p, pi, tau, real, i / pi * real, j / (tau - shift) * real)
    fixed = np.column_stack([none[:, 0], -GAS_CONSTANT * np.log(pi), RT / p])
    return np.concatenate([first, second], axis=1), fixed


def _gibbs(RT, p, pi, tau, gamma, by_pi, by_tau):
    enthalpy = RT * tau * by_tau
    return np.stack([enthalpy, enthalpy * GAS_CONSTANT / RT - GAS_CONSTANT * gamma,
                     RT / p * pi * by_pi], axis=2)  # fmt: skip


def _helmholtz(rho, T):
    delta, tau = rho / 322.0, 647.096 / T
    i = np.append(Const.Region3_Li, 0)
    j = np.append(Const.Region3_Lj, 0)
    phi = np.append(Const.Region3_n, 1.0658070028513) * delta**i * tau**j
    by_delta, by_tau = i * phi, j * phi  # times delta, times tau
    phi[:, -1:] *= np.log(delta)
    by_delta[:, -1:] = 1.0658070028513
    RT = GAS_CONSTANT * T
    return np.stack(
        [RT * (by_tau + by_delta), GAS_CONSTANT * (by_tau - phi), rho * RT * by_delta], axis=2
    )
