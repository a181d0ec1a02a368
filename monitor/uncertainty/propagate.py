"""From moved instruments to the uncertainty of every figure of a window.

Each piece of equipment is evaluated once more, with all rows of its own sources together, by the
same functions that gave its figures: the moves are differences of two evaluations, c_i u_i to first
order (JCGM 100:2008, 5.1.3 note 2, one-sided). It is done in the first cell of each hour, whose
uncertainty stands for the hour; a window begins on a full hour, so no cell hangs on its window.

Classes of instruments are taken as fully correlated in time: an hour's mean has the same
uncertainty as a cell. Fixed values, options of equipment and the steam tables count as exact.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from monitor.equipment.account import balances, destruction
from monitor.thermo.dead_state import DeadState, dead_state
from monitor.uncertainty.budget import Budget, Hourly, Uncertainties
from monitor.uncertainty.classes import class_of, standard_uncertainty
from monitor.uncertainty.rows import Moved, Sample, in_order, move, rows_of

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from monitor.equipment.base import FloatArray, Item
    from monitor.figures import Ambient
    from monitor.readings.condition import Gridded
    from monitor.site.load import Site
    from monitor.thermo.arrays import BoolArray

__all__ = ["propagate"]

# In the order in which `_dead` takes them.
_DEAD = ("temperature", "pressure", "enthalpy", "entropy", "volume", "gibbs")
_LINES = ("supplied", "used", "lost", "destroyed", "imbalance")


def propagate(
    site: Site, tags: Mapping[str, Gridded], ambient: Ambient, hourly: Hourly
) -> Uncertainties:
    """Work out the uncertainty budget of every figure of a window.

    Args:
        site: the site.
        tags: gridded tags over the kept cells.
        ambient: the surroundings over the same cells.
        hourly: the cells to do it in.
    """
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        sample = _sample(site, tags, ambient, hourly)
        surroundings = _surroundings(site, ambient, hourly)
        moved = move(site, sample)
        streams = {s: _stream(moved, surroundings, s) for s in site.streams}
        equipment = {i.id: _equipment(moved, surroundings, i) for i in site.items.values()}
    return Uncertainties(
        hourly=hourly,
        mass_flow={name: flow for name, (flow, _) in streams.items()},
        exergy={name: exergy for name, (_, exergy) in streams.items()},
        destroyed={name: one.destroyed for name, one in equipment.items()},
        conditions={
            (name, figure): budget
            for name, one in equipment.items()
            for figure, budget in one.conditions.items()
        },
        ledger=_ledger(site, streams, equipment),
        by_default={name: _by_default(site, one.destroyed) for name, one in equipment.items()},
    )


def _sample(site: Site, tags: Mapping[str, Gridded], ambient: Ambient, hourly: Hourly) -> Sample:
    cells = hourly.cells
    ends = np.stack([cells, cells + 1], axis=1)
    return Sample(
        means={name: one.mean[cells] for name, one in tags.items()},
        edges={name: one.edges[ends] for name, one in tags.items()},
        barometer=ambient.barometer[cells],
        barometer_edges=ambient.barometer_edges[ends],
        barometer_tag=site.file.dead_state.pressure.tag or "",
        interval=site.file.site.interval,
    )


@dataclass(frozen=True)
class _Surroundings:
    """The live dead state with its own tags moved: values (fields, 1 + sources, n)."""

    sources: tuple[str, ...]
    values: FloatArray
    frozen: BoolArray

    def rows(self, wanted: tuple[str, ...]) -> DeadState:
        """The rows of other sources, shape (1 + sources, n)."""
        places = rows_of(self.sources, wanted)
        return _dead(self.values.take(places, axis=1), self.frozen[places])

    def column(self, wanted: tuple[str, ...]) -> DeadState:
        """The rows of other sources under each other, shape (cells, 1)."""
        places = rows_of(self.sources, wanted)
        values = self.values.take(places, axis=1).reshape(len(_DEAD), -1, 1)
        return _dead(values, self.frozen[places].reshape(-1, 1))


def _dead(values: FloatArray, frozen: BoolArray) -> DeadState:
    temperature, pressure, enthalpy, entropy, volume, gibbs = values
    return DeadState(temperature, pressure, enthalpy, entropy, volume, gibbs, frozen)


def _surroundings(site: Site, ambient: Ambient, hourly: Hourly) -> _Surroundings:
    live, cells, table = ambient.live, hourly.cells, site.file.dead_state
    T0, p0 = live.temperature[cells], live.pressure[cells]
    read = np.stack([getattr(live, name)[cells] for name in _DEAD])
    sources, rows = [], []
    for tag, here, other in ((table.temperature.tag, T0, p0), (table.pressure.tag, p0, T0)):
        if tag is None:
            continue
        moved = here + standard_uncertainty(site.tags[tag], here)
        sources.append(tag)
        rows.append(dead_state(moved, other) if here is T0 else dead_state(other, moved))
    values = [read, *(np.stack([getattr(row, name) for name in _DEAD]) for row in rows)]
    return _Surroundings(
        tuple(sources),
        np.stack(values, axis=1),
        np.stack([live.frozen[cells], *(row.frozen for row in rows)]),
    )


def _stream(moved: Moved, surroundings: _Surroundings, stream: str) -> tuple[Budget, Budget]:
    """Budgets of a stream's mass flow [kg/s] and live exergy [W]."""
    wanted, state = moved.stream(stream, surroundings.sources)
    exergy = state.exergy(surroundings.rows(wanted))
    return _budget(wanted, state.mass_flow), _budget(wanted, exergy)


