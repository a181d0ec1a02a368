"""The site that the benchmarks share: 60 tags, 25 streams, 12 pieces of equipment, and its exports.

A boiler, three headers, a back-pressure and a condensing turbine, a let-down station, a condenser,
two users, a deaerator and a feed pump. The readings are a design point that follows a load with a
daily swing and some noise, one a minute, with a bad one here and there; any number of such units
may stand in one site file.
"""

from __future__ import annotations

import itertools
import json
from functools import cache

import numpy as np
import pyarrow as pa
from pyarrow import csv

from monitor.thermo.water import state_ps, state_pt, state_px

START = 1767225600  # 2026-01-01, UTC
MINUTE, DAY = 60, 86400
BAD_SHARE = 2e-4

# Streams of water and steam: flow [kg/s], pressure [bar a], temperature [degC] at the design point;
# None: left to a balance, or computed below. Every number becomes a tag but those marked fixed.
WATER = {
    "steam": (40.0, 60.0, 480.0),
    "t1_in": (20.0, 59.2, 478.0),
    "t2_in": (15.0, 59.2, 478.0),
    "ld_in": (5.0, 59.2, 478.0),
    "t1_ext": (8.0, 12.6, None),
    "t1_exh": (12.0, 4.3, None),
    "t2_exh": (None, 0.08, None),
    "ld_out": (5.0, 12.6, None),
    "u1_steam": (13.0, 12.3, 295.0),
    "u2_steam": (9.0, 4.1, 200.0),
    "da_steam": (3.0, 4.1, 200.0),
    "cw_in": (760.0, 2.6, 22.0),
    "cw_out": (None, 2.1, None),
    "cond": (15.0, 4.0, 41.0),
    "u1_ret": (13.0, 5.0, 128.0),
    "u2_ret": (9.0, 5.0, 118.0),
    "makeup": (0.4, None, 15.0),
    "feedwater": (40.4, 4.2, None),
    "feed": (40.2, 75.0, None),
}
POWER = {"t1_power": "out", "t2_power": "out", "pump_power": "in"}
EFFICIENCY, HEATING_VALUE, MAKEUP_BAR = 0.82, 49.0e6, 4.0

EQUIPMENT = {
    "B1": ("boiler", {"fuel": ["gas"], "feedwater": ["feed"], "steam": ["steam"]}),
    "H60": ("header", {"inlet": ["steam"], "outlet": ["t1_in", "t2_in", "ld_in"]}),
    "T1": (
        "turbine",
        {"inlet": "t1_in", "extraction": ["t1_ext"], "exhaust": "t1_exh", "power": "t1_power"},
    ),
    "T2": ("turbine", {"inlet": "t2_in", "exhaust": "t2_exh", "power": "t2_power"}),
    "LD": ("letdown", {"inlet": "ld_in", "outlet": "ld_out"}),
    "H12": ("header", {"inlet": ["t1_ext", "ld_out"], "outlet": ["u1_steam"]}),
    "H4": ("header", {"inlet": ["t1_exh"], "outlet": ["u2_steam", "da_steam"]}),
    "C1": (
        "condenser",
        {
            "steam": ["t2_exh"],
            "cooling_in": "cw_in",
            "condensate": "cond",
            "cooling_out": "cw_out",
        },
    ),
    "U1": ("user", {"steam": ["u1_steam"], "condensate": ["u1_ret"], "heat": "u1_heat"}),
    "U2": ("user", {"steam": ["u2_steam"], "condensate": ["u2_ret"], "heat": "u2_heat"}),
    "DA": (
        "deaerator",
        {
            "steam": ["da_steam"],
            "water": ["cond", "u1_ret", "u2_ret", "makeup"],
            "feedwater": "feedwater",
        },
    ),
    "P1": ("pump", {"inlet": "feedwater", "power": "pump_power", "outlet": "feed"}),
}
KEYS = {
    "T1": {"drive_efficiency": 0.96},
    "T2": {"drive_efficiency": 0.96},
    "LD": {"position": "ld_position"},
}


