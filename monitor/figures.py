"""Every figure of one window, from readings: pure, and the same whatever windows came before.

What a cell needs from before the window (held readings, the dead state's trailing mean, the load's
steadiness) is read as a lead-in and left out of the result, so that windows of any size, in any
order, give the same figures to the last bit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from monitor.equipment.account import Account, Balances, account, balances
from monitor.equipment.base import Content, Drawn, FloatArray, Item, Signal, StreamState, sum_flags
from monitor.equipment.solve import complete
from monitor.flags import Flag, FlagArray
from monitor.readings.condition import Conditioned, Gridded, condition
from monitor.readings.grid import Grid
from monitor.store.batch import (
    CONDITION_COLUMNS,
    EQUIPMENT_COLUMNS,
    LEDGER_COLUMNS,
    STREAM_COLUMNS,
    FigureBatch,
)
from monitor.streams import Gauges, signals_of, stream_states, with_enthalpy
from monitor.thermo.dead_state import DeadState, dead_state, live_ambient

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from connectors.base import Problem, ReadResult
    from monitor.site.load import Site

__all__ = ["Computed", "compute", "lead_in"]

_HOUR = 3600
# Without stated uncertainties, destruction below this share of the exergy that comes in is taken
# for a contradiction of the second law rather than for noise (common practice: meters of 1 %).
_CONTRADICTION = 0.02


@dataclass(frozen=True)
class Computed:
    """Figures of one window, and what was read for them.

    Attributes:
        batch: figures for the store.
        readings, bad, missing: readings inside the window; those left out; cells without a value.
        problems: what the sources passed over.
    """

    batch: FigureBatch
    readings: int
    bad: int
    missing: int
    problems: tuple[Problem, ...] = ()


def lead_in(site: Site) -> int:
    """How long before a window its readings begin [s], in whole cells."""
    dead, general = site.file.dead_state, site.file.site
    hold = max((t.hold for t in site.used_tags().values()), default=0.0)
    before = max(general.steady_window, dead.mean + dead.hold) + hold
    return math.ceil(before / general.interval + 1) * int(general.interval)


def compute(site: Site, read: ReadResult, start: int, end: int) -> Computed:
    """Compute every figure of a window.

    Args:
        site: the site.
        read: readings from ``start - lead_in(site)`` to ``end`` inclusive.
        start: UTC s, on a full hour.
        end: UTC s, on the grid.
    """
    if start % _HOUR:
        raise ValueError(f"a window starts on a full hour, not at {start}")
    interval = int(site.file.site.interval)
    grid = Grid(start, end, interval)
    wide = Grid(start - lead_in(site), end, interval)
    conditioned = condition(read.readings, site.used_tags(), wide, site.file.site.least_coverage)
    steady_cells = math.ceil(site.file.site.steady_window / interval)
    kept = grid.count + steady_cells
    ambient = _ambient(site, conditioned, kept)
    plant = _plant(site, conditioned, ambient, kept, interval)
    return _figures(site, plant, grid, conditioned, read.problems)


@dataclass(frozen=True)
class _Ambient:
    """The surroundings over the kept cells: live dead state, the fixed one, and the barometer."""

    live: DeadState
    reference: DeadState
    flag: FlagArray
    barometer: FloatArray
    barometer_edges: FloatArray
    barometer_flag: FlagArray


def _ambient(site: Site, conditioned: Conditioned, kept: int) -> _Ambient:
    table = site.file.dead_state
    interval = site.file.site.interval
    hold, mean = int(table.hold // interval), max(int(table.mean // interval), 1)
    count = conditioned.grid.count

    def series(reference: object, fallback: float, mean_cells: int) -> tuple[FloatArray, FlagArray]:
        tag = getattr(reference, "tag", None)
        if tag is None:
            fixed = getattr(reference, "fixed", None)
            values = np.full(count, fallback if fixed is None else fixed)
            return values, np.zeros(count, dtype=np.int32)
        gridded = conditioned.tags[tag]
        usable = np.isfinite(gridded.mean)
        values, stood_in = live_ambient(gridded.mean, usable, hold, mean_cells, fallback)
        # What left the reading out is told by DEAD_STATE_HELD; the figure itself is not missing.
        flag = gridded.flag & ~np.int32(Flag.MISSING | Flag.LOW_COVERAGE | Flag.HELD)
        held = (gridded.flag & Flag.HELD) != 0
        bits = np.where(stood_in | held, np.int32(Flag.DEAD_STATE_HELD), np.int32(0))
        return values, np.asarray(flag | bits, dtype=np.int32)

    T0, T_flag = series(table.temperature, table.reference_temperature, mean)
    p0, p_flag = series(table.pressure, table.reference_pressure, mean)
    barometer, barometer_flag = series(table.pressure, table.reference_pressure, 1)
    T0, p0, barometer = T0[-kept:], p0[-kept:], barometer[-kept - 1 :]
    live = dead_state(T0, p0)
    freezing = np.where(live.frozen, np.int32(Flag.FREEZING), np.int32(0))
    return _Ambient(
        live=live,
        reference=dead_state(table.reference_temperature, table.reference_pressure),
        flag=np.asarray(T_flag[-kept:] | p_flag[-kept:] | freezing, dtype=np.int32),
        barometer=barometer[1:],
        # At a cell's end stands the mean of the cell before it: the same whatever comes after.
        barometer_edges=barometer,
        barometer_flag=barometer_flag[-kept:],
    )


@dataclass(frozen=True)
class _Plant:
    """The whole site over the kept cells (steadiness lead-in included)."""

    ambient: _Ambient
    states: Mapping[str, StreamState]
    drawn: Mapping[str, Drawn]


def _plant(
    site: Site, conditioned: Conditioned, ambient: _Ambient, kept: int, interval: int
) -> _Plant:
    tags: dict[str, Gridded] = {k: v.tail(kept) for k, v in conditioned.tags.items()}
    gauges = Gauges(tags, ambient.barometer, ambient.barometer_edges, ambient.barometer_flag)
    states = stream_states(site, gauges)
    signals = signals_of(site, gauges)
    contents = {i.id: i.kind.content(i, signals[i.id]) for i in site.items.values()}
    draw = partial(_draw, site.items, states, signals, contents, interval)
    complete(site.steps, states, draw, with_enthalpy)
    return _Plant(ambient, states, {item: draw(item) for item in site.items})


def _draw(
    items: Mapping[str, Item],
    states: Mapping[str, StreamState],
    signals: Mapping[str, Mapping[str, Signal]],
    contents: Mapping[str, Content | None],
    interval: int,
    item_id: str,
) -> Drawn:
    item = items[item_id]
    at = {port: tuple(states[s] for s in ids) for port, ids in item.ports.items()}
    return Drawn(item, at, signals[item_id], float(interval), contents[item_id])


@dataclass(frozen=True)
class _Accounted:
    """One piece of equipment with its account at both dead states."""

    drawn: Drawn
    counted: Balances
    live: Account
    reference: Account
    load: FloatArray
    flag: FlagArray


def _accounted(site: Site, drawn: Drawn, ambient: _Ambient) -> _Accounted:
    counted = balances(drawn)
    live = account(drawn, counted, ambient.live)
    reference = account(drawn, counted, ambient.reference)
    load = drawn.item.kind.load(drawn)
    flag = sum_flags((*drawn.facing("in"), *drawn.facing("out")), tuple(drawn.signals.values()))
    flag = np.asarray(flag | ambient.flag | _running(site, drawn.item, load), dtype=np.int32)
    contradicts = live.destroyed < -_CONTRADICTION * np.abs(live.exergy_in)
    flag[contradicts] |= Flag.SECOND_LAW
    absent = ~np.isfinite(live.destroyed) & ((flag & Flag.OUT_OF_REGION) == 0)
    flag[absent] |= Flag.MISSING
    return _Accounted(drawn, counted, live, reference, load, flag)


def _running(site: Site, item: Item, load: FloatArray) -> FlagArray:
    """Out of service, and unsteady: the load's spread over the trailing window is too wide."""
    cells = math.ceil(site.file.site.steady_window / site.file.site.interval) + 1
    padded = np.concatenate([np.full(cells - 1, np.nan), load])
    recent = np.lib.stride_tricks.sliding_window_view(padded, cells)
    # Missing cells neither help nor harm; fmax and fmin pass over them.
    spread = np.fmax.reduce(recent, axis=1) - np.fmin.reduce(recent, axis=1)
    unsteady = spread > site.file.site.steady_limit * np.abs(load)
    off = load < item.options.off_below
    return (
        np.where(unsteady, np.int32(Flag.UNSTEADY), np.int32(0))
        | np.where(off, np.int32(Flag.OFF), np.int32(0))
    ).astype(np.int32)