@dataclass(frozen=True)
class _Equipment:
    """Budgets of one piece of equipment; all but the condition figures [W, live]."""

    destroyed: Budget
    heat_loss: Budget
    imbalance: Budget
    conditions: Mapping[str, Budget]


def _equipment(moved: Moved, surroundings: _Surroundings, item: Item) -> _Equipment:
    wanted = in_order(moved.sources(item), surroundings.sources)
    drawn = moved.draw(item, wanted)
    dead = surroundings.column(wanted)
    counted = balances(drawn)
    gone = destruction(drawn, counted, dead)
    figures = item.kind.figures(item)
    values = item.kind.condition(drawn, dead) if figures else {}
    return _Equipment(
        destroyed=_budget(wanted, gone.destroyed),
        heat_loss=_budget(wanted, gone.heat_loss_exergy),
        # An account closes but for the energy that the readings do not account for.
        imbalance=_budget(wanted, gone.unaccounted + counted.energy_imbalance),
        conditions={f.name: _budget(wanted, values[f.name].value) for f in figures},
    )


def _budget(sources: tuple[str, ...], values: FloatArray) -> Budget:
    rows = values.reshape(1 + len(sources), -1)
    return Budget(sources, rows[1:] - rows[0])


def _ledger(
    site: Site,
    streams: Mapping[str, tuple[Budget, Budget]],
    equipment: Mapping[str, _Equipment],
) -> dict[str, Budget]:
    """The ledger's lines: what a tag does to each part of a line adds up with its sign."""
    ends = site.crossing()
    parts = {line: [streams[s][1] for s in ends.get(line, ())] for line in _LINES}
    for one in equipment.values():
        parts["lost"].append(one.heat_loss)
        parts["destroyed"].append(one.destroyed)
        parts["imbalance"].append(one.imbalance)
    every = in_order(*[budget.sources for line in parts.values() for budget in line])
    places = {source: place for place, source in enumerate(every)}
    count = next(iter(equipment.values())).destroyed.moves.shape[1]
    return {line: _added(every, places, budgets, count) for line, budgets in parts.items()}


def _added(
    sources: tuple[str, ...], places: Mapping[str, int], budgets: Sequence[Budget], count: int
) -> Budget:
    moves = np.zeros((len(sources), count))
    for budget in budgets:
        moves[[places[source] for source in budget.sources]] += budget.moves
    return Budget(sources, moves)


def _by_default(site: Site, budget: Budget) -> tuple[str, ...]:
    """The tags behind a figure whose class the site file does not state."""
    classes = {s: class_of(site.tags[s]) for s in budget.sources if s in site.tags}
    return tuple(name for name, one in classes.items() if one is None or not one.stated)
