"""The demo plant at operating points of a test's choosing: its machines stand still unless told."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import partial

import numpy as np
import pandas as pd

from connectors.base import Quality, ReadResult
from monitor.demo import DemoPlan, network, simulate
from monitor.demo.design import CELSIUS, DESIGN, LD12_FULL, given
from monitor.demo.files import config_folder, read_tags
from monitor.demo.instruments import true_value
from monitor.demo.load import TONNE_PER_HOUR
from monitor.demo.vessel import Vessel
from monitor.demo.weather import Weather
from monitor.figures import compute, lead_in
from monitor.site.load import load_site
from monitor.thermo.water import state_pt

CELLS, INTERVAL = 264, 300
PLAN = DemoPlan(days=CELLS * INTERVAL / 86400, interval_s=INTERVAL, noise=False, dirt=False)
# Slow swings of different lengths: weather and loads meet in every combination.
PERIODS = (89, 53, 61, 71, 83, 97, 103, 113, 127)
RANGES = {
    "air": (-5.0, 15.0),
    "barometer": (985.0, 1030.0),
    "cooling_water": (15.0, 22.0),
    "board": (46.0, 61.0),
    "heating": (5.0, 12.0),
    "dispersion": (11.0, 14.0),
    "condensing": (26.0, 37.0),
    "discharge": (0.8, 4.0),
    "let_down": (1.5, 4.0),
}


@dataclass(frozen=True)
class Worn:
    """What has happened to the machines; by default nothing."""

    section_1: float = 0.0
    """Isentropic efficiency lost by TG1's first section [1]."""
    passing: float = 0.0
    """Steam through the closed LD62 [kg/s]."""
    boiler_1: float = 0.0
    """Efficiency lost by B1 [1]."""
    design: dict[str, object] | None = None
    """Fixed numbers of the plant that are other than they were."""
    standing_loss: float = Vessel.standing_loss
    """Heat that the accumulator loses [W/K]."""


def swings(shift=0.0, **moved):
    """A value for every cell of each of `RANGES`; ``moved`` adds to one."""
    k = np.arange(CELLS)
    found = {}
    for i, (name, (low, high)) in enumerate(RANGES.items()):
        wave = np.sin(2 * np.pi * k / PERIODS[i] + 1.7 * i + shift)
        found[name] = (low + high) / 2 + (high - low) / 2 * wave + moved.get(name, 0.0)
    return found


def operating(points, worn=None):
    """What the plant is given at these points: no controller wanders, no fuel changes."""
    worn = worn or Worn()
    ones = np.ones(CELLS)
    low = points["board"] + points["heating"]
    let_down, discharge = points["let_down"], points["discharge"]
    deaerator = 0.105 * (low + points["dispersion"] + 35.0)
    exhaust = low + deaerator - discharge - 1.1 * let_down
    throttle = exhaust + points["dispersion"] + let_down + discharge
    boilers = (throttle + points["condensing"]) * TONNE_PER_HOUR
    bark = np.minimum(64.0 * TONNE_PER_HOUR * ones, 0.6 * boilers)
    gas = boilers - bark
    plain = given(PLAN)
    load = replace(
        plain.load,
        board_machine=points["board"] * TONNE_PER_HOUR,
        heating=points["heating"] * TONNE_PER_HOUR,
        dispersion=points["dispersion"] * TONNE_PER_HOUR,
        condensing_target=points["condensing"] * TONNE_PER_HOUR,
        boiler_steam=boilers,
        bark_steam=bark,
        let_down_12=let_down * TONNE_PER_HOUR,
        let_down_62=0.0 * ones,
        discharge=discharge * TONNE_PER_HOUR,
        stop=0.0 * ones,
    )

    def outlet(flow, celsius):
        return state_pt(62e5 + 0.9e5 * np.square(flow / 18.0), (celsius + CELSIUS) * ones)

    best_gas, best_bark = DESIGN.boiler_efficiency
    return replace(
        plain,
        air=Weather(
            points["air"] + CELSIUS,
            points["barometer"] * 100.0,
            points["cooling_water"] + CELSIUS,
        ),
        load=load,
        p62=62e5 * ones,
        p12=12e5 * ones,
        p4=4.05e5 * ones,
        p_deaerator=3e5 * ones,
        gas_steam=outlet(gas, 476.0),
        bark_steam=outlet(bark, 470.0),
        gas_flow=gas,
        bark_flow=bark,
        blowdown=(0.012 * gas, 0.016 * bark),
        boiler_efficiency=(
            best_gas - 0.03 * (gas / 20.0 - 0.75) ** 2 - worn.boiler_1,
            best_bark - 0.03 * (bark / 20.0 - 0.85) ** 2,
        ),
        degraded=worn.section_1 * ones,
        passing=worn.passing * ones,
        opening_62=0.0 * ones,
        opening_12=load.let_down_12 / LD12_FULL,
        cooling_flow=1500 * TONNE_PER_HOUR * ones,
        makeup=state_pt(4e5, (14 + CELSIUS) * ones),
        returns=tuple(state_pt(4e5, (t + CELSIUS) * ones) for t in (95, 106, 78)),
    )


def demo_site():
    """The demo's site as it is shipped."""
    return load_site(config_folder() / "site.toml")


def figures_at(site, points, worn=None):
    """Every figure of the plant at these points, from exact instruments.

    Returns:
        A table with a column a condition figure (equipment, figure), and one of the loads that a
        baseline takes them at.
    """
    worn = worn or Worn()
    kept = network.DESIGN, network.Vessel
    network.DESIGN = replace(DESIGN, **(worn.design or {}))
    network.Vessel = partial(Vessel, standing_loss=worn.standing_loss)
    try:
        plant = simulate(PLAN, operating(points, worn))
    finally:
        network.DESIGN, network.Vessel = kept
    tags, times = read_tags(), plant.times
    table = pd.DataFrame(
        {
            "tag": pd.Categorical.from_codes(
                np.repeat(np.arange(len(tags)), len(times)), categories=[t.name for t in tags]
            ),
            "time": pd.to_datetime(np.tile(times, len(tags)), unit="s", utc=True).as_unit("us"),
            "value": np.concatenate([true_value(plant, tag) for tag in tags]),
            "quality": np.full(len(tags) * len(times), np.uint8(Quality.GOOD)),
        }
    )
    start = int(times[0]) + -(-lead_in(site) // 3600) * 3600
    batch = compute(site, ReadResult(table), start, int(times[-1])).batch
    values = _columns(batch.conditions, ["subject", "figure"], "value")
    own = _columns(batch.equipment, ["subject"], "load_kg_s")
    flows = _columns(batch.streams, ["subject"], "mass_flow_kg_s")
    loads = {
        (item.id, figure.name): sum(sign * flows[s] for sign, s in figure.load_streams)
        if figure.load_streams
        else own[item.id]
        for item in site.items.values()
        for figure in item.kind.figures(item)
    }
    return values, pd.DataFrame(loads)


def _columns(table, keys, value):
    """One column a key; what has no value at all stays a column of NaN."""
    return pd.DataFrame(
        {
            key if len(keys) > 1 else key[0]: part.set_index("time")[value]
            for key, part in table.groupby(keys, observed=True)
        }
    )
