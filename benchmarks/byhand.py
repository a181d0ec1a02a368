"""What a user would write by hand for the benchmarks' site: the same figures, without lostwork.

pandas reads, pivots and resamples; PropsSI gives every property, array by array; arithmetic does
the rest; `to_sql` stores. ``fluid`` is "Water" (PropsSI's default engine) or "IF97::Water" (an
expert's choice). The figures are the exergy of every stream, the account of every piece of
equipment and the ledger at the live and at the reference dead state, and the condition figures,
end states included: what lostwork stores beside states and flags.
"""

from __future__ import annotations

import contextlib
import sqlite3

import numpy as np
import pandas as pd
import plant
from CoolProp.CoolProp import PropsSI

REFERENCE = (288.15, 101325.0)
BY_BALANCE = {"B1", "H60", "H12", "H4"}  # their energy residual leaves as heat at T0
SUPPLIED = ("gas", "cw_in", "makeup", "pump_power")
USED = ("t1_power", "t2_power", "u1_heat", "u2_heat")
BOUNDARY = {"u1_heat": 393.15, "u2_heat": 363.15}
DRIVE = 0.96


def read(folder, *, quick):
    """All readings in one long table; quick is an expert's way."""
    files = sorted(folder.glob("exports/*.csv"))
    if quick:
        table = pd.concat([pd.read_csv(f, engine="pyarrow") for f in files], ignore_index=True)
    else:
        table = pd.concat([pd.read_csv(f, parse_dates=["time"]) for f in files], ignore_index=True)
    return table[table["quality"] == "Good"]


def gridded(long, minutes):
    """A column a tag, a row an interval; a bad reading leaves the one before it standing."""
    wide = long.pivot(index="time", columns="tag", values="value")  # noqa: PD010 - the quicker one
    return wide.resample(f"{minutes}min").mean().ffill(limit=10)


def figures(wide, fluid):
    """Every figure as a column, rates in kW, condition figures in lostwork's units."""
    T0, p0 = wide["t0"].to_numpy() + 273.15, wide["p0"].to_numpy() * 1e5
    h, s, m, e_rate, energy, p, T = {}, {}, {}, {}, {}, {}, {}

    def tag(name):
        return wide[name].to_numpy()

    for stream in plant.WATER:
        if f"{stream}_f" in wide:
            m[stream] = tag(f"{stream}_f")
        p[stream] = tag(f"{stream}_p") * 1e5 if f"{stream}_p" in wide else np.full(len(wide), 4e5)
        if f"{stream}_t" in wide:
            T[stream] = tag(f"{stream}_t") + 273.15
            h[stream] = PropsSI("H", "P", p[stream], "T", T[stream], fluid)
            s[stream] = PropsSI("S", "P", p[stream], "T", T[stream], fluid)
    power = {x: tag(f"{x}_j") * 1e6 for x in ("t1_power", "t2_power")}
    power["pump_power"] = tag("pump_power_j") * 1e3
    # What no meter tells.
    m["t2_exh"] = m["t2_in"]
    m["cw_out"] = m["cw_in"] + m["t2_exh"] - m["cond"]
    h["t2_exh"] = h["t2_in"] - power["t2_power"] / DRIVE / m["t2_exh"]
    s["t2_exh"] = PropsSI("S", "P", p["t2_exh"], "H", h["t2_exh"], fluid)
    heat = {
        "u1_heat": m["u1_steam"] * h["u1_steam"] - m["u1_ret"] * h["u1_ret"],
        "u2_heat": m["u2_steam"] * h["u2_steam"] - m["u2_ret"] * h["u2_ret"],
    }
    gas = tag("gas_f") * plant.HEATING_VALUE
    for stream in plant.WATER:
        energy[stream] = m[stream] * h[stream]
    energy |= power | heat | {"gas": gas}

    columns = {}
    reference = tuple(np.full(len(wide), x) for x in REFERENCE)
    for name, (dead_T, dead_p) in (("live", (T0, p0)), ("reference", reference)):
        h0 = PropsSI("H", "P", dead_p, "T", dead_T, fluid)
        s0 = PropsSI("S", "P", dead_p, "T", dead_T, fluid)
        e_rate = {x: m[x] * (h[x] - h0 - dead_T * (s[x] - s0)) for x in plant.WATER}
        e_rate |= power | {"gas": 1.04 * gas}
        e_rate |= {x: heat[x] * (1.0 - dead_T / BOUNDARY[x]) for x in heat}
        columns |= {f"{x} exergy_{name}": e / 1e3 for x, e in e_rate.items()}
        totals = {"destroyed": 0.0, "imbalance": 0.0}
        for item in plant.EQUIPMENT:
            inlets, outlets = sides(item)
            e_in = sum(e_rate[x] for x in inlets)
            e_out = sum(e_rate[x] for x in outlets)
            missing, h_mean, s_mean, residual = imbalance(item, m, h, s, energy)
            lost = missing * (h_mean - h0 - dead_T * (s_mean - s0))
            closure = 0.0 if item in BY_BALANCE else residual
            destroyed = e_in - e_out - lost - closure
            for key, value in (("in", e_in), ("out", e_out), ("destroyed", destroyed)):
                columns[f"{item} {key}_{name}"] = value / 1e3
            totals["destroyed"] += destroyed / 1e3
            totals["imbalance"] += (lost + closure) / 1e3
        totals["supplied"] = sum(e_rate[x] for x in SUPPLIED) / 1e3
        totals["used"] = sum(e_rate[x] for x in USED) / 1e3
        totals["lost"] = e_rate["cw_out"] / 1e3
        columns |= {f"ledger {key}_{name}": value for key, value in totals.items()}
        if name == "reference":
            gained = e_rate["steam"] - e_rate["feed"]
            columns["B1 exergetic_efficiency"] = 100.0 * gained / e_rate["gas"]
    columns |= conditions(wide, fluid, (m, h, s, p, T), energy, T0)
    return pd.DataFrame(columns, index=wide.index)


