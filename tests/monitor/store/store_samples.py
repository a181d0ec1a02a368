"""A small site and its windows, for the tests of the store."""

from __future__ import annotations

import datetime as dt
from dataclasses import replace

import numpy as np
import pandas as pd

from monitor.flags import NOT_JUDGED, Flag
from monitor.site.shifts import ShiftCalendar
from monitor.store.batch import (
    CONDITION_COLUMNS,
    EQUIPMENT_COLUMNS,
    LEDGER_COLUMNS,
    QUALITY_COLUMNS,
    STREAM_COLUMNS,
    FigureBatch,
)

INTERVAL_S = 900
STREAMS = ("hp_steam", "lp_steam")
EQUIPMENT = ("tg1", "hp_header")
FIGURES = (("tg1", "eta_s_1"), ("tg1", "steam_rate"), ("hp_header", "heat_loss_kw_k"))
TAGS = ("62-FT-001", "62-PT-001")
RATED = {
    "stream": tuple(n for n in STREAM_COLUMNS if not n.startswith("u_")),
    "equipment": tuple(n for n in EQUIPMENT_COLUMNS if not n.startswith("u_")),
    "site": tuple(n for n in LEDGER_COLUMNS if not n.startswith("u_")),
}


def at(text):
    """Integer UTC seconds of an ISO time in UTC."""
    return int(dt.datetime.fromisoformat(text).replace(tzinfo=dt.UTC).timestamp())


def calendar(time_zone="Europe/Vienna", starts=("06:00", "14:00", "22:00")):
    return ShiftCalendar(
        tuple(dt.time.fromisoformat(s) for s in starts), ("early", "late", "night"), time_zone
    )


def register(store, site="mill", cal=None, interval_s=INTERVAL_S):
    cal = cal or calendar()
    return store.register(
        site,
        "The mill",
        interval_s,
        cal.time_zone,
        cal,
        streams=[(s, f"stream {s}", "water") for s in STREAMS],
        equipment=[(e, f"equipment {e}", "turbine") for e in EQUIPMENT],
        figures=[(e, f, f"label {f}", "1", "low") for e, f in FIGURES],
    )


