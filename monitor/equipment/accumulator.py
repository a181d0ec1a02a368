"""Wet steam accumulator: a closed vessel of boiling water, charged and discharged.

What it holds follows from level and pressure (`saturated_vessel`). What is stored is non-flow
exergy E = U + p0 V - T0 S - g0 m: never flow exergy, which would count (p - p0) V too much.

Exergy returned / exergy stored belongs to a period, not to a cell: over a shift or a day it is the
period's product over its fuel (discharged over charged less the rise of what is stored), which the
roll-ups give as psi. A period of a few full cycles tells the vessel; one with more discharge than
charge tells how it was run.

While nothing but little flows, what the balance misses is the standing loss. Mass that the gauges
find or miss is valued as liquid, h_f, so that a level's noise of half a per cent does not pass for
megawatts: Q = sum m (h - h_f) in - out - (dU - h_f dm) / dt.
Source: Bejan, Tsatsaronis, Moran (1996), eq. 3.8 (physical exergy of a closed system).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Annotated, cast

import numpy as np

from monitor.equipment.base import (
    ConditionFigure,
    Content,
    Drawn,
    Figure,
    FloatArray,
    Item,
    Kind,
    Options,
    PortSpec,
    Signal,
    measured,
    total,
)
from monitor.equipment.saturated_vessel import exergy_rise, saturated_content
from monitor.equipment.working import Working, ratio
from monitor.site.models import Reference
from monitor.site.units import Quantity
from monitor.thermo.water import saturated

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from monitor.equipment.working import AtHand
    from monitor.thermo.dead_state import DeadState

__all__ = ["Accumulator", "AccumulatorOptions"]


class AccumulatorOptions(Options):
    """Keys of an accumulator's table.

    Attributes:
        volume: of the vessel [m^3].
        level: tag of the liquid's share of the volume.
        pressure: tag of the vessel's pressure.
    """

    volume: Annotated[float, measured(Quantity.VOLUME)]
    level: Reference
    pressure: Reference

    def signals(self) -> dict[str, tuple[Reference, Quantity]]:
        """Level and pressure."""
        return {
            "level": (self.level, Quantity.FRACTION),
            "pressure": (self.pressure, Quantity.PRESSURE),
        }


class Accumulator(Kind):
    """See the module's docstring."""

    name = "accumulator"
    title = "Steam accumulator"
    ports = (
        PortSpec("charge", "in", least=0, most=None),
        PortSpec("discharge", "out", most=None),
    )
    options = AccumulatorOptions
    fuel_and_product = (
        "fuel: exergy charged less the rise of what is stored; product: exergy discharged"
    )

    def content(self, item: Item, signals: Mapping[str, Signal]) -> Content:
        """Mass, energy and entropy in the vessel at the cells' ends."""
        volume = cast("AccumulatorOptions", item.options).volume
        return saturated_content(volume, signals["level"].edges, signals["pressure"].edges)

    def load(self, drawn: Drawn) -> FloatArray:
        """Flow in or out, whichever is larger [kg/s]."""
        out = total([s.mass_flow for s in drawn.at("discharge")])
        charges = [s.mass_flow for s in drawn.at("charge")]
        return np.maximum(total(charges), out) if charges else out

    def fuel(self, drawn: Drawn, dead: DeadState) -> tuple[FloatArray, FloatArray]:
        """Exergy charged less what stays in the vessel, exergy discharged [W]."""
        out = total([s.exergy(dead) for s in drawn.at("discharge")])
        charged = [s.exergy(dead) for s in drawn.at("charge")]
        into = total(charged) if charged else np.zeros_like(out)
        return np.asarray(into - exergy_rise(drawn, dead)), out

    def figures(self, item: Item) -> tuple[Figure, ...]:
        """Exergy held; standing loss while nothing flows, whole and per kelvin of difference."""
        del item
        both = (
            ("standing_loss", "standing heat loss", "kW", 20.0),
            ("heat_loss_coefficient", "heat-loss coefficient", "kW/K", 0.2),
        )
        held = Figure(
            "stored_exergy",
            "exergy stored, at the cell's end",
            "kWh",
            "both",
            0.0,
            judged=False,
            needs_load=False,
            follows_load=False,
        )
        return held, *(
            Figure(
                name,
                label,
                unit,
                "high",
                smallest,
                judged=False,
                needs_load=False,
                follows_load=False,
            )
            for name, label, unit, smallest in both
        )

    def condition(self, drawn: Drawn, dead: DeadState) -> dict[str, ConditionFigure]:
        """Values of `figures`: what the energy balance misses where next to nothing flows."""
        held = drawn.content
        if held is None:
            raise TypeError(f"accumulator '{drawn.item.id}' was drawn without its content")
        idle = np.abs(self.load(drawn)) < drawn.item.options.off_below
        pressure = drawn.signals["pressure"]
        liquid = saturated(pressure.value)[0]
        brought = [s.energy - s.mass_flow * liquid.enthalpy for s in drawn.facing("in")]
        taken = [s.energy - s.mass_flow * liquid.enthalpy for s in drawn.facing("out")]
        fall = liquid.enthalpy * np.diff(held.mass) - np.diff(held.internal_energy)
        missed = fall / drawn.interval - total(taken)
        loss = np.where(idle, total([missed, *brought]), np.nan) / 1e3
        flag = drawn.signals["level"].flag | pressure.flag
        ones = np.ones_like(loss)
        stored = (
            held.internal_energy[..., 1:]
            + dead.pressure * held.volume[..., 1:]
            - dead.temperature * held.entropy[..., 1:]
            - dead.gibbs * held.mass[..., 1:]
        )
        return {
            "stored_exergy": ConditionFigure(stored / 3.6e6, ones, flag),
            "standing_loss": ConditionFigure(loss, ones, flag),
            "heat_loss_coefficient": ConditionFigure(
                loss / (liquid.temperature - dead.temperature), ones, flag
            ),
        }

    def working(self, at: AtHand, figure: str) -> Iterator[Working]:
        """Steps to one figure: what the vessel holds, then its exergy or what its balance misses.

        No steps to a loss while the vessel is at work.
        """
        level, pressure = at.signals["level"], at.signals["pressure"]
        held = [
            _content_working(at, when, share, p)
            for when, share, p in (
                ("begin", level.before, pressure.before),
                ("end", level.after, pressure.after),
            )
        ]
        if figure == "stored_exergy":
            yield from held[1]
            yield _exergy_working(at, [step.value for step in held[1]])
            return
        if abs(at.account["load_kg_s"]) >= at.item.options.off_below:
            return
        liquid = saturated(pressure.value)[0]
        h_f, T = float(liquid.enthalpy) / 1e3, float(liquid.temperature) - 273.15
        for steps in held:
            yield from steps[:2]
        (m1, u1, _), (m2, u2, _) = ([step.value for step in steps] for steps in held)
        rows = (*((1.0, r) for r in at.at("charge")), *((-1.0, r) for r in at.at("discharge")))
        flowing = [(sign * r["mass_flow_kg_s"], r["enthalpy_kj_kg"]) for sign, r in rows]
        passing = math.fsum(m * (h - h_f) for m, h in flowing if m)
        rise = ((u2 - u1) * 1e3 - h_f * (m2 - m1)) / at.interval
        loss = Working(
            "standing heat loss",
            "Q = sum m (h - h_f) in - out - (dU - h_f dm) / dt",
            f"{passing:.4f} - ({1e3 * (u2 - u1):.4f} - {h_f:.4f} * {m2 - m1:.6f}) / "
            f"{at.interval:g}",
            passing - rise,
            "kW",
            is_figure=figure == "standing_loss",
        )
        yield loss
        if figure == "heat_loss_coefficient":
            name, formula = "heat-loss coefficient", "Q / (T_sat - T0)"
            yield from ratio(name, formula, loss.value, T - at.ambient, "kW/K")


