"""Every figure of one window, from readings: pure, and the same whatever windows came before.

What a cell needs from before the window (held readings, the dead state's trailing mean, the load's
steadiness) is read as a lead-in and left out of the result, so that windows of any size, in any
order, give the same figures to the last bit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import partial
from typing import TYPE_CHECKING

import numpy as np

from monitor.equipment.account import (
    Account,
    Balances,
    account,
    balances,
    content_uncertainty,
)
from monitor.equipment.base import Content, Drawn, FloatArray, Item, Signal, StreamState, sum_flags
from monitor.equipment.solve import complete
from monitor.flags import Flag, FlagArray
from monitor.readings.grid import Grid
from monitor.readings.site import condition_site
from monitor.readings.steadiness import just_started, unsteady
from monitor.store.batch import LEFT_OUT_COLUMNS, FigureBatch
from monitor.streams import Gauges, signals_of, stream_states, with_enthalpy
from monitor.tables import condition_table, equipment_table, ledger_table, stream_table
from monitor.thermo.dead_state import DeadState, dead_state, live_ambient
from monitor.uncertainty import COVERAGE, Hourly, Uncertainties, propagate
from monitor.uncertainty.classes import standard_uncertainty

if TYPE_CHECKING:
    from collections.abc import Mapping

    from connectors.base import Problem, ReadResult
    from monitor.readings.condition import Conditioned, Gridded
    from monitor.site.load import Site
    from monitor.site.models import Reference
    from monitor.thermo.arrays import BoolArray

__all__ = [
    "Accounted",
    "Ambient",
    "Computed",
    "Plant",
    "compute",
    "lead_in",
    "stated_uncertainty",
]

_HOUR = 3600
# Negative destruction beyond the expanded uncertainty of the instruments is a contradiction of the
# second law. Steam tables and fixed values, which that leaves out, are allowed a thousandth of the
# exergy that passes through. Where the site file does not state every class, or the load moves and
# pipes and metal store what no account holds, the allowance is a share of what passes through
# (common practice: meters of 1 %).
_MODEL, _CONTRADICTION = 0.001, 0.02
# What a vessel holds is differentiated, so the stated uncertainties of its gauges come on top,
# expanded to leave one cell in seven hundred (normal distribution).
_CONTENT_COVERAGE = 3.0


@dataclass(frozen=True)
class Computed:
    """Figures of one window, and what was read for them.

    Attributes:
        batch: figures for the store.
        readings, bad, missing: readings inside the window; those left out; cells without a value.
        problems: what the sources passed over.
        uncertainties: what each instrument contributes to each figure; None unless asked for.
        plant: the states and signals behind the figures; None unless asked for.
    """

    batch: FigureBatch
    readings: int
    bad: int
    missing: int
    problems: tuple[Problem, ...] = ()
    uncertainties: Uncertainties | None = None
    plant: Plant | None = None


def lead_in(site: Site) -> int:
    """How long before a window its readings begin [s], in whole cells.

    The cells of the steadiness window come before it, and their dead state's mean and hold before
    them; a stuck value is told by the cells of its time; before the first of all these cells come
    the readings that its values and their checks rest on.
    """
    dead, general = site.file.dead_state, site.file.site
    tags = site.used_tags().values()
    stuck = max((tag.stuck_seconds for tag in tags), default=0.0)
    before = max(general.steady_window + dead.mean + dead.hold, stuck)
    before += max((tag.look_back for tag in tags), default=0.0)
    return math.ceil(before / general.interval + 1) * int(general.interval)


def compute(
    site: Site, read: ReadResult, start: int, end: int, *, with_budgets: bool = False
) -> Computed:
    """Compute every figure of a window.

    Args:
        site: the site.
        read: readings from ``start - lead_in(site)`` to ``end`` inclusive.
        start: UTC s, on a full hour.
        end: UTC s, on the grid.
        with_budgets: hand out the uncertainty budgets, states and signals too, which nobody stores.
    """
    if start % _HOUR:
        raise ValueError(f"a window starts on a full hour, not at {start}")
    interval = int(site.file.site.interval)
    grid = Grid(start, end, interval)
    wide = Grid(start - lead_in(site), end, interval)
    conditioned = condition_site(site, read.readings, wide)
    kept = grid.count + _steady_cells(site) - 1
    ambient = _ambient(site, conditioned, kept)
    tags = {name: one.tail(kept) for name, one in conditioned.tags.items()}
    plant = _plant(site, tags, ambient, interval)
    hourly = Hourly.of(kept, grid.count, _HOUR // interval)
    uncertain = propagate(site, tags, ambient, hourly)
    computed = _figures(site, plant, uncertain, grid, conditioned, read.problems)
    return replace(computed, uncertainties=uncertain, plant=plant) if with_budgets else computed


@dataclass(frozen=True)
class Ambient:
    """The surroundings over the kept cells: live dead state, the fixed one, and the barometer."""

    live: DeadState
    reference: DeadState
    flag: FlagArray
    barometer: FloatArray
    barometer_edges: FloatArray
    barometer_flag: FlagArray


def _ambient(site: Site, conditioned: Conditioned, kept: int) -> Ambient:
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
    return Ambient(
        live=live,
        reference=dead_state(table.reference_temperature, table.reference_pressure),
        flag=np.asarray(T_flag[-kept:] | p_flag[-kept:] | freezing, dtype=np.int32),
        barometer=barometer[1:],
        # At a cell's end stands the mean of the cell before it: the same whatever comes after.
        barometer_edges=barometer,
        barometer_flag=barometer_flag[-kept:],
    )


@dataclass(frozen=True)
class Plant:
    """The whole site over the kept cells (steadiness lead-in included)."""

    ambient: Ambient
    states: Mapping[str, StreamState]
    drawn: Mapping[str, Drawn]


def _plant(site: Site, tags: Mapping[str, Gridded], ambient: Ambient, interval: int) -> Plant:
    gauges = Gauges(tags, ambient.barometer, ambient.barometer_edges, ambient.barometer_flag)
    states = stream_states(site, gauges)
    signals = signals_of(site, gauges)
    contents = {i.id: i.kind.content(i, signals[i.id]) for i in site.items.values()}
    draw = partial(_draw, site.items, states, signals, contents, interval)
    complete(site.steps, states, draw, with_enthalpy)
    return Plant(ambient, states, {item: draw(item) for item in site.items})


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
class Accounted:
    """One piece of equipment with its account at both dead states.

    Attributes:
        u_destroyed: standard uncertainty of what it destroys, live [W].
        classes_stated: whether the site file states the class of every instrument behind it.
    """

    drawn: Drawn
    counted: Balances
    live: Account
    reference: Account
    load: FloatArray
    flag: FlagArray
    u_destroyed: FloatArray
    classes_stated: bool


def _accounted(
    site: Site,
    drawn: Drawn,
    ambient: Ambient,
    uncertain: Uncertainties,
    load: FloatArray,
    moving: BoolArray,
) -> Accounted:
    counted = balances(drawn)
    live = account(drawn, counted, ambient.live)
    reference = account(drawn, counted, ambient.reference)
    flag = sum_flags((*drawn.facing("in"), *drawn.facing("out")), tuple(drawn.signals.values()))
    flag = np.asarray(
        flag | ambient.flag | _running(site, drawn.item, load, moving), dtype=np.int32
    )
    u = uncertain.standard(uncertain.destroyed[drawn.item.id])
    stated = not uncertain.by_default[drawn.item.id]
    passing = np.maximum(np.abs(live.exergy_in), np.abs(live.exergy_out))
    judged = np.isfinite(u) & ((flag & Flag.UNSTEADY) == 0) & stated
    allowed = np.where(judged, COVERAGE * u + _MODEL * passing, _CONTRADICTION * passing)
    stored = content_uncertainty(drawn, ambient.live, _moved_contents(site, drawn))
    contradicts = live.destroyed < -(allowed + _CONTENT_COVERAGE * stored)
    if drawn.content is None:
        # Out of service, meters about zero show as much below it as above.
        contradicts &= (flag & Flag.OFF) == 0
    flag[contradicts] |= Flag.SECOND_LAW
    # A reading that is not needed (a pipe without flow, a valve's position) takes no figure away.
    whole = np.isfinite(live.closure + live.fuel + live.product)
    flag[whole] &= ~np.int32(Flag.MISSING)
    absent = ~np.isfinite(live.destroyed) & ((flag & Flag.OUT_OF_REGION) == 0)
    flag[absent] |= Flag.MISSING
    return Accounted(drawn, counted, live, reference, load, flag, u, stated)


def _moved_contents(site: Site, drawn: Drawn) -> list[Content]:
    """What a vessel would hold with each of its gauges in turn higher by its uncertainty."""
    item, moved = drawn.item, []
    for key, (reference, _) in item.options.signals().items() if drawn.content else ():
        signal = drawn.signals[key]
        shift = stated_uncertainty(site, reference, signal.edges)
        if shift is None:
            continue
        signals = {**drawn.signals, key: replace(signal, edges=signal.edges + shift)}
        content = item.kind.content(item, signals)
        moved += [] if content is None else [content]
    return moved


def stated_uncertainty(site: Site, reference: Reference, values: FloatArray) -> FloatArray | None:
    """Standard uncertainty of values [SI] by their tag's class; None where it states none."""
    tag = site.tags.get(reference.tag or "")
    if tag is None or not tag.uncertainty:
        return None
    return standard_uncertainty(tag, values)