def window(start, end, seed=0):
    """A window in which every cell depends on its own time alone, not on the window's ends."""
    times = np.arange(start, end, INTERVAL_S)
    streams = [_rates(times, s, STREAM_COLUMNS, seed) for s in STREAMS]
    equipment = [_rates(times, e, EQUIPMENT_COLUMNS, seed) for e in EQUIPMENT]
    conditions = [_conditions(times, e, f, seed) for e, f in FIGURES]
    hours = np.arange(start, end, 3600)
    quality = {
        "tag": np.repeat(TAGS, len(hours)),
        "hour": np.tile(hours, len(TAGS)),
        **{
            name: np.tile(hours // 3600 % 7 + number, len(TAGS))
            for number, name in enumerate(QUALITY_COLUMNS)
        },
    }
    return FigureBatch(
        start,
        end,
        pd.concat(streams, ignore_index=True),
        pd.concat(equipment, ignore_index=True),
        pd.concat(conditions, ignore_index=True),
        _rates(times, "", LEDGER_COLUMNS, seed).drop(columns="subject"),
        pd.DataFrame(quality),
    )


def without(batch, table, keep):
    """The batch with only those rows of one table that ``keep`` marks."""
    frame = getattr(batch, table)
    return replace(batch, **{table: frame[keep(frame)].reset_index(drop=True)})


def _noise(times, *names):
    """A number for each time, the same whenever it is asked for; about one in nine is absent."""
    salt = sum(sum(map(ord, str(name))) * 31 for name in names)
    mixed = (times // INTERVAL_S * 2654435761 + salt * 40503) % 1000003
    return np.where(mixed % 9 == 0, np.nan, mixed / 1000 + 1 / 3)


def _rates(times, subject, columns, seed):
    values = {
        name: np.full(len(times), np.nan)
        if name in {"dryness", "u_exergy_live_kw"}
        else _noise(times, subject, name, seed)
        for name in columns
    }
    flag = np.full(len(times), int(Flag.HELD), dtype=np.int32)
    return pd.DataFrame({"subject": subject, "time": times, **values, "flag": flag})


def _conditions(times, subject, figure, seed):
    values = {name: _noise(times, subject, figure, name, seed) for name in CONDITION_COLUMNS}
    # Every fifth cell is unsteady and must not count, and some weigh nothing.
    flag = np.where(times // INTERVAL_S % 5 == 0, int(Flag.UNSTEADY), int(Flag.SOLVED))
    values["weight"] = np.where(times // INTERVAL_S % 11 == 0, 0.0, values["weight"])
    table = {"subject": subject, "figure": figure, "time": times, **values}
    return pd.DataFrame({**table, "flag": flag.astype(np.int32)})


def dump(site):
    """Everything that is stored of a site's figures, by name, in order."""
    start, end = at("2000-01-01"), at("2100-01-01")
    tables = {
        "streams": site.streams(None, start, end),
        "equipment": site.equipment(None, start, end),
        "conditions": site.conditions(None, None, start, end),
        "ledger": site.ledger(start, end),
        "tag_quality": site.tag_quality(start, end),
    }
    for kind in ("stream", "equipment", "site"):
        for resolution in ("hour", "shift", "day", "month"):
            tables[f"{kind} {resolution}"] = site.rollups(kind, resolution, start, end)
    return tables


def assert_same(one, other):
    """Two dumps are equal to the last digit."""
    assert one.keys() == other.keys()
    for name, frame in one.items():
        pd.testing.assert_frame_equal(
            _texts(frame), _texts(other[name]), check_exact=True, obj=name
        )


def _texts(frame):
    """Categories by their text: which others there are depends on the store's numbering."""
    return frame.astype(
        {c: "str" for c in frame if isinstance(frame[c].dtype, pd.CategoricalDtype)}
    )


def expected_rollups(batch, kind, time_zone, shift_starts=None):
    """Roll-ups made by plain pandas from the definition: {resolution: table}.

    Local days and months come from pandas' own time zones; shifts from the wall clock.
    """
    long = _long(batch, kind)
    local = pd.to_datetime(long["time"], unit="s", utc=True).dt.tz_convert(time_zone)
    wall = local.dt.tz_localize(None)
    keys = {
        "hour": long["time"] // 3600,
        "day": wall.dt.normalize(),
        "month": wall.dt.to_period("M"),
    }
    if shift_starts is not None:
        minutes = wall.dt.hour * 60 + wall.dt.minute
        marks = [int(s[:2]) * 60 + int(s[3:]) for s in shift_starts]
        number = np.searchsorted(marks, minutes.to_numpy(), side="right") - 1
        day = wall.dt.normalize() - pd.to_timedelta((number < 0).astype(int), unit="D")
        keys["shift"] = day.astype(str) + "/" + pd.Series(number % len(marks)).astype(str)
    return {
        resolution: _rolled(long.assign(span=np.asarray(key))) for resolution, key in keys.items()
    }


def _long(batch, kind):
    frame = {"stream": batch.streams, "equipment": batch.equipment, "site": batch.ledger}[kind]
    if kind == "site":
        frame = frame.assign(subject="ledger")
    rates = frame.melt(["subject", "time"], list(RATED[kind]), "figure", "value").assign(weight=1.0)
    if kind != "equipment":
        return rates
    conditions = batch.conditions
    judged = (conditions["flag"] & int(NOT_JUDGED)) == 0
    counts = judged & (conditions["weight"] > 0) & conditions["value"].notna()
    return pd.concat([rates, conditions.loc[counts, list(rates.columns)]], ignore_index=True)


def _rolled(long):
    long = long[long["value"].notna()]
    groups = long.assign(product=long["value"] * long["weight"]).groupby(
        ["subject", "figure", "span"], sort=True
    )
    made = groups.agg(
        minimum=("value", "min"), maximum=("value", "max"), cells=("value", "size"),
        product=("product", "sum"), weight=("weight", "sum"), first=("time", "min"),
    )  # fmt: skip
    made["mean"] = made["product"] / made["weight"]
    made["covered_s"] = made["cells"] * INTERVAL_S
    return made.reset_index().sort_values(["subject", "figure", "first"], ignore_index=True)
