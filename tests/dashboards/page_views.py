"""Views of a site that does not exist, in every state that a page has to show."""

from __future__ import annotations

from dataclasses import fields, is_dataclass, replace
from functools import cache
from typing import Any

import numpy as np
import pandas as pd
from CoolProp.CoolProp import PropsSI

from dashboards.views import (
    AlarmRow,
    ConditionRow,
    CostRow,
    CostsView,
    DeadStateView,
    EquipmentRow,
    EquipmentView,
    EventRow,
    ExpansionView,
    FlowLink,
    LedgerLine,
    LossRow,
    OverviewView,
    PageContext,
    QualityRow,
    ResidualView,
    ShiftView,
    StreamCostRow,
    TrendView,
)

ZONE = "Europe/Helsinki"
END = pd.Timestamp("2026-03-03 06:00", tz=ZONE)
START = END - pd.Timedelta(days=30)
NAN = float("nan")

MACHINES = (
    ("boiler-1", "Boiler 1", "boiler"),
    ("boiler-2", "Boiler 2", "boiler"),
    ("TG-1", "Turbine generator 1", "turbine"),
    ("prv-hp-mp", "HP to MP letdown with spray", "letdown"),
    ("hp-header", "HP header", "header"),
    ("mp-header", "MP header", "header"),
    ("lp-header", "LP header", "header"),
    ("cond-1", "Condenser", "condenser"),
    ("accu", "Steam accumulator", "accumulator"),
    ("deaerator", "Deaerator", "deaerator"),
    ("digesters", "Digesters", "process"),
    ("fwp", "Feedwater pump", "pump"),
)


def context(**changes: Any) -> PageContext:
    made = PageContext(
        site_name="Kivilahti board mill",
        time_zone=ZONE,
        made=END + pd.Timedelta(minutes=7),
        start=START,
        end=END,
        newest=END - pd.Timedelta(minutes=1),
        version="0.1.0",
        equipment=tuple((identifier, name) for identifier, name, _ in MACHINES),
    )
    return replace(made, **changes)


def hours(count: int = 720, minutes: int = 60, end: pd.Timestamp = END) -> pd.DatetimeIndex:
    return pd.date_range(end=end, periods=count, freq=f"{minutes}min")


def noise(count: int, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).normal(size=count)


def ledger(scale: float = 1.0) -> tuple[LedgerLine, ...]:
    rows = (
        ("supplied", "Supplied", 84_230.0, 84_060.0, None, None),
        ("used", "Used", 31_870.0, 31_650.0, None, None),
        ("destroyed", "Destroyed", 46_120.0, 46_480.0, 1_328_000.0, 6_641.0),
        ("lost", "Lost", 6_190.0, 5_880.0, 178_300.0, 891.0),
        ("stored", "Change in store", 38.4, 38.9, None, None),
        ("imbalance", "Imbalance", 11.6, 11.1, None, None),
    )
    return tuple(
        LedgerLine(key, label, live * scale, ref * scale, live * 0.72 * scale, cost, co2)  # type: ignore[arg-type]
        for key, label, live, ref, cost, co2 in rows
    )


def ledger_trend(index: pd.DatetimeIndex | None = None) -> pd.DataFrame:
    index = hours() if index is None else index
    count = len(index)
    day = np.sin(np.arange(count) / 24 * 2 * np.pi)
    table = pd.DataFrame(index=index)
    table["used"] = 31_800 + 2_500 * day + 300 * noise(count, 2)
    table["lost"] = 6_100 + 300 * day + 90 * noise(count, 3)
    table["destroyed"] = 46_000 + 3_000 * day + 500 * noise(count, 4)
    table["stored"] = 150 * noise(count, 5)
    table["imbalance"] = 40 * noise(count, 6)
    table["supplied"] = table.sum(axis=1)
    if count > 300:
        table.iloc[200:230] = np.nan
    return table