def _figures(
    site: Site,
    plant: _Plant,
    grid: Grid,
    conditioned: Conditioned,
    problems: tuple[Problem, ...],
) -> Computed:
    n = grid.count
    accounted = [_accounted(site, d, plant.ambient) for d in plant.drawn.values()]
    quality = conditioned.quality
    quality = quality[(quality["hour"] >= grid.start) & (quality["hour"] < grid.end)]
    batch = FigureBatch(
        start=grid.start,
        end=grid.end,
        streams=_stream_table(plant, grid, n),
        equipment=_equipment_table(accounted, grid, n),
        conditions=_condition_table(accounted, plant.ambient, grid, n),
        ledger=_ledger_table(site, plant, accounted, grid, n),
        tag_quality=quality.reset_index(drop=True),
    )
    return Computed(
        batch=batch,
        readings=int(quality["readings"].sum()),
        bad=int(quality["bad"].sum() + quality["out_of_range"].sum()),
        missing=int(quality["cells_missing"].sum()),
        problems=problems,
    )


def _table(
    subject: str | None, grid: Grid, columns: Mapping[str, FloatArray], flag: FlagArray, n: int
) -> pd.DataFrame:
    head: dict[str, object] = {} if subject is None else {"subject": subject}
    body = {name: np.broadcast_to(values, flag.shape)[-n:] for name, values in columns.items()}
    return pd.DataFrame(head | {"time": grid.starts} | body | {"flag": flag[-n:]})


