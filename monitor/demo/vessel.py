"""The steam accumulator: the one dynamic store of the demo, integrated reading by reading.

Flows are constant from one reading to the next, so that mass and internal energy are plain sums.
The pressure follows from them: at saturation in a fixed volume V, U = a(p) + b(p) M.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING

import numpy as np

from monitor.thermo.water import state_px

if TYPE_CHECKING:
    from monitor.demo.plan import FloatArray

__all__ = ["Charging", "Vessel", "VesselRun", "run_vessel"]

LOWEST, HIGHEST, POINTS = 2.0e5, 12.5e5, 84_001
CHARGE_MOST = 2.4
PRESSURE_SET = 9.5e5


@dataclass(frozen=True)
class Vessel:
    """What the accumulator is: volume [m^3], standing loss [W/K], where it starts."""

    volume: float = 60.0
    standing_loss: float = 45.0
    start_pressure: float = 9.3e5
    level_set: float = 0.78


@dataclass(frozen=True)
class Charging:
    """The 12 bar header as the accumulator meets it, arrays of shape (n,).

    The header mixes turbine extraction with let-down steam; its enthalpy depends on the charge
    itself, h = h_e + (m_l (h_l - h_e) - Q) / (m_o + charge).

    Attributes:
        extraction_enthalpy: h_e [J/kg].
        let_down: m_l (h_l - h_e) - Q [W].
        other_flow: m_o, what else leaves the header [kg/s].
        fill_enthalpy: of the feed water that keeps the level [J/kg].
        ambient: [K].
        wanted_discharge: [kg/s].
    """

    extraction_enthalpy: FloatArray
    let_down: FloatArray
    other_flow: FloatArray
    fill_enthalpy: FloatArray
    ambient: FloatArray
    wanted_discharge: FloatArray


@dataclass(frozen=True)
class VesselRun:
    """What happened: flows of shape (n,), content of shape (n + 1,).

    Attributes:
        charge, discharge, fill: [kg/s].
        charge_enthalpy, discharge_enthalpy: [J/kg].
        loss: standing loss [W].
        pressure: [Pa]. mass: [kg]. internal_energy: [J]. entropy: [J/K].
        level: share of the volume that is liquid.
    """

    charge: FloatArray
    discharge: FloatArray
    fill: FloatArray
    charge_enthalpy: FloatArray
    discharge_enthalpy: FloatArray
    loss: FloatArray
    pressure: FloatArray
    mass: FloatArray
    internal_energy: FloatArray
    entropy: FloatArray
    level: FloatArray


def run_vessel(vessel: Vessel, at: Charging, interval: float) -> VesselRun:
    """Integrate the accumulator over the whole plan.

    Args:
        vessel: the vessel.
        at: what it meets.
        interval: time between readings [s].
    """
    flows, (mass, energy, close) = _integrate(vessel, at, interval)
    pressure = _pressure(vessel.volume, mass, energy, close)
    liquid, vapour = state_px(pressure, 0.0), state_px(pressure, 1.0)
    quality = (vessel.volume / mass - liquid.volume) / (vapour.volume - liquid.volume)
    charge, discharge, fill, charge_enthalpy, discharge_enthalpy, loss = flows
    return VesselRun(
        charge=charge,
        discharge=discharge,
        fill=fill,
        charge_enthalpy=charge_enthalpy,
        discharge_enthalpy=discharge_enthalpy,
        loss=loss,
        pressure=pressure,
        mass=mass,
        internal_energy=energy,
        entropy=mass * (liquid.entropy + quality * (vapour.entropy - liquid.entropy)),
        level=mass * (1.0 - quality) * liquid.volume / vessel.volume,
    )


def _coefficients(volume: float, pressure: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Find a(p) [J] and b(p) [J/kg] of U = a + b M at saturation in a fixed volume."""
    liquid, vapour = state_px(pressure, 0.0), state_px(pressure, 1.0)
    u_f = liquid.enthalpy - pressure * liquid.volume
    u_g = vapour.enthalpy - pressure * vapour.volume
    rho_f, rho_g = 1.0 / liquid.volume, 1.0 / vapour.volume
    slope = (rho_f * u_f - rho_g * u_g) / (rho_f - rho_g)
    return volume * rho_g * (u_g - slope), slope