def flows() -> tuple[FlowLink, ...]:
    rows = (
        ("fuel", "boiler-1", "Bark to boiler 1", 52_300.0, "fuel"),
        ("gas", "boiler-2", "Gas to boiler 2", 29_400.0, "fuel"),
        ("boiler-1", "hp-header", "Live steam 1", 23_150.0, "water"),
        ("boiler-2", "hp-header", "Live steam 2", 13_900.0, "water"),
        ("boiler-1", "destroyed", "Destroyed", 26_900.0, "destroyed"),
        ("boiler-2", "destroyed", "Destroyed", 13_800.0, "destroyed"),
        ("boiler-1", "lost", "Flue gas", 3_600.0, "lost"),
        ("boiler-2", "lost", "Flue gas", 2_000.0, "lost"),
        ("hp-header", "TG-1", "To the turbine", 33_400.0, "water"),
        ("hp-header", "prv-hp-mp", "To the letdown", 3_300.0, "water"),
        ("hp-header", "destroyed", "Destroyed", 210.0, "destroyed"),
        ("TG-1", "grid", "Power", 14_800.0, "power"),
        ("TG-1", "mp-header", "Extraction", 9_700.0, "water"),
        ("TG-1", "lp-header", "Back-pressure", 5_600.0, "water"),
        ("TG-1", "cond-1", "Exhaust", 900.0, "water"),
        ("TG-1", "destroyed", "Destroyed", 2_400.0, "destroyed"),
        ("prv-hp-mp", "mp-header", "Let down", 2_650.0, "water"),
        ("prv-hp-mp", "destroyed", "Destroyed", 650.0, "destroyed"),
        ("mp-header", "digesters", "MP steam", 11_900.0, "water"),
        ("mp-header", "accu", "Charging", 320.0, "water"),
        ("accu", "lp-header", "Discharging", 270.0, "water"),
        ("accu", "destroyed", "Destroyed", 50.0, "destroyed"),
        ("lp-header", "deaerator", "Pegging steam", 1_150.0, "water"),
        ("lp-header", "machine", "LP steam", 4_600.0, "water"),
        ("cond-1", "destroyed", "Destroyed", 780.0, "destroyed"),
        ("cond-1", "lost", "Cooling water", 110.0, "heat"),
        ("deaerator", "fwp", "Feedwater", 890.0, "water"),
        ("fwp", "boiler-1", "Feedwater 1", 520.0, "water"),
        ("fwp", "boiler-2", "Feedwater 2", 330.0, "water"),
        ("grid-in", "fwp", "Motor", 210.0, "power"),
        ("digesters", "used", "Product", 8_100.0, "heat"),
        ("digesters", "destroyed", "Destroyed", 3_800.0, "destroyed"),
        ("digesters", "deaerator", "Condensate", 140.0, "water"),
        ("hp-header", "lost", "Vent, closed", 0.0, "lost"),
        ("machine", "used", "Drying", NAN, "heat"),
    )
    return tuple(FlowLink(*row) for row in rows)  # type: ignore[arg-type]


NODE_NAMES = {identifier: name for identifier, name, _ in MACHINES} | {
    "fuel": "Bark",
    "gas": "Natural gas",
    "grid": "Power out",
    "grid-in": "Power in",
    "machine": "Board machine",
    "used": "Used",
    "lost": "Lost",
    "destroyed": "Destroyed",
}

_DESTROYED = (26_900, 13_800, 2_400, 650, 210, 120, 96.4, 780, 50.2, 31.7, 3_800, 44.8)


def equipment_rows() -> tuple[EquipmentRow, ...]:
    rows = [
        EquipmentRow(
            id=identifier,
            name=name,
            kind=kind,
            destroyed_kw=float(kw),
            destroyed_reference_kw=kw * 1.008,
            share=kw / sum(_DESTROYED),
            cost_per_day=kw * 0.96,
            psi=0.35 + 0.05 * place,
            psi_statement="fuel: exergy of the fuel burnt; product: exergy gained by the water"
            if kind == "boiler"
            else "fuel: exergy of all inlets; product: exergy of all outlets",
            closure_kw=0.012,
            mass_imbalance_kg_s=0.0312,
            energy_imbalance_kw=-18.4,
            running_share=1.0 if place % 4 else 0.871,
            flags=(("held value", 0.04), ("from a balance", 1.0))[: 1 + place % 2],
        )
        for place, ((identifier, name, kind), kw) in enumerate(
            zip(MACHINES, _DESTROYED, strict=True)
        )
    ]
    return tuple(sorted(rows, key=lambda row: -row.destroyed_kw))