def _stream_table(plant: _Plant, grid: Grid, n: int) -> pd.DataFrame:
    absent = np.full(len(plant.ambient.flag), np.nan)
    tables = []
    for state in plant.states.values():
        values = (
            state.mass_flow,
            state.pressure / 1e5,
            state.temperature - 273.15,
            state.enthalpy / 1e3,
            state.entropy / 1e3,
            state.dryness,
            state.energy / 1e3,
            state.exergy(plant.ambient.live) / 1e3,
            state.exergy(plant.ambient.reference) / 1e3,
            absent,
            absent,
        )
        columns = dict(zip(STREAM_COLUMNS, values, strict=True))
        flag = np.asarray(state.flag | plant.ambient.flag, dtype=np.int32)
        tables.append(_table(state.id, grid, columns, flag, n))
    return pd.concat(tables, ignore_index=True)


def _equipment_table(accounted: Sequence[_Accounted], grid: Grid, n: int) -> pd.DataFrame:
    tables = []
    for a in accounted:
        live, reference, counted = a.live, a.reference, a.counted
        in_kw = {
            "exergy_in_live_kw": live.exergy_in,
            "exergy_out_live_kw": live.exergy_out,
            "destroyed_live_kw": live.destroyed,
            "fuel_live_kw": live.fuel,
            "product_live_kw": live.product,
            "exergy_in_reference_kw": reference.exergy_in,
            "exergy_out_reference_kw": reference.exergy_out,
            "destroyed_reference_kw": reference.destroyed,
            "fuel_reference_kw": reference.fuel,
            "product_reference_kw": reference.product,
            "heat_loss_kw": counted.heat_loss + counted.unmeasured_heat,
            "heat_loss_exergy_live_kw": live.heat_loss_exergy,
            "stored_rate_live_kw": live.stored_rate,
            "unaccounted_live_kw": live.unaccounted,
            "closure_live_kw": live.closure,
            "energy_imbalance_kw": counted.energy_imbalance,
        }
        values = {k: np.asarray(v) / 1e3 for k, v in in_kw.items()} | {
            "load_kg_s": a.load,
            "mass_imbalance_kg_s": counted.mass_imbalance,
            "u_destroyed_live_kw": np.full_like(a.load, np.nan),
        }
        columns = {name: values[name] for name in EQUIPMENT_COLUMNS}
        tables.append(_table(a.drawn.item.id, grid, columns, a.flag, n))
    return pd.concat(tables, ignore_index=True)


