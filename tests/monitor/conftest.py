"""A tiny plant of the tests' own: one header, one turbine, one let-down, a long CSV export."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd
import pytest

from monitor.thermo.water import state_ph, state_ps, state_pt

if TYPE_CHECKING:
    from collections.abc import Callable
    from pathlib import Path

SITE = """\
[site]
id = "{site}"
name = "Mill Race Works"
time_zone = "Europe/Berlin"
interval = "{interval} min"
settle = "{settle} s"
look_back = "1 h"

[store]
url = "{store}"

[dead_state]
temperature = "TT-0001"
pressure = "PT-0001"

[[source]]
id = "dcs"
kind = "csv"
path = "exports/*.csv"
quality_column = "quality"

[[tag]]
name = "TT-0001"
source = "dcs"
unit = "degC"
description = "ambient temperature"

[[tag]]
name = "PT-0001"
source = "dcs"
unit = "mbar(a)"

[[tag]]
name = "PT-6201"
source = "dcs"
unit = "bar(g)"
range = [0, 100]

[[tag]]
name = "TT-6201"
source = "dcs"
unit = "degC"
range = [0, 600]

[[tag]]
name = "FT-6201"
source = "dcs"
unit = "t/h"
range = [0, 80]

[[tag]]
name = "FT-4101"
source = "dcs"
unit = "t/h"
range = [0, 80]

[[tag]]
name = "PT-4103"
source = "dcs"
unit = "bar(g)"

[[tag]]
name = "TT-4103"
source = "dcs"
unit = "degC"

[[tag]]
name = "JT-4101"
source = "dcs"
unit = "MW"

[[tag]]
name = "PT-1201"
source = "dcs"
unit = "bar(g)"

[[tag]]
name = "TT-1201"
source = "dcs"
unit = "degC"

[[stream]]
id = "live_steam"
flow = "FT-6201"
pressure = "PT-6201"
temperature = "TT-6201"

[[stream]]
id = "to_turbine"
flow = "FT-4101"
pressure = "PT-6201"
temperature = "TT-6201"

[[stream]]
id = "to_letdown"
flow = "balance"
pressure = "PT-6201"
temperature = "TT-6201"

[[stream]]
id = "exhaust"
flow = "balance"
pressure = "PT-4103"
temperature = "TT-4103"
counts_as = "used"

[[stream]]
id = "power"
medium = "power"
power = "JT-4101"

[[stream]]
id = "reduced"
flow = "balance"
pressure = "PT-1201"
temperature = "TT-1201"
counts_as = "used"

[[equipment]]
id = "HDR62"
kind = "header"
name = "Header 62 bar"
ports = {{ inlet = "live_steam", outlet = ["to_turbine", "to_letdown"] }}

[[equipment]]
id = "TG1"
kind = "turbine"
name = "Turbine TG1"
ports = {{ inlet = "to_turbine", exhaust = "exhaust", power = "power" }}

[[equipment]]
id = "LD62"
kind = "letdown"
name = "Let-down LD62"
ports = {{ inlet = "to_letdown", outlet = "reduced" }}

[economics]
currency = "EUR"
exergy_price = 50

