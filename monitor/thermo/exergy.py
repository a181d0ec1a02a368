"""Exergy of streams, of stored water, of heat, and what is lost: the formulas, one each.

Sources: T. J. Kotas, The Exergy Method of Thermal Plant Analysis, 1985; A. Bejan, G. Tsatsaronis,
M. Moran, Thermal Design and Optimization, 1996.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    import numpy.typing as npt

    from monitor.thermo.arrays import FloatArray
    from monitor.thermo.dead_state import DeadState

__all__ = [
    "STANDARD_GRAVITY",
    "flow_exergy",
    "heat_exergy",
    "lost_work",
    "nonflow_exergy",
]

STANDARD_GRAVITY = 9.80665
"""[m/s2], 3rd CGPM (1901)."""


def flow_exergy(
    enthalpy: npt.ArrayLike,
    entropy: npt.ArrayLike,
    dead: DeadState,
    velocity: npt.ArrayLike = 0.0,
    height: npt.ArrayLike = 0.0,
) -> FloatArray:
    """Specific flow exergy of a stream [J/kg]: h - h0 - T0 (s - s0) + V^2/2 + g z.

    Args:
        enthalpy: h [J/kg].
        entropy: s [J/(kg K)].
        dead: the dead state, of a shape that broadcasts with the stream's.
        velocity: V [m/s].
        height: z above the surroundings' level [m].
    """
    V, z = np.asarray(velocity, dtype=np.float64), np.asarray(height, dtype=np.float64)
    return np.asarray(
        np.asarray(enthalpy, dtype=np.float64)
        - dead.temperature * np.asarray(entropy, dtype=np.float64)
        - dead.gibbs
        + 0.5 * V * V
        + STANDARD_GRAVITY * z
    )


def nonflow_exergy(
    internal_energy: npt.ArrayLike,
    volume: npt.ArrayLike,
    entropy: npt.ArrayLike,
    dead: DeadState,
) -> FloatArray:
    """Specific exergy of what a vessel holds [J/kg]: u - u0 + p0 (v - v0) - T0 (s - s0).

    It differs from the flow exergy of the same state by (p - p0) v: a vessel's content does no
    flow work.

    Args:
        internal_energy: u [J/kg].
        volume: v [m3/kg].
        entropy: s [J/(kg K)].
        dead: the dead state, of a shape that broadcasts with the content's.
    """
    return np.asarray(
        np.asarray(internal_energy, dtype=np.float64)
        + dead.pressure * np.asarray(volume, dtype=np.float64)
        - dead.temperature * np.asarray(entropy, dtype=np.float64)
        - dead.gibbs
    )


def heat_exergy(
    heat: npt.ArrayLike, boundary_temperature: npt.ArrayLike, dead_temperature: npt.ArrayLike
) -> FloatArray:
    """Exergy that goes with heat through a boundary at Tb: (1 - T0/Tb) Q, in the unit of Q.

    Heat that leaves at T0 carries none. Below T0 the sign turns: there, heat and its exergy flow
    in opposite directions. NaN where Tb is not above 0 K.

    Args:
        heat: Q [W] or [J].
        boundary_temperature: Tb [K].
        dead_temperature: T0 [K].
    """
    Tb = np.asarray(boundary_temperature, dtype=np.float64)
    T0 = np.asarray(dead_temperature, dtype=np.float64)
    carnot = 1.0 - T0 / np.where(Tb > 0.0, Tb, np.nan)
    return np.asarray(carnot * np.asarray(heat, dtype=np.float64))


def lost_work(dead_temperature: npt.ArrayLike, entropy_generation: npt.ArrayLike) -> FloatArray:
    """Exergy destroyed by an irreversible process: I = T0 S_gen (Gouy and Stodola).

    Args:
        dead_temperature: T0 [K], never degC.
        entropy_generation: S_gen [W/K], or per mass or time as wanted; the result follows it.
    """
    T0 = np.asarray(dead_temperature, dtype=np.float64)
    return np.asarray(T0 * np.asarray(entropy_generation, dtype=np.float64))
