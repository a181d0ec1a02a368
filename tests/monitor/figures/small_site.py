"""A small site of the tests' own: a boiler, a header, a turbine with a wet exhaust, a let-down."""

from __future__ import annotations

import textwrap

import numpy as np
import pandas as pd

from connectors.base import Quality, ReadResult
from monitor.figures import lead_in

SITE = """
[site]
id = "small"
name = "Small site"
interval = "5 min"
[dead_state]
temperature = "TA"
pressure = "PA"
mean = "30 min"
hold = "1 h"
[[source]]
id = "dcs"
kind = "csv"
path = "*.csv"

[[stream]]
id = "gas"
medium = "fuel"
flow = "FG"
lower_heating_value = "49 MJ/kg"
fuel = "natural gas"
[[stream]]
id = "feed"
pressure = "80 bar(a)"
temperature = "TF"
flow = "balance"
[[stream]]
id = "live"
pressure = "PL"
temperature = "TL"
flow = "FL"
[[stream]]
id = "to_turbine"
pressure = "PH"
temperature = "TH"
flow = "FT"
[[stream]]
id = "to_letdown"
pressure = "PH"
temperature = "TH"
flow = "balance"
[[stream]]
id = "extraction"
pressure = "PX"
temperature = "TX"
flow = "FX"
counts_as = "used"
[[stream]]
id = "exhaust"
pressure = "PE"
enthalpy = "balance"
flow = "balance"
[[stream]]
id = "generator"
medium = "power"
power = "WG"
[[stream]]
id = "reduced"
pressure = "PX"
temperature = "TR"
flow = "balance"
counts_as = "used"
[[stream]]
id = "spray"
pressure = "80 bar(a)"
temperature = "TF"
flow = "balance"
counts_as = "supplied"

[[equipment]]
id = "boiler"
kind = "boiler"
ports = { fuel = "gas", feedwater = "feed", steam = "live" }
[[equipment]]
id = "header"
kind = "header"
ports = { inlet = "live", outlet = ["to_turbine", "to_letdown"] }
[[equipment]]
id = "turbine"
kind = "turbine"
drive_efficiency = 0.97
ports.inlet = "to_turbine"
ports.extraction = "extraction"
ports.exhaust = "exhaust"
ports.power = "generator"
[[equipment]]
id = "letdown"
kind = "letdown"
position = "ZL"
ports = { inlet = "to_letdown", spray = "spray", outlet = "reduced" }
"""

UNITS = {
    "TA": "degC", "PA": "mbar(a)", "FG": "t/h", "TF": "degC", "PL": "bar(g)", "TL": "degC",
    "FL": "t/h", "PH": "bar(g)", "TH": "degC", "FT": "t/h", "PX": "bar(g)", "TX": "degC",
    "FX": "t/h", "PE": "bar(a)", "WG": "MW", "TR": "degC", "ZL": "%",
}  # fmt: skip

STEADY = {
    "TA": 12.0, "PA": 1005.0, "FG": 7.1, "TF": 130.0, "PL": 61.5, "TL": 472.0, "FL": 110.0,
    "PH": 61.0, "TH": 470.0, "FT": 100.0, "PX": 11.0, "TX": 285.0, "FX": 40.0, "PE": 0.08,
    "WG": 20.5, "TR": 205.0, "ZL": 35.0,
}  # fmt: skip


def write_site(folder, *changes):
    """Write the site file, with (old, new) changes to its text, and return its path."""
    tags = "".join(
        f'\n[[tag]]\nname = "{name}"\nsource = "dcs"\nunit = "{unit}"\n'
        for name, unit in UNITS.items()
    )
    text = textwrap.dedent(SITE) + tags
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    path = folder / "site.toml"
    path.write_text(text, encoding="utf-8")
    return path


def times_of(site, start, end, step=60):
    """Times of readings that a window needs, lead-in and last edge included."""
    return np.arange(start - lead_in(site), end + 1, step)


def readings(times, values=None, quality=None):
    """Readings of every tag; values: tag -> number or array over ``times``."""
    values = STEADY | (values or {})
    quality = quality or {}
    names = list(values)
    data = {n: np.broadcast_to(np.asarray(values[n], float), times.shape) for n in names}
    marks = {n: np.broadcast_to(quality.get(n, Quality.GOOD), times.shape) for n in names}
    codes = np.repeat(np.arange(len(names)), len(times))
    table = pd.DataFrame(
        {
            "tag": pd.Categorical.from_codes(codes, categories=names),
            "time": pd.to_datetime(np.tile(times, len(names)), unit="s", utc=True).as_unit("us"),
            "value": np.concatenate([data[n] for n in names]),
            "quality": np.concatenate([marks[n] for n in names]).astype(np.uint8),
        }
    )
    return ReadResult(table)
