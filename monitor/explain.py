"""One figure at one time, step by step: its readings, gridded values, states, formula and numbers.

Everything is read from the sources again and computed again; the stored figure stands beside it.
The last steps are put together here from states alone, a second way to the same number.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from connectors.base import Quality
from monitor.cycle import read_window
from monitor.equipment.working import AtHand, CellSignal
from monitor.equipment.working import Working as Step
from monitor.errors import WrongUseError
from monitor.figures import Computed, compute, lead_in
from monitor.flags import Flag, describe
from monitor.judging import tags_behind, tags_of_stream
from monitor.readings.grid import Grid
from monitor.readings.site import condition_site
from monitor.store.batch import EQUIPMENT_COLUMNS, LEDGER_COLUMNS, STREAM_COLUMNS
from monitor.store.errors import StoreError
from monitor.store.handle import SITE_SUBJECT
from monitor.thermo.dead_state import dead_state
from monitor.uncertainty.told import Contribution, budget_of, contributions, excess, suspect

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

    from connectors.base import Connector, ReadResult
    from monitor.equipment.base import Item
    from monitor.site.load import Site
    from monitor.store.site import SiteStore
    from monitor.thermo.dead_state import DeadState

__all__ = ["Explanation", "GridValue", "RawReading", "StateRow", "Step", "explain", "figures_of"]

HOUR = 3600
AGREES = 1e-9
"""Largest relative difference of two computations of one figure that rounding explains."""


@dataclass(frozen=True)
class RawReading:
    """A reading as the historian has it; ``time`` in UTC."""

    tag: str
    time: pd.Timestamp
    value: float
    unit: str
    quality: str


@dataclass(frozen=True)
class GridValue:
    """A tag's time-weighted mean over the cell, in its own unit; what it rests on, in words."""

    tag: str
    value: float
    unit: str
    rests_on: str


@dataclass(frozen=True)
class StateRow:
    """A stream in the cell: columns of the store, and what it rests on, in words."""

    stream: str
    medium: str
    figures: Mapping[str, float]
    rests_on: str


@dataclass(frozen=True)
class Explanation:
    """Where one figure comes from.

    Attributes:
        subject, figure, unit: which figure.
        start, end: the grid cell, integer UTC seconds.
        readings: inside the cell, and the one before it that was still in force.
        gridded, states, steps: from readings to the figure.
        computed: the figure as computed now; NaN when absent.
        rests_on: its flag in words.
        uncertainty: its combined standard uncertainty, in its unit; NaN where none is worked out.
        budget: what makes it up, the largest first.
        suspect: what most easily explains a figure that contradicts the second law; or empty.
        stored: the figure in the store; None when there is none.
    """

    subject: str
    figure: str
    unit: str
    start: int
    end: int
    readings: tuple[RawReading, ...]
    gridded: tuple[GridValue, ...]
    states: tuple[StateRow, ...]
    steps: tuple[Step, ...]
    computed: float
    rests_on: str
    uncertainty: float
    budget: tuple[Contribution, ...]
    suspect: str
    stored: float | None

    @property
    def by_steps(self) -> float | None:
        """What the steps come to; None where none leads all the way to the figure."""
        return next((step.value for step in self.steps if step.is_figure), None)

    @property
    def agrees(self) -> bool:
        """Whether the stored figure, the computed one and the steps are the same number."""
        others = [v for v in (self.stored, self.by_steps) if v is not None]
        return all(_same(self.computed, other) for other in others)


def figures_of(site: Site, subject: str) -> tuple[str, ...]:
    """The figures that a subject has: columns of the store, and condition figures.

    Raises:
        WrongUseError: the site has no such stream or equipment.
    """
    if subject in site.streams:
        return STREAM_COLUMNS
    if subject in site.items:
        item = site.items[subject]
        return (*EQUIPMENT_COLUMNS, *(f.name for f in item.kind.figures(item)))
    if subject == SITE_SUBJECT:
        return LEDGER_COLUMNS
    raise WrongUseError(f"'{subject}' is neither a stream nor equipment of this site")