def conditions() -> tuple[ConditionRow, ...]:
    since = pd.Timestamp("2026-02-21 14:00", tz=ZONE)
    return (
        ConditionRow("TG-1", "Turbine generator 1", "eta_s_2", "Isentropic efficiency, section 2",
                     "%", 79.84, 82.31, -2.47, 0.62, "drifting", since, "low"),
        ConditionRow("TG-1", "Turbine generator 1", "eta_s_1", "Isentropic efficiency, section 1",
                     "%", 84.12, 84.31, -0.19, 0.55, "steady", None, "low"),
        ConditionRow("hp-header", "HP header", "ua", "Heat-loss coefficient",
                     "kW/K", 0.4123, 0.3981, 0.0142, 0.021, "steady", None, "high"),
        ConditionRow("cond-1", "Condenser", "ttd", "Terminal temperature difference",
                     "K", 4.81, 3.62, 1.19, 0.8, "drifting", since, "high"),
        ConditionRow("prv-hp-mp", "HP to MP letdown with spray", "passing", "Passing flow, closed",
                     "t/h", 0.12, NAN, NAN, NAN, "no baseline", None, "high"),
        ConditionRow("accu", "Steam accumulator", "standing", "Standing loss",
                     "kW", NAN, 41.2, NAN, 6.1, "not judged", None, "both"),
    )  # fmt: skip


def alarms() -> tuple[AlarmRow, ...]:
    return (
        AlarmRow(
            11, "TG-1", "Turbine generator 1", "Isentropic efficiency, section 2",
            "unacknowledged", "high", pd.Timestamp("2026-02-21 14:00", tz=ZONE), None,
            "section 2 runs 2.5 % points below its baseline since 21 Feb; the loss grows by 0.2 "
            "points a day, which looks like deposits rather than an instrument.", 1_240.0,
        ),
        AlarmRow(
            12, "cond-1", "Condenser", "Terminal temperature difference", "acknowledged", "medium",
            pd.Timestamp("2026-02-27 03:00", tz=ZONE), None,
            "terminal difference is 1.2 K above its baseline; look at the tubes' cleanliness.",
            185.0,
        ),
        AlarmRow(
            9, "hp-header", "HP header", "Unaccounted flow", "returned, unacknowledged", "low",
            pd.Timestamp("2026-02-25 22:00", tz=ZONE), pd.Timestamp("2026-02-26 02:00", tz=ZONE),
            "unaccounted flow was above its limit for four hours.", None,
        ),
    )  # fmt: skip


def events() -> tuple[EventRow, ...]:
    return (
        EventRow(pd.Timestamp("2026-02-10 08:00", tz=ZONE), "Turbine generator 1", "wash",
                 "Online wash with saturated steam"),
        EventRow(pd.Timestamp("2026-02-10 15:00", tz=ZONE), "Turbine generator 1", "calibration",
                 "62-FT-001 zeroed"),
        EventRow(pd.Timestamp("2026-02-24 08:00", tz=ZONE), "Turbine generator 1", "overhaul",
                 "Gland steam valve replaced"),
    )  # fmt: skip


def quality() -> tuple[QualityRow, ...]:
    return (
        QualityRow("62-FT-014", "Spray water flow", "t/h", 31_204, 0.42, 0.11, 0.21, 0.26, 0.05),
        QualityRow("62-PT-101", "HP header pressure", "bar(g)", 43_011, 0.91, 0.05, 0, 0.04, 0.01),
        QualityRow("62-TT-007.PV", "Condensate", "degC", 43_180, 0.995, 0, 0.004, 0.001, 0),
        QualityRow("62-JT-001", "Generator power", "MW", 43_200, 1.0, 0.0, 0.0, 0.0, 0.0),
    )  # fmt: skip