def sides(item):
    """The streams into and out of a piece of equipment."""
    facing = {"in": [], "out": []}
    for port, streams in plant.EQUIPMENT[item][1].items():
        into = port in {"fuel", "inlet", "steam", "water", "cooling_in"} or port == "feedwater"
        if item == "B1":
            into = port != "steam"
        elif item == "DA":
            into = port != "feedwater"
        elif item == "P1":
            into = port != "outlet"
        facing["in" if into else "out"] += [streams] if isinstance(streams, str) else streams
    return facing["in"], facing["out"]


def imbalance(item, m, h, s, energy):
    """Missing mass, the inlets' mean state that it is valued at, and the energy residual."""
    inlets, outlets = sides(item)
    water = [x for x in inlets if x in m]
    total = sum(m[x] for x in water)
    missing = total - sum(m[x] for x in outlets if x in m)
    h_mean = sum(m[x] * h[x] for x in water) / total
    s_mean = sum(m[x] * s[x] for x in water) / total
    drive = (1.0 / DRIVE - 1.0) * sum(energy[x] for x in outlets if x in {"t1_power", "t2_power"})
    residual = sum(energy[x] for x in inlets) - sum(energy[x] for x in outlets)
    return missing, h_mean, s_mean, residual - drive - missing * h_mean


