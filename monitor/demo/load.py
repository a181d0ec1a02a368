"""What the mill asks of its steam system: board grades, web breaks, a planned stop, the week."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from monitor.demo.signals import lag, plateau, wander

if TYPE_CHECKING:
    from monitor.demo.plan import DemoPlan, FloatArray
    from monitor.demo.weather import Weather

__all__ = ["TONNE_PER_HOUR", "Load", "load"]

TONNE_PER_HOUR = 1000.0 / 3600.0
STOP_DAYS = 8.0 / 24

# Steam of the dryer section for each board grade [t/h].
GRADES = (46.0, 49.0, 52.0, 55.0, 58.0, 61.0)


@dataclass(frozen=True)
class Load:
    """Demands and set points over time; flows in kg/s, pressures in Pa, shares 0 to 1.

    Attributes:
        board_machine: steam to the dryer section, 4 bar.
        heating: steam to mill heating and white water, 4 bar.
        dispersion: steam to hot dispersion and coating dryers, 12 bar.
        condensing_target: what TG2 is asked to take.
        boiler_steam: steam of both boilers together.
        bark_steam: steam of the bark boiler.
        let_down_12: steam into LD12.
        let_down_62: steam into LD62 through an open valve (passing comes on top).
        discharge: steam that the accumulator is asked for.
        stop: 1 while the board machine is stopped.
    """

    board_machine: FloatArray
    heating: FloatArray
    dispersion: FloatArray
    condensing_target: FloatArray
    boiler_steam: FloatArray
    bark_steam: FloatArray
    let_down_12: FloatArray
    let_down_62: FloatArray
    discharge: FloatArray
    stop: FloatArray


def load(plan: DemoPlan, air: Weather) -> Load:
    """Make the load of the whole plan.

    Steps pass first-order lags of minutes, so that each reading is a quasi-steady state.
    """
    days = plan.elapsed_days()
    interval = float(plan.interval_s)
    stop = plateau(days, plan.stop_day, STOP_DAYS, 0.4 / 24)
    board = _board_machine(plan, days) * (1.0 - 0.95 * stop)
    heating = _heating(plan, air)
    dispersion = 13.0 * (1.0 - 0.5 * stop) + _wander(plan, "dispersion", 0.5, 2400)
    dispersion *= 1.0 - 0.15 * _weekend(days)
    low_pressure = board + heating
    excess = low_pressure - lag(low_pressure, 3600.0, interval)
    discharge = np.clip(0.8 + 0.6 * excess, 0.8, 6.5)
    let_down_12 = 2.0 + np.clip(0.15 * excess, -0.8, 4.0) + _wander(plan, "ld12", 0.15, 1200)
    let_down_62 = _let_down_62(plan, days)
    condensing = _condensing(plan, days)
    throttle = _expected_throttle(low_pressure, dispersion, discharge, let_down_12, let_down_62)
    wanted = throttle + let_down_62 + condensing
    boilers = lag(lag(wanted, 150.0, interval), 150.0, interval)
    bark = np.minimum(66.0 + _wander(plan, "bark", 3.0, 3 * 3600), 0.6 * boilers)
    return Load(
        board_machine=board * TONNE_PER_HOUR,
        heating=heating * TONNE_PER_HOUR,
        dispersion=dispersion * TONNE_PER_HOUR,
        condensing_target=condensing * TONNE_PER_HOUR,
        boiler_steam=boilers * TONNE_PER_HOUR,
        bark_steam=bark * TONNE_PER_HOUR,
        let_down_12=let_down_12 * TONNE_PER_HOUR,
        let_down_62=let_down_62 * TONNE_PER_HOUR,
        discharge=discharge * TONNE_PER_HOUR,
        stop=stop,
    )


def _wander(plan: DemoPlan, topic: str, spread: float, time_constant: float) -> FloatArray:
    return wander(
        plan.rng(topic),
        plan.times().size,
        spread=spread,
        time_constant=time_constant,
        interval=float(plan.interval_s),
    )


def _weekend(days: FloatArray) -> FloatArray:
    """1 on two days of seven."""
    return ((days + 1.0) % 7.0 >= 5.0).astype(np.float64)  # noqa: PLR2004 - five working days


def _board_machine(plan: DemoPlan, days: FloatArray) -> FloatArray:
    """Dryer steam [t/h]: grades that change every few hours, and short web breaks."""
    rng = plan.rng("grades")
    lengths = rng.uniform(5.0, 15.0, size=int(plan.days * 5) + 8) / 24
    changes = np.cumsum(lengths)
    grade = rng.choice(GRADES, size=changes.size + 1)[np.searchsorted(changes, days, side="right")]
    breaks = np.zeros_like(days)
    rng = plan.rng("breaks")
    starts = np.cumsum(rng.exponential(0.55, size=int(plan.days * 4) + 8)) + 0.15
    for start, minutes in zip(starts, rng.uniform(4.0, 35.0, size=starts.size), strict=True):
        breaks[(days >= start) & (days < start + minutes / 1440)] = 1.0
    interval = float(plan.interval_s)
    steady = lag(grade, 900.0, interval) + _wander(plan, "moisture", 0.5, 1800)
    held = lag(lag(breaks, 120.0, interval), 120.0, interval)
    # After a break the cylinders are heated up again: the slower lag leaves an overshoot.
    reheat = np.clip(lag(breaks, 900.0, interval) - breaks, 0.0, 1.0)
    return steady * (1.0 - 0.42 * held + 0.12 * lag(reheat, 240.0, interval))


def _heating(plan: DemoPlan, air: Weather) -> FloatArray:
    """Heating steam [t/h]: follows the cold of the last hours, with white water as a floor."""
    felt = lag(air.temperature - 273.15, 4 * 3600.0, float(plan.interval_s))
    return 4.5 + 0.5 * np.clip(17.0 - felt, 0.0, None) + _wander(plan, "heating", 0.3, 1200)


def _condensing(plan: DemoPlan, days: FloatArray) -> FloatArray:
    """Steam for TG2 [t/h]: more by day than at night, less at the weekend."""
    hour = days % 1.0 * 24
    day = ((hour >= 5.0) & (hour < 19.0)).astype(np.float64)  # noqa: PLR2004 - dear hours
    target = 27.0 + 10.0 * day * (1.0 - _weekend(days)) + _wander(plan, "tg2", 0.6, 1800)
    return lag(target, 1500.0, float(plan.interval_s))


def _let_down_62(plan: DemoPlan, days: FloatArray) -> FloatArray:
    """Steam through LD62 [t/h]: closed, but for the restart and a stroke test every ten days."""
    restart = plateau(days, plan.stop_day + STOP_DAYS, 1.5 / 24, 0.5 / 24)
    tests = [plateau(days, day, 0.35 / 24, 0.12 / 24) for day in np.arange(8.4, plan.days, 10.0)]
    return 9.0 * restart + 8.0 * np.asarray(sum(tests, np.zeros_like(days)))


def _expected_throttle(
    low_pressure: FloatArray,
    dispersion: FloatArray,
    discharge: FloatArray,
    let_down_12: FloatArray,
    let_down_62: FloatArray,
) -> FloatArray:
    """Steam into TG1 [t/h] by rule of thumb, as the boilers' master controller sees it."""
    deaerator = 0.105 * (low_pressure + dispersion + 35.0)
    exhaust = low_pressure + deaerator - discharge - 1.1 * let_down_12
    extraction = dispersion + let_down_12 + discharge - 1.2 * let_down_62
    return exhaust + extraction
