"""Small sites written out of plain tables, and water by a library that the project does not use."""

from __future__ import annotations

import json
from dataclasses import dataclass
from functools import cache

import numpy as np
import pandas as pd
from iapws import IAPWS97
from iapws._iapws import _Ice

from connectors.base import Quality, ReadResult
from monitor.figures import compute, lead_in
from monitor.site.load import load_site

START = 1_771_200_000  # 2026-02-16 00:00 UTC
HOUR = 3600
CELL = 300


def _toml(table):
    def value(v):
        if isinstance(v, dict):
            return "{ " + ", ".join(f"{k} = {value(x)}" for k, x in v.items()) + " }"
        return json.dumps(v)

    return "".join(f"{k} = {value(v)}\n" for k, v in table.items())


def build(folder, streams, equipment, tags=None, *, site=None, dead=None):
    """A loaded site from {id: keys} of streams and equipment and {name: keys} of tags."""
    tags = {"TA": {"unit": "degC"}, "PA": {"unit": "bar(a)"}} | (tags or {})
    text = "[site]\n" + _toml({"id": "own", "name": "Own", "interval": "5 min"} | (site or {}))
    text += "[dead_state]\n" + _toml({"temperature": "TA", "pressure": "PA"} | (dead or {}))
    text += '[[source]]\nid = "dcs"\nkind = "csv"\npath = "*.csv"\n'
    for name, keys in streams.items():
        text += "[[stream]]\n" + _toml({"id": name} | keys)
    for name, keys in equipment.items():
        text += "[[equipment]]\n" + _toml({"id": name} | keys)
    for name, keys in tags.items():
        text += "[[tag]]\n" + _toml({"name": name, "source": "dcs"} | keys)
    path = folder / "site.toml"
    path.write_text(text, encoding="utf-8")
    return load_site(path)


def run(site, values, *, hours=1, step=60):
    """Figures of some hours from {tag: number, or function of seconds since the start}."""
    end = START + hours * HOUR
    times = np.arange(START - lead_in(site), end + 1, step)
    names = list(values)
    columns = []
    for name in names:
        v = values[name]
        at = v(times - START) if callable(v) else v
        columns.append(np.broadcast_to(np.asarray(at, float), times.shape))
    table = pd.DataFrame(
        {
            "tag": pd.Categorical.from_codes(
                np.repeat(np.arange(len(names)), len(times)), categories=names
            ),
            "time": pd.to_datetime(np.tile(times, len(names)), unit="s", utc=True).as_unit("us"),
            "value": np.concatenate(columns),
            "quality": np.full(len(names) * len(times), Quality.GOOD, dtype=np.uint8),
        }
    )
    return compute(site, ReadResult(table), START, end).batch


def rows(table, subject):
    """The rows of one subject, as columns."""
    return table[table["subject"] == subject].reset_index(drop=True)


def last(table, subject, column):
    """The last cell's value."""
    return float(rows(table, subject)[column].iloc[-1])


@dataclass(frozen=True)
class Water:
    """Enthalpy [kJ/kg] and entropy [kJ/(kg K)] by the iapws package."""

    h: float
    s: float
    v: float = np.nan


@cache
def water(p_bar, t_c=None, *, x=None, h=None):
    """Water at p and T, at p and dryness, or wet at p and h, by IF97 of the iapws package."""
    p = p_bar / 10
    if h is not None:
        wet, dry = IAPWS97(P=p, x=0), IAPWS97(P=p, x=1)
        share = (h - wet.h) / (dry.h - wet.h)
        assert 0 <= share <= 1, "the test's own state is not wet"
        return Water(h, wet.s + share * (dry.s - wet.s))
    state = IAPWS97(P=p, x=x) if x is not None else IAPWS97(P=p, T=t_c + 273.15)
    return Water(state.h, state.s, state.v)


@cache
def surroundings(t_c, p_bar):
    """Dead-state water: liquid, or ice Ih below freezing (iapws package)."""
    if t_c < 0:
        ice = _Ice(t_c + 273.15, p_bar / 10)
        return Water(ice["h"], ice["s"])
    return water(p_bar, t_c)


def exergy(state, t_c=15.0, p_bar=1.0):
    """Specific flow exergy [kJ/kg]: h - h0 - T0 (s - s0)."""
    dead = surroundings(t_c, p_bar)
    return state.h - dead.h - (t_c + 273.15) * (state.s - dead.s)


def left_over(ledger, name):
    """Supplied less everything that the ledger names [kW]."""
    parts = ("used", "lost", "destroyed", "stored_rate", "imbalance")
    return ledger[f"supplied_{name}_kw"] - sum(ledger[f"{p}_{name}_kw"] for p in parts)
