"""Published check values for the tests of `monitor.thermo`, as rows of text.

Each file's ``source`` column says where a row is published and ``status`` whether it was confirmed;
``confirmed_by`` names the independent libraries that reproduce it.
"""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np

__all__ = ["column", "inputs", "kelvin", "rows"]

_FOLDER = Path(__file__).parents[2] / "reference"


def rows(name, **wanted):
    """Read a reference file's rows, those whose columns hold the wanted words."""
    with (_FOLDER / name).open(encoding="utf-8", newline="") as file:
        found = [r for r in csv.DictReader(file) if all(r[k] == v for k, v in wanted.items())]
    assert found, f"{name} has no rows with {wanted}"
    return found


def column(table, name, scale=1.0):
    """One column of rows as numbers, in SI by ``scale``."""
    return np.array([float(r[name]) for r in table]) * scale


def inputs(text):
    """Read 'p_bar=63;T_C=465' into numbers; streams are parted by '|' and named before ':'."""
    read = {}
    for part in text.split("|"):
        prefix = ""
        for item in part.split(";"):
            named, colon, rest = item.partition(":")
            prefix = named if colon else prefix  # it names the rest of its part
            name, equals, value = (rest if colon else item).partition("=")
            if equals:
                read[f"{prefix}.{name}" if prefix else name] = float(value)
    return read


def kelvin(celsius):
    return np.asarray(celsius, dtype=float) + 273.15