def explain(
    site: Site,
    store: SiteStore | None,
    sources: Mapping[str, Connector],
    subject: str,
    figure: str,
    at: int,
) -> Explanation:
    """Explain one figure.

    Args:
        site: the site.
        store: to compare with; None to compute only.
        sources: open connectors by source id.
        subject: a stream, a piece of equipment, or ``ledger``.
        figure: one of `figures_of` it.
        at: integer UTC seconds; the grid cell that holds it is explained.

    Raises:
        WrongUseError: no such subject or figure.
        ConnectorError: a source cannot be read.
    """
    if figure not in figures_of(site, subject):
        raise WrongUseError(f"'{subject}' has no figure '{figure}'")
    interval = int(site.file.site.interval)
    start = at // interval * interval
    hour = start // HOUR * HOUR
    read = read_window(site, sources, hour, start + interval)
    window = compute(site, read, hour, start + interval, with_budgets=True)
    cell = _Cell(site, window, start)
    streams, tags = _behind(site, subject)
    computed, flag = cell.figure(subject, figure)
    unit = _unit(site, subject, figure)
    uncertainty, budget = _uncertainty(site, window, subject, figure)
    beyond = excess(computed, unit) if flag & Flag.SECOND_LAW else 0.0
    culprit = suspect(budget, beyond)
    return Explanation(
        subject=subject,
        figure=figure,
        unit=unit,
        start=start,
        end=start + interval,
        readings=tuple(_readings(site, read, tags, start, start + interval)),
        gridded=tuple(_gridded(site, read, tags, hour, start)),
        states=tuple(cell.state(stream) for stream in streams),
        steps=tuple(_steps(site, cell, subject, figure)),
        computed=computed,
        rests_on=describe(flag),
        uncertainty=uncertainty,
        budget=budget,
        suspect="" if culprit is None else culprit.sentence,
        stored=None if store is None else _stored(store, site, subject, figure, start),
    )


def _uncertainty(
    site: Site, window: Computed, subject: str, figure: str
) -> tuple[float, tuple[Contribution, ...]]:
    """Standard uncertainty and budget; the window begins with the cell's hour."""
    found = None
    if window.uncertainties is not None:
        found = budget_of(window.uncertainties, subject, figure)
    if found is None:
        return math.nan, ()
    budget, scale = found
    return scale * float(budget.standard[0]), contributions(budget, scale, site.tags, 0)


@dataclass(frozen=True)
class _Cell:
    """One grid cell of a computed window."""

    site: Site
    window: Computed
    start: int

    def figure(self, subject: str, figure: str) -> tuple[float, int]:
        row = self._row(subject, figure)
        column = "value" if figure not in row.index else figure
        return float(row[column]), int(row["flag"])

    def _row(self, subject: str, figure: str) -> pd.Series[float]:
        batch = self.window.batch
        if subject in self.site.streams:
            table = batch.streams[batch.streams["subject"] == subject]
        elif subject == SITE_SUBJECT:
            table = batch.ledger
        elif figure in EQUIPMENT_COLUMNS:
            table = batch.equipment[batch.equipment["subject"] == subject]
        else:
            table = batch.conditions
            table = table[(table["subject"] == subject) & (table["figure"] == figure)]
        return table[table["time"] == self.start].iloc[0]

    def state(self, stream: str) -> StateRow:
        row = self._row(stream, STREAM_COLUMNS[0])
        figures = {n: float(row[n]) for n in STREAM_COLUMNS if not n.startswith("u_")}
        medium = self.site.streams[stream].medium
        return StateRow(stream, medium, figures, describe(int(row["flag"])))

    def at_hand(self, item: Item) -> AtHand:
        """What the steps of a condition figure may use."""
        row = self._row(item.id, EQUIPMENT_COLUMNS[0])
        plant = self.window.plant
        if plant is None:
            raise TypeError("a figure is explained from a window with its states and signals")
        # The window ends with the cell that is explained.
        signals = {
            key: CellSignal(float(s.value[-1]), float(s.edges[-2]), float(s.edges[-1]))
            for key, s in plant.drawn[item.id].signals.items()
        }
        streams = {
            s: {**self.state(s).figures, "volume_m3_kg": float(plant.states[s].volume[-1])}
            for s in (*item.ids("in"), *item.ids("out"))
        }
        account = {n: float(row[n]) for n in EQUIPMENT_COLUMNS}
        interval = float(self.site.file.site.interval)
        return AtHand(item, streams, account, self.dead("live"), signals, interval)

    def dead(self, figure: str) -> DeadState:
        table = self.site.file.dead_state
        if "reference" in figure:
            return dead_state(table.reference_temperature, table.reference_pressure)
        row = self._row(SITE_SUBJECT, "t0_degc")
        return dead_state(float(row["t0_degc"]) + 273.15, float(row["p0_bar"]) * 1e5)