def _condition_table(
    accounted: Sequence[_Accounted], ambient: _Ambient, grid: Grid, n: int
) -> pd.DataFrame:
    tables = []
    for a in accounted:
        item = a.drawn.item
        values = item.kind.condition(a.drawn, ambient.live)
        for figure in item.kind.figures(item):
            got = values[figure.name]
            running = Flag.OFF | Flag.UNSTEADY
            flag = a.flag if figure.needs_load else a.flag & ~np.int32(running)
            flag = np.asarray(flag | got.flag, dtype=np.int32)
            flag[~np.isfinite(got.value)] |= Flag.MISSING
            columns = dict(
                zip(
                    CONDITION_COLUMNS,
                    (got.value, got.weight, np.full_like(a.load, np.nan)),
                    strict=True,
                )
            )
            table = _table(item.id, grid, columns, flag, n)
            table.insert(1, "figure", figure.name)
            tables.append(table)
    if not tables:
        return pd.DataFrame(columns=["subject", "figure", "time", *CONDITION_COLUMNS, "flag"])
    return pd.concat(tables, ignore_index=True)


def _ledger_table(
    site: Site, plant: _Plant, accounted: Sequence[_Accounted], grid: Grid, n: int
) -> pd.DataFrame:
    """Supplied = used + lost + destroyed + change in store + imbalance, at both dead states."""
    ambient = plant.ambient
    supplied = [s for s in site.streams if s not in site.producer]
    leaving = [s for s in site.streams if s not in site.consumer]
    used = [s for s in leaving if site.counts_as_used(s)]
    lost = [s for s in leaving if s not in used]
    columns: dict[str, FloatArray] = {
        "t0_degc": ambient.live.temperature - 273.15,
        "p0_bar": ambient.live.pressure / 1e5,
    }
    nothing = np.zeros(len(ambient.flag))
    for name, dead in (("live", ambient.live), ("reference", ambient.reference)):
        accounts = [a.live if name == "live" else a.reference for a in accounted]
        crossing = {
            "supplied": sum((plant.states[s].exergy(dead) for s in supplied), nothing),
            "used": sum((plant.states[s].exergy(dead) for s in used), nothing),
            "lost": sum((plant.states[s].exergy(dead) for s in lost), nothing)
            + sum((a.heat_loss_exergy for a in accounts), nothing),
            "destroyed": sum((a.destroyed for a in accounts), nothing),
            "stored_rate": sum((a.stored_rate for a in accounts), nothing),
            "imbalance": sum((a.unaccounted + a.closure for a in accounts), nothing),
        }
        columns |= {f"{key}_{name}_kw": value / 1e3 for key, value in crossing.items()}
    own = Flag.UNSTEADY | Flag.OFF
    flag = np.bitwise_or.reduce(np.stack([a.flag for a in accounted]), axis=0) & ~np.int32(own)
    ordered = {name: columns[name] for name in LEDGER_COLUMNS}
    return _table(None, grid, ordered, np.asarray(flag | ambient.flag, dtype=np.int32), n)