def _running(site: Site, item: Item, load: FloatArray, moving: BoolArray) -> FlagArray:
    """Out of service, just started, or unsteady: states of the plant, not faults of readings."""
    off = load < item.options.off_below
    return np.asarray(
        _bits(off, Flag.OFF)
        | _bits(just_started(off, _steady_cells(site)), Flag.STARTING)
        | _bits(moving & ~off, Flag.UNSTEADY)
    )


def _moving(site: Site, rates: Mapping[str, FloatArray]) -> dict[str, BoolArray]:
    """Which of some rates are not steady; all at once, since many small calls cost more."""
    general = site.file.site
    limits = (general.steady_limit, general.steady_drift)
    found = unsteady(np.stack(list(rates.values())), _steady_cells(site), *limits)
    return dict(zip(rates, found, strict=True))


def _steady_cells(site: Site) -> int:
    return math.ceil(site.file.site.steady_window / site.file.site.interval) + 1


def _bits(where: np.ndarray[tuple[int], np.dtype[np.bool_]], flag: Flag) -> FlagArray:
    return np.where(where, np.int32(flag), np.int32(0))


def _figures(
    site: Site,
    plant: Plant,
    uncertain: Uncertainties,
    grid: Grid,
    conditioned: Conditioned,
    problems: tuple[Problem, ...],
) -> Computed:
    loads = {name: drawn.item.kind.load(drawn) for name, drawn in plant.drawn.items()}
    unsteady_loads = _moving(site, loads)
    accounted = [
        _accounted(site, drawn, plant.ambient, uncertain, loads[name], unsteady_loads[name])
        for name, drawn in plant.drawn.items()
    ]
    quality = conditioned.quality
    quality = quality[(quality["hour"] >= grid.start) & (quality["hour"] < grid.end)]
    rates = {
        state.id: state.mass_flow if state.medium == "water" else state.energy
        for state in plant.states.values()
    }
    moving = {name: _bits(bad, Flag.UNSTEADY) for name, bad in _moving(site, rates).items()}
    batch = FigureBatch(
        start=grid.start,
        end=grid.end,
        streams=stream_table(plant, moving, uncertain, grid),
        equipment=equipment_table(accounted, grid),
        conditions=condition_table(accounted, plant.ambient, uncertain, grid),
        ledger=ledger_table(site, plant, accounted, uncertain, grid),
        tag_quality=quality.reset_index(drop=True),
    )
    return Computed(
        batch=batch,
        readings=int(quality["readings"].sum()),
        bad=int(quality[list(LEFT_OUT_COLUMNS)].to_numpy().sum()),
        missing=int(quality["cells_missing"].sum()),
        problems=problems,
    )
