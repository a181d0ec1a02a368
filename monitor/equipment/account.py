"""The exergy account of one control volume: the same for every kind of equipment.

Mass, energy, entropy and exergy are counted over the ports. Where the readings do not close:

- A mass imbalance is valued as an unaccounted flow that leaves at the mean state of the inlets, so
  that a bad flow meter does not pass for entropy generation. Where next to nothing comes in (a
  vessel discharges), it has the mean state of the outlets: a stagnant pipe's says nothing.
- An energy residual leaves as heat where the site file says so (``heat_loss = "balance"``);
  otherwise it is an imbalance, stored as it is.

Destroyed exergy is T0 * S_gen (Gouy-Stodola). The exergy balance over the same ports gives it a
second time; the difference, `closure`, is the energy that the readings do not account for.
Source: Bejan, Tsatsaronis, Moran, Thermal Design and Optimization (1996), chapters 3.2 to 3.5.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Sequence

    from monitor.equipment.base import Content, Drawn, FloatArray, StreamState
    from monitor.thermo.dead_state import DeadState

__all__ = [
    "Account",
    "Balances",
    "Destruction",
    "account",
    "balances",
    "content_rates",
    "content_uncertainty",
    "destruction",
]

# Inlets that carry less than this share of what the outlets carry do not value what is missing.
_LITTLE = 0.1


@dataclass(frozen=True)
class Rates:
    """Rates of change of a vessel's content: kg/s, W, W/K."""

    mass: FloatArray | float = 0.0
    internal_energy: FloatArray | float = 0.0
    entropy: FloatArray | float = 0.0


@dataclass(frozen=True)
class Balances:
    """What is the same at every dead state.

    Attributes:
        mass_imbalance: in - out - stored [kg/s].
        energy_imbalance: in - out - stored - known losses, the unaccounted flow taken out [W].
        heat_loss: heat that leaves by balance [W].
        unmeasured_heat: heat that leaves at the dead state by the kind's own law [W].
        unaccounted_enthalpy, unaccounted_entropy: what the unaccounted flow carries [W], [W/K].
        rates: of the vessel's content.
    """

    mass_imbalance: FloatArray
    energy_imbalance: FloatArray
    heat_loss: FloatArray
    unmeasured_heat: FloatArray
    unaccounted_enthalpy: FloatArray
    unaccounted_entropy: FloatArray
    rates: Rates


@dataclass(frozen=True)
class Account:
    """The exergy account of one control volume against one dead state; all [W], shape (n,).

    ``exergy_in = exergy_out + heat_loss_exergy + unaccounted + stored_rate + destroyed + closure``
    holds to rounding, by construction of ``closure``.
    """

    exergy_in: FloatArray
    exergy_out: FloatArray
    heat_loss_exergy: FloatArray
    unaccounted: FloatArray
    stored_rate: FloatArray
    destroyed: FloatArray
    closure: FloatArray
    fuel: FloatArray
    product: FloatArray


@dataclass(frozen=True)
class Destruction:
    """The part of an account that Gouy and Stodola give, without exergies: all [W]."""

    heat_loss_exergy: FloatArray
    unaccounted: FloatArray
    stored_rate: FloatArray
    destroyed: FloatArray


def content_rates(drawn: Drawn) -> Rates:
    """Rates of change of what the vessel holds, over each cell."""
    held = drawn.content
    if held is None:
        return Rates()
    return Rates(
        mass=np.diff(held.mass) / drawn.interval,
        internal_energy=np.diff(held.internal_energy) / drawn.interval,
        entropy=np.diff(held.entropy) / drawn.interval,
    )


def balances(drawn: Drawn) -> Balances:
    """Count mass and energy over the ports of one control volume."""
    inlets, outlets = drawn.facing("in"), drawn.facing("out")
    rates = content_rates(drawn)
    mass = _sum(inlets, "mass_flow") - _sum(outlets, "mass_flow") - rates.mass
    unaccounted = _unaccounted_state(inlets, outlets)
    if unaccounted is None:
        # No water at all, or fuel alone: its mass leaves as flue gas, which nobody meters.
        mass = np.zeros_like(mass)
        enthalpy = entropy = mass
    else:
        mass = mass - _sum([s for s in inlets if s.medium == "fuel"], "mass_flow", like=mass)
        mass = mass + _sum([s for s in outlets if s.medium == "fuel"], "mass_flow", like=mass)
        # Closed to rounding is closed: an absent state must not turn nothing into NaN.
        closed = np.abs(mass) <= 1e-12 * np.abs(_sum(inlets, "mass_flow"))
        enthalpy = np.where(closed, 0.0, mass * unaccounted[0])
        entropy = np.where(closed, 0.0, mass * unaccounted[1])
    unmeasured = np.broadcast_to(drawn.item.kind.unmeasured_heat(drawn), mass.shape).astype(float)
    residual = (
        _sum(inlets, "energy")
        - _sum(outlets, "energy")
        - rates.internal_energy
        - unmeasured
        - enthalpy
    )
    by_balance = drawn.item.options.heat_loss == "balance"
    nothing = np.zeros_like(residual)
    return Balances(
        mass_imbalance=mass,
        energy_imbalance=nothing if by_balance else residual,
        heat_loss=residual if by_balance else nothing,
        unmeasured_heat=unmeasured,
        unaccounted_enthalpy=enthalpy,
        unaccounted_entropy=entropy,
        rates=rates,
    )


