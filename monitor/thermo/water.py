"""States of water and steam by IAPWS-IF97, whole arrays at a time.

Every function takes numbers or arrays that broadcast, in SI, and returns a `State` of the common
shape. No point raises: a point that the formulation does not cover, or that its inputs do not fix,
is NaN with ``valid`` False.

Range: 273.15 K to 1073.15 K up to 100 MPa, to 2273.15 K up to 50 MPa, and from 611.213 Pa up.
Source: IAPWS R7-97(2012).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from monitor.thermo import engine
from monitor.thermo.arrays import broadcast
from monitor.thermo.engine import ENTHALPY, ENTROPY, VOLUME
from monitor.thermo.isobar import solve_above_region_3_pressure, solve_single_phase
from monitor.thermo.limits import (
    CRITICAL_DENSITY,
    CRITICAL_PRESSURE,
    CRITICAL_TEMPERATURE,
    HIGHEST_PRESSURE,
    LOWEST_PRESSURE,
    REGION_3_TEMPERATURE,
)
from monitor.thermo.saturation import LIQUID, VAPOUR, saturation_properties
from monitor.thermo.saturation_line import (
    near_saturation,
    saturation_pressure,
    saturation_temperature,
)

if TYPE_CHECKING:
    import numpy.typing as npt

    from monitor.thermo.arrays import BoolArray, FloatArray

__all__ = [
    "CRITICAL_PRESSURE",
    "CRITICAL_TEMPERATURE",
    "State",
    "near_saturation",
    "saturated",
    "saturation_pressure",
    "saturation_temperature",
    "state_ph",
    "state_ps",
    "state_pt",
    "state_px",
    "state_tx",
]

_CRITICAL_VOLUME = 1.0 / CRITICAL_DENSITY


@dataclass(frozen=True, eq=False)
class State:
    """States of water, arrays of one shape.

    Attributes:
        pressure: [Pa].
        temperature: [K].
        enthalpy: [J/kg].
        entropy: [J/(kg K)].
        volume: specific volume [m3/kg].
        dryness: mass of vapour / mass: 1.0 dry or superheated, 0.0 liquid, between when wet, NaN
            above both the critical pressure and the critical temperature.
        valid: False where the state is not covered or not fixed; everything computed is NaN there.
    """

    pressure: FloatArray
    temperature: FloatArray
    enthalpy: FloatArray
    entropy: FloatArray
    volume: FloatArray
    dryness: FloatArray
    valid: BoolArray

    @property
    def internal_energy(self) -> FloatArray:
        """Specific internal energy u = h - p v [J/kg]."""
        return np.asarray(self.enthalpy - self.pressure * self.volume)


def state_pt(
    pressure: npt.ArrayLike,
    temperature: npt.ArrayLike,
    *,
    side: Literal["vapour", "liquid"] | npt.ArrayLike | None = None,
) -> State:
    """State from pressure and temperature.

    On the saturation line p and T fix no state: points within 3.3e-5 (relative) of p_sat, which
    is 0.5 to 2.7 mK, are invalid unless ``side`` says which phase is meant; they then get the
    saturated phase at that pressure. Other points ignore ``side``.

    Args:
        pressure: [Pa].
        temperature: [K].
        side: "vapour" or "liquid" for all points; or per point +1 for vapour, -1 for liquid, 0
            for not known.

    Raises:
        ValueError: ``side`` is a word other than these two.
    """
    p, T, which = broadcast(pressure, temperature, _side_numbers(side))
    values, on_saturation = engine.evaluate_off_saturation(p.ravel(), T.ravel())
    t = T.ravel()
    chosen = on_saturation & (np.abs(which.ravel()) > 0)
    if chosen.any():
        t = t.copy()
        t[chosen] = saturation_temperature(p.ravel()[chosen])
        both = saturation_properties(p.ravel()[chosen], t[chosen])
        vapour = which.ravel()[chosen] > 0
        values[chosen] = np.where(vapour[:, None], both[:, VAPOUR], both[:, LIQUID])
    return _single_phase(p, t, values)


def state_px(pressure: npt.ArrayLike, dryness: npt.ArrayLike) -> State:
    """State on the saturation line from pressure [Pa] and dryness fraction (0 to 1)."""
    p, x = broadcast(pressure, dryness)
    return _mixture(p, saturation_temperature(p), x)


def state_tx(temperature: npt.ArrayLike, dryness: npt.ArrayLike) -> State:
    """State on the saturation line from temperature [K] and dryness fraction (0 to 1)."""
    T, x = broadcast(temperature, dryness)
    return _mixture(saturation_pressure(T), T, x)


def saturated(pressure: npt.ArrayLike) -> tuple[State, State]:
    """Saturated liquid and saturated vapour at a pressure [Pa]."""
    (p,) = broadcast(pressure)
    t = saturation_temperature(p.ravel())
    both = saturation_properties(p.ravel(), t)
    liquid = _state(p, t, both[:, LIQUID], np.zeros(p.size))
    return liquid, _state(p, t, both[:, VAPOUR], np.ones(p.size))


def state_ph(pressure: npt.ArrayLike, enthalpy: npt.ArrayLike) -> State:
    """State from pressure [Pa] and enthalpy [J/kg], wet states included.

    The forward equations at the temperature found give the enthalpy and the entropy back within
    1e-3 J/kg and 2e-6 J/(kg K), up to 100 MPa and through region 3; within 0.5 mK and 100 Pa of the
    critical point, where the isotherm is flat, within 0.1 J/kg. Where the equations of two regions
    meet, IF97 leaves gaps in h and s (30 J/kg at 350 degC, 134 J/kg at the boundary between regions
    2 and 3): what lies in a gap gets the boundary's temperature.
    """
    return _on_isobar(pressure, enthalpy, ENTHALPY)


def state_ps(pressure: npt.ArrayLike, entropy: npt.ArrayLike) -> State:
    """State from pressure [Pa] and entropy [J/(kg K)], wet states included.

    ``state_ps(p2, s1).enthalpy`` is the end of an isentropic expansion. Accuracy as `state_ph`.
    """
    return _on_isobar(pressure, entropy, ENTROPY)


def _on_isobar(pressure: npt.ArrayLike, target: npt.ArrayLike, column: int) -> State:
    p, wanted = broadcast(pressure, target)
    shape, p, wanted = p.shape, p.ravel(), wanted.ravel()
    t_sat = saturation_temperature(p)
    temperature, values = t_sat.copy(), np.full((p.size, 3), np.nan)
    x = np.full(p.size, np.nan)
    low = t_sat <= REGION_3_TEMPERATURE
    for solve, where in ((_below_region_3, low), (_from_region_3_on, ~low)):
        if where.all():
            temperature, values, x = solve(p, t_sat, wanted, column)
            break
        index = np.flatnonzero(where)
        if index.size:
            found = solve(p[index], t_sat[index], wanted[index], column)
            temperature[index], values[index], x[index] = found
    dryness = np.where(np.isnan(x), _phase(p, temperature, values[:, VOLUME]), x)
    return _state(p.reshape(shape), temperature, values, dryness)


def _below_region_3(
    p: FloatArray, t_sat: FloatArray, wanted: FloatArray, column: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """T, h-s-v and the dryness of what is wet (NaN beside), up to 350 degC at saturation."""
    liquid, vapour, x = _within_the_dome(p, t_sat, wanted, column)
    temperature = t_sat.copy()
    values = liquid + x[:, None] * (vapour - liquid)
    values[:, column] = wanted
    for branch, where in ((True, ~(x <= 1.0)), (False, x < 0.0)):
        index = np.flatnonzero(where)
        if index.size:
            temperature[index], values[index] = solve_single_phase(
                p[index],
                t_sat[index],
                (vapour if branch else liquid)[index, column],
                wanted[index],
                column=column,
                vapour=branch,
            )
    return temperature, values, np.where((x >= 0.0) & (x <= 1.0), x, np.nan)


def _from_region_3_on(
    p: FloatArray, t_sat: FloatArray, wanted: FloatArray, column: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """The same above 350 degC at saturation, and above the critical pressure."""
    temperature, values = np.full(p.size, np.nan), np.full((p.size, 3), np.nan)
    x = np.full(p.size, np.nan)
    covered = np.flatnonzero((p > LOWEST_PRESSURE) & (p <= HIGHEST_PRESSURE))
    temperature[covered], values[covered] = solve_above_region_3_pressure(
        p[covered], wanted[covered], column=column
    )
    below = np.flatnonzero(np.isfinite(t_sat))
    if below.size:
        liquid, vapour, share = _within_the_dome(p[below], t_sat[below], wanted[below], column)
        wet = (share >= 0.0) & (share <= 1.0)
        index, share = below[wet], share[wet]
        x[index], temperature[index] = share, t_sat[index]
        values[index] = liquid[wet] + share[:, None] * (vapour[wet] - liquid[wet])
        values[index, column] = wanted[index]
    return temperature, values, x


def _within_the_dome(
    p: FloatArray, t_sat: FloatArray, wanted: FloatArray, column: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    both = saturation_properties(p, t_sat)
    liquid, vapour = both[:, LIQUID], both[:, VAPOUR]
    width = vapour[:, column] - liquid[:, column]
    # At the critical point itself the dome has no width.
    return liquid, vapour, (wanted - liquid[:, column]) / np.where(width == 0.0, np.nan, width)


def _mixture(pressure: FloatArray, temperature: FloatArray, dryness: FloatArray) -> State:
    p, t, x = pressure.ravel(), temperature.ravel(), dryness.ravel()
    x = np.where((x >= 0.0) & (x <= 1.0), x, np.nan)
    both = saturation_properties(p, t)
    values = both[:, LIQUID] + x[:, None] * (both[:, VAPOUR] - both[:, LIQUID])
    return _state(pressure, t, values, x)


def _single_phase(pressure: FloatArray, temperature: FloatArray, values: FloatArray) -> State:
    dryness = _phase(pressure.ravel(), temperature, values[:, VOLUME])
    return _state(pressure, temperature, values, dryness)


def _phase(pressure: FloatArray, temperature: FloatArray, volume: FloatArray) -> FloatArray:
    # Below the critical pressure the critical volume lies between those of the two phases, so no
    # saturation temperature is needed to tell them apart.
    supercritical = (pressure >= CRITICAL_PRESSURE) & (temperature >= CRITICAL_TEMPERATURE)
    return np.where(supercritical | np.isnan(volume), np.nan, volume > _CRITICAL_VOLUME)


def _state(
    pressure: FloatArray, temperature: FloatArray, values: FloatArray, dryness: FloatArray
) -> State:
    shape = pressure.shape
    valid = np.isfinite(values[:, VOLUME])
    return State(
        pressure=pressure,
        temperature=temperature.reshape(shape),
        enthalpy=values[:, ENTHALPY].reshape(shape),
        entropy=values[:, ENTROPY].reshape(shape),
        volume=values[:, VOLUME].reshape(shape),
        dryness=np.where(valid, dryness, np.nan).reshape(shape),
        valid=valid.reshape(shape),
    )


def _side_numbers(side: Literal["vapour", "liquid"] | npt.ArrayLike | None) -> npt.ArrayLike:
    if side is None:
        return 0.0
    if isinstance(side, str):
        if side not in ("vapour", "liquid"):
            raise ValueError(f"side is '{side}'; write 'vapour', 'liquid', or +1, -1, 0 per point")
        return 1.0 if side == "vapour" else -1.0
    return side