@cache
def design():
    """Every tag's value at the design point, in its unit: ``{tag: (value, unit)}``."""
    found = {}
    for stream, (flow, pressure, temperature) in WATER.items():
        for key, value, unit in (
            ("f", flow, "kg/s"),
            ("p", pressure, "bar(a)"),
            ("t", temperature, "degC"),
        ):
            if value is not None:
                found[f"{stream}_{key}"] = (value, unit)

    def expanded(before, pressure):
        start = state_pt(before[1] * 1e5, before[2] + 273.15)
        end = state_ps(pressure * 1e5, start.entropy)
        return float(start.enthalpy - EFFICIENCY * (start.enthalpy - end.enthalpy))

    def temperature_of(pressure, enthalpy):
        from monitor.thermo.water import state_ph  # noqa: PLC0415

        return float(state_ph(pressure * 1e5, enthalpy).temperature) - 273.15

    inlet = WATER["t1_in"]
    h_in = float(state_pt(inlet[1] * 1e5, inlet[2] + 273.15).enthalpy)
    h_ext, h_exh, h_wet = (expanded(inlet, p) for p in (12.6, 4.3, 0.08))
    h_cond = float(state_pt(4e5, 314.15).enthalpy)
    drive = KEYS["T1"]["drive_efficiency"]
    found["t1_ext_t"] = (temperature_of(12.6, h_ext), "degC")
    found["t1_exh_t"] = (temperature_of(4.3, h_exh), "degC")
    found["ld_out_t"] = (temperature_of(12.6, h_in), "degC")
    found["cw_out_t"] = (22.0 + 15.0 * (h_wet - h_cond) / (760.0 * 4182.0), "degC")
    found["feedwater_t"] = (139.0, "degC")
    found["feed_t"] = (140.1, "degC")
    power = 8.0 * (h_in - h_ext) + 12.0 * (h_in - h_exh)
    found["t1_power_j"] = (power * drive / 1e6, "MW")
    found["t2_power_j"] = (15.0 * (h_in - h_wet) * drive / 1e6, "MW")
    found["pump_power_j"] = (40.4 * 71e5 / 930.0 / 0.72 / 1e3, "kW")
    steam = float(state_pt(60e5, 753.15).enthalpy)
    feed = float(state_px(3.6e5, 0.0).enthalpy)
    found["gas_f"] = (40.0 * (steam - feed) / (0.91 * HEATING_VALUE), "kg/s")
    found["ld_position"] = (42.0, "%")
    return found


AMBIENT = {"t0": (12.0, "degC"), "p0": (1.005, "bar(a)")}


def site_text(interval_minutes, units=1, sources=None, *, settle="0 s", look_back="2 h"):
    """The site file; each source is (id, its TOML keys, the units that it serves)."""
    sources = sources or [("dcs", long_csv("exports/*.csv"), range(units))]
    lines = [
        '[site]\nid = "works"\nname = "Benchmark works (fictional)"\ntime_zone = "Europe/Vienna"',
        f'interval = "{interval_minutes} min"\nsettle = "{settle}"\nlook_back = "{look_back}"',
        '[store]\nurl = "sqlite:///lostwork.sqlite"',
        '[dead_state]\ntemperature = "t0"\npressure = "p0"',
    ]
    lines += [f'[[source]]\nid = "{name}"\n{keys}' for name, keys, _ in sources]
    first = sources[0][0]
    lines += [_tag(name, unit, first) for name, (_, unit) in AMBIENT.items()]
    serving = {unit: name for name, _, served in sources for unit in served}
    for unit in range(units):
        pre = prefix(unit)
        lines += [_tag(pre + tag, u, serving[unit]) for tag, (_, u) in design().items()]
        lines += _streams(pre)
        lines += [_equipment(pre, *item) for item in EQUIPMENT.items()]
    return "\n\n".join(lines) + "\n"


def prefix(unit):
    """Before every name of a unit; the first has none."""
    return f"n{unit}_" if unit else ""


def long_csv(path):
    """Keys of a source of long CSV files."""
    return f'kind = "csv"\npath = "{path}"\nlayout = "long"\nquality_column = "quality"'


def _tag(name, unit, source):
    return f'[[tag]]\nname = "{name}"\nsource = "{source}"\nunit = "{unit}"'


def _streams(pre):
    tags, lines = design(), []
    for stream in WATER:
        keys = {"id": pre + stream}
        keys["flow"] = f"{pre}{stream}_f" if f"{stream}_f" in tags else "balance"
        for letter, key in (("p", "pressure"), ("t", "temperature")):
            if f"{stream}_{letter}" in tags:
                keys[key] = f"{pre}{stream}_{letter}"
        if stream == "makeup":
            keys["pressure"] = f"{MAKEUP_BAR} bar(a)"
        if stream == "t2_exh":
            keys["enthalpy"] = "balance"
        if stream in {"cw_in", "makeup"}:
            keys["counts_as"] = "supplied"
        lines.append(_table("stream", keys))
    lines += [
        _table("stream", {"id": pre + stream, "medium": "power", "power": f"{pre}{stream}_j"})
        for stream in POWER
    ]
    for stream, boundary in (("u1_heat", "120 degC"), ("u2_heat", "90 degC")):
        heat = {"medium": "heat", "heat": "balance", "boundary_temperature": boundary}
        lines.append(_table("stream", {"id": pre + stream, **heat, "counts_as": "used"}))
    gas = {"medium": "fuel", "flow": f"{pre}gas_f", "lower_heating_value": "49.0 MJ/kg"}
    lines.append(_table("stream", {"id": f"{pre}gas", **gas, "exergy_ratio": 1.04}))
    return lines