def _behind(site: Site, subject: str) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Streams and tags that a figure rests on, the surroundings' included."""
    dead = site.file.dead_state
    ambient = [r.tag for r in (dead.temperature, dead.pressure) if r.tag]
    if subject in site.streams:
        streams: tuple[str, ...] = (subject,)
        tags = list(tags_of_stream(site, subject))
    elif subject == SITE_SUBJECT:
        ends = [s for s in site.streams if s not in site.producer or s not in site.consumer]
        streams, tags = tuple(ends), [t for s in ends for t in tags_of_stream(site, s)]
    else:
        item = site.items[subject]
        streams = (*item.ids("in"), *item.ids("out"))
        behind = tags_behind(site)[subject]
        tags = [name for name in site.tags if name in behind]
    return streams, tuple(dict.fromkeys([*tags, *ambient]))


def _readings(
    site: Site, read: ReadResult, tags: tuple[str, ...], start: int, end: int
) -> Iterator[RawReading]:
    rows = read.readings
    first, last = pd.Timestamp(start, unit="s", tz="UTC"), pd.Timestamp(end, unit="s", tz="UTC")
    for tag in tags:
        own = rows[rows["tag"] == tag].sort_values("time")
        before = own[own["time"] < first].tail(1)
        inside = own[(own["time"] >= first) & (own["time"] < last)]
        shown = pd.concat([before, inside])
        unit = site.tags[tag].unit.text
        for time, value, quality in zip(
            shown["time"], shown["value"], shown["quality"], strict=True
        ):
            yield RawReading(tag, time, float(value), unit, Quality(int(quality)).name.lower())


def _gridded(
    site: Site, read: ReadResult, tags: tuple[str, ...], hour: int, start: int
) -> Iterator[GridValue]:
    interval = int(site.file.site.interval)
    grid = Grid(hour - lead_in(site), start + interval, interval)
    conditioned = condition_site(site, read.readings, grid).tags
    for name in tags:
        one, unit = conditioned[name], site.tags[name].unit
        value = (float(one.mean[-1]) - unit.offset) / unit.scale
        yield GridValue(name, value, unit.text, describe(int(one.flag[-1])))


def _steps(site: Site, cell: _Cell, subject: str, figure: str) -> Iterator[Step]:
    if subject in site.streams and figure.startswith("exergy_"):
        yield from _stream_exergy(cell, subject, figure)
    elif subject in site.items and figure in {"destroyed_live_kw", "destroyed_reference_kw"}:
        yield from _destroyed(cell, site.items[subject], figure)
    elif subject in site.items and figure not in EQUIPMENT_COLUMNS:
        item = site.items[subject]
        yield from item.kind.working(cell.at_hand(item), figure)


def _dead_step(dead: DeadState) -> Step:
    T0, g0 = float(dead.temperature), float(dead.gibbs) / 1e3
    phase = "ice Ih (IAPWS R10-06)" if bool(dead.frozen) else "compressed liquid (IAPWS R7-97)"
    return Step(
        "Gibbs energy of dead-state water",
        f"g0 = h0 - T0 s0, {phase} at T0 = {T0:.2f} K, p0 = {float(dead.pressure) / 1e5:.5f} bar",
        f"{float(dead.enthalpy) / 1e3:.4f} - {T0:.2f} * {float(dead.entropy) / 1e3:.6f}",
        g0,
        "kJ/kg",
    )


def _stream_exergy(cell: _Cell, stream: str, figure: str) -> Iterator[Step]:
    """Water: m [(h - h0) - T0 (s - s0)]; power: the rate itself."""
    state, dead = cell.state(stream), cell.dead(figure)
    f = state.figures
    if state.medium == "power":
        power = f["energy_kw"]
        yield Step(
            "exergy rate", "E = W: power is exergy", f"{power:.3f}", power, "kW", is_figure=True
        )
        return
    if state.medium != "water":
        return
    yield _dead_step(dead)
    T0, g0 = float(dead.temperature), float(dead.gibbs) / 1e3
    h, s, m = f["enthalpy_kj_kg"], f["entropy_kj_kgk"], f["mass_flow_kg_s"]
    specific = h - T0 * s - g0
    yield Step(
        "specific flow exergy",
        "e_f = (h - h0) - T0 (s - s0) = h - T0 s - g0",
        f"{h:.4f} - {T0:.2f} * {s:.6f} - ({g0:.4f})",
        specific,
        "kJ/kg",
    )
    rate = 0.0 if m == 0 else m * specific
    yield Step("exergy rate", "E = m e_f", f"{m:.5f} * {specific:.4f}", rate, "kW", is_figure=True)