def destruction(drawn: Drawn, counted: Balances, dead: DeadState) -> Destruction:
    """What is destroyed and what leaves unused, against one dead state."""
    inlets, outlets = drawn.facing("in"), drawn.facing("out")
    T0 = dead.temperature
    stated = drawn.item.options.boundary_temperature
    boundary = T0 if stated is None else stated
    heat_entropy = counted.heat_loss / boundary
    heat_exergy = counted.heat_loss - T0 * heat_entropy
    unaccounted = (
        counted.unaccounted_enthalpy
        - T0 * counted.unaccounted_entropy
        - dead.gibbs * counted.mass_imbalance
    )
    stored_rate = (
        counted.rates.internal_energy
        - T0 * counted.rates.entropy
        - dead.gibbs * np.asarray(counted.rates.mass)
    )
    entropy_generation = (
        _add(*(s.entropy_at(dead) for s in outlets))
        - _add(*(s.entropy_at(dead) for s in inlets))
        + counted.unaccounted_entropy
        + heat_entropy
        + counted.unmeasured_heat / T0
        + counted.rates.entropy
    )
    # Burning turns the fuel's exergy above its heating value into nothing; there is no entropy
    # of a fuel in the steam tables, so it joins Gouy-Stodola as what it is worth.
    chemical = _sum(inlets, "chemical") - _sum(outlets, "chemical")
    return Destruction(
        heat_loss_exergy=np.asarray(heat_exergy),
        unaccounted=np.asarray(unaccounted),
        stored_rate=np.asarray(stored_rate),
        destroyed=np.asarray(T0 * entropy_generation + chemical),
    )


def account(drawn: Drawn, counted: Balances, dead: DeadState) -> Account:
    """Draw up the exergy account against one dead state."""
    exergy_in = _add(*(s.exergy(dead) for s in drawn.facing("in")))
    exergy_out = _add(*(s.exergy(dead) for s in drawn.facing("out")))
    gone = destruction(drawn, counted, dead)
    balance = exergy_in - exergy_out - gone.heat_loss_exergy - gone.unaccounted - gone.stored_rate
    fuel, product = drawn.item.kind.fuel(drawn, dead)
    return Account(
        exergy_in=exergy_in,
        exergy_out=exergy_out,
        heat_loss_exergy=gone.heat_loss_exergy,
        unaccounted=gone.unaccounted,
        stored_rate=np.broadcast_to(gone.stored_rate, gone.destroyed.shape).astype(float),
        destroyed=gone.destroyed,
        closure=np.asarray(balance - gone.destroyed),
        fuel=fuel,
        product=product,
    )


def content_uncertainty(drawn: Drawn, dead: DeadState, moved: Sequence[Content]) -> FloatArray:
    """Standard uncertainty of ``destroyed`` from the gauges of what the vessel holds [W].

    The gauges' errors at the two ends of a cell count as independent: an upper bound, since an
    offset that stays cancels. First-order propagation, JCGM 100:2008 (GUM), eq. 10.

    Args:
        drawn: a vessel with its content.
        dead: the dead state.
        moved: what the content would be with each gauge in turn higher by its uncertainty.
    """
    held = drawn.content
    T0, options = dead.temperature, drawn.item.options
    variance = np.zeros_like(T0)
    if held is None:
        return variance
    state = _unaccounted_state(drawn.facing("in"), drawn.facing("out"))
    h, s = (variance, variance) if state is None else state
    stated = options.boundary_temperature
    boundary = T0 if stated is None else stated
    for other in moved:
        for end in (slice(None, -1), slice(1, None)):
            mass = (other.mass - held.mass)[end]
            generated = (other.entropy - held.entropy)[end] - s * mass
            if options.heat_loss == "balance":
                energy = (other.internal_energy - held.internal_energy)[end]
                generated = generated - (energy - h * mass) / boundary
            variance = variance + np.square(T0 * generated / drawn.interval)
    return np.asarray(np.sqrt(variance))


def _unaccounted_state(
    inlets: Sequence[StreamState], outlets: Sequence[StreamState]
) -> tuple[FloatArray, FloatArray] | None:
    """Enthalpy and entropy that an unaccounted flow is valued at.

    The flow-weighted mean of the inlets; of the outlets where the inlets carry little beside them;
    where nothing flows, the plain mean of what has a state.
    """
    entering = [s for s in inlets if s.medium == "water"]
    water = entering + [s for s in outlets if s.medium == "water"]
    if not water:
        return None
    flow = np.maximum(np.array([s.mass_flow for s in water]), 0.0)
    is_inlet = (np.arange(len(water)) < len(entering)).reshape(-1, *[1] * (flow.ndim - 1))
    enthalpy = np.array([s.enthalpy for s in water])
    entropy = np.array([s.entropy for s in water])
    into = np.add.reduce(np.where(is_inlet, flow, 0.0))
    out = np.add.reduce(np.where(is_inlet, 0.0, flow))
    weight = np.where(is_inlet == (into >= _LITTLE * out), flow, 0.0)
    idle = into + out == 0
    weight = np.where(idle, np.isfinite(enthalpy), weight)
    total = np.add.reduce(weight)
    # A stream without flow must not spoil the mean with a state that is absent.
    with np.errstate(invalid="ignore"):
        return (
            np.add.reduce(np.where(weight == 0, 0.0, weight * enthalpy)) / total,
            np.add.reduce(np.where(weight == 0, 0.0, weight * entropy)) / total,
        )


def _sum(states: Sequence[StreamState], name: str, like: FloatArray | None = None) -> FloatArray:
    if not states and like is not None:
        return np.zeros_like(like)
    return _add(*(getattr(s, name) for s in states))


def _add(*terms: FloatArray) -> FloatArray:
    return np.add.reduce(terms) if terms else np.zeros(1)