def _equipment(pre, name, what):
    kind, ports = what
    named = {
        port: [pre + s for s in streams] if isinstance(streams, list) else pre + streams
        for port, streams in ports.items()
    }
    inline = ", ".join(f"{port} = {json.dumps(streams)}" for port, streams in named.items())
    keys = {
        key: pre + value if key == "position" else value
        for key, value in KEYS.get(name, {}).items()
    }
    text = _table("equipment", {"id": pre + name, "kind": kind, **keys})
    return f"{text}\nports = {{ {inline} }}"


def _table(name, keys):
    return "\n".join([f"[[{name}]]", *(f"{key} = {json.dumps(v)}" for key, v in keys.items())])


def readings(first, count, units=1):
    """Readings of ``count`` minutes from UTC second ``first``: names, and values (count, names).

    A bad reading is NaN. The same minute has the same values, whatever else is asked for, but for
    the noise, which begins anew with each call.
    """
    minute = np.arange(first, first + count * MINUTE, MINUTE)
    rng = np.random.default_rng(first % 2**31 + units)
    hours = (minute - START) / 3600.0
    load = 1.0 + 0.08 * np.sin(hours * np.pi / 12.0) + 0.02 * np.sin(hours * 1.7)
    names, columns = [], []
    for name, (value, _) in AMBIENT.items():
        swing = 5.0 * np.sin(hours * np.pi / 12.0 - 2.0) if name == "t0" else 0.01 * np.sin(hours)
        names.append(name)
        columns.append(value + swing + rng.normal(0, 1e-3, count))
    for unit in range(units):
        for tag, (value, _) in design().items():
            follows = load if tag[-2:] in {"_f", "_j"} else 1.0
            noise = {"_f": 4e-3, "_j": 2e-3, "_p": 8e-4}.get(tag[-2:], 4e-4)
            names.append(prefix(unit) + tag)
            columns.append(value * follows * (1.0 + rng.normal(0, noise, count)))
    values = np.column_stack(columns)
    values[rng.random(values.shape) < BAD_SHARE] = np.nan
    return names, values.round(4)


def table_of(first, names, values):
    """Readings as a long Arrow table in the order of time, as a historian exports them."""
    count = len(values)
    stamps = np.arange(first, first + count * MINUTE, MINUTE).astype("datetime64[s]")
    flat = values.ravel()
    bad = np.isnan(flat)
    texts = np.char.add(np.datetime_as_string(stamps), "Z")
    return pa.table(
        {
            "time": pa.DictionaryArray.from_arrays(
                np.repeat(np.arange(count, dtype=np.int32), len(names)), texts.tolist()
            ).dictionary_decode(),
            "tag": pa.DictionaryArray.from_arrays(
                np.tile(np.arange(len(names), dtype=np.int32), count), names
            ).dictionary_decode(),
            "value": pa.array(np.where(bad, 0.0, flat)),
            "quality": pa.DictionaryArray.from_arrays(
                bad.astype(np.int32), ["Good", "Bad"]
            ).dictionary_decode(),
        }
    )


def write_days(folder, days, units=1):
    """One long CSV file a UTC day under ``folder``, from `START`; returns their bytes."""
    folder.mkdir(parents=True, exist_ok=True)
    options = csv.WriteOptions(quoting_style="none")
    size = 0
    for first in range(START, START + int(days * DAY), DAY):
        count = min(DAY, START + int(days * DAY) - first) // MINUTE
        stamp = np.datetime_as_string(np.datetime64(first, "s"), unit="D")
        path = folder / f"{stamp}.csv"
        csv.write_csv(table_of(first, *readings(first, count, units)), path, options)
        size += path.stat().st_size
    return size


def counted():
    """Tags, streams, pieces of equipment, as the issue counts them."""
    streams = set(
        itertools.chain.from_iterable(
            [s] if isinstance(s, str) else s
            for _, ports in EQUIPMENT.values()
            for s in ports.values()
        )
    )
    return len(design()) + len(AMBIENT), len(streams), len(EQUIPMENT)
