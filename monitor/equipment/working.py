"""How a figure is worked out from the states of its streams, in steps that a person can follow.

A kind gives its steps from the stored figures of its streams alone (kJ/kg, bar, degC, kW): a second
way to the number that `Kind.condition` computes from arrays.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from monitor.equipment.heat_transfer import log_mean_difference
from monitor.thermo.water import saturated, saturation_temperature, state_ps

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping, Sequence

    import numpy.typing as npt

    from monitor.equipment.base import Item
    from monitor.thermo.dead_state import DeadState

__all__ = [
    "AtHand",
    "CellSignal",
    "Working",
    "boiling_at",
    "conductance_of",
    "difference",
    "enthalpies_at_boiling",
    "heat_taken",
    "isentropic_end",
    "ratio",
    "through_an_orifice",
]


@dataclass(frozen=True)
class Working:
    """One step: what it gives, the formula, the numbers in it, the outcome with its unit.

    ``is_figure`` marks the step whose outcome is the figure that is explained.
    """

    gives: str
    formula: str
    numbers: str
    value: float
    unit: str
    is_figure: bool = False


@dataclass(frozen=True)
class CellSignal:
    """A signal of the equipment's own in one cell [SI, pressures absolute].

    Attributes:
        value: its mean.
        before, after: its values at the cell's ends.
    """

    value: float
    before: float
    after: float


@dataclass(frozen=True)
class AtHand:
    """What the steps may use in one cell.

    Attributes:
        item: the equipment.
        streams: the stored figures of its streams, by stream and column, with ``volume_m3_kg``.
        account: the stored figures of the equipment itself, by column.
        dead: the live dead state.
        signals: the equipment's own, by option.
        interval: length of the cell [s].
    """

    item: Item
    streams: Mapping[str, Mapping[str, float]]
    account: Mapping[str, float]
    dead: DeadState
    signals: Mapping[str, CellSignal]
    interval: float

    @property
    def ambient(self) -> float:
        """T0 [degC]."""
        return float(self.dead.temperature) - 273.15

    def at(self, *ports: str) -> list[Mapping[str, float]]:
        """The streams at some ports, in order."""
        return [self.streams[s] for port in ports for s in self.item.ports.get(port, ())]

    def only(self, port: str) -> Mapping[str, float]:
        """The first stream at a port."""
        return self.at(port)[0]

    def total(self, column: str, *ports: str) -> float:
        """Sum of one rate over some ports; what is absent counts as nothing."""
        return math.fsum(row[column] for row in self.at(*ports) if not math.isnan(row[column]))


def ratio(
    gives: str, formula: str, part: float, whole: float, unit: str = "%"
) -> Iterator[Working]:
    """A share: the last step of many figures."""
    factor = 100.0 if unit == "%" else 1.0
    value = factor * part / whole if whole > 0 else math.nan
    yield Working(gives, formula, f"{part:.5f} / {whole:.5f}", value, unit, is_figure=True)


def difference(gives: str, formula: str, one: float, other: float, unit: str = "K") -> Working:
    """A difference of two readings as the last step."""
    numbers = f"{one:.4f} - {other:.4f}"
    return Working(gives, formula, numbers, one - other, unit, is_figure=True)


def isentropic_end(before: Mapping[str, float], p_bar: float, names: Sequence[str]) -> Working:
    """Enthalpy after an isentropic change from a state to a pressure."""
    s1 = before["entropy_kj_kgk"]
    way = "expansion" if p_bar < before["pressure_bar"] else "compression"
    return Working(
        f"enthalpy after an isentropic {way}",
        f"h_s = h(p = {p_bar:.4f} bar(a), s = {s1:.6f} kJ/(kg K))",
        f"from {names[0]} to the pressure of {names[1]}",
        float(state_ps(p_bar * 1e5, s1 * 1e3).enthalpy) / 1e3,
        "kJ/kg",
    )


def boiling_at(p_bar: float) -> Working:
    """Saturation temperature at a pressure."""
    return Working(
        "saturation temperature",
        "T_sat(p), IAPWS R7-97, eq. 31",
        f"p = {p_bar:.5f} bar(a)",
        float(saturation_temperature(p_bar * 1e5)) - 273.15,
        "degC",
    )


def enthalpies_at_boiling(p_bar: float) -> tuple[float, float]:
    """Enthalpy of saturated liquid and vapour [kJ/kg]."""
    liquid, vapour = saturated(p_bar * 1e5)
    return float(liquid.enthalpy) / 1e3, float(vapour.enthalpy) / 1e3


def heat_taken(cold: Mapping[str, float], warm: Mapping[str, float]) -> Working:
    """Duty counted on the cold side."""
    m, h1, h2 = warm["mass_flow_kg_s"], cold["enthalpy_kj_kg"], warm["enthalpy_kj_kg"]
    return Working(
        "heat to the cold side",
        "Q = m (h_out - h_in)",
        f"{m:.5f} * ({h2:.4f} - {h1:.4f})",
        m * (h2 - h1),
        "kW",
    )


def conductance_of(duty: float, one_end: float, other_end: float) -> Iterator[Working]:
    """UA = Q / LMTD, in two steps."""
    mean = float(log_mean_difference(_array(one_end), _array(other_end)))
    yield Working(
        "log-mean temperature difference",
        "LMTD = (d1 - d2) / ln(d1 / d2)",
        f"d1 = {one_end:.4f}, d2 = {other_end:.4f}",
        mean,
        "K",
    )
    yield Working(
        "heat transfer",
        "UA = Q / LMTD",
        f"{duty:.3f} / {mean:.4f}",
        duty / mean if mean else math.nan,
        "kW/K",
        is_figure=True,
    )


def through_an_orifice(
    diameter: float, coefficient: float, before: tuple[float, float], behind: float, k: float
) -> Iterator[Working]:
    """Steam through a hole: pressure ratio, then flow. ``before``: p [bar] and v [m^3/kg]."""
    p, v = before
    critical = (2.0 / (k + 1.0)) ** (k / (k - 1.0))
    r = min(max(behind / p, critical), 1.0)
    yield Working(
        "pressure ratio",
        "r = p2 / p1, not below the critical (2 / (k + 1))^(k / (k - 1))",
        f"{behind:.4f} / {p:.4f}, k = {k:.4f}, critical {critical:.5f}",
        r,
        "",
    )
    area = math.pi / 4.0 * diameter**2
    expansion = max(r ** (2.0 / k) - r ** ((k + 1.0) / k), 0.0)
    flux = math.sqrt(2.0 * k / (k - 1.0) * p * 1e5 / v * expansion)
    yield Working(
        "flow through one orifice",
        "m = C A sqrt(2 k / (k - 1) p / v (r^(2/k) - r^((k+1)/k)))",
        f"C = {coefficient:g}, A = {area:.6e} m^2, v = {v:.6f} m^3/kg",
        coefficient * area * flux,
        "kg/s",
    )


def _array(value: float) -> npt.NDArray[np.float64]:
    return np.asarray(value, dtype=np.float64)