def overview(**changes: Any) -> OverviewView:
    made = OverviewView(
        context=context(),
        ledger=ledger(),
        ledger_trend=ledger_trend(),
        flows=flows(),
        node_names=NODE_NAMES,
        equipment=equipment_rows(),
        conditions=conditions(),
        alarms=alarms(),
        quality=quality(),
        currency="EUR",
    )
    return replace(made, **changes)


def empty_overview() -> OverviewView:
    start = pd.Timestamp("2026-02-02 06:00", tz=ZONE)
    return overview(
        context=context(newest=None, start=start, equipment=()),
        ledger=(),
        ledger_trend=ledger_trend(hours(0)),
        flows=(),
        equipment=(),
        conditions=(),
        alarms=(),
        quality=(),
    )


def unknown_overview() -> OverviewView:
    """Every figure NaN: the site is there, nothing could be computed."""
    return overview(
        context=context(newest=END - pd.Timedelta(hours=31)),
        ledger=tuple(
            replace(line, live_kw=NAN, reference_kw=NAN, live_mwh=NAN, cost=NAN, co2_t=NAN)
            for line in ledger()
        ),
        ledger_trend=ledger_trend() * np.nan,
        flows=tuple(replace(flow, kw=NAN) for flow in flows()),
        equipment=tuple(
            replace(
                row, destroyed_kw=NAN, destroyed_reference_kw=NAN, share=NAN, cost_per_day=NAN,
                psi=NAN, closure_kw=NAN, running_share=NAN, flags=(("no usable reading", 1.0),),
            )
            for row in equipment_rows()
        ),
        conditions=tuple(
            replace(row, current=NAN, expected=NAN, residual=NAN, limit=NAN, state="not judged")
            for row in conditions()
        ),
        alarms=(),
        quality=tuple(
            replace(row, readings=0, good=0.0, uncertain=0.0, bad=0.0, missing=1.0)
            for row in quality()
        ),
    )  # fmt: skip


def trend(count: int = 720, minutes: int = 60, *, baseline: bool = True) -> TrendView:
    data = pd.DataFrame(index=hours(count, minutes))
    base = 82.3 + 0.6 * np.sin(np.arange(count) / 70)
    data["value"] = base - np.linspace(0, 2.2, count) + 0.25 * noise(count, 8)
    if count > 300:
        data.iloc[100:118] = np.nan
        data.iloc[250:260] = np.nan
        data.iloc[255] = 82.0
    if baseline:
        data["expected"] = base
        data["low"], data["high"] = base - 0.8, base + 0.8
    title = "Isentropic efficiency, section 2"
    return TrendView(title, "Measured", "%", data)


def power_trend() -> TrendView:
    count = 60
    data = pd.DataFrame(index=hours(count, 1440))
    data["value"] = 14_800 + 500 * noise(count, 9)
    data["minimum"] = data["value"] - 900
    data["maximum"] = data["value"] + 700
    return TrendView("Shaft power", "Daily mean", "kW", data)


def residual() -> ResidualView:
    data = pd.DataFrame(index=hours())
    drift = np.concatenate([np.zeros(420), np.linspace(0, -2.4, 300)])
    data["residual"] = drift + 0.35 * noise(720, 10)
    data["ewma"] = data["residual"].ewm(alpha=0.1).mean()
    data["low"], data["high"] = -0.62, 0.62
    data.iloc[100:118] = np.nan
    return ResidualView(
        figure="eta_s_2",
        label="Isentropic efficiency, section 2",
        unit="% points",
        data=data,
        alarms=((pd.Timestamp("2026-02-21 14:00", tz=ZONE), "below its limit"),),
        events=events(),
        reference=(START, START + pd.Timedelta(days=12)),
        design="Limits are set for one false alarm a year and a change of 1 % point within 2 days.",
    )


