"""Accounts and states as the tables that the store takes: units of the trade, a row a cell.

Every table is built column by column from whole arrays; names are categories, never a string a row.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from monitor.flags import Flag, FlagArray
from monitor.store.batch import (
    CONDITION_COLUMNS,
    EQUIPMENT_COLUMNS,
    LEDGER_COLUMNS,
    STREAM_COLUMNS,
)
from monitor.uncertainty.budget import COVERAGE

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from monitor.equipment.base import FloatArray
    from monitor.figures import Accounted, Ambient, Plant
    from monitor.readings.grid import Grid
    from monitor.site.load import Site
    from monitor.uncertainty import Uncertainties

__all__ = ["condition_table", "equipment_table", "ledger_table", "stream_table"]


@dataclass(frozen=True)
class _Block:
    """The rows of one subject (and figure) over the grid, lead-in cells still in front."""

    names: tuple[str, ...]
    columns: Mapping[str, FloatArray]
    flag: FlagArray


def _stacked(
    heads: tuple[str, ...], wanted: tuple[str, ...], blocks: Sequence[_Block], grid: Grid
) -> pd.DataFrame:
    """Put blocks under each other, their lead-in cut off."""
    n = grid.count
    table: dict[str, object] = {}
    for place, head in enumerate(heads):
        names = [block.names[place] for block in blocks]
        distinct = list(dict.fromkeys(names))
        codes = np.repeat(np.array([distinct.index(name) for name in names], dtype=np.int64), n)
        table[head] = pd.Categorical.from_codes(codes, categories=pd.Index(distinct))
    table["time"] = np.tile(grid.starts, len(blocks))
    for name in wanted:
        table[name] = np.concatenate([block.columns[name][-n:] for block in blocks])
    table["flag"] = np.concatenate([block.flag[-n:] for block in blocks])
    return pd.DataFrame(table)


def stream_table(
    plant: Plant, moving: Mapping[str, FlagArray], uncertain: Uncertainties, grid: Grid
) -> pd.DataFrame:
    """State, flow and exergy of every stream, flagged where its rate was moving.

    That is the stream's own steadiness: a machine's is told by its load, whatever a drain does.
    """
    blocks = []
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
            uncertain.standard(uncertain.mass_flow[state.id]),
            uncertain.standard(uncertain.exergy[state.id]) / 1e3,
        )
        columns = dict(zip(STREAM_COLUMNS, values, strict=True))
        flag = np.asarray(state.flag | plant.ambient.flag | moving[state.id], dtype=np.int32)
        blocks.append(_Block((state.id,), columns, flag))
    return _stacked(("subject",), STREAM_COLUMNS, blocks, grid)


def equipment_table(accounted: Sequence[Accounted], grid: Grid) -> pd.DataFrame:
    """The account of every piece of equipment."""
    blocks = [_Block((a.drawn.item.id,), _account_columns(a), a.flag) for a in accounted]
    return _stacked(("subject",), EQUIPMENT_COLUMNS, blocks, grid)


def _account_columns(a: Accounted) -> dict[str, FloatArray]:
    live, reference, counted = a.live, a.reference, a.counted
    watts = {
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
        "u_destroyed_live_kw": a.u_destroyed,
    }
    return {name: np.asarray(values) / 1e3 for name, values in watts.items()} | {
        "load_kg_s": a.load,
        "mass_imbalance_kg_s": counted.mass_imbalance,
    }


def condition_table(
    accounted: Sequence[Accounted], ambient: Ambient, uncertain: Uncertainties, grid: Grid
) -> pd.DataFrame:
    """The condition figures of every piece of equipment, in their own units."""
    blocks = [block for a in accounted for block in _condition_blocks(a, ambient, uncertain)]
    if not blocks:
        return pd.DataFrame(columns=["subject", "figure", "time", *CONDITION_COLUMNS, "flag"])
    return _stacked(("subject", "figure"), CONDITION_COLUMNS, blocks, grid)


def _condition_blocks(a: Accounted, ambient: Ambient, uncertain: Uncertainties) -> list[_Block]:
    item = a.drawn.item
    values = item.kind.condition(a.drawn, ambient.live)
    blocks = []
    for figure in item.kind.figures(item):
        got = values[figure.name]
        u = uncertain.standard(uncertain.conditions[item.id, figure.name])
        own = got.flag
        if a.classes_stated and figure.unit in _LEAST_AND_MOST:
            possible = _possible(got.value, u, *_LEAST_AND_MOST[figure.unit])
            own = np.where(possible, own & ~np.int32(Flag.SECOND_LAW), own)
        running = np.int32(Flag.OFF | Flag.STARTING | Flag.UNSTEADY)
        flag = np.asarray((a.flag if figure.needs_load else a.flag & ~running) | own)
        absent = np.where(np.isfinite(got.value), np.int32(0), np.int32(Flag.MISSING))
        columns = dict(zip(CONDITION_COLUMNS, (got.value, got.weight, u), strict=True))
        blocks.append(_Block((item.id, figure.name), columns, np.asarray(flag | absent, np.int32)))
    return blocks


# What a share or a temperature difference that drives heat can be.
_LEAST_AND_MOST = {"%": (0.0, 100.0), "K": (0.0, np.inf)}


def _possible(
    value: FloatArray, u: FloatArray, least: float, most: float
) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
    """Where a figure is outside what can be by no more than its instruments explain."""
    beyond = np.maximum(value - most, least - value)
    return np.asarray((beyond > 0) & (beyond <= COVERAGE * u))


def ledger_table(
    site: Site,
    plant: Plant,
    accounted: Sequence[Accounted],
    uncertain: Uncertainties,
    grid: Grid,
) -> pd.DataFrame:
    """Supplied = used + lost + destroyed + change in store + imbalance, at both dead states."""
    ambient, ends = plant.ambient, site.crossing()
    supplied, used, lost = ends["supplied"], ends["used"], ends["lost"]
    lines: dict[str, FloatArray] = {}
    nothing = np.zeros(len(ambient.flag))
    for name, dead in (("live", ambient.live), ("reference", ambient.reference)):
        accounts = [a.live if name == "live" else a.reference for a in accounted]
        totals = {
            "supplied": sum((plant.states[s].exergy(dead) for s in supplied), nothing),
            "used": sum((plant.states[s].exergy(dead) for s in used), nothing),
            "lost": sum((plant.states[s].exergy(dead) for s in lost), nothing)
            + sum((a.heat_loss_exergy for a in accounts), nothing),
            "destroyed": sum((a.destroyed for a in accounts), nothing),
            "stored_rate": sum((a.stored_rate for a in accounts), nothing),
            "imbalance": sum((a.unaccounted + a.closure for a in accounts), nothing),
        }
        lines |= {f"{key}_{name}_kw": value / 1e3 for key, value in totals.items()}
    # A ledger with a hole in it is no ledger: its lines are there together or not at all.
    whole = np.isfinite(np.stack(list(lines.values()))).all(axis=0)
    lines |= {
        f"u_{line}_live_kw": uncertain.standard(budget) / 1e3
        for line, budget in uncertain.ledger.items()
    }
    columns = {
        "t0_degc": ambient.live.temperature - 273.15,
        "p0_bar": ambient.live.pressure / 1e5,
    } | {name: np.where(whole, values, np.nan) for name, values in lines.items()}
    own = np.int32(Flag.UNSTEADY | Flag.STARTING | Flag.OFF)
    every = np.bitwise_or.reduce(np.stack([a.flag for a in accounted]), axis=0)
    absent = np.where(whole, np.int32(0), np.int32(Flag.MISSING))
    flag = np.asarray((every & ~own) | ambient.flag | absent, dtype=np.int32)
    return _stacked((), LEDGER_COLUMNS, [_Block((), columns, flag)], grid)