def conditions(wide, fluid, state, energy, T0):
    """The condition figures."""
    m, h, s, p, T = state
    found = {}

    def end(before, after):
        return PropsSI("H", "P", p[after], "S", s[before], fluid)

    found["B1 fuel_efficiency"] = 100.0 * (energy["steam"] - energy["feed"]) / energy["gas"]
    density = {
        x: PropsSI("D", "P", p[x], "T", T[x], fluid)
        for x in ("steam", "t1_ext", "ld_out", "t1_exh", "ld_in")
    }
    for item in ("H60", "H12", "H4"):
        inlets, outlets = sides(item)
        missing, _, _, residual = imbalance(item, m, h, s, energy)
        out = sum(m[x] for x in outlets)
        warm = sum(m[x] * T[x] for x in outlets) / out
        after = sum(m[x] * p[x] for x in outlets) / out
        drop = sum(m[x] * (p[x] - after) for x in inlets)
        found[f"{item} unaccounted_flow"] = missing * 3.6
        found[f"{item} heat_loss_coefficient"] = residual / (warm - T0) / 1e3
        found[f"{item} pressure_loss_coefficient"] = drop / sum(
            m[x] ** 3 / density[x] for x in inlets
        )
    for name, before, after in (
        ("T1 eta_s_1", "t1_in", "t1_ext"),
        ("T1 eta_s_2", "t1_ext", "t1_exh"),
        ("T2 eta_s_1", "t2_in", "t2_exh"),
    ):
        found[name] = 100.0 * (h[before] - h[after]) / (h[before] - end(before, after))
    for item, inlet in (("T1", "t1_in"), ("T2", "t2_in")):
        found[f"{item} steam_rate"] = m[inlet] / energy[f"{item.lower()}_power"] * 3.6e6
    dryness = PropsSI("Q", "P", p["t2_exh"], "H", h["t2_exh"], fluid)
    found["T2 exhaust_moisture"] = 100.0 * (1.0 - dryness)
    found["LD work_bypassed"] = m["ld_in"] * (h["ld_in"] - end("ld_in", "ld_out")) / 1e3
    choked = 1.3 / 1.4 * 0.7
    ratio = np.minimum(1.0 - p["ld_out"] / p["ld_in"], choked)
    root = np.sqrt(ratio * p["ld_in"] * density["ld_in"])
    opening = wide["ld_position"].to_numpy() / 100.0
    found["LD flow_coefficient"] = (
        36000.0 * m["ld_in"] / ((1.0 - ratio / (3.0 * choked)) * root * opening)
    )
    boiling = {
        x: PropsSI("T", "P", p[x], "Q", 0.0, fluid)
        for x in ("t2_exh", "u1_steam", "u2_steam", "feedwater")
    }
    near, far = boiling["t2_exh"] - T["cw_out"], boiling["t2_exh"] - T["cw_in"]
    duty = m["cw_out"] * (h["cw_out"] - h["cw_in"])
    found["C1 ua"] = duty * np.log(far / near) / (far - near) / 1e3
    found["C1 ttd"] = near
    for item in ("U1", "U2"):
        steam, back, heat = f"{item.lower()}_steam", f"{item.lower()}_ret", f"{item.lower()}_heat"
        found[f"{item} condensate_return"] = 100.0 * m[back] / m[steam]
        found[f"{item} ua"] = energy[heat] / (boiling[steam] - BOUNDARY[heat]) / 1e3
    found["DA ttd"] = boiling["feedwater"] - T["feedwater"]
    out = h["feedwater"]
    needed = sum(m[x] * (out - h[x]) for x in ("cond", "u1_ret", "u2_ret", "makeup"))
    found["DA steam_excess"] = 100.0 * m["da_steam"] * (h["da_steam"] - out) / needed - 100.0
    ideal = end("feedwater", "feed") - h["feedwater"]
    found["P1 eta_s"] = 100.0 * m["feedwater"] * ideal / energy["pump_power"]
    found["P1 thermodynamic_efficiency"] = 100.0 * ideal / (h["feed"] - h["feedwater"])
    return found


def store(table, path, *, one_wide_table):
    """Store the figures and their means by hour and by day."""
    with contextlib.closing(sqlite3.connect(path)) as db:
        for name, part in (
            ("figures", table),
            ("by_hour", table.resample("1h").mean()),
            ("by_day", table.resample("1D").mean()),
        ):
            if one_wide_table:
                part.to_sql(name, db)
            else:
                part.rename_axis("time").reset_index().melt("time").to_sql(name, db, index=False)