def _pressure(
    volume: float, mass: FloatArray, energy: FloatArray, pressure: FloatArray
) -> FloatArray:
    """Saturation pressure of a vessel with this mass and internal energy, by Newton's method."""
    step = 50.0
    for _ in range(12):
        a, b = _coefficients(volume, pressure)
        a_up, b_up = _coefficients(volume, pressure + step)
        slope = ((a_up - a) + (b_up - b) * mass) / step
        change = (energy - a - b * mass) / slope
        pressure = np.clip(pressure + change, LOWEST, HIGHEST)
        if np.abs(change).max() < 1e-6:  # noqa: PLR2004 - a millionth of a pascal
            break
    return pressure


@cache
def _table(volume: float) -> tuple[list[float], list[float], list[float], list[float]]:
    """a(p), b(p), and enthalpy and temperature of saturated vapour, on a fine grid of p."""
    grid = np.linspace(LOWEST, HIGHEST, POINTS)
    a, b = _coefficients(volume, grid)
    vapour = state_px(grid, 1.0)
    return a.tolist(), b.tolist(), vapour.enthalpy.tolist(), vapour.temperature.tolist()


def _integrate(
    vessel: Vessel, at: Charging, interval: float
) -> tuple[FloatArray, tuple[FloatArray, FloatArray, FloatArray]]:
    """Step through time with plain floats; saturation properties come from a fine table."""
    spacing = (HIGHEST - LOWEST) / (POINTS - 1)
    a_of, b_of, h_of, T_of = _table(vessel.volume)
    mass_set = _mass_at(vessel, vessel.start_pressure, vessel.level_set)
    p, mass = vessel.start_pressure, mass_set
    a, b = _coefficients(vessel.volume, np.array([p]))
    energy = float(a[0] + b[0] * mass)
    count = at.ambient.size
    flows, masses, energies, pressures = [], [mass], [energy], [p]
    columns = zip(
        at.extraction_enthalpy.tolist(),
        at.let_down.tolist(),
        at.other_flow.tolist(),
        at.fill_enthalpy.tolist(),
        at.ambient.tolist(),
        at.wanted_discharge.tolist(),
        strict=True,
    )
    for h_e, let_down, other, h_fill, T0, wanted in columns:
        place = (p - LOWEST) / spacing
        i = int(place)
        share = place - i
        h_out = h_of[i] + share * (h_of[i + 1] - h_of[i])
        loss = vessel.standing_loss * (T_of[i] + share * (T_of[i + 1] - T_of[i]) - T0)
        charge = min(max(0.2 + 1.1e-5 * (PRESSURE_SET - p), 0.12), CHARGE_MOST)
        discharge = wanted * min(max((p - 5.2e5) / 0.8e5, 0.0), 1.0)
        fill = min(max(2e-4 * (mass_set - mass), 0.0), 1.5)
        h_in = h_e + let_down / (other + charge)
        flows.append((charge, discharge, fill, h_in, h_out, loss))
        mass += interval * (charge + fill - discharge)
        energy += interval * (charge * h_in + fill * h_fill - discharge * h_out - loss)
        for _ in range(3):
            place = (p - LOWEST) / spacing
            i = int(place)
            share = place - i
            da, db = a_of[i + 1] - a_of[i], b_of[i + 1] - b_of[i]
            held = a_of[i] + share * da + (b_of[i] + share * db) * mass
            p += (energy - held) / (da + db * mass) * spacing
        masses.append(mass)
        energies.append(energy)
        pressures.append(p)
    table = np.asarray(flows).T.reshape(6, count)
    return table, (np.asarray(masses), np.asarray(energies), np.asarray(pressures))


def _mass_at(vessel: Vessel, pressure: float, level: float) -> float:
    liquid, vapour = (state_px(np.array([pressure]), x) for x in (0.0, 1.0))
    share = level / liquid.volume + (1.0 - level) / vapour.volume
    return float(vessel.volume * share[0])