[drift]
reference_length = "36 h"
least_hours = 24
"""


@dataclass(frozen=True)
class TinyPlant:
    """A folder with a site file and the exports that it names.

    Attributes:
        folder: the site file's.
        start: of the readings, UTC.
        times: of the readings, integer UTC seconds.
        readings: ``time``, ``tag``, ``value``, ``quality`` as in the export.
    """

    folder: Path
    start: pd.Timestamp
    readings: pd.DataFrame

    @property
    def path(self) -> Path:
        return self.folder / "site.toml"

    @property
    def end(self) -> pd.Timestamp:
        return pd.Timestamp(self.readings["time"].max()) + pd.Timedelta(1, "min")

    def edit(self, old: str, new: str) -> None:
        """Change the site file."""
        text = self.path.read_text()
        assert old in text
        self.path.write_text(text.replace(old, new, 1))

    def export(self, before: pd.Timestamp | None = None, name: str = "day.csv") -> None:
        """Write the export anew, up to a time."""
        rows = self.readings
        if before is not None:
            rows = rows[rows["time"] < before]
        self.write(rows, name)

    def write(self, rows: pd.DataFrame, name: str = "day.csv") -> None:
        (self.folder / "exports").mkdir(exist_ok=True)
        rows.to_csv(self.folder / "exports" / name, index=False, date_format="%Y-%m-%dT%H:%M:%SZ")


def plant_readings(
    start: pd.Timestamp, days: float, every: str, worse_after_days: float
) -> pd.DataFrame:
    """Readings of the plant: a load that swings over the day, and a turbine that loses 3 points."""
    times = pd.date_range(start, start + pd.Timedelta(days=days), freq=every, inclusive="left")
    n = len(times)
    rng = np.random.default_rng(7)
    hours = np.arange(n) * (pd.Timedelta(every) / pd.Timedelta("1h"))
    turbine = 40.0 + 6.0 * np.sin(2 * np.pi * hours / 24) + rng.normal(0, 0.05, n)
    letdown = 5.0 + 0.2 * np.sin(2 * np.pi * hours / 31)

    def gauge(value, spread):
        # No gauge stands still: one that does is taken for stuck.
        return value + rng.normal(0, spread, n)

    live, low, middle = gauge(62.0, 2e-4), gauge(4.0, 2e-5), gauge(12.0, 5e-5)
    warm = gauge(470.0, 2e-3)
    inlet = state_pt(live * 1e5, warm + 273.15)
    efficiency = 0.82 - 0.03 * (hours > 24 * worse_after_days) + rng.normal(0, 0.0008, n)
    ideal = state_ps(low * 1e5, inlet.entropy).enthalpy
    drop = efficiency * (inlet.enthalpy - ideal)
    exhaust = state_ph(low * 1e5, inlet.enthalpy - drop)
    throttled = state_ph(middle * 1e5, inlet.enthalpy)
    barometer = gauge(1013.0, 0.01)
    ambient = 8.0 + 5.0 * np.sin(2 * np.pi * hours / 24)
    values = {
        "TT-0001": ambient,
        "PT-0001": barometer,
        "PT-6201": live - barometer / 1e3,
        "TT-6201": warm,
        "FT-6201": turbine + letdown,
        "FT-4101": turbine,
        "PT-4103": low - barometer / 1e3,
        "TT-4103": exhaust.temperature - 273.15,
        "JT-4101": turbine / 3.6 * drop / 1e6,
        "PT-1201": middle - barometer / 1e3,
        "TT-1201": throttled.temperature - 273.15,
    }
    wide = pd.DataFrame(values, index=times.rename("time")).round(6)
    long = wide.melt(ignore_index=False, var_name="tag", value_name="value").reset_index()
    return long.assign(quality="Good").sort_values(["time", "tag"], ignore_index=True)


@pytest.fixture(scope="session")
def make_plant() -> Callable[..., TinyPlant]:
    """Make a tiny plant in a folder: site file and exports."""

    def make(
        folder: Path,
        *,
        start: str | pd.Timestamp = "2026-01-10T00:00Z",
        days: float = 2.0,
        every: str = "5min",
        interval: int = 15,
        settle: int = 60,
        worse_after_days: float = 1e9,
        store: str = "sqlite:///figures.sqlite",
        site: str = "mill_race",
    ) -> TinyPlant:
        folder.mkdir(parents=True, exist_ok=True)
        begins = pd.Timestamp(start)
        text = SITE.format(interval=interval, settle=settle, store=store, site=site)
        (folder / "site.toml").write_text(text)
        readings = plant_readings(begins, days, every, worse_after_days)
        plant = TinyPlant(folder, begins, readings)
        plant.export()
        return plant

    return make