@cache
def expansion() -> ExpansionView:
    def hs(pressure: float, entropy: float) -> float:
        return float(PropsSI("H", "P", pressure, "S", entropy, "IF97::Water")) / 1e3

    pressures = [62e5, 11e5, 3.4e5, 0.08e5]
    efficiencies = (0.842, 0.798, 0.81)

    def line(worse: float) -> pd.DataFrame:
        h = [float(PropsSI("H", "P", pressures[0], "T", 753.15, "IF97::Water")) / 1e3]
        s = [float(PropsSI("S", "P", pressures[0], "T", 753.15, "IF97::Water")) / 1e3]
        ideal = [(NAN, NAN)]
        for pressure, efficiency in zip(pressures[1:], efficiencies, strict=True):
            end = hs(pressure, s[-1] * 1e3)
            ideal.append((s[-1], end))
            h.append(h[-1] - (efficiency + worse) * (h[-1] - end))
            s.append(float(PropsSI("S", "P", pressure, "H", h[-1] * 1e3, "IF97::Water")) / 1e3)
        states = [(p, x * 1e3) for p, x in zip(pressures, h, strict=True)]
        return pd.DataFrame(
            {
                "label": ["HP inlet", "Extraction", "LP steam", "Exhaust"],
                "entropy": s,
                "enthalpy": h,
                "pressure": np.array(pressures) / 1e5,
                "temperature": [
                    float(PropsSI("T", "P", p, "H", x, "IF97::Water")) - 273.15 for p, x in states
                ],
                "dryness": [float(PropsSI("Q", "P", p, "H", x, "IF97::Water")) for p, x in states],
                "ideal_entropy": [x for x, _ in ideal],
                "ideal_enthalpy": [x for _, x in ideal],
            }
        )

    temperatures = np.linspace(274.0, 640.0, 120)
    sides = [
        pd.DataFrame(
            {
                "entropy": PropsSI("S", "T", way, "Q", q, "IF97::Water") / 1e3,
                "enthalpy": PropsSI("H", "T", way, "Q", q, "IF97::Water") / 1e3,
            }
        )
        for q, way in ((0, temperatures), (1, temperatures[::-1]))
    ]
    isobars = []
    for pressure in pressures:
        boiling = float(PropsSI("T", "P", pressure, "Q", 0, "IF97::Water"))
        wet, hot = np.linspace(0.5, 1.0, 30), np.linspace(boiling + 0.1, 1_000.0, 60)
        entropy = np.concatenate(
            [
                PropsSI("S", "P", pressure, "Q", wet, "IF97::Water"),
                PropsSI("S", "P", pressure, "T", hot, "IF97::Water"),
            ]
        )
        enthalpy = np.concatenate(
            [
                PropsSI("H", "P", pressure, "Q", wet, "IF97::Water"),
                PropsSI("H", "P", pressure, "T", hot, "IF97::Water"),
            ]
        )
        table = pd.DataFrame({"entropy": entropy / 1e3, "enthalpy": enthalpy / 1e3})
        isobars.append((f"{pressure / 1e5:g} bar", table))
    return ExpansionView(line(0.0), line(0.03), pd.concat(sides), tuple(isobars))


def streams() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "port": ["inlet", "extraction", "lp", "exhaust"],
            "stream": ["hp-to-tg1", "tg1-to-mp", "tg1-to-lp", "tg1-exhaust"],
            "flow": [98.41, 41.2, 52.9, 4.31],
            "pressure": [62.04, 11.02, 3.412, 0.0804],
            "temperature": [480.2, 262.4, 158.3, 41.51],
            "dryness": [NAN, NAN, NAN, 0.9124],
            "exergy": [33_412.0, 9_702.0, 5_601.0, 902.4],
            "flags": ["good", "good", "held value", "from a balance"],
        }
    )


def equipment(**changes: Any) -> EquipmentView:
    made = EquipmentView(
        context=context(),
        row=next(row for row in equipment_rows() if row.id == "TG-1"),
        conditions=conditions()[:2],
        trends=(trend(), power_trend()),
        residuals=(residual(),),
        expansion=expansion(),
        alarms=alarms()[:1],
        events=events(),
        streams=streams(),
        currency="EUR",
    )
    return replace(made, **changes)