def _destroyed(cell: _Cell, item: Item, figure: str) -> Iterator[Step]:
    """The exergy balance over the ports, and the entropy generation that goes with it."""
    state = "reference" if "reference" in figure else "live"
    T0 = float(cell.dead(figure).temperature)
    flows = {s: cell.state(s).figures for s in (*item.ids("in"), *item.ids("out"))}
    exergy = {s: f[f"exergy_{state}_kw"] for s, f in flows.items()}
    entered = sum(exergy[s] for s in item.ids("in"))
    left = sum(exergy[s] for s in item.ids("out"))
    yield Step("exergy in", "sum of E at the inlets", _sum(exergy, item.ids("in")), entered, "kW")
    yield Step("exergy out", "sum of E at the outlets", _sum(exergy, item.ids("out")), left, "kW")
    destroyed = cell.figure(item.id, figure)[0]
    if state == "live":
        names = ("heat_loss_exergy_live_kw", "unaccounted_live_kw", "stored_rate_live_kw")
        lost, unaccounted, stored = (cell.figure(item.id, n)[0] for n in names)
        closure = cell.figure(item.id, "closure_live_kw")[0]
        yield Step(
            "destroyed, by the exergy balance",
            "I = in - out - with lost heat - with the unaccounted flow - stored - closure",
            f"{entered:.3f} - {left:.3f} - {lost:.3f} - {unaccounted:.3f} - {stored:.3f} "
            f"- ({closure:.3f})",
            entered - left - lost - unaccounted - stored - closure,
            "kW",
            is_figure=True,
        )
    yield Step(
        "entropy generated (Gouy-Stodola)",
        "S_gen = I / T0: sum(m s) out - in, with heat Q/Tb, the unaccounted flow and storage",
        f"{destroyed:.3f} / {T0:.2f}; {_entropies(cell, item)}",
        destroyed / T0,
        "kW/K",
    )


def _sum(rates: Mapping[str, float], streams: tuple[str, ...]) -> str:
    return " + ".join(f"{rates[s]:.3f} ({s})" for s in streams) or "0"


def _entropies(cell: _Cell, item: Item) -> str:
    def total(streams: tuple[str, ...]) -> float:
        rows = [cell.state(s) for s in streams]
        terms = [
            r.figures["mass_flow_kg_s"] * r.figures["entropy_kj_kgk"]
            for r in rows
            if r.medium == "water" and r.figures["mass_flow_kg_s"]
        ]
        return float(np.sum(terms))

    return f"water out {total(item.ids('out')):.5f}, water in {total(item.ids('in')):.5f} kW/K"


def _stored(store: SiteStore, site: Site, subject: str, figure: str, start: int) -> float | None:
    end = start + int(site.file.site.interval)
    try:
        if subject in site.streams:
            row = store.streams(subject, start, end)[figure]
        elif subject == SITE_SUBJECT:
            row = store.ledger(start, end)[figure]
        elif figure in EQUIPMENT_COLUMNS:
            row = store.equipment(subject, start, end)[figure]
        else:
            row = store.conditions(subject, figure, start, end)["value"]
    except StoreError:
        # Not registered yet: the site file has grown since the store was filled.
        return None
    return float(row.iloc[0]) if len(row) else None


def _unit(site: Site, subject: str, figure: str) -> str:
    ends = {
        "_kw": "kW",
        "_kg_s": "kg/s",
        "_degc": "degC",
        "_kj_kg": "kJ/kg",
        "_kj_kgk": "kJ/(kg K)",
    }
    if subject in site.items and figure not in EQUIPMENT_COLUMNS:
        item = site.items[subject]
        return next(f.unit for f in item.kind.figures(item) if f.name == figure)
    if figure.endswith("_bar"):
        return "bar(a)"
    return next((unit for end, unit in ends.items() if figure.endswith(end)), "")


def _same(one: float, other: float) -> bool:
    if math.isnan(one) or math.isnan(other):
        return math.isnan(one) and math.isnan(other)
    return math.isclose(one, other, rel_tol=AGREES, abs_tol=1e-6)
