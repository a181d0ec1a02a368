"""What a simulated plant is: streams, equipment, events, and the balances that they obey."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Literal

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Mapping

    import numpy.typing as npt
    import pandas as pd

    from monitor.demo.plan import FloatArray
    from monitor.thermo.dead_state import DeadState

__all__ = [
    "Content",
    "Machine",
    "Plant",
    "Truth",
    "destroyed",
    "energy_residual",
    "entropy_generation",
    "exergy",
    "mass_residual",
]

Medium = Literal["water", "fuel", "power", "heat"]


@dataclass(frozen=True)
class Truth:
    """One stream as it truly is: arrays over time, SI.

    Attributes:
        medium: water, fuel, power or heat.
        energy: [W]; for water m h, for fuel m LHV.
        mass_flow: [kg/s]; zero for power and heat.
        pressure, temperature, enthalpy, entropy, dryness: of water, NaN elsewhere. ``dryness`` is
            NaN outside the wet region.
        entropy_rate: [W/K]; for water m s, for heat Q / Tb, zero for power and fuel.
        chemical: exergy of a fuel above its heating value [W].
    """

    medium: Medium
    energy: FloatArray
    mass_flow: FloatArray
    pressure: FloatArray
    temperature: FloatArray
    enthalpy: FloatArray
    entropy: FloatArray
    dryness: FloatArray
    entropy_rate: FloatArray
    chemical: FloatArray


@dataclass(frozen=True)
class Content:
    """What a vessel holds at each reading and one interval after the last, shape (n + 1,)."""

    mass: FloatArray
    internal_energy: FloatArray
    entropy: FloatArray


@dataclass(frozen=True)
class Machine:
    """One piece of equipment: stream ids in and out, the heat it loses to the ambient [W]."""

    id: str
    kind: str
    inlets: tuple[str, ...]
    outlets: tuple[str, ...]
    heat_loss: FloatArray
    content: Content | None = None


@dataclass(frozen=True)
class Plant:
    """A simulated plant.

    Attributes:
        times: integer seconds since 1970-01-01 UTC, shape (n,).
        interval: between readings [s].
        live, reference: the dead states.
        streams, machines: by id.
        signals: what is measured but belongs to no stream, SI: ``barometer`` [Pa], ``ambient``
            [K], ``ld62_position`` [1], ``ld62_outlet_gauge`` [K], ``acc_level`` [1], ...
        conditions: ``(equipment, figure)``: the true condition figures.
        events: columns ``start``, ``end`` (UTC), ``equipment``, ``what``, ``amount``, ``unit``.
    """

    times: npt.NDArray[np.int64]
    interval: float
    live: DeadState
    reference: DeadState
    streams: Mapping[str, Truth]
    machines: Mapping[str, Machine]
    signals: Mapping[str, FloatArray]
    conditions: Mapping[tuple[str, str], FloatArray]
    events: pd.DataFrame = field(repr=False)


def mass_residual(plant: Plant, machine: Machine) -> FloatArray:
    """Water mass in - out - stored [kg/s]; fuel leaves as flue gas, which is not water."""
    residual = _net(plant, machine, "mass_flow", water_only=True)
    if machine.content is not None:
        residual = residual - np.diff(machine.content.mass) / plant.interval
    return residual


def energy_residual(plant: Plant, machine: Machine) -> FloatArray:
    """Energy in - out - lost - stored [W]."""
    residual = _net(plant, machine, "energy") - machine.heat_loss
    if machine.content is not None:
        residual = residual - np.diff(machine.content.internal_energy) / plant.interval
    return residual


def entropy_generation(plant: Plant, machine: Machine, T0: FloatArray) -> FloatArray:
    """Entropy out - in + stored [W/K]; heat that is lost crosses at the dead state's T0 [K]."""
    made = machine.heat_loss / T0 - _net(plant, machine, "entropy_rate")
    if machine.content is not None:
        made = made + np.diff(machine.content.entropy) / plant.interval
    return made


def destroyed(plant: Plant, machine: Machine, dead: DeadState) -> FloatArray:
    """Exergy destroyed [W]: T0 S_gen (Gouy-Stodola), and a fuel's part above its LHV."""
    made = entropy_generation(plant, machine, dead.temperature)
    return dead.temperature * made + _net(plant, machine, "chemical")


def exergy(stream: Truth, dead: DeadState) -> FloatArray:
    """Exergy rate of a stream [W]: m (h - T0 s - g0), or W, or Q (1 - T0 / Tb)."""
    free = stream.energy - dead.temperature * stream.entropy_rate + stream.chemical
    return free - dead.gibbs * stream.mass_flow if stream.medium == "water" else free


def _net(plant: Plant, machine: Machine, name: str, *, water_only: bool = False) -> FloatArray:
    """Sum an attribute over the inlets, less the outlets."""
    net = np.zeros(plant.times.size)
    for sign, ids in ((1.0, machine.inlets), (-1.0, machine.outlets)):
        for stream in (plant.streams[key] for key in ids):
            if not water_only or stream.medium == "water":
                net += sign * getattr(stream, name)
    return net
