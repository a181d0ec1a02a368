"""The site's weather: ambient temperature, barometer, and the tower that cools the condenser."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from monitor.demo.signals import lag, plateau, wander

if TYPE_CHECKING:
    from monitor.demo.plan import DemoPlan, FloatArray

__all__ = ["Weather", "weather"]

HEAT_WAVE_DAYS = 5.0


@dataclass(frozen=True)
class Weather:
    """Ambient temperature [K], barometer [Pa] and cooling-water supply temperature [K]."""

    temperature: FloatArray
    barometer: FloatArray
    cooling_water: FloatArray


def weather(plan: DemoPlan) -> Weather:
    """Make weather that runs from late winter into spring, with one heat wave.

    Fronts of two to three days ride on the season; nights are clear when the barometer is high.
    """
    days = plan.elapsed_days()
    count, interval = days.size, float(plan.interval_s)
    fronts = wander(
        plan.rng("fronts"), count, spread=1.0, time_constant=1.1 * 86400, interval=interval
    )
    pressure = wander(
        plan.rng("barometer"), count, spread=1.0, time_constant=1.3 * 86400, interval=interval
    )
    gusts = wander(plan.rng("gusts"), count, spread=0.25, time_constant=900, interval=interval)
    season = -1.5 + 11.0 * np.clip(days / 60.0, 0.0, 1.5)
    swing = 4.2 + 1.4 * np.tanh(pressure)
    # The coldest hour is about five in the morning by the sun.
    daily = -swing * np.cos(2 * np.pi * (days - 5.0 / 24))
    heat = plateau(days, plan.heat_wave_day, HEAT_WAVE_DAYS, 0.4)
    mild = season + 3.0 * np.tanh(fronts / 1.5) + daily
    hot = 22.5 + 1.4 * daily
    celsius = mild + heat * (hot - mild) + gusts
    barometer = 1008.5 + 25.0 * np.tanh(pressure / 1.3)
    # A cooling tower's basin follows the air by hours; its fans hold it at 15 degC in the cold.
    basin = 15.0 + 3.0 * np.log1p(np.exp((lag(celsius, 6 * 3600.0, interval) - 12.0) / 3.0))
    return Weather(celsius + 273.15, barometer * 100.0, basin + 273.15)