def young_equipment() -> EquipmentView:
    """One time point, no baseline, nothing judged."""
    silent = residual()
    lone = trend(1, baseline=False)
    return equipment(
        conditions=conditions()[4:5],
        trends=(lone, replace(lone, title="Steam flow", data=lone.data * np.nan)),
        residuals=(
            replace(silent, data=silent.data * np.nan, alarms=(), events=(), reference=None),
        ),
        expansion=replace(
            expansion(),
            points=expansion().points.assign(entropy=NAN),
            baseline_points=None,
        ),
        alarms=(),
        events=(),
        streams=streams().iloc[:0],
    )


def costs(**changes: Any) -> CostsView:
    rates = (26_900.0, 13_800.0, 2_400.0, 650.0, 210.0, -6.0, NAN)
    machines = [MACHINES[place] for place in (0, 1, 2, 3, 4, 11, 8)]
    made = CostsView(
        context=context(),
        equipment=tuple(
            CostRow(
                id=identifier,
                name=name,
                destroyed_kw=kw,
                unit_cost=18.0 + 9.0 * place,
                cost_per_day=kw * 0.024 * (18.0 + 9.0 * place),
                mean_per_day=kw * 0.96,
                fuel_kw=kw * (0.9 + 0.3 * place),
                co2_t_per_day=kw * 0.004,
                avoidable_kw=NAN if place == 1 else 0.03 * kw,
                avoidable_per_day=NAN if place == 1 else 0.03 * kw * 0.4,
                compared=0.0 if place == 1 else 0.98,
            )
            for place, ((identifier, name, _), kw) in enumerate(zip(machines, rates, strict=True))
        ),
        losses=(
            LossRow("Flue gas of boiler 1", 3_600.0, 1_555.0, 17.3),
            LossRow("Blowdown", 41.0, NAN, 0.0),
        ),
        streams=(
            StreamCostRow("Bark", 52_300.0, 18.0, 38.5, 0.0, 0.87, ""),
            StreamCostRow("Live steam 1", 23_150.0, 44.1, 17.3, 0.0, 2.1, ""),
            StreamCostRow("Power", 14_800.0, 58.2, NAN, 0.0, 2.7, ""),
            StreamCostRow("Vent", 0.0, 40.0, NAN, 200.0, 0.0, "'vent' makes no product"),
        ),
        supplied_per_day=41_300.0,
        mean_price=40.0,
        reference=(START, START + pd.Timedelta(days=14)),
        currency="EUR",
    )
    return replace(made, **changes)


def empty_costs() -> CostsView:
    return costs(
        equipment=(), losses=(), streams=(), supplied_per_day=0.0, reference=None, mean_price=0.0
    )


def dead_state(**changes: Any) -> DeadStateView:
    index = hours()
    count = len(index)
    ambient = pd.DataFrame(index=index)
    ambient["temperature"] = -2.0 + 5 * np.sin(np.arange(count) / 24 * 2 * np.pi) + noise(count, 11)
    ambient["pressure"] = 1_008 + 9 * np.sin(np.arange(count) / 90) + noise(count, 12)
    ambient["held"] = False
    ambient.iloc[300:340, 2] = True
    ambient.iloc[500, 2] = True
    account = pd.DataFrame(index=index)
    for name, level in (("destroyed", 46_000), ("supplied", 84_000), ("lost", 6_100)):
        account[f"{name}_reference"] = level + 0.01 * level * noise(count, 13)
        account[f"{name}_live"] = account[f"{name}_reference"] * (
            1 - 0.001 * (ambient["temperature"] - 15)
        )
    made = DeadStateView(
        context=context(),
        ambient=ambient,
        ledger=account,
        reference_temperature=15.0,
        reference_pressure=1013.25,
        freezing_hours=431.0,
        held_hours=41.0,
        weather_effect=pd.DataFrame(
            {
                "period": ["2026, week 6", "2026, week 7", "2026, week 8", "2026, week 9"],
                "t0_mean": [-3.2, -6.1, -1.4, 2.2],
                "destroyed_live_mwh": [7_702.0, 7_655.0, 7_731.0, 7_690.0],
                "destroyed_reference_mwh": [7_781.0, 7_761.0, 7_788.0, 7_722.0],
                "difference_mwh": [-79.0, -106.0, -57.0, -32.0],
            }
        ),
    )
    return replace(made, **changes)


