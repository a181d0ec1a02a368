"""Real weather by the hour: the two typical years that pvlib ships (NREL TMY3, public data).

Only the files are used, and read here: importing pvlib would cost more than the tests.
"""

from __future__ import annotations

import csv
from functools import cache
from importlib.util import find_spec
from pathlib import Path

import numpy as np

__all__ = ["STATIONS", "facts", "weather"]

STATIONS = ("723170TYA.CSV", "703165TY.csv")
"""Greensboro (measured pressure, 792 h of frost); Sand Point (1640 h of frost, sea level)."""

_REFERENCE = Path(__file__).parents[2] / "reference" / "ambient_series.csv"


@cache
def weather(station):
    """Dry-bulb temperature [degC] and pressure [bar] of 8760 hours."""
    folder = Path(next(iter(find_spec("pvlib").submodule_search_locations))) / "data"
    with (folder / station).open(encoding="utf-8", newline="") as file:
        next(file)  # the station
        rows = list(csv.DictReader(file))
    temperature, pressure = (
        np.array([float(row[name]) for row in rows]) for name in ("Dry-bulb (C)", "Pressure (mbar)")
    )
    return temperature, pressure / 1000.0


def facts(station):
    """What is known of a series: {(quantity, column): (value, tolerance)}."""
    with _REFERENCE.open(encoding="utf-8", newline="") as file:
        rows = [r for r in csv.DictReader(file) if r["file"] == station]
    return {(r["quantity"], r["column"]): (float(r["value"]), float(r["tol"])) for r in rows}