def _content_working(at: AtHand, when: str, share: float, p: float) -> list[Working]:
    """Mass [kg], internal energy [MJ] and entropy [MJ/K] of what the vessel holds."""
    volume = cast("AccumulatorOptions", at.item.options).volume
    sides = saturated(p)
    masses = [
        volume * part / float(side.volume)
        for part, side in zip((share, 1.0 - share), sides, strict=True)
    ]
    energies, entropies = (
        [float(getattr(side, name)) for side in sides] for name in ("internal_energy", "entropy")
    )
    where = f"at the cell's {when}"
    told = (
        ("mass", "V [y / v_f + (1 - y) / v_g]", [1.0, 1.0], 1.0, "kg"),
        ("internal energy", "m_f u_f + m_g u_g", energies, 1e6, "MJ"),
        ("entropy", "m_f s_f + m_g s_g", entropies, 1e6, "MJ/K"),
    )
    numbers = f"V = {volume:g} m^3, y = {100 * share:.4f} %, p = {p / 1e5:.5f} bar(a)"
    return [
        Working(
            f"{name} held {where}",
            formula,
            numbers,
            math.fsum(m * x for m, x in zip(masses, each, strict=True)) / scale,
            unit,
        )
        for name, formula, each, scale, unit in told
    ]


def _exergy_working(at: AtHand, held: list[float]) -> Working:
    """E = U + p0 V - T0 S - g0 m."""
    mass, energy, entropy = held
    volume = cast("AccumulatorOptions", at.item.options).volume
    p0, T0, g0 = (float(x) for x in (at.dead.pressure, at.dead.temperature, at.dead.gibbs))
    stored = 1e6 * energy + p0 * volume - T0 * 1e6 * entropy - g0 * mass
    return Working(
        "exergy stored, at the cell's end",
        "E = (U + p0 V - T0 S - g0 m) / 3.6",
        f"({energy:.4f} + {p0 * volume / 1e6:.5f} - {T0:.2f} * {entropy:.7f} - "
        f"({g0 / 1e6:.8f}) * {mass:.4f}) MJ / 3.6",
        stored / 3.6e6,
        "kWh",
        is_figure=True,
    )