def empty_dead_state() -> DeadStateView:
    full = dead_state()
    return dead_state(
        ambient=full.ambient.iloc[:0],
        ledger=full.ledger.iloc[:0],
        weather_effect=full.weather_effect.iloc[:0],
        freezing_hours=0.0,
        held_hours=NAN,
    )


def shift(**changes: Any) -> ShiftView:
    start = END - pd.Timedelta(hours=8)
    made = ShiftView(
        context=context(start=start),
        shift_name="night",
        summary=(
            "The shift destroyed 46.1 MW, 0.9 MW more than the seven night shifts before.",
            "Lost work cost 16 900 EUR.",
            "Turbine generator 1, section 2, is 2.5 % points below its baseline: plan a wash.",
            "Tag 62-FT-014 was good for 42 % of the shift; have the transmitter looked at.",
        ),
        ledger=ledger(),
        previous_ledger=ledger(0.981),
        equipment=equipment_rows(),
        conditions=conditions(),
        alarms=alarms(),
        events=events()[2:],
        quality=quality()[:2],
        ledger_trend=ledger_trend(hours(96, 5)),
        currency="EUR",
    )
    return replace(made, **changes)


def crowded_shift() -> ShiftView:
    """More of everything than a page holds, and longer."""
    long = "a word after another that says what somebody saw during the night and then some more "
    return shift(
        shift_name="night with a long name that somebody wrote",
        summary=tuple(long * 6 for _ in range(12)),
        alarms=tuple(
            replace(
                row, id=place, message=long * 6, figure_label="Isentropic efficiency, section 2"
            )
            for place, row in enumerate(alarms()[:2] * 10)
        ),
        conditions=tuple(
            replace(row, equipment_name=row.equipment_name * 4, label=row.label * 4)
            for row in conditions()[:1] * 12
        ),
        equipment=tuple(replace(row, name=row.name * 5) for row in equipment_rows()),
        quality=tuple(replace(row, tag=row.tag * 8) for row in quality() * 5),
    )


def empty_shift() -> ShiftView:
    return shift(
        summary=(),
        ledger=(),
        previous_ledger=(),
        equipment=(),
        conditions=(),
        alarms=(),
        events=(),
        quality=(),
        ledger_trend=ledger_trend(hours(0)),
    )


HOSTILE = "<b></script><script>owned=1</script><img src=x onerror=owned=1>\"'&amp;%{x}$x$\u2028"

# What the contract fixes to a few words, or what names files, cannot be free text.
_FIXED = {
    PageContext: {"time_zone", "equipment"},
    LedgerLine: {"key"},
    FlowLink: {"kind", "source", "target"},
    EquipmentRow: {"id"},
    CostRow: {"id"},
    ConditionRow: {"equipment", "state", "worse"},
    AlarmRow: {"equipment"},
}


def poisoned(view: Any, text: str = HOSTILE) -> Any:
    """Return the view with every free text in it replaced; a digit keeps a shift's name a name."""
    if isinstance(view, str):
        return f"{text}1"
    if isinstance(view, tuple):
        return tuple(poisoned(item, text) for item in view)
    if isinstance(view, dict):
        return {key: poisoned(item, text) for key, item in view.items()}
    if isinstance(view, pd.DataFrame):
        words = [name for name in view.columns if pd.api.types.is_string_dtype(view[name])]
        return view.assign(**dict.fromkeys(words, f"{text}1"))
    if not is_dataclass(view) or isinstance(view, type):
        return view
    fixed = _FIXED.get(type(view), set())
    changed = {
        field.name: poisoned(getattr(view, field.name), text)
        for field in fields(view)
        if field.name not in fixed
    }
    if isinstance(view, PageContext):
        changed["equipment"] = tuple((identifier, f"{text}1") for identifier, _ in view.equipment)
    return replace(view, **changed)
