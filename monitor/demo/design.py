"""The demo plant's fixed numbers, and what it is given at each reading."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from monitor.demo.happenings import degradation, passing
from monitor.demo.load import TONNE_PER_HOUR, load
from monitor.demo.signals import wander
from monitor.demo.weather import weather
from monitor.thermo.water import State, state_pt

if TYPE_CHECKING:
    from monitor.demo.load import Load
    from monitor.demo.plan import DemoPlan, FloatArray
    from monitor.demo.weather import Weather

__all__ = ["CELSIUS", "DESIGN", "Design", "Given", "given", "thinned"]

CELSIUS = 273.15
LD62_FULL = 40.0 * TONNE_PER_HOUR
LD12_FULL = 15.0 * TONNE_PER_HOUR


@dataclass(frozen=True)
class Design:
    """Fixed numbers of the plant, SI.

    Attributes:
        drive_efficiency: electrical over internal power of both turbines.
        section_efficiency: best isentropic efficiency of TG1's sections and of TG2.
        section_flow: flow at which each is best [kg/s].
        header_loss: heat-loss coefficients of the 62, 12 and 4 bar headers [W/K].
        condenser_conductance: UA [W/K].
        boiler_efficiency: best of gas and bark boiler, on the lower heating value.
        heating_value, exergy_ratio: of gas and bark, [J/kg] and [1].
        stack_temperature: at which the boilers' stack losses leave [K].
        user_temperature: of the processes of dispersion, board machine and heating [K].
        let_down_outlet: set points of LD62 and LD12 [K].
        pump_efficiency: of feed and condensate pump.
    """

    drive_efficiency: float = 0.97
    section_efficiency: tuple[float, float, float] = (0.825, 0.80, 0.79)
    section_flow: tuple[float, float, float] = (27.0, 21.0, 9.5)
    header_loss: tuple[float, float, float] = (260.0, 320.0, 480.0)
    condenser_conductance: float = 1.3e6
    boiler_efficiency: tuple[float, float] = (0.925, 0.865)
    heating_value: tuple[float, float] = (49.0e6, 8.6e6)
    exergy_ratio: tuple[float, float] = (1.04, 1.15)
    stack_temperature: tuple[float, float] = (130 + CELSIUS, 165 + CELSIUS)
    user_temperature: tuple[float, float, float] = (85 + CELSIUS, 90 + CELSIUS, 60 + CELSIUS)
    let_down_outlet: tuple[float, float] = (235 + CELSIUS, 168 + CELSIUS)
    pump_efficiency: tuple[float, float] = (0.74, 0.60)


DESIGN = Design()


@dataclass(frozen=True)
class Given:
    """What does not depend on the steam system: weather, load, and the controllers' wander.

    Attributes:
        air, load: weather and demands.
        interval: between readings [s].
        p62, p12, p4, p_deaerator: controlled pressures [Pa].
        gas_steam, bark_steam: states at the boilers' outlets.
        gas_flow, bark_flow: steam of each boiler [kg/s].
        blowdown: of each boiler [kg/s].
        boiler_efficiency: of each boiler on the lower heating value.
        degraded: isentropic efficiency lost by TG1's first section.
        passing: steam through the closed LD62 [kg/s].
        opening_62, opening_12: valve positions, 0 to 1.
        cooling_flow: cooling water [kg/s].
        makeup: state of the make-up water.
        returns: states of the returned condensate of dispersion, board machine and heating.
    """

    air: Weather
    load: Load
    interval: float
    p62: FloatArray
    p12: FloatArray
    p4: FloatArray
    p_deaerator: FloatArray
    gas_steam: State
    bark_steam: State
    gas_flow: FloatArray
    bark_flow: FloatArray
    blowdown: tuple[FloatArray, FloatArray]
    boiler_efficiency: tuple[FloatArray, FloatArray]
    degraded: FloatArray
    passing: FloatArray
    opening_62: FloatArray
    opening_12: FloatArray
    cooling_flow: FloatArray
    makeup: State
    returns: tuple[State, State, State]


def given(plan: DemoPlan) -> Given:
    """Make everything that the steam system is given over a plan."""
    air = weather(plan)
    mill = load(plan, air)
    count, interval = plan.times().size, float(plan.interval_s)

    def drift(topic: str, spread: float, seconds: float = 1800.0) -> FloatArray:
        return wander(
            plan.rng(topic), count, spread=spread, time_constant=seconds, interval=interval
        )

    gas, bark = mill.boiler_steam - mill.bark_steam, mill.bark_steam
    p62 = 62.0e5 + drift("header 62", 0.2e5)
    best_gas, best_bark = DESIGN.boiler_efficiency
    return Given(
        air=air,
        load=mill,
        interval=interval,
        p62=p62,
        p12=12.0e5 + drift("header 12", 0.08e5),
        p4=4.05e5 + drift("header 4", 0.035e5),
        p_deaerator=3.0e5 + drift("deaerator", 0.02e5),
        gas_steam=_boiler_outlet(p62, gas, 476.0 + drift("gas boiler", 1.2)),
        bark_steam=_boiler_outlet(p62, bark, 470.0 + drift("bark boiler", 2.0)),
        gas_flow=gas,
        bark_flow=bark,
        blowdown=(0.012 * gas, 0.016 * bark),
        boiler_efficiency=(
            best_gas - 0.03 * (gas / 20.0 - 0.75) ** 2 + drift("burner", 0.001, 7200),
            best_bark - 0.03 * (bark / 20.0 - 0.85) ** 2 + drift("bark moisture", 0.006, 14400),
        ),
        degraded=degradation(plan),
        passing=passing(plan) * p62 / 62.0e5,
        opening_62=mill.let_down_62 / LD62_FULL,
        opening_12=mill.let_down_12 / LD12_FULL,
        cooling_flow=1500 * TONNE_PER_HOUR + drift("cooling pumps", 4.0, 7200),
        makeup=state_pt(4.0e5, 14 + CELSIUS + drift("make-up", 1.0, 86400)),
        returns=(
            state_pt(4.0e5, 95 + CELSIUS + drift("dispersion return", 0.8, 3600)),
            state_pt(4.0e5, 106 + CELSIUS + drift("board return", 0.8, 3600)),
            state_pt(4.0e5, 78 + CELSIUS + drift("heating return", 1.0, 3600)),
        ),
    )


def _boiler_outlet(header: FloatArray, flow: FloatArray, celsius: FloatArray) -> State:
    """Steam at a boiler's outlet: the pressure loss to the header goes with the flow squared."""
    return state_pt(header + 0.9e5 * np.square(flow / 18.0), celsius + CELSIUS)


def thinned(value: Any, step: int) -> Any:  # noqa: ANN401 - a record gives the same kind of record
    """Keep every ``step``-th reading in all arrays of a record and of the records inside it."""
    if isinstance(value, np.ndarray):
        return value[::step]
    if isinstance(value, tuple):
        return tuple(thinned(part, step) for part in value)
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        parts = {f.name: thinned(getattr(value, f.name), step) for f in dataclasses.fields(value)}
        return type(value)(**parts)
    return value
